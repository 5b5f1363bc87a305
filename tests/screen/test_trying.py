"""Trials at the desk: what changed against the reference, in every view, and keeping, dropping and naming it."""

from __future__ import annotations

import pytest

from budget.project.document import get
from budget.ui.changes import change
from budget.ui.desk import NOT_COMPARED, VIEWS, Ask, Desk
from budget.ui.view import Cell
from tests.screen.driving import demo, press, shown, small, typed

CURRENT = ("converter", 0, "output", 0, "current")


def rides(desk: Desk) -> list[str]:
    """The lines below rows, as text."""
    return [" | ".join(c.text for c in row.cells) for _, row in desk.lines() if row is not None and row.rides]


def held(name: str = "heron") -> Desk:
    """The demo with the reference held and CV11 put behind the next filter."""
    desk, _ = demo(name, everything=True)
    press(desk, "K")
    assert "held as the reference" in desk.message
    row = next(r for _, r in desk.lines() if r is not None and r.cells[0].text.startswith("CV11"))
    desk.cursor.key = row.key
    press(desk, ">")
    return desk


@pytest.fixture(scope="module")
def moved() -> Desk:
    return held()


def test_every_changed_number_has_sign_amount_and_better_or_worse(moved: Desk) -> None:
    moved.view_name = "sheet"
    lines = moved.lines()
    at = next(k for k, (_, r) in enumerate(lines) if r is not None and r.cells[0].text.startswith("FL2"))
    main, below = lines[at][1], lines[at + 1][1]
    assert main is not None
    assert below is not None
    assert below.rides
    texts = [cell.text for cell in below.cells]
    assert texts[0] == "change"
    assert texts[3].startswith("-")
    assert texts[3].endswith("^")  # less current: better
    assert texts[7].startswith("^ was FAIL current")
    assert main.cells[3].change.endswith("better")
    assert "was 11.81 A" in main.cells[3].change


def test_what_is_worse_says_so(moved: Desk) -> None:
    moved.view_name = "sheet"
    main = next(r for _, r in moved.lines() if r is not None and r.cells[0].text.startswith("FL3"))
    assert main.cells[6].change.endswith("worse")  # more heat


def test_the_cursor_passes_the_lines_of_changes_by(moved: Desk) -> None:
    moved.view_name = "sheet"
    press(moved, "home")
    for _ in range(60):
        row, _ = moved.here()
        assert row is not None
        assert not row.rides
        press(moved, "down")


def test_the_title_names_the_reference_and_the_hints_the_way_out(moved: Desk) -> None:
    moved.view_name = "sheet"
    text = shown(moved)
    assert "vs reference" in text.splitlines()[0]
    assert "K keep or drop" in text.splitlines()[-1].replace("  ", " ")


@pytest.mark.parametrize("name", sorted(set(VIEWS) - NOT_COMPARED))
@pytest.mark.parametrize("size", [(80, 24), (160, 48)])
def test_every_view_bears_a_reference(moved: Desk, name: str, size: tuple[int, int]) -> None:
    moved.view_name = name
    text = shown(moved, *size)
    assert "vs reference" in text.splitlines()[0]


@pytest.mark.parametrize("name", ["sheet", "checks", "spectrum", "switchon", "stable"])
def test_the_views_of_results_show_changes(moved: Desk, name: str) -> None:
    moved.view_name = name
    assert rides(moved)


def test_pictures_draw_the_reference_faintly(moved: Desk) -> None:
    for name in ("spectrum", "switchon", "stable"):
        moved.view_name = name
        plot = moved.view().plot
        assert plot is not None
        faint = [t for t in plot.traces if t.name.endswith("(reference)")]
        assert faint, name
        assert all(t.tone == "pale" for t in faint)


def test_checks_show_the_change_of_their_margins(moved: Desk) -> None:
    moved.view_name = "checks"
    row = next(r for _, r in moved.lines() if r is not None and r.key == ("check", "filter current", "FL2"))
    assert row.cells[0].change == "was FAIL, better"
    assert row.cells[5].change.startswith("was 4.7 % over, +")


def test_undone_by_hand_nothing_is_shown_as_changed() -> None:
    desk = held()
    assert rides(desk)
    press(desk, "u")
    assert rides(desk) == []


def test_drop_returns_to_the_reference_and_undo_brings_the_changes_back() -> None:
    desk, log = demo("heron")
    press(desk, "K")
    before, result = desk.session.document, desk.session.result
    press(desk, "down down R")
    assert desk.session.document is not before
    calculated = log.calculated
    press(desk, "K")
    assert isinstance(desk.mode, Ask)
    press(desk, "d")
    assert desk.session.document is before
    assert desk.session.result is result
    assert log.calculated == calculated  # the numbers of the reference were still there
    assert desk.session.reference is None
    assert rides(desk) == []
    press(desk, "u")
    assert desk.session.document is not before


def test_keep_ends_the_comparison_only() -> None:
    desk, _ = demo("heron")
    press(desk, "K down down R")
    document = desk.session.document
    press(desk, "K k")
    assert desk.session.document is document
    assert desk.session.reference is None


def test_a_new_row_and_a_removed_one_are_told() -> None:
    desk = small()
    press(desk, "K")
    press(desk, "down R")
    assert any("gone" in line for line in rides(desk))
    press(desk, "u down n")
    assert any(line.startswith("new") for line in rides(desk))


def test_moved_rows_are_matched_by_their_ids() -> None:
    desk, _ = demo("heron")
    press(desk, "K")
    row = next(r for _, r in desk.lines() if r is not None and r.cells[0].text.startswith("CV2 "))
    desk.cursor.key = row.key
    press(desk, "]")
    assert rides(desk) == []  # in another place, with the same numbers


def test_trials_are_held_switched_to_and_removed() -> None:
    desk, _ = demo("heron")
    first = desk.session.document
    press(desk, "T n")
    press(desk, "ctrl+u")
    typed(desk, "as it was")
    press(desk, "enter")
    assert [t.name for t in desk.session.trials] == ["as it was"]
    press(desk, "s down down R T n enter")
    second = desk.session.document
    assert len(desk.session.trials) == 2
    text = shown(desk)
    assert "as it was" in text
    assert "checks that fail" in text
    press(desk, "home right")  # the first column names the rows, the second is the present
    press(desk, "right enter")
    assert desk.session.document is first
    press(desk, "u")
    assert desk.session.document is second
    press(desk, "R y")
    assert len(desk.session.trials) == 1


def test_the_table_tells_what_differs_in_the_inputs() -> None:
    desk, _ = demo("heron")
    press(desk, "K s")
    desk.session.enter(("bus", "rating"), "31 A", desk.spot())
    desk.changed("rating")
    press(desk, "T")
    assert "bus.rating" in shown(desk, 80, 48)
    assert "31 A" in shown(desk, 80, 48)


def test_a_trial_becomes_the_reference() -> None:
    desk, _ = demo("heron")
    press(desk, "T n enter s down down R T end K")
    reference = desk.session.reference
    assert reference is not None
    assert reference.name == "trial 1"
    press(desk, "s")
    assert "vs trial 1" in shown(desk)


def test_what_cannot_be_done_is_said() -> None:
    desk, _ = demo("heron")
    press(desk, "T enter")
    assert "not on a trial" in desk.message
    press(desk, "R")
    assert "not on a trial" in desk.message


@pytest.mark.parametrize(
    ("now", "then", "sense", "short"),
    [
        (Cell("8.1", value=8.1, kind="current"), Cell("7.4", value=7.4, kind="current"), -1, "+700m!"),
        (Cell("8.1", value=8.1, kind="current"), Cell("7.4", value=7.4, kind="current"), 0, "+700m"),
        (Cell("55 %", value=0.55, kind="%"), Cell("80 %", value=0.8, kind="%"), -1, "-25 %^"),
        (Cell("4.5", value=4.5, kind="dB"), Cell("3.25", value=3.25, kind="dB"), 1, "+1.2^"),
        (Cell("12.5"), Cell("12.0"), 0, "+0.5"),
        (Cell("3 kHz"), Cell("1 kHz"), -1, "+2 kHz!"),
        (Cell("3 kHz"), Cell("900 Hz"), -1, "was 900 Hz"),
        (Cell("red"), Cell("blue"), 0, "was blue"),
        (Cell(""), Cell("blue"), 0, "was blue"),
        (Cell("blue"), Cell(""), 0, "was empty"),
        (Cell("FAIL", rank=-3e6), Cell("ok", rank=0.2), 0, "! was ok"),
    ],
)
def test_a_change_in_a_few_characters(now: Cell, then: Cell, sense: int, short: str) -> None:
    found = change(now, then, sense)
    assert found is not None
    assert found.short == short


@pytest.mark.parametrize(
    ("now", "then"),
    [
        (Cell("8.1"), Cell("8.1")),
        (Cell("8.1", value=8.1, kind="current"), Cell("8.1", value=8.1 * (1 + 1e-12), kind="current")),
        (Cell("~"), Cell("8.1")),
        (Cell("8.1"), Cell("~")),
    ],
)
def test_no_change_is_none(now: Cell, then: Cell) -> None:
    assert change(now, then, -1) is None


def test_a_tiny_change_is_told_for_the_cell_under_the_cursor_only() -> None:
    found = change(Cell("8.1", value=8.1001, kind="current"), Cell("8.1", value=8.1, kind="current"), -1)
    assert found is not None
    assert found.small
    assert "+100 uA" in found.words


def test_an_edit_under_a_reference_enters_its_cell() -> None:
    desk, _ = demo("heron")
    press(desk, "K s down down f")
    session = desk.session
    session.enter(CURRENT, "9 A", desk.spot())
    desk.changed("x")
    assert get(session.document, CURRENT) == "9 A"
    assert any("+" in line for line in rides(desk))
