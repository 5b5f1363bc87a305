"""What the desk looks like: goldens of every view, exact widths at every size, and states that need no colour.

For each scene and size there are three goldens: the text with ASCII signs and with all signs, as it stands without
colour, and the tones, which columns of which line have which; what colour a tone has is one table in ``ui/app.py``.
``BUDGET_GOLDEN=1 pytest tests/screen/test_paint.py`` writes them anew; look at the difference before committing.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable
from functools import cache
from itertools import groupby
from pathlib import Path
from unittest.mock import patch

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.cells import cell_len

from budget.session import Session, calculate
from budget.ui.commands import COMMANDS
from budget.ui.desk import VIEWS, Desk
from budget.ui.paint import SMALLEST, Line, frame, plain
from tests.screen.driving import TEXTS, demo, desk_of, key_of, press, screen, session_of, shown, small, typed

GOLDEN = Path(__file__).parent / "golden"
SIZES = ((80, 24), (160, 48))
SIGNS = str.maketrans("\u2588\u2591\u2502\u2500\u253c\u2514\u00b7", "#.|-++.")  # all there are; PC consoles have them
NOW = "2031-05-06 07:08"
KINDS = ("ascii", "unicode", "tones")
KEY = {command.name: command.keys[0] for command in COMMANDS}


def _move_into_output(desk: Desk) -> None:
    desk.go_to(("converter", 0, "output", 1, "current"))


def _typing(desk: Desk) -> None:
    desk.go_to(("converter", 0, "lead", "R"))
    typed(desk, "2 * 3 mohm")


def _wrong(desk: Desk) -> None:
    desk.go_to(("converter", 0, "rated_power"))
    typed(desk, "80 A")
    press(desk, "enter")


def _table_filter(desk: Desk) -> None:
    desk.subject, desk.view_name = ("filter", 2), "response"


def _held(desk: Desk) -> None:
    """A reference, and one edit since: a converter that is rated lower, so that some numbers are better, some worse."""
    press(desk, KEY["hold"])
    desk.go_to(("converter", 0, "rated_power"))
    press(desk, "7 5 enter")
    press(desk, "s down")


def _held_then(keys: str) -> Callable[[Desk], None]:
    def go(desk: Desk) -> None:
        _held(desk)
        press(desk, keys)

    return go


def _trials(desk: Desk) -> None:
    _held(desk)
    press(desk, f"{KEY['view_trials']} n enter")
    press(desk, "down down right right")


def _mended(desk: Desk) -> None:
    """The demo after the one move that mends it, against the demo as it was."""
    press(desk, KEY["hold"])
    press(desk, " ".join(["down"] * 12) + " >")


def _how_far(desk: Desk) -> None:
    desk.go_to(("bus", "resistance"))
    press(desk, KEY["ask_reach"])


def _map(desk: Desk) -> None:
    desk.go_to(("converter", 1, "output", 0, "current"))
    press(desk, f"{KEY['ask_sweep']} ctrl+u")
    typed(desk, "1.5 A to 3500 mA in 9")
    press(desk, "enter")
    desk.go_to(("bus", "resistance"))
    press(desk, f"{KEY['ask_sweep']} ctrl+u")
    typed(desk, "10 mohm to 900 mohm in 7")
    press(desk, "enter down enter")  # of DC, what fails already left aside


def _numbers(desk: Desk) -> None:
    _map(desk)
    press(desk, f"{KEY['next_mode']} down right right")


SCENES: dict[str, tuple[str, str | Callable[[Desk], None]]] = {
    **{f"view {view}": ("small", "") for view in VIEWS},
    "converter fields": ("small", "down down f"),
    "converter lists": ("small", _move_into_output),
    "filter fields": ("small", "down f"),
    "sheet right": ("small", "down down end"),
    "sheet corner": ("small", "o down enter down down"),
    "typing": ("small", _typing),
    "wrong entry": ("small", _wrong),
    "commands": ("small", "space"),
    "choices": ("small", "r down down down down down down enter"),
    "edited": ("small", "down down > w"),
    "question": ("small", "down D q"),
    "long note": ("small", "t down down down"),
    "full length": ("small", f"k {KEY['read']}"),
    "held sheet": ("small", _held),
    "held fields": ("small", _held_then("down f")),
    "held checks": ("small", _held_then("k down")),
    "held emissions": ("small", _held_then("R a")),
    "held question": ("small", _held_then(KEY["hold"])),
    "held trials": ("small", _trials),
    "how far": ("small", _how_far),
    "map": ("small", _map),
    "map numbers": ("small", _numbers),
    "broken sheet": ("broken", "down"),
    "broken faults": ("broken", "b down down"),
    "empty sheet": ("empty", ""),
    "empty loads": ("empty", "l"),
    "small unfiltered": ("small", "a B down down"),
    "small table filter": ("small", _table_filter),
    "small voltages": ("small", "J A L"),
    "heron": ("heron", ""),
    "heron mended": ("heron", _mended),
    "heron emissions": ("heron", "a down down"),
    "heron plan": ("heron", "y down"),
    "heron filter": ("heron", "down z down"),
    "heron filter common": ("heron", "down z A"),
    "heron switch-on": ("heron", "J L"),
    "heron voltages": ("heron", "J A"),
    "heron stability": ("heron", "Y"),
    "ferry emissions": ("ferry", "a A"),
    "ferry plan": ("ferry", "y"),
    "ferry filter": ("ferry", "down z"),
    "ferry switch-on": ("ferry", "J down"),
    "ferry stability": ("ferry", "Y"),
}


def scene(name: str, ascii_only: bool) -> Desk:
    text, keys = SCENES[name]
    desk = small(text, ascii_only=ascii_only) if text in TEXTS else demo(text, ascii_only=ascii_only)[0]
    with patch("budget.trials.now", lambda: NOW):
        if name.startswith("view "):
            desk.view_name = name.removeprefix("view ")
        elif isinstance(keys, str):
            press(desk, keys)
        else:
            keys(desk)
    return desk


@cache
def frames(name: str) -> dict[tuple[int, int, bool], list[Line]]:
    """A scene at each size, without and with signs beyond ASCII; made once."""
    desk = scene(name, True)
    shots: dict[tuple[int, int, bool], list[Line]] = {}
    for ascii_only in (True, False):
        desk.ascii_only = ascii_only
        desk._stamp = desk._then = None  # what is made before has the signs of before
        for made in (desk._views, desk.cells, desk.memo):
            made.clear()
        for size in SIZES:
            for cursor in desk.cursors.values():  # as if the terminal had had this size from the start
                cursor.top = cursor.left = 0
            with patch("budget.trials.now", lambda: NOW):
                shots[*size, ascii_only] = frame(desk, *size)
    return shots


def lines_of(name: str, width: int, height: int, ascii_only: bool = True) -> list[str]:
    return [plain(line) for line in frames(name)[width, height, ascii_only]]


def tones(lines: list[Line]) -> str:
    """Which columns of which line have which tone, without the blank ones; of curves only which signs have which."""
    rows: list[tuple[int, str]] = []
    curves: dict[str, set[str]] = {}
    for y, line in enumerate(lines):
        spans, x = [], 0
        for text, tone in line:
            width = cell_len(text)
            if tone.startswith("trace"):
                curves.setdefault(tone, set()).update(text)
            elif tone and (text.strip() or tone not in ("pale", "head")):
                spans.append(f"{tone} {x}-{x + width}")
            x += width
        rows += [(y, "  ".join(spans))] if spans else []
    out: list[str] = []
    for text, group in groupby(rows, lambda row: row[1]):
        numbers = [y for y, _ in group]
        out.append(f"{numbers[0]:>2}{f'-{numbers[-1]}' if numbers[1:] else '':<3}  {text}")
    out += [f"{tone}  {' '.join(sorted(signs))}" for tone, signs in sorted(curves.items())]
    return "\n".join(out) + "\n"


def golden(name: str, width: int, height: int, kind: str) -> Path:
    return GOLDEN / f"{name.replace(' ', '-')}-{width}x{height}{'.tones' if kind == 'tones' else f'-{kind}.txt'}"


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(("width", "height"), SIZES, ids=lambda n: str(n))
@pytest.mark.parametrize("name", list(SCENES))
def test_golden(name: str, width: int, height: int, kind: str) -> None:
    shot = frames(name)[width, height, kind == "ascii"]
    lines = [plain(line) for line in shot]
    assert [cell_len(line) for line in lines] == [width] * height
    if kind == "ascii":
        assert all(line.isascii() for line in lines)
    text = tones(shot) if kind == "tones" else "\n".join(line.rstrip() for line in lines) + "\n"
    file = golden(name, width, height, kind)
    if os.environ.get("BUDGET_GOLDEN"):
        GOLDEN.mkdir(exist_ok=True)
        file.write_text(text, encoding="utf-8")
    new = f"{file.name} is missing: every view and scene has goldens, BUDGET_GOLDEN=1 writes them; look at it then"
    assert file.exists(), new
    assert text == file.read_text(encoding="utf-8")


def test_every_view_is_among_the_scenes() -> None:
    assert {f"view {view}" for view in VIEWS} <= set(SCENES)


def test_no_golden_is_left_over() -> None:
    wanted = {golden(name, *size, kind).name for name in SCENES for size in SIZES for kind in KINDS}
    left = {file.name for file in GOLDEN.iterdir()} - wanted
    for name in sorted(left) if os.environ.get("BUDGET_GOLDEN") else ():
        (GOLDEN / name).unlink()
    assert os.environ.get("BUDGET_GOLDEN") or not left


@pytest.mark.parametrize("name", list(SCENES))
def test_unicode_differs_from_ascii_only_in_signs(name: str) -> None:
    for size in SIZES:
        plain_signs = [[(text.translate(SIGNS), tone) for text, tone in line] for line in frames(name)[*size, False]]
        assert plain_signs == frames(name)[*size, True]


# -- states can be told without colour


def row_text(desk: Desk, ident: str) -> str:
    return next(line for line in screen(desk) if ident in line.split()[:1] or f"!{ident}" in line.split()[:1])


def test_fail_thin_and_no_data_are_words() -> None:
    desk = small()
    assert "FAIL" in row_text(desk, "FA")
    assert "thin" in row_text(desk, "C1")
    assert "FAIL" in row_text(desk, "C4")
    assert "ok" in row_text(desk, "FB")
    assert "left out" in row_text(small("broken"), "FA")
    press(desk, "k")
    states = {line.split()[0] for line in screen(desk, 80, 90)[2:85] if line.strip()}
    assert {"FAIL", "thin", "no", "ok"} <= states


def test_every_span_in_a_tone_that_warns_has_a_word_or_a_mark() -> None:
    marks = ("FAIL", "thin", "!", "%", "no results", "error", "warning", "calculating", "cannot", "changed", "unsaved")
    marks += ("held", "fails", "ttt", "##")  # the last two are signs of the map, explained below it
    for name in SCENES:
        for size in SIZES:
            lines = frames(name)[*size, True][:-4]  # below the grid are sentences
            for line in lines if name != "view help" else ():
                for text, tone in line:
                    if tone in ("fail", "thin") and text.strip():
                        below_zero = re.match(r" *-\d", text)
                        assert below_zero or any(mark in plain(line) for mark in marks), (name, text)


def test_the_share_over_all_of_it_is_a_number_above_100() -> None:
    assert "144%" in row_text(small(), "FA")


def test_bad_cells_are_marked() -> None:
    desk = small("broken")
    assert "!C1" in shown(desk)
    assert "bad cells (b)" in screen(desk)[0]
    desk.go_to(("bus", "rating"))
    assert "!lots" in shown(desk)
    told = "\n".join(screen(desk)[-4:])
    assert "'lots' is not a quantity" in told


def test_pending_and_stale_results_are_marked() -> None:
    session = session_of(TEXTS["small"])
    desk = Desk(session, True)
    assert "~ calculating" in screen(desk)[0]
    assert screen(desk)[2].split()[2:9] == ["~"] * 7
    desk.accept(calculate(session.snapshot()))
    ready = shown(desk)
    assert "~" not in ready
    press(desk, "down down end left left left left 9 0 enter home")
    desk.pending = True  # as the program says when results are late
    stale = shown(desk)
    assert "~ calculating" in stale
    assert "~110" in stale
    desk.accept(calculate(session.snapshot()))
    assert "~" not in shown(desk)


def test_unsaved_work_has_a_mark() -> None:
    desk = small()
    assert "*" not in screen(desk)[0]
    press(desk, "down D")
    assert "*" in screen(desk, 160, 48)[0]


def test_the_cursor_and_the_caret_are_reversed_not_coloured() -> None:
    from budget.ui.app import STYLES

    assert STYLES["cursor"].reverse
    assert STYLES["cursor"].color is None
    for keys in ("", "down right", "k", "space", "5", "g"):
        desk = small()
        press(desk, keys)
        assert any(tone == "cursor" for line in frame(desk, 80, 24) for _, tone in line)


def test_no_style_differs_from_another_by_colour_alone_where_it_matters() -> None:
    from budget.ui.app import STYLES

    for tone in ("cursor", "edit", "bar", "heading", "panel", "head"):
        assert STYLES[tone].color is None


# -- sizes


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from(list(TEXTS)),
    st.booleans(),
    st.lists(
        st.one_of(
            st.sampled_from(
                [
                    *("down", "up", "left", "right", "end", "home", "pagedown", "enter", "escape", "tab", "space"),
                    *"slfrkihtb?ognNDRuU><m5e.",
                ]
            ),
            st.tuples(st.integers(1, 220), st.integers(1, 70)),
        ),
        max_size=25,
    ),
)
def test_a_frame_fills_the_terminal_exactly(name: str, ascii_only: bool, steps: list[str | tuple[int, int]]) -> None:
    desk = small(name, ascii_only=ascii_only)
    width, height = 80, 24
    for step in [*steps, (80, 24)]:
        if isinstance(step, tuple):
            width, height = step
        else:
            desk.key(*key_of(step))
        lines = frame(desk, width, height)
        assert len(lines) == height
        for line in lines:
            assert cell_len(plain(line)) == width
            assert not ascii_only or plain(line).isascii()


@pytest.mark.parametrize("height", [SMALLEST[1], 24])
@pytest.mark.parametrize("width", [SMALLEST[0], 80, 100, 130])
def test_the_cursor_is_always_in_sight(width: int, height: int) -> None:
    for view in VIEWS:
        desk = small()
        desk.view_name = view
        frame(desk, width, height)
        count = sum(row is not None for _, row in desk.lines())
        for key in (*["down"] * count, "end", "home", *["right"] * 14, *["up"] * count, *["left"] * 14):
            desk.key(key)
            row, _ = desk.here()
            if row is not None and not (desk.view().plot is not None):
                tones = [tone for line in frame(desk, width, height)[1:-4] for _, tone in line]
                assert "cursor" in tones, (view, key, desk.spot())


def test_a_terminal_that_is_too_small_says_so() -> None:
    desk = small()
    assert "60x12" in shown(desk, 20, 5)
    assert screen(desk, 80, 24)[2].startswith("bus")


# -- wide and strange characters


NAMES = (
    "ńändliches Gerät",
    "電源フィルター一号機",
    "e\u0301\u0302te\u0301",
    "\u200bnull",
    "\U0001f50b battery",
    "a\tb",
    "ﷺ" * 5,
)


@pytest.mark.parametrize("ascii_only", [True, False])
@pytest.mark.parametrize("name", NAMES)
def test_names_of_any_width_keep_the_columns(name: str, ascii_only: bool) -> None:
    desk = small(ascii_only=ascii_only)
    desk.go_to(("converter", 0, "name"))
    press(desk, "enter ctrl+u")
    desk.paste(name)
    for width, height in (*SIZES, (61, 13)):
        assert {cell_len(line) for line in screen(desk, width, height)} == {width}
    press(desk, "enter")
    for view in VIEWS:
        desk.view_name = view
        for width, height in SIZES:
            assert {cell_len(line) for line in screen(desk, width, height)} == {width}


@settings(max_examples=30, deadline=None)
@given(st.text(st.characters(codec="utf-8"), min_size=1, max_size=40), st.integers(60, 170))
def test_any_text_of_a_file_keeps_the_columns(text: str, width: int) -> None:
    import tomli_w

    data = {"format": 1, "bus": {"low": 22, "nominal": 28, "high": 29, "name": text, "note": text, "rating": text}}
    data["converter"] = [{"id": text, "name": text, "filter": text, "output": [{"name": text}]}]
    data["project"] = {"title": text}
    desk = desk_of(session_of(tomli_w.dumps(data)), ascii_only=False)[0]
    for view in VIEWS:
        desk.view_name = view
        lines = screen(desk, width, 24)
        assert {cell_len(line) for line in lines} == {width}
        assert not any(ord(c) < 32 or ord(c) == 127 for line in lines for c in line)


def test_a_session_without_results_paints_every_view() -> None:
    desk = Desk(Session(session_of(TEXTS["small"]).document), True)
    for view in VIEWS:
        desk.view_name = view
        assert len(screen(desk)) == 24


# -- pictures


@pytest.mark.parametrize(
    "name", ["heron emissions", "heron filter", "heron voltages", "heron stability", "small voltages"]
)
def test_curves_are_told_apart_by_letters_not_by_colour(name: str) -> None:
    desk = scene(name, True)
    plot = desk.view().plot
    assert plot is not None
    drawn = [t for t in plot.traces if t.symbol.isalpha() and t.tone != "limit"]  # a limit has the letter of its curve
    assert len(drawn) > 1
    assert len({t.symbol for t in drawn}) == len(drawn)
    picture = "\n".join(line[8:] for line in screen(desk, 80, 24)[1:12])
    seen = {t.symbol for t in drawn if t.symbol in picture}
    assert len(seen) >= min(len(drawn), 2)
    told = "\n".join(cell.text for _, row in desk.lines() if row for cell in row.cells) + desk.view().summary
    assert all(f"{t.symbol} " in told for t in drawn)


def test_a_walk_through_the_table_leaves_the_curves_where_they_are() -> None:
    desk = scene("heron emissions", True)
    before = screen(desk)[1:12]
    press(desk, "down down up up")
    assert screen(desk)[1:12] == before
