"""The first minute: what is wrong, why, and which key is next; an empty project leads from the bus to a converter."""

from __future__ import annotations

from budget.project import store
from budget.project.document import put
from budget.session import Session, calculate
from budget.ui import commands, guide
from budget.ui.desk import Desk
from tests.screen.driving import demo, desk_of, press, screen, session_of, shown, typed


def test_the_demo_says_what_fails_and_which_key_mends_it() -> None:
    desk, _ = demo("heron")
    text = shown(desk)
    assert "FAIL: FL2 current 4.7 % over" in text
    assert "> on a converter moves it on" in text
    assert len(desk.message) <= 80
    row = next(r for _, r in desk.lines() if r is not None and r.cells[0].text.startswith("CV11"))
    desk.cursor.key = row.key  # and that key does mend it
    press(desk, ">")
    assert "FAIL" not in "\n".join(screen(desk)[:1])


def test_every_step_fits_the_line_and_names_keys_that_exist() -> None:
    keys = {commands.key_text(key) for command in commands.COMMANDS for key in command.keys}
    for step in guide._STEPS.values():
        assert len(step) <= 52
        assert any(word.strip(",") in keys for word in step.split()), step


def test_an_empty_project_leads_to_its_first_converter() -> None:
    desk, _ = desk_of(session_of("format = 1\n"), ascii_only=True)
    assert "first the bus: f on its row" in shown(desk)
    press(desk, "f")
    for field, value in (("low", "22 V"), ("nominal", "28 V"), ("high", "32 V")):
        desk.cursor.key = ("bus", field)
        desk.cursor.column = 1
        press(desk, "enter")
        typed(desk, value)
        press(desk, "enter")
    press(desk, "s")
    assert "next a filter: N adds one" in shown(desk)
    press(desk, "N")
    assert "next a converter: n on the filter's row" in shown(desk)
    press(desk, "n")
    assert guide.beginning(desk.session) == ""
    assert desk.session.result is not None
    assert len(desk.session.result.project.converters) == 1


def test_what_cannot_be_read_comes_before_what_fails() -> None:
    desk, _ = demo("heron")
    changed = put(desk.session.document, ("bus", "resistance"), "20 volts")
    desk.session.apply("by another program", changed, None)
    desk.session.accept(calculate(desk.session.snapshot()))
    assert "b lists them" in guide.next_step(desk.session)[0]


def test_nothing_to_mend_is_said_too() -> None:
    text = store.render(demo("smallest")[0].session.document).text
    session = Session(store.parse(text, None, "x.toml").document)
    session.accept(calculate(session.snapshot()))
    found, tone = guide.next_step(session)
    assert tone in ("ok", "thin")
    assert found


def test_the_greeting_is_said_once_and_never_over_something_else() -> None:
    desk, _ = demo("heron")
    assert desk.message.startswith("FAIL")
    press(desk, "c")
    assert desk.message.startswith("copied")
    press(desk, "down d u")
    assert not desk.message.startswith("FAIL:")
    other = Desk(desk.session)
    other.say("a note")
    other.accept(calculate(desk.session.snapshot()))
    assert other.message == "a note"
