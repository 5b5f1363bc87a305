"""Esc and a key right behind it: two keys, however the bytes come; no key out of a paste."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from textual.events import Key, Paste

from budget.ui.app import Keys
from budget.ui.escapes import Escapes

ESC = "\x1b"
# What a terminal sends, and the keys it means.
SENT = {
    f"{ESC}[A": "up",
    f"{ESC}OB": "down",
    f"{ESC}[3~": "delete",
    f"{ESC}[1;5C": "ctrl+right",
    "a": "a",
    "5": "5",
    "\r": "enter",
    " ": "space",
    "<": "less_than_sign",
    "U": "U",
    "\x7f": "backspace",
    "\u00b5": "\u00b5",
}


def keys(*pieces: str) -> list[str]:
    """The keys that textual makes of what comes in these pieces; a last Esc has been waited with."""
    parser = Keys()
    found = []
    for piece in pieces:
        found += list(parser.feed(piece))
    parser._timeout_time = 0.0 if parser._timeout_time is not None else None  # nothing more came
    found += list(parser.tick())
    return [event.key if isinstance(event, Key) else str(type(event).__name__) for event in found]


@pytest.mark.parametrize("sent", list(SENT), ids=list(SENT.values()))
def test_escape_before_any_key_is_a_key_of_its_own(sent: str) -> None:
    assert keys(ESC + sent) == ["escape", SENT[sent]]
    assert keys(ESC, sent)[-1] == SENT[sent]
    assert keys(ESC + ESC + sent)[-3:] == ["escape", "escape", SENT[sent]]


@pytest.mark.parametrize("sent", ["[", "O", "\t"])
def test_escape_before_what_could_begin_a_sequence(sent: str) -> None:
    assert keys(ESC + sent)[0] == "escape"
    assert len(keys(ESC + sent)) == 2


@given(st.lists(st.sampled_from([*SENT, ESC]), max_size=12), st.data())
def test_the_keys_do_not_hang_on_how_the_bytes_come(sent: list[str], data: st.DataObject) -> None:
    text = "".join(sent)
    cuts = sorted(data.draw(st.lists(st.integers(0, len(text)), max_size=6)))
    pieces = [text[a:b] for a, b in zip([0, *cuts], [*cuts, len(text)], strict=True) if a < b]
    expected = [SENT.get(one, "escape") for one in sent]
    assert keys(*pieces) == expected


@given(st.text(st.sampled_from([*"ab[O~201", ESC]), max_size=30), st.integers(1, 40))
def test_nothing_in_a_paste_is_a_key(inside: str, size: int) -> None:
    if f"{ESC}[201~" in inside:  # the end of the paste
        return
    parser = Keys()
    text = f"{ESC}[200~{inside}x{ESC}[201~q"
    found = [event for k in range(0, len(text), size) for event in parser.feed(text[k : k + size])]
    pasted = [event.text for event in found if isinstance(event, Paste)]
    assert pasted == [inside.replace(ESC, "") + "x"]
    assert [event.key for event in found if isinstance(event, Key)] == ["q"]


@given(st.text(max_size=40))
def test_without_an_escape_nothing_is_changed(text: str) -> None:
    assert Escapes()(text.replace(ESC, "")) == text.replace(ESC, "")
