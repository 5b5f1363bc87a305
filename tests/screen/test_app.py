"""The desk inside textual: keys reach it in order, results come back and are painted, only differences are sent."""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Awaitable, Callable, Iterator
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rich.segment import Segment
from textual.pilot import Pilot
from textual.strip import Strip

from budget.session import Outcome, Session, Snapshot, open_file, stages
from budget.ui import app as app_module
from budget.ui.app import STYLES, BudgetApp, difference
from budget.ui.desk import Ask, Desk
from budget.ui.paint import Line, frame, plain
from tests.screen.driving import TEXTS, session_of

Check = Callable[[BudgetApp, Pilot[int]], Awaitable[None]]


def pilot(check: Check, session: Session | None = None, size: tuple[int, int] = (80, 24)) -> BudgetApp:
    """Run ``check`` against the program on a screen in memory."""
    app = BudgetApp(Desk(session or session_of(TEXTS["small"]), ascii_only=True))

    async def run() -> None:
        async with app.run_test(size=size) as hand:
            await check(app, hand)

    asyncio.run(run())
    return app


async def until(hand: Pilot[int], done: Callable[[], bool]) -> None:
    """Let the program run until something has happened; the suite's own timeout ends a wait for what never does."""
    async with asyncio.timeout(20):
        while not done():
            await hand.pause()


def lines(app: BudgetApp) -> list[str]:
    """What is on the screen, as text."""
    return [strip.text for strip in app.screen._compositor.render_strips()]


def told(app: BudgetApp) -> str:
    """The message, which takes up to three lines where it has to."""
    return " ".join(line.strip() for line in lines(app)[-4:-1])


def test_results_arrive_and_are_painted() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert "FAIL" in lines(app)[0]
        assert "144%" in "\n".join(lines(app))

    pilot(check)


def test_keys_reach_the_desk_in_their_order() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await hand.press(*["l", "down", "down", "down", "5", "full_stop", "2", "enter", "7", "enter"])
        case = app.desk.session.document.data["case"][0]["load"]
        assert (case["C1"], case["C2"], case["C3"]) == (5.2, 7, "5 W")
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert lines(app) == [plain(line) for line in app.board.lines]

    pilot(check)


def test_an_edit_is_calculated_and_told() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("down", "down", "greater_than_sign")
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert lines(app)[-2].startswith("C1 behind FB: ")

    pilot(check)


def test_the_screen_follows_the_size() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        for width, height in ((160, 48), (20, 5), (80, 24)):
            await hand.resize_terminal(width, height)
            await until(hand, lambda w=width, h=height: app.board.size == (w, h))  # type: ignore[misc]
            await hand.pause()
            assert [len(line) for line in lines(app)] == [width] * height
            assert lines(app) == [plain(line) for line in app.board.lines]
        assert lines(app)[2].startswith("bus")

    pilot(check)


def test_paste_is_one_text() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        from textual.events import Paste

        app.board.post_message(Paste("new name\r"))
        await hand.pause()
        await hand.press("enter")
        assert app.desk.session.document.data["bus"]["name"] == "new name"

    pilot(check)


def test_quit_asks_while_something_is_unsaved() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await hand.press("down", "D", "q")
        assert isinstance(app.desk.mode, Ask)
        assert "unsaved" in lines(app)[-2]
        await hand.press("escape", "ctrl+q")
        assert isinstance(app.desk.mode, Ask)
        await hand.press("d")

    assert pilot(check).return_value == 0


def test_quit_leaves_at_once_where_nothing_changed() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await hand.press("q")

    assert pilot(check).return_value == 0


def test_ctrl_c_copies_and_does_not_end_the_program() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await hand.press("ctrl+c")
        assert app.desk.message == "copied: bench"
        assert app.clipboard == "bench"

    pilot(check)


def test_a_file_changed_by_another_is_told(tmp_path: Path) -> None:
    file = tmp_path / "bus.toml"
    file.write_text(TEXTS["small"], encoding="utf-8")

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app.look_at_file()
        assert "changed on disk" not in app.desk.message
        file.write_text(TEXTS["small"].replace("bench", "desk"), encoding="utf-8")
        app.look_at_file()
        await hand.pause()
        assert "changed on disk" in lines(app)[-2]

    pilot(check, open_file(file))


def test_late_results_look_stale() -> None:
    gate = threading.Event()
    real = stages

    def slow(snapshot: Snapshot, *told: object) -> Iterator[Outcome]:
        gate.wait(20)
        yield from real(snapshot)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        vars(app_module)["stages"] = slow
        await hand.press("l", "down", "down", "down", "9", "enter")
        await until(hand, lambda: app.desk.pending)
        await hand.press("escape")
        await hand.pause()
        assert "~ calculating" in lines(app)[0]
        assert "~" in lines(app)[2]
        await hand.press("down")  # keys are taken while it calculates
        gate.set()
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert "~" not in lines(app)[2]

    try:
        pilot(check)
    finally:
        gate.set()
        vars(app_module)["stages"] = real


def test_an_error_of_the_calculation_is_told_and_the_sheet_stays_open() -> None:
    real = stages

    def broken(snapshot: Snapshot, *told: object) -> Iterator[Outcome]:
        raise ZeroDivisionError("made for the test")

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        vars(app_module)["stages"] = broken
        await hand.press("down", "D")
        await until(hand, lambda: "fault of this program" in app.desk.message)
        vars(app_module)["stages"] = real
        await hand.press("u")
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert lines(app)[-2].startswith("undone: duplicated FA")

    try:
        pilot(check)
    finally:
        vars(app_module)["stages"] = real


class Gates:
    """Stages that wait, each for its gate, and tell when they have come to it. Stands in for ``session.stages``."""

    def __init__(self) -> None:
        self.real = stages
        self.open = [threading.Event() for _ in range(4)]
        self.reached: list[tuple[int, int]] = []  # generation, stage
        self.cancelled: list[int] = []
        self.fail_at = -1

    def __call__(
        self, snapshot: Snapshot, cancelled: Callable[[], bool], progress: Callable[[float], None]
    ) -> Iterator[Outcome]:
        for n, outcome in enumerate(self.real(snapshot, cancelled, progress)):
            self.reached.append((snapshot.generation, n))
            while not self.open[n].wait(0.02):  # as a long stage does, it asks now and then whether it is wanted
                if cancelled():
                    self.cancelled.append(snapshot.generation)
                    return
            if n == self.fail_at:
                raise ZeroDivisionError("made for the test")
            if n == 3:
                progress(0.5)
            yield outcome


@pytest.fixture
def gates(monkeypatch: pytest.MonkeyPatch) -> Iterator[Gates]:
    made = Gates()
    monkeypatch.setattr(app_module, "stages", made)
    yield made
    for gate in made.open:
        gate.set()


def has(app: BudgetApp) -> tuple[bool, bool, bool, bool]:
    """Which parts of the results are there."""
    result = app.desk.session.result
    if result is None:
        return (False, False, False, False)
    return (True, result.emissions is not None, result.stability is not None, result.inrush is not None)


def test_results_arrive_stage_by_stage_and_the_sheet_is_not_stale_after_the_first(gates: Gates) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: gates.reached == [(1, 0)] and app.desk.pending)
        assert has(app) == (False, False, False, False)
        await until(hand, lambda: "~ calculating" in lines(app)[0] and "~" in lines(app)[2])
        for n in range(4):
            gates.open[n].set()
            await until(hand, lambda k=n: sum(has(app)) == k + 1)  # type: ignore[misc]
            await hand.pause()
            assert app.desk.session.complete == (n == 3)
            assert "~" not in "\n".join(lines(app)[2:10])
            assert ("~" in lines(app)[0]) == (n < 3)
        assert "FAIL" in lines(app)[0]

    pilot(check)


def test_an_edit_in_a_later_stage_cancels_it(gates: Gates) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        for gate in gates.open[:3]:
            gate.set()
        await until(hand, lambda: (1, 3) in gates.reached)
        await hand.press("down", "D")
        await until(hand, lambda: gates.cancelled == [1] and (2, 3) in gates.reached)
        assert app.desk.session.generation == 2
        assert has(app) == (True, True, True, False)
        assert not app.desk.session.complete
        gates.open[3].set()
        await until(hand, lambda: app.desk.session.complete)
        assert has(app) == (True, True, True, True)
        assert (1, 3) in gates.reached
        assert app.desk.session.full is app.desk.session.result

    pilot(check)


def test_an_edit_in_the_first_stage_replaces_it(gates: Gates) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: gates.reached == [(1, 0)])
        await hand.press("down", "D", "D", "D")
        for gate in gates.open:
            gate.set()
        await until(hand, lambda: app.desk.session.complete)
        assert app.desk.session.generation == 4
        assert {generation for generation, stage in gates.reached if stage == 3} == {4}

    pilot(check)


def test_views_show_what_was_before_the_edit_until_their_part_is_there(gates: Gates) -> None:
    for gate in gates.open:
        gate.set()

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        for gate in gates.open:
            gate.clear()
        await hand.press("down", "down", "greater_than_sign")
        for n in range(4):
            gates.open[n].set()
            await until(hand, lambda k=n: app.desk.session.fresh and sum(has(app)) == k + 1)  # type: ignore[misc]
            for key, stage in (("a", 1), ("y", 1), ("Y", 2), ("J", 3)):
                await hand.press(key)
                await hand.pause()
                assert ("~ before the edit" in lines(app)[0]) == (n < stage), (key, n)

    pilot(check, size=(160, 24))


@pytest.mark.parametrize("stage", range(4))
def test_a_stage_that_fails_leaves_the_sheet_open_with_a_sentence(gates: Gates, stage: int) -> None:
    for gate in gates.open:
        gate.set()

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        gates.fail_at = stage
        await hand.press("down", "D")
        await until(hand, lambda: "a fault of this program" in app.desk.message)
        await hand.pause()
        assert "the calculation failed" in told(app)
        assert "! calculation failed" in lines(app)[0]
        gates.fail_at = -1
        await hand.press("u")
        await until(hand, lambda: app.desk.session.complete)
        for key in "aJYs":
            await hand.press(key)
        assert lines(app)[2].startswith("bus")

    pilot(check)


def test_a_view_that_fails_gives_way_to_the_sheet_with_a_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    from budget.ui.desk import VIEWS

    def broken(_: object) -> object:
        raise ZeroDivisionError("made for the test")

    monkeypatch.setitem(VIEWS, "spectrum", broken)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("a")
        await until(hand, lambda: "this view failed, a fault of this program" in told(app))
        assert lines(app)[2].startswith("bus")
        await hand.press("J")
        assert "switchon" in app.desk.view_name

    pilot(check)


def test_a_job_runs_aside_shows_its_progress_and_gives_its_answer() -> None:
    from budget.ui.desk import Work

    gate, begun = threading.Event(), threading.Event()
    got: list[object] = []

    def run(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> object:
        progress(0.5)
        begun.set()
        gate.wait(20)
        return 7

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app.desk.start_job(Work("counting", run, got.append))
        await until(hand, lambda: begun.is_set() and "~ counting 50%" in lines(app)[0])
        await hand.press("down")  # keys are taken meanwhile
        assert app.desk.here()[0] is not None
        gate.set()
        await until(hand, lambda: got == [7])
        assert app.desk.job is None

    try:
        pilot(check)
    finally:
        gate.set()


def test_a_newer_job_takes_the_place_of_one_and_a_failing_one_is_told() -> None:
    from budget.ui.desk import Work

    ended = threading.Event()
    got: list[object] = []

    def patient(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> object:
        while not cancelled():
            ended.wait(0.01)
        ended.set()
        return "old"

    def failing(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> object:
        raise ZeroDivisionError("made for the test")

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app.desk.start_job(Work("old", patient, got.append))
        app.desk.start_job(Work("new", lambda _c, _p: "new", got.append))
        await until(hand, lambda: ended.is_set() and got == ["new"])
        app.desk.start_job(Work("third", failing, got.append))
        await until(hand, lambda: "third failed, a fault of this program" in app.desk.message)
        assert got == ["new"]

    try:
        pilot(check)
    finally:
        ended.set()


# -- what is sent

TONES = ("", "fail", "cursor")
words = st.text(st.sampled_from("ab 1\u0430\u7535\u6e90"), min_size=1, max_size=8)
spans = st.lists(st.tuples(words, st.sampled_from(TONES)), max_size=5)


def cells(line: Line) -> list[tuple[str, str]]:
    """The columns of a line: a wide sign takes two."""
    out = []
    for text, tone in line:
        for sign in text:
            out += [(sign, tone)] * Segment(sign).cell_length
    return out


@given(spans, spans)
def test_outside_the_difference_two_lines_are_the_same(before: Line, after: Line) -> None:
    one, two = cells(before), cells(after)
    size = max(len(one), len(two))
    before, after = [*before, (" " * (size - len(one)), "")], [*after, (" " * (size - len(two)), "")]
    one, two = cells(before), cells(after)
    start, end = difference(before, after)
    assert one[:start] == two[:start]
    assert one[end:] == two[end:]
    if one == two:
        assert start >= end
    else:
        assert one[start] != two[start]
        assert one[end - 1] != two[end - 1]


def test_the_difference_of_lines_of_unequal_width_is_all_of_them() -> None:
    assert difference([("abc", "")], [("ab", "")]) == (0, 3)
    assert difference([("a", "")], [("a", "fail")]) == (0, 1)
    assert difference([], []) == (0, 0)


def test_every_tone_that_is_painted_has_a_style() -> None:
    from tests.screen.test_paint import SCENES, SIZES, scene

    for name in SCENES:
        for size in SIZES:
            for line in frame(scene(name, True), *size):
                assert {tone for _, tone in line} <= set(STYLES)
                assert Strip([Segment(text, STYLES[tone]) for text, tone in line]).cell_length == size[0]
