"""The desk inside textual: keys reach it in order, results come back and are painted, only differences are sent."""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Awaitable, Callable, Iterator
from pathlib import Path

from hypothesis import given
from hypothesis import strategies as st
from rich.segment import Segment
from textual.pilot import Pilot
from textual.strip import Strip

from budget.session import Outcome, Session, Snapshot, open_file
from budget.ui import app as app_module
from budget.ui.app import STYLES, BudgetApp, difference
from budget.ui.desk import Ask, Desk
from budget.ui.paint import Line, plain
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
    real = app_module.stages

    def slow(snapshot: Snapshot, *told: object) -> Iterator[Outcome]:
        gate.wait(20)
        yield from real(snapshot)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app_module.stages = slow  # type: ignore[assignment]
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
        app_module.stages = real


def test_an_error_of_the_calculation_is_told_and_the_sheet_stays_open() -> None:
    real = app_module.stages

    def broken(snapshot: Snapshot, *told: object) -> Iterator[Outcome]:
        raise ZeroDivisionError("made for the test")

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        app_module.stages = broken  # type: ignore[assignment]
        await hand.press("down", "D")
        await until(hand, lambda: "fault of this program" in app.desk.message)
        app_module.stages = real
        await hand.press("u")
        await until(hand, lambda: app.desk.session.complete)
        await hand.pause()
        assert lines(app)[-2].startswith("undone: duplicated FA")

    try:
        pilot(check)
    finally:
        app_module.stages = real


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
    from tests.screen.test_paint import SCENES, SIZES, frame, scene

    for name in SCENES:
        for size in SIZES:
            for line in frame(scene(name, True), *size):
                assert {tone for _, tone in line} <= set(STYLES)
                assert Strip([Segment(text, STYLES[tone]) for text, tone in line]).cell_length == size[0]
