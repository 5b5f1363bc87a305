"""The allocation view: wishes, a search that shows the best so far and can be stopped, checks in stages, taking one."""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import pytest
from textual.pilot import Pilot

from budget.engine.candidates import Candidate
from budget.engine.checks import CheckRow
from budget.engine.evaluate import Result, evaluate
from budget.engine.transient import CancelledError
from budget.project import edits
from budget.project.document import get
from budget.session import calculate
from budget.ui import allocation
from budget.ui.allocation import CHECKING, DONE, SEARCHING, Search
from budget.ui.app import BudgetApp
from budget.ui.desk import Desk, Edit, Job, Pick, Work
from tests.screen.driving import demo, press, screen, session_of, shown, typed, written
from tests.screen.test_app import lines, pilot, until

# Four converters on two filters of different rating, all well damped, with a switch-on of a few steps.
TEXT = (
    """\
format = 1
[rules]
inrush_window = "300 us"
[bus]
low = "22 V"
nominal = "28 V"
high = "29 V"
resistance = "10 mohm"
"""
    + "".join(
        f"""
[[filter]]
id = "{name}"
rated_current = "{amps} A"
dm = [{{ series = {{ L = "1 uH", R = "{ohms} mohm" }} }}, {{ shunt = {{ C = "10 uF", R = "400 mohm" }} }}]
"""
        for name, amps, ohms in (("FA", 9, 10), ("FB", 7, 20))
    )
    + "".join(
        f"""
[[converter]]
id = "C{k + 1}"
name = "unit {k + 1}"
filter = "{home}"
rated_power = "90 W"
efficiency = "90 %"
min_input = "16 V"
output = [{{ voltage = "10 V", current = "{amps} A" }}]
"""
        for k, (amps, home) in enumerate(((6, "FA"), (5, "FA"), (4, "FB"), (1, "FB")))
    )
)


@dataclass
class Aside:
    """Stands for the thread of a longer calculation: begun by the desk, run by the test as far as it likes."""

    desk: Desk
    works: list[Work] = field(default_factory=list)
    shares: list[float] = field(default_factory=list)
    looks: list[str] = field(default_factory=list)  # screens, each time something is shown from aside
    asked: int = 0
    stop_at: int | None = None  # stopped by Esc after so many questions
    at_look: Callable[[int], object] = lambda _: None

    def __post_init__(self) -> None:
        self.desk.start_job, self.desk.later = self.start, self.later

    def start(self, work: Work) -> None:
        self.works.append(work)
        self.desk.job = Job(work.label)

    def later(self, do: Callable[[], None]) -> None:
        do()
        self.looks.append(shown(self.desk))
        self.at_look(len(self.looks))

    def run(self) -> None:
        job, work = self.desk.job, self.works.pop()
        assert job is not None

        def cancelled() -> bool:
            self.asked += 1
            if self.asked == self.stop_at:
                press(self.desk, "escape")
            return job.stop

        found = work.run(cancelled, self.shares.append)
        self.desk.job = None
        assert work.keeps
        work.done(found)


def begun(text: str = TEXT, keys: str = "Z G enter") -> tuple[Desk, Aside]:
    desk, _ = written(text)
    aside = Aside(desk)
    press(desk, keys)
    return desk, aside


def searched(text: str = TEXT, keys: str = "Z G enter") -> tuple[Desk, Aside]:
    desk, aside = begun(text, keys)
    aside.run()
    return desk, aside


def search_of(desk: Desk) -> Search:
    found = desk.options.allocation
    assert isinstance(found, Search)
    return found


def candidates(desk: Desk) -> tuple[Candidate, ...]:
    return search_of(desk).candidates


def homes(desk: Desk) -> dict[str, str]:
    rows = get(desk.session.document, ("converter",))
    return {row["id"]: row.get("filter", "") for row in rows}


def wish(desk: Desk, keys: str) -> None:
    press(desk, f"n {keys}")


def to_row(desk: Desk, *key: str) -> None:
    press(desk, "pageup pageup pageup")
    for _ in desk.lines():
        row, _ = desk.here()
        if row is not None and row.key == key:
            return
        press(desk, "down")
    pytest.fail(f"no row {key}")


# -- a search


def test_the_view_shows_at_once_that_it_searches() -> None:
    desk, aside = begun(keys="s G enter")
    assert desk.view_name == "allocation"
    assert search_of(desk).state == SEARCHING
    assert desk.view().title == "~ searching: allocation, even"
    assert "~ searching, even" in screen(desk)[0]
    assert "~ nothing admissible yet" in shown(desk)
    assert screen(desk)[-1].startswith(" Esc stop")
    aside.run()
    assert search_of(desk).state == DONE
    assert desk.view().title == "allocation, even"


def test_the_best_so_far_is_shown_with_its_gap_before_the_search_ends() -> None:
    desk, aside = searched()
    first = aside.looks[0]
    assert "so far" in first
    assert "searching, this is the best so far; none can be better by more than" in " ".join(first.split())
    assert "headroom" in first
    assert "proved" not in first
    assert search_of(desk).found is not None
    assert "goal even: proved" in shown(desk)
    assert all(0.0 <= share <= 1.0 for share in aside.shares)


def test_every_check_is_made_in_stages_and_says_which_are_open() -> None:
    desk, aside = searched()
    open_ = [look for look in aside.looks if "no. 1" in look and "not checked" in look]
    assert any("switch-on" in look and "~ ok" in look for look in open_)
    assert "not checked" not in shown(desk)
    for one in candidates(desk):
        assert one.unchecked == ()
        placed = search_of(desk).project
        placed = replace(
            placed, converters=tuple(replace(c, filter=dict(one.allocation)[c.id]) for c in placed.converters)
        )
        assert one.status == evaluate(placed).status


def test_candidates_are_ranked_anew_when_a_late_check_fails_and_the_cursor_stays_on_its_own() -> None:
    """The one with the best headroom fails at switch-on only: its place is last then, and the rest move up."""
    from budget.engine import evaluate as engine

    real = engine.with_inrush
    calls: list[tuple[str, ...]] = []

    def failing(result: Result, *rest: Any) -> Result:
        calls.append(tuple(c.filter for c in result.project.converters))
        done = real(result, *rest)
        if len(calls) > 1:
            return done
        row = CheckRow("start", "C1", None, None, None, None, None, "", None, "", "fail")
        return replace(done, checks=(row, *done.checks), status="fail")

    desk, aside = begun()
    stood: list[tuple[tuple[str, str], ...]] = []

    def look(_: int) -> None:
        if search_of(desk).state == CHECKING and not stood:
            press(desk, "right")
            stood.append(candidates(desk)[desk.cursor.column - 2].allocation)

    aside.at_look = look
    patch = pytest.MonkeyPatch()
    patch.setattr(engine, "with_inrush", failing)
    try:
        aside.run()
    finally:
        patch.undo()
    found = candidates(desk)
    assert len(found) > 2
    assert [c.status for c in found] == ["ok"] * (len(found) - 1) + ["fail"]
    assert found[-1].place == 0
    assert "FAIL, start of C1" in shown_info(desk, len(found) - 1)
    assert (found[0].allocation, desk.cursor.column) == (stood[0], 2)  # it was no. 2


def shown_info(desk: Desk, number: int) -> str:
    row = next(row for _, row in desk.lines() if row is not None and row.key == ("fact", "state"))
    return row.cells[2 + number].info


# -- stopping it


@pytest.mark.parametrize("key", ["escape", "G"])
def test_it_can_be_stopped_and_keeps_the_best_so_far(key: str) -> None:
    desk, aside = begun(keys="Z G down down enter")  # with nothing checked against, quiet goes by the headroom
    aside.at_look = lambda number: press(desk, key) if number == 1 else None
    aside.run()
    search = search_of(desk)
    assert search.state == DONE
    assert search.found is not None
    assert not search.found.proved
    assert "stopped" in search.found.note
    assert search.candidates
    assert search.candidates[0].headroom is not None
    assert all("switch-on" in c.unchecked for c in search.candidates)
    assert desk.view_name == "allocation"
    assert desk.message == "stopped; what was found so far is kept"
    assert "not proved (stopped); none can be better" in shown(desk)
    assert screen(desk)[-1].startswith(" Esc back")
    press(desk, "escape")
    assert desk.view_name == "sheet"


@pytest.mark.parametrize("stop_at", [1, 2, 5, 20, 60])
def test_wherever_it_is_stopped_nothing_is_claimed_that_was_not_done(stop_at: int) -> None:
    desk, aside = begun()
    aside.stop_at = stop_at
    aside.run()
    search = search_of(desk)
    assert search.state == DONE
    assert search.found is not None
    assert "~" not in shown(desk)
    done = [c for c in search.candidates if not c.unchecked]
    if search.found.proved:  # it was stopped in the checks
        assert len(done) < len(search.candidates) or aside.asked < stop_at
    else:
        assert not done


def test_stopped_checks_can_be_gone_on_with() -> None:
    desk, aside = begun()

    def look(_: int) -> None:
        if search_of(desk).state == CHECKING and desk.job is not None and not desk.job.stop:
            press(desk, "escape")

    aside.at_look = look
    aside.run()
    assert any(c.unchecked for c in candidates(desk))
    assert "not checked" in shown(desk)
    found = search_of(desk).found
    assert found is not None
    assert found.proved  # the search itself was done
    aside.at_look = lambda _: None
    press(desk, "G")
    assert isinstance(desk.mode, Pick)
    assert desk.mode.shown()[0][0] == "go on with the checks of the candidates"
    press(desk, "enter")
    assert search_of(desk).state == CHECKING
    aside.run()
    assert not any(c.unchecked for c in candidates(desk))
    press(desk, "G")
    assert isinstance(desk.mode, Pick)
    assert desk.mode.shown()[0][1] == "even"


def test_a_search_that_a_newer_one_replaced_changes_nothing_any_more() -> None:
    desk, aside = begun()
    old = aside.works[0]
    desk.job = None
    press(desk, "G down enter")
    assert search_of(desk).goal == "fewest"
    before = desk.options
    old.done(old.run(lambda: True, lambda _: None))
    assert desk.options is before


def test_a_fault_in_a_search_leaves_the_view_usable(monkeypatch: pytest.MonkeyPatch) -> None:
    desk, aside = begun()

    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("made for the test")

    monkeypatch.setattr("budget.engine.allocate.allocate", broken)
    with pytest.raises(ZeroDivisionError):
        aside.run()
    assert search_of(desk).state == DONE
    assert "ended before anything was found" in shown(desk)
    assert not desk.view().title.startswith("~")


def test_a_cancelled_switch_on_is_no_fault() -> None:
    desk, aside = begun()

    def look(_: int) -> None:
        if any(not c.unchecked for c in candidates(desk)) and desk.job is not None:
            desk.stop_job()

    aside.at_look = look
    aside.run()
    assert [c.unchecked for c in candidates(desk)].count(()) == 1
    assert CancelledError.__name__ not in shown(desk)


def test_it_does_not_search_with_what_is_not_calculated_yet() -> None:
    desk, _ = written(TEXT)
    aside = Aside(desk)
    desk.calculate = lambda: None
    press(desk, "down down > Z G")
    assert desk.mode is None
    assert "still being calculated" in desk.message
    assert not aside.works


@pytest.mark.parametrize("keeps", [True, False])
def test_escape_stops_what_runs_aside_and_what_it_has_is_kept_only_if_it_keeps_it(keeps: bool) -> None:
    """In the program itself, with its thread: the work ends on the flag, and delivers or says that it stopped."""
    begun, got = threading.Event(), []

    def patient(cancelled: Callable[[], bool], _: Callable[[float], None]) -> str:
        begun.set()
        while not cancelled():
            threading.Event().wait(0.005)
        return "so far"

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app.desk.start_job(Work("counting", patient, got.append, keeps))
        await until(hand, begun.is_set)
        await hand.press("l", "escape")
        assert app.desk.view_name == "loads"  # the first Esc only stops
        await until(hand, lambda: app.desk.job is None)
        assert got == (["so far"] if keeps else [])
        assert keeps or app.desk.message == "stopped: counting"
        await hand.press("escape")
        assert app.desk.view_name == "sheet"

    pilot(check)


def test_the_program_searches_aside_and_stops_on_a_key() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        desk = app.desk
        await until(hand, lambda: desk.session.complete)
        await hand.press("Z", "G", "enter")
        await until(hand, lambda: desk.options.allocation.state == DONE)
        assert not any(c.unchecked for c in candidates(desk))
        assert "goal even: proved" in "\n".join(lines(app))
        await hand.press("enter")
        await until(hand, lambda: desk.session.complete)
        assert homes(desk) == dict(candidates(desk)[0].allocation)

    pilot(check, session_of(TEXT))


# -- wishes


def test_wishes_of_every_kind_are_entered_listed_and_obeyed() -> None:
    desk, aside = begun(keys="Z")
    assert "none; n adds one" in shown(desk)
    wish(desk, "enter")  # keep
    typed(desk, "C2")
    press(desk, "enter")
    assert desk.message == "wish: C2 stays; the next search (G) obeys it"
    wish(desk, "down enter")  # apart
    typed(desk, "C1")
    press(desk, "enter")
    typed(desk, "C3")
    press(desk, "enter")
    wish(desk, "down down enter")  # together
    typed(desk, "C3")
    press(desk, "enter")
    typed(desk, "C4")
    press(desk, "enter")
    wish(desk, "down down down enter")  # not behind
    typed(desk, "C1")
    press(desk, "enter")
    typed(desk, "FB")
    press(desk, "enter")
    wish(desk, "end enter enter")  # at most, behind each
    assert isinstance(desk.mode, Edit)
    typed(desk, "3")
    press(desk, "enter")
    assert desk.options.wishes == (
        ("keep", "C2"),
        ("apart", "C1", "C3"),
        ("together", "C3", "C4"),
        ("banned", "C1", "FB"),
        ("most", "", "3"),
    )
    text = shown(desk)
    for line in (
        "C2 stays",
        "C1 and C3 apart",
        "C3 and C4 together",
        "C1 not behind FB",
        "at most 3 converters behind",
    ):
        assert line in text
    assert text.count("holds now") == 5
    press(desk, "G enter")
    aside.run()
    row, _ = desk.here()
    assert row is not None
    assert row.key == ("fact", "state")  # no longer on a wish
    assert [dict(c.allocation) for c in candidates(desk)] == [{"C1": "FA", "C2": "FA", "C3": "FB", "C4": "FB"}]
    assert search_of(desk).wishes == desk.options.wishes


def test_the_converter_under_the_cursor_is_offered_first() -> None:
    desk, _ = searched()
    to_row(desk, "converter", "C3 unit 3")
    press(desk, "n enter")
    assert isinstance(desk.mode, Pick)
    assert desk.mode.shown()[desk.mode.index][1] == "C3"


def test_a_wish_is_removed_by_itself_and_the_number_of_one_can_be_changed() -> None:
    desk, _ = begun(keys="Z")
    for keys in ("enter enter", "end enter enter 3 enter", "enter down enter"):
        wish(desk, keys)
    to_row(desk, "wish", "most", "", "3")
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert desk.mode.text == "3"
    press(desk, "ctrl+u backspace 0 enter")
    assert isinstance(desk.mode, Edit)
    assert "from 1 on" in desk.mode.error
    press(desk, "backspace 2 enter")
    assert desk.options.wishes == (("keep", "C1"), ("most", "", "2"), ("keep", "C2"))
    press(desk, "R")
    assert desk.options.wishes == (("keep", "C1"), ("keep", "C2"))
    assert desk.message == "wish removed: at most 2 converters behind each filter"
    to_row(desk, "wish", "keep", "C1")
    press(desk, "enter")
    assert "R removes it" in desk.message
    press(desk, "R R")
    assert desk.options.wishes == ()
    press(desk, "R")
    assert "not on a wish" in desk.message
    assert not desk.session.done  # wishes are no part of the project
    assert not desk.session.dirty


def test_a_wish_that_is_there_already_is_told() -> None:
    desk, _ = begun(keys="Z")
    wish(desk, "down enter enter enter")
    assert desk.options.wishes == (("apart", "C1", "C2"),)
    wish(desk, "down enter down enter enter")  # the same pair the other way round
    assert desk.options.wishes == (("apart", "C1", "C2"),)
    assert "is there already" in desk.message


def test_contradictory_wishes_are_named_before_and_after_a_search() -> None:
    desk, aside = begun(keys="Z")
    for keys in ("enter enter", "enter down enter", "down enter enter enter"):  # C1 and C2 stay at FA, and apart
        wish(desk, keys)
    assert shown(desk).count("! contradiction") == 3
    to_row(desk, "wish", "apart", "C1", "C2")
    assert "cannot be together with: C1 stays, C2 stays" in shown(desk)
    press(desk, "G enter")
    aside.run()
    text = shown(desk)
    assert "goal even: no allocation is admissible, proved" in text
    assert "these cannot be together: C1 and C2 apart, C1 stays, C2 stays" in text


def test_a_wish_about_what_is_gone_says_so_and_is_left_out() -> None:
    desk, aside = begun(keys="Z")
    wish(desk, "enter enter")
    wish(desk, "down down down enter down enter enter")
    press(desk, "s g")
    typed(desk, "C1")
    press(desk, "enter R")
    assert "C1" not in homes(desk)
    press(desk, "Z")
    assert "gone: there is no C1" in shown(desk)
    press(desk, "G enter")
    aside.run()
    assert search_of(desk).wishes == (("banned", "C2", "FA"),)
    assert all(dict(c.allocation)["C2"] == "FB" for c in candidates(desk))
    press(desk, "u")
    assert "gone" not in shown(desk)


def test_the_search_says_which_wishes_it_leaves_out() -> None:
    desk, _ = begun(keys="Z")
    wish(desk, "enter enter")
    desk.options = replace(desk.options, wishes=(*desk.options.wishes, ("keep", "C9")))
    press(desk, "G enter")
    assert desk.message == "left out, as they name what is not there: C9 stays"


def test_a_wish_about_what_cannot_be_read_says_so() -> None:
    desk, _ = written(TEXT.replace('current = "4 A"', 'current = "x"'))
    press(desk, "Z")
    wish(desk, "enter")
    typed(desk, "C3")
    press(desk, "enter")
    assert "left out: C3 cannot be read" in shown(desk)


def test_names_of_files_reach_no_terminal_unprintable() -> None:
    desk, _ = searched(TEXT.replace('name = "unit 1"', 'name = "a\\u001b[31mb\\u0000"'))
    wish(desk, "enter enter")
    assert all(line.isprintable() for line in screen(desk))


# -- taking one


def test_taking_a_candidate_is_one_edit_and_one_undo_brings_all_back() -> None:
    desk, _ = searched()
    first, before = desk.session.document, homes(desk)
    one = candidates(desk)[0]
    assert one.moves > 1
    press(desk, "enter")
    assert homes(desk) == dict(one.allocation)
    assert [step.label for step in desk.session.done] == ["allocation no. 1"]
    assert desk.view().title == "allocation, even"  # the numbers still hold
    moves = next(row for _, row in desk.lines() if row is not None and row.key == ("fact", "moves"))
    assert moves.cells[2].text == "0"
    press(desk, "u")
    assert desk.session.document is first
    assert homes(desk) == before
    press(desk, "U")
    assert homes(desk) == dict(one.allocation)


def test_each_candidate_can_be_taken_and_its_numbers_come_true() -> None:
    desk, _ = searched()
    for number, one in enumerate(candidates(desk)):
        press(desk, "pageup home right right " + "right " * number + "enter")
        assert homes(desk) == dict(one.allocation)
        result = calculate(desk.session.snapshot()).result
        assert result is not None
        assert result.status == one.status
        wanted = [
            (row.wanted - row.value) / row.wanted
            for row in result.checks
            if row.check == "filter current" and row.value is not None and row.wanted
        ]
        assert min(wanted) == pytest.approx(one.headroom, abs=1e-12)


def test_what_is_no_candidate_cannot_be_taken() -> None:
    desk, _ = searched()
    first = desk.session.document
    press(desk, "home enter right enter")
    assert "not on a candidate" in desk.message
    wish(desk, "enter enter")
    press(desk, "right right right enter")  # a column of candidates, but the row of a wish
    assert "R removes it" in desk.message
    assert desk.session.document is first


def test_an_edit_since_the_search_is_marked_and_a_candidate_can_still_be_taken() -> None:
    desk, _ = searched()
    desk.go_to(("converter", 2, "output", 0, "current"))
    press(desk, "3 enter Z")
    assert desk.view().title == "~ before the edit: allocation, even"
    assert "The project changed since this search; G searches anew." in shown(desk)
    one = candidates(desk)[0]
    press(desk, "enter")
    assert homes(desk) == dict(one.allocation)
    press(desk, "u u Z")
    assert desk.view().title == "allocation, even"


def test_wishes_changed_since_the_search_are_marked() -> None:
    desk, _ = searched()
    wish(desk, "enter enter")
    assert desk.view().title == "~ other wishes: allocation, even"
    press(desk, "R")
    assert desk.view().title == "allocation, even"


def test_a_kept_converter_moved_since_the_search_is_marked() -> None:
    desk, _ = begun(keys="Z")
    aside = Aside(desk)
    wish(desk, "enter enter")
    press(desk, "G enter")
    aside.run()
    press(desk, "s g")
    typed(desk, "C1")
    press(desk, "enter > Z")
    assert homes(desk)["C1"] == "FB"
    assert desk.view().title == "~ before the move: allocation, even"


@pytest.mark.parametrize(
    ("keys", "said"),
    [("s g C 4 enter R Z", "C4 is gone"), ("s g C 4 enter D Z", "C5 came"), ("s g F B enter R Z", "FB is gone")],
)
def test_a_candidate_that_no_longer_fits_is_refused_with_a_sentence(keys: str, said: str) -> None:
    desk, _ = searched()
    press(desk, keys)
    document = desk.session.document
    to_row(desk, "fact", "state")
    press(desk, "home right right enter")
    assert said in desk.message
    assert "search again (G)" in desk.message
    assert desk.session.document is document


def test_a_search_of_the_demo_gives_what_the_command_line_gives() -> None:
    """The demo's own search, on the desk; the candidates are fully checked there too."""
    desk, log = demo("ferry")
    press(desk, "Z G enter")
    assert log.jobs == ["searching, even"]
    found = candidates(desk)
    assert search_of(desk).found is not None
    assert [round((c.headroom or 0.0) * 100, 1) for c in found] == [54.1, 48.1, 46.3, 43.2, 31.9]
    assert not any(c.unchecked for c in found)
    assert list(edits.ids(desk.session.document, "converter")) == [unit for unit, _ in found[0].allocation]


def test_where_nothing_is_admissible_it_says_what_would_help() -> None:
    desk, _ = searched(TEXT.replace('rated_current = "9 A"', 'rated_current = "2 A"'))
    text = shown(desk)
    assert "no allocation is admissible, proved" in text
    assert "would carry" in text
    assert "it would do with a rated current of at least" in text
    press(desk, "enter")
    assert "not on a candidate" in desk.message


def test_the_view_fits_a_small_terminal_and_an_ascii_one() -> None:
    desk, _ = searched()
    wish(desk, "enter enter")
    for width, height in ((80, 24), (60, 12), (200, 50)):
        lines = screen(desk, width, height)
        assert len(lines) == height
        assert all(len(line) == width and line.isascii() for line in lines)


def test_age_looks_at_everything_but_places_and_names() -> None:
    desk, _ = searched()
    project = search_of(desk).project
    moved = replace(project, converters=tuple(replace(c, filter="FA", name="x") for c in project.converters))
    assert allocation.same_bus(project, moved)
    assert not allocation.same_bus(project, replace(project, bus=replace(project.bus, low=21.0)))
