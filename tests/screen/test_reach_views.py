"""How far a cell can go and sweeps of two, at the desk: the answers are the engine's, and what is put in holds."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget import quantity
from budget.project import edits, schema
from budget.project.document import get
from budget.report import study
from budget.study import paths
from budget.study.probe import Probe
from budget.study.reach import Reach, reach
from budget.study.sweep import Sweep, sweep
from budget.ui import asking
from budget.ui.commands import COMMANDS
from budget.ui.desk import Ask, Desk, Edit, Job, Pick, Work
from budget.ui.reach import Asked
from budget.ui.view import Row
from tests.screen.driving import SMALL, press, screen, session_of, shown, small, typed, written

KEY = {command.name: command.keys[0] for command in COMMANDS}
Q, P, A, F = KEY["ask_reach"], KEY["ask_sweep"], KEY["next_mode"], KEY["view_map"]
AMPS = ("converter", 1, "output", 0, "current")  # of C2, 2 A
OHMS = ("bus", "resistance")  # 20 mohm
# No DC check fails in it, and C2 can take a little more.
FINE = (
    SMALL.replace('rated_current = "3 A"', 'rated_current = "9 A"')
    .replace('rated_current = "2 A"', 'rated_current = "4 A"')
    .replace('rated_power = "50 W"', 'rated_power = "40 W"')
    .replace('rated_power = "80 W"', 'rated_power = "120 W"')
    .replace('name = "loose"\n', 'name = "loose"\nfilter = "FC"\n')
)


def fine() -> Desk:
    return written(FINE)[0]


def ask(desk: Desk, path: tuple[str | int, ...]) -> Reach:
    desk.go_to(path)
    press(desk, Q)
    return answer(desk)


def answer(desk: Desk) -> Reach:
    asked: Asked = desk.options.reach
    assert asked.found is not None
    return asked.found


def rows(desk: Desk, head: str) -> list[Row]:
    return [row for _, row in desk.lines() if row is not None and row.key[0] == head]


def to_row(desk: Desk, *key: object) -> None:
    desk.cursor.key = key
    desk.cursor.index = -1
    row, _ = desk.here()
    assert row is not None
    assert row.key == key


def failing(desk: Desk) -> set[tuple[str, str]]:
    result = desk.session.result
    assert result is not None
    return {(row.check, row.subject) for row in result.checks if row.status == "fail"}


# -- how far


def test_the_answer_is_that_of_the_search() -> None:
    desk = fine()
    found = ask(desk, AMPS)
    assert desk.view_name == "reach"
    parts = ("dc", "emissions", "stability")
    assert found == reach(desk.session.document, desk.session.shelves, AMPS, parts=parts)
    assert desk.view().title == "C2.output.0.current = 2 A, before a check fails"
    down, up = (row.cells[0].text for row in rows(desk, "side"))
    assert (down, up) == (study.side_sentence(found, found.down, False), study.side_sentence(found, found.up, True))
    assert found.up.check is not None
    assert f"{found.up.check.subject} {found.up.check.check} fails" in up
    points = rows(desk, "point")
    assert [row.key[1] for row in points] == [p.value for p in found.curve]
    for row, point in zip(points, found.curve, strict=True):
        shown_as = [cell.text for cell in row.cells]
        assert shown_as[1] == found.cell.show(point.value)
        assert shown_as[2] == (study.margin_text(point.margin) or "no number")
        assert shown_as[3] == f"{point.subject} {point.check}".strip()
        assert (shown_as[0] == "now") == (point.value == 2.0)
        assert row.cells[2].mark == ("!" if point.margin < 0 else "")


def test_the_picture_has_the_curve_zero_the_present_and_the_limit() -> None:
    desk = fine()
    found = ask(desk, AMPS)
    plot = desk.view().plot
    assert plot is not None
    traces = {trace.symbol: trace for trace in plot.traces}
    assert list(traces["-"].y) == [0.0, 0.0]
    assert list(traces["o"].x) == [2.0]
    assert list(traces[">"].x) == [found.up.limit]
    assert traces[">"].y[0] >= 0.0
    assert "<" not in traces  # nothing stops it on the way down
    assert list(traces["*"].x) == [p.value for p in found.curve]
    text = shown(desk)
    for mark in ("o", ">", "-----", "% left"):
        assert mark in text


def test_dc_comes_first_and_says_what_is_in_work() -> None:
    desk = fine()
    seen: list[tuple[tuple[str, ...], tuple[str, ...], str]] = []

    def later(do: object) -> None:
        do()  # type: ignore[operator]
        seen.append((answer(desk).parts, desk.options.reach.waits, desk.view().summary))

    desk.later = later
    ask(desk, AMPS)
    assert [(parts, waits) for parts, waits, _ in seen] == [
        (("dc",), ("emissions", "stability")),
        (("dc", "emissions"), ("stability",)),
        (("dc", "emissions", "stability"), ()),
    ]
    assert seen[0][2].startswith("~ with emissions and stability in work; so far DC")
    assert seen[2][2].startswith("counted: DC, emissions and stability")


def test_a_project_without_limit_sets_leaves_emissions_out() -> None:
    desk, _ = written(FINE.replace('emissions = ["CE102", "own"]\n', ""))
    assert ask(desk, AMPS).parts == ("dc", "stability")


def test_stopped_in_the_middle_it_keeps_what_it_has() -> None:
    desk = fine()

    def job(work: Work) -> None:
        told: list[float] = []
        work.done(work.run(lambda: bool(told) and told[-1] > 0.4, told.append))

    desk.start_job = job
    desk.go_to(AMPS)
    press(desk, Q)
    assert answer(desk).parts == ("dc",)
    assert desk.options.reach.waits == ()
    assert desk.view().summary.startswith("counted: DC;")
    assert desk.message.startswith("stopped: ")


def test_stopped_at_once_it_says_so() -> None:
    desk = fine()
    desk.start_job = lambda work: work.done(work.run(lambda: True, lambda _: None))
    desk.go_to(AMPS)
    press(desk, Q)
    assert "stopped before there was a result" in shown(desk)
    assert len(screen(desk, 60, 12)) == 12


def test_up_to_where_a_check_turns_thin_and_back() -> None:
    desk = fine()
    fails = ask(desk, AMPS)
    press(desk, A)
    thin = answer(desk)
    assert thin.thin
    assert desk.view().title.endswith("before a check turns thin")
    assert thin.up.limit is not None
    assert fails.up.limit is not None
    assert thin.up.limit < fails.up.limit
    press(desk, A)
    assert answer(desk) == fails


def test_the_limit_is_put_in_as_one_edit_and_nothing_fails() -> None:
    desk = fine()
    found = ask(desk, AMPS)
    already = failing(desk)
    before = desk.session.document
    to_row(desk, "side", "up")
    press(desk, "enter")
    assert len(desk.session.done) == 1
    assert "C2.output.0.current = " in desk.session.done[-1].label
    now = paths.cell_at(desk.session.document, (), AMPS).value
    assert now is not None
    assert found.up.limit is not None
    assert found.up.limit * (1 - 1e-4) < now <= found.up.limit
    assert failing(desk) <= already
    assert desk.view().title.startswith("~ before the edit: ")
    press(desk, "u")
    assert desk.session.document is before
    desk.view_name = "reach"
    assert not desk.view().title.startswith("~")
    found = ask(desk, AMPS)
    to_row(desk, "point", found.curve[-1].value)
    press(desk, "enter")
    assert paths.cell_at(desk.session.document, (), AMPS).value == pytest.approx(found.curve[-1].value, rel=1e-5)


def test_rows_without_a_value_put_nothing_in() -> None:
    desk = small()
    found = ask(desk, AMPS)
    assert found.failing
    first = desk.session.document
    for key, words in (
        (("side", "down"), "no value to put in"),
        (("aside",), "no value to put in"),
        (("point", 2.0), "holds 2 A already"),
    ):
        to_row(desk, *key)
        press(desk, "enter")
        assert words in desk.message
    assert desk.session.document is first
    assert "left aside: " in rows(desk, "aside")[0].cells[0].text


def test_the_value_goes_to_the_same_converter_wherever_its_row_is_now() -> None:
    desk = fine()
    ask(desk, AMPS)
    changed, _ = edits.insert_row(desk.session.document, ("converter", 0), {"id": "C0", "rated_power": "5 W"}, {})
    desk.change("a row above", changed)
    to_row(desk, "side", "up")
    press(desk, "enter")
    document = desk.session.document
    assert get(document, ("converter", 2, "id")) == "C2"
    assert get(document, ("converter", 2, "output", 0, "current")) != "2 A"
    assert get(document, ("converter", 1, "output", 0, "current")) == "10 A"
    desk.view_name = "reach"
    press(desk, Q)  # again, of the present project
    assert not desk.view().title.startswith("~")
    desk.change("gone", edits.remove_row(desk.session.document, ("converter", 2)))
    desk.view_name = "reach"
    for key in ("enter", Q, A):
        press(desk, key)
        assert "nothing here is called 'C2'" in desk.message


@pytest.mark.parametrize(
    ("path", "words"),
    [
        (("converter", 1, "name"), "holds a text"),
        (("converter", 1, "filter"), "holds a text"),
        (("converter", 1, "turn_on"), "is not entered"),
        (("case", 0, "load", "C2"), "is switched off"),
    ],
)
@pytest.mark.parametrize("key", [Q, P])
def test_what_is_no_number_is_told_in_a_sentence(path: tuple[str | int, ...], words: str, key: str) -> None:
    desk = fine()
    desk.go_to(path)
    view = desk.view_name
    press(desk, key)
    assert words in desk.message
    assert desk.message.endswith(".")
    assert (desk.view_name, desk.mode) == (view, None)


@pytest.mark.parametrize("key", [Q, P])
def test_a_calculated_cell_is_no_number_to_ask_about(key: str) -> None:
    desk = fine()
    press(desk, f"right right {key}")
    assert desk.message.startswith("this cell is calculated;")
    press(desk, f"k {key}")
    assert desk.message.startswith("this cell is calculated;")
    press(desk, f"question_mark {key}")
    assert desk.message.startswith("there is no number here;")


def test_beside_the_value_the_row_is_meant() -> None:
    desk = fine()
    desk.go_to(OHMS)
    press(desk, f"left {Q}")
    assert answer(desk).cell.path == OHMS
    press(desk, "escape")
    assert (desk.view_name, desk.here()[0].key) == ("fields", OHMS)  # type: ignore[union-attr]


def test_a_project_that_cannot_be_calculated_says_why() -> None:
    desk, _ = written('format = 1\n[bus]\nlow = "x"\nnominal = 28\nhigh = 29\nresistance = "1 ohm"\n')
    desk.go_to(OHMS)
    press(desk, Q)
    assert "bus, low" in shown(desk)
    assert "Traceback" not in shown(desk)


def test_every_sort_of_number_has_an_answer_to_show(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(asking, "_stages", lambda document: [("dc",)])
    for path in (
        ("bus", "temperature"),
        ("rules", "converter_load"),
        ("rules", "emission_margin"),
        ("converter", 0, "efficiency", 1, 0),
        ("converter", 1, "efficiency"),
        ("converter", 0, "lead", "R"),
        ("converter", 0, "frequency"),
        ("case", 0, "load", "C1"),
        ("case", 0, "load", "C3"),
        ("case", 0, "duration"),
        ("filter", 1, "dm", 0, "L"),
    ):
        for plain in (True, False):
            desk, _ = written(FINE, ascii_only=plain)
            ask(desk, path)
            for size in ((80, 24), (60, 12), (160, 45)):
                lines = screen(desk, *size)
                assert len(lines) == size[1]
                assert all(len(line) == size[0] for line in lines)
                assert all(line.isascii() for line in lines) or not plain


NUMBERS = st.floats(-9e5, 9e5).filter(lambda x: x == 0.0 or abs(x) > 1e-12)
KINDS = sorted(set(quantity.KINDS) - {"level_line", "level_uA", "level_uV", "temperature"})


@settings(max_examples=300, deadline=None)
@given(st.sampled_from(KINDS), NUMBERS, NUMBERS)
def test_what_is_typed_never_lies_beyond_a_limit(kind: str, value: float, present: float) -> None:
    cell = paths.Cell(("x",), "x", schema.Field("x", kind, ""), present)
    read = paths.number(cell, asking._towards(cell, value, present))
    assert min(value, present) <= read <= max(value, present)
    assert read == pytest.approx(value, rel=1.1e-5)


# -- sweeps


def swept(desk: Desk, parts: str = "enter") -> Sweep:
    """Sweep C2's current and the feed's resistance, with the ranges that are offered."""
    desk.go_to(AMPS)
    press(desk, f"{P} enter")
    desk.go_to(OHMS)
    press(desk, f"{P} enter {parts}")
    found = desk.options.sweep.found
    assert isinstance(found, Sweep)
    return found


def test_the_map_is_that_of_the_sweep() -> None:
    desk = fine()
    found = swept(desk)
    assert desk.view_name == "map"
    assert desk.view().title == "C2.output.0.current across, bus.resistance up"
    assert found.values_a == pytest.approx([1.0 + 0.3 * k for k in range(11)])
    assert found.values_b[0] == 0.01
    assert len(found.values_b) == 9
    assert found == sweep(desk.session.document, (), AMPS, found.values_a, OHMS, found.values_b)
    lines = rows(desk, "b")
    assert [row.key[1] for row in lines] == sorted(found.values_b, reverse=True)
    signs = set()
    for row, b in zip(lines, reversed(range(9)), strict=True):
        for i, cell in enumerate(row.cells[1:]):
            spot = found.spots[i][b]
            one = cell.text.strip("[]")[0]
            signs.add(one)
            wanted = "#" if spot.status == "fail" else "t" if spot.status == "thin" else str(int(10 * spot.margin))  # type: ignore[operator]
            assert one == wanted
            assert set(cell.text) <= {one, "[", "]"}
            assert f"{found.cell_a.show(found.values_a[i])}, {found.cell_b.show(found.values_b[b])}: " in cell.info
            assert f"{spot.subject} {spot.check}" in cell.info
    assert {"#", "t"} <= signs
    assert len(signs) > 2
    marked = [cell.info for row in lines for cell in row.cells[1:] if cell.text.startswith("[")]
    assert len(marked) == 1
    assert marked[0].startswith("1.9 A, ") or marked[0].startswith("2.2 A, ")
    assert all(line.isascii() for line in screen(desk))


def test_what_fails_already_can_be_left_aside() -> None:
    text = FINE.replace('rated_current = "9 A"', 'rated_current = "2 A"')
    desk, _ = written(text)
    assert all(spot.status == "fail" for row in swept(desk).spots for spot in row)
    press(desk, "escape")
    found = swept(desk, "down enter")
    assert {(row.check, row.subject) for row in found.failing} == {("filter current", "FA")}
    assert {spot.status for row in found.spots for spot in row} != {"fail"}
    assert "counted: DC but for FA filter current" in desk.view().summary
    press(desk, P)  # again, the same way
    assert desk.options.sweep.found == found


def test_the_boundary_is_told_beside_the_row() -> None:
    desk = fine()
    found = swept(desk)
    for row in rows(desk, "b"):
        turns = [a for a, b in found.boundary if b == row.key[1]]
        for a in turns:
            assert found.cell_a.show(a) in row.cells[0].info
        signs = [cell.text[2] for cell in row.cells[1:]]
        assert ("#" in signs and set(signs) != {"#"}) == bool(turns)


def test_as_numbers() -> None:
    desk = fine()
    found = swept(desk)
    press(desk, A)
    for row, b in zip(rows(desk, "b"), reversed(range(9)), strict=True):
        for i, cell in enumerate(row.cells[1:]):
            margin = found.spots[i][b].margin
            assert margin is not None
            assert float(cell.text) == pytest.approx(100 * margin, abs=0.06)
            assert (cell.mark == "!") == (margin < 0)
    press(desk, A)
    assert "#####" in shown(desk)


def test_a_point_is_put_in_as_one_edit() -> None:
    desk = fine()
    found = swept(desk)
    first = desk.session.document
    desk.cursor.column = 3
    to_row(desk, "b", found.values_b[4])
    press(desk, "enter")
    assert len(desk.session.done) == 1
    document = desk.session.document
    assert paths.cell_at(document, (), AMPS).value == pytest.approx(found.values_a[2])
    assert paths.cell_at(document, (), OHMS).value == pytest.approx(found.values_b[4])
    assert desk.view().title.startswith("~ before the edit: ")
    result = Probe(document, ()).at()
    assert not isinstance(result, str)
    assert ("fail" if result.status == "fail" else "no") == ("fail" if found.spots[2][4].status == "fail" else "no")
    press(desk, P)  # again, of the present project
    assert not desk.view().title.startswith("~")
    press(desk, "u")
    assert desk.session.document is first
    press(desk, f"{F} home enter")
    assert "not on a point" in desk.message


def test_the_map_is_written_as_csv(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    desk = fine()
    found = swept(desk)
    press(desk, "E")
    assert isinstance(desk.mode, Edit)
    name = desk.mode.text
    press(desk, "enter")
    assert desk.message == f"written: {name}"
    text = (tmp_path / name).read_text(encoding="utf-8")
    assert text == study.sweep_csv(found)
    assert len(list(csv.DictReader(text.splitlines()))) == 99


def test_the_second_cell_is_looked_for_in_any_view() -> None:
    desk = fine()
    assert ("P", "second cell") not in desk.hint_pairs()
    desk.go_to(AMPS)
    press(desk, f"{P} enter")
    assert "C2.output.0.current first" in desk.message
    press(desk, "s l k f down")
    assert ("P", "second cell") in desk.hint_pairs()
    desk.go_to(AMPS)
    press(desk, P)
    assert "no longer the first" in desk.message
    assert desk.options.first is None
    press(desk, f"{P} escape")
    assert desk.options.first is None
    assert desk.mode is None


def test_a_range_can_be_typed() -> None:
    desk = fine()
    desk.go_to(AMPS)
    press(desk, f"{P} ctrl+u")
    typed(desk, "1.5 A to 2500 mA in 3")
    press(desk, "enter")
    desk.go_to(("bus", "low"))
    press(desk, f"{P} ctrl+u")
    typed(desk, "20 V to 27 V")
    press(desk, "enter")
    assert isinstance(desk.mode, Pick)
    assert "27 points" in desk.mode.title
    typed(desk, "emissions")
    press(desk, "enter")
    found = desk.options.sweep.found
    assert found.values_a == (1.5, 2.0, 2.5)
    assert (found.values_b[0], found.values_b[-1], len(found.values_b)) == (20.0, 27.0, 9)
    assert found.parts == ("dc", "emissions")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("6 A to 1 A in 3", "ends are exchanged"),
        ("6 A", "a range with a number of steps was expected"),
        ("", "a range with a number of steps was expected"),
        ("1 A to 2 V", "C2.output.0.current"),
        ("-1 A to 2 A", "at least 0 A"),
        ("1 A to 2 A in 0", "0 steps were found"),
    ],
)
def test_a_range_that_cannot_be_stays_to_be_mended(text: str, words: str) -> None:
    desk = fine()
    desk.go_to(AMPS)
    press(desk, f"{P} ctrl+u")
    typed(desk, text)
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert words in desk.mode.error


def test_too_many_points_are_refused_before_anything_runs() -> None:
    desk = fine()
    desk.go_to(AMPS)
    press(desk, f"{P} ctrl+u")
    typed(desk, "1 A to 2 A in 1000")
    press(desk, "enter")
    desk.go_to(OHMS)
    press(desk, f"{P} ctrl+u")
    typed(desk, "0 to 1 in 1000")
    press(desk, "enter enter")
    assert "at most 100000" in shown(desk)


def test_a_point_without_a_result_says_why() -> None:
    desk = fine()
    for path, text in ((("bus", "low"), "20 V to 30 V in 3"), (("bus", "nominal"), "25 V to 28 V in 2")):
        desk.go_to(path)
        press(desk, f"{P} ctrl+u")
        typed(desk, text)
        press(desk, "enter")
    press(desk, "enter")
    row = rows(desk, "b")[-1]
    assert row.cells[3].text == "?????"
    assert "low <= nominal <= high" in row.cells[3].info
    press(desk, A)
    assert rows(desk, "b")[-1].cells[3].text == "?"


@pytest.mark.parametrize("count", [1, 11, 17, 40])
def test_more_values_take_narrower_columns(count: int) -> None:
    desk = fine()
    desk.go_to(AMPS)
    press(desk, f"{P} ctrl+u")
    typed(desk, f"1 A to 2 A in {count}")
    press(desk, "enter")
    desk.go_to(OHMS)
    press(desk, f"{P} ctrl+u")
    typed(desk, "0 to 50 mohm in 2")
    press(desk, "enter enter end")
    for size in ((80, 24), (60, 12), (160, 45)):
        lines = screen(desk, *size)
        assert all(len(line) == size[0] for line in lines)
    columns = desk.view().sections[0].columns[1:]
    assert len(columns) == count
    assert {column.width for column in columns} == {1 if count > 17 else 3 if count > 11 else 5}
    heads = [column.title for column in columns]
    assert len(set(heads)) == count or set(heads) == {""}


def test_a_running_sweep_is_not_ended_without_a_question() -> None:
    desk = fine()
    held: list[Work] = []
    desk.start_job = held.append
    desk.go_to(AMPS)
    press(desk, f"{P} enter")
    desk.go_to(OHMS)
    press(desk, f"{P} enter enter")
    assert "it is shown here when it is done" in shown(desk)
    desk.job = Job("sweep", 0.34)
    desk.go_to(AMPS)
    press(desk, Q)
    assert isinstance(desk.mode, Ask)
    assert desk.mode.question == "sweep is at 34% and would be stopped."
    press(desk, "escape")
    assert len(held) == 1
    press(desk, f"{Q} s")
    assert len(held) == 2
    assert desk.view_name == "reach"
    desk.job = Job("how far")
    press(desk, A)  # soon asked again: no question
    assert desk.mode is None
    assert len(held) == 3
    held[0].done(held[0].run(lambda: True, lambda _: None))
    assert "F shows" not in desk.message
    press(desk, F)
    assert "the sweep was stopped" in shown(desk)


def test_a_sweep_that_ends_behind_another_view_says_so() -> None:
    desk = fine()
    held: list[Work] = []
    desk.start_job = held.append
    desk.go_to(AMPS)
    press(desk, f"{P} enter")
    desk.go_to(OHMS)
    press(desk, f"{P} enter enter escape s")
    held[0].done(held[0].run(lambda: False, lambda _: None))
    assert (desk.view_name, desk.message) == ("sheet", "the sweep is done; F shows its map")
    press(desk, F)
    assert "#####" in shown(desk)


def test_an_answer_to_an_older_question_is_let_go() -> None:
    desk = fine()
    held: list[Work] = []
    desk.start_job = held.append
    desk.go_to(AMPS)
    press(desk, Q)
    desk.go_to(OHMS)
    press(desk, Q)
    for work in reversed(held):
        work.done(work.run(lambda: False, lambda _: None))
    assert answer(desk).cell.path == OHMS


def test_before_any_question_the_views_say_how_to_ask() -> None:
    desk = fine()
    press(desk, F)
    assert "no sweep yet" in shown(desk)
    press(desk, P)
    assert "there is no number here" in desk.message
    press(desk, "enter E")
    assert "nothing to write" in desk.message
    desk.view_name = "reach"
    assert "asks how far it can go" in shown(desk)
    press(desk, Q)
    assert desk.message.endswith(".")
    press(desk, A)
    assert desk.message.endswith(".")
    press(desk, "enter")
    assert desk.message.endswith(".")


@settings(max_examples=200, deadline=None)
@given(st.sampled_from(KINDS), st.floats(0.0, 1e5).filter(lambda x: x == 0.0 or x > 1e-12))
def test_the_range_that_is_offered_can_be_taken(kind: str, value: float) -> None:
    cell = paths.Cell(("x",), "x", schema.Field("x", kind, "", low=0.0 if kind != "temperature" else None), value)
    low, high = asking.usual_range(cell)
    assert low < high
    assert low <= value <= high
    desk = Desk(session_of("format = 1\n"))
    asking._ask_range(desk, cell, 5, lambda _: None)
    assert isinstance(desk.mode, Edit)
    values = asking.read_range(cell, desk.mode.text, 9)
    assert len(values) == 5
    assert list(values) == sorted(values)


def test_names_from_the_file_reach_the_screen_clean() -> None:
    desk, _ = written(FINE.replace('"C2"', '"C\\u001b2"').replace("C2 =", '"C\\u001b2" ='))
    ask(desk, AMPS)
    assert all(line.isprintable() for line in screen(desk))
    for _, row in desk.lines():
        assert row is None or all(cell.info.isprintable() for cell in row.cells)
    press(desk, f"escape {P} enter")
    assert desk.message.isprintable()
    desk.go_to(OHMS)
    press(desk, f"{P} enter enter")  # an id like that has to be mended first, says the map
    assert desk.options.sweep.found is None
    assert all(line.isprintable() for line in screen(desk))
