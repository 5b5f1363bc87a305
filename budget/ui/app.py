"""The desk in a terminal: textual brings keys in and lines out, a thread calculates. Only this module knows textual.

One widget covers the screen and has every key. After each key the frame is painted anew as plain data and compared with
the one before; only the spans that differ are sent to the terminal.
"""

from __future__ import annotations

import contextlib
import gc
import sys
import threading
from collections.abc import Callable, Iterator
from itertools import islice
from typing import Any

from rich.segment import Segment
from rich.style import Style
from textual.app import App, ComposeResult
from textual.events import Key, Paste, Resize
from textual.geometry import Region
from textual.message import Message
from textual.strip import Strip
from textual.widget import Widget

from budget.project.document import Document
from budget.session import Outcome, Session, Snapshot, asides, stages
from budget.ui.desk import Desk, Job, Work
from budget.ui.paint import Line, frame

LATE = 0.05  # seconds after which results that have not come look stale
PAUSE = 0.03  # seconds between two stages: painting and calculating at once would make both late
FAST = 2  # stages that follow an edit at once: DC and emissions
WATCH = 2.0  # seconds between looks at the file on disk

STYLES: dict[str, Style] = {
    "": Style(),
    "head": Style(bold=True),
    "heading": Style(bold=True, underline=True),
    "panel": Style(bold=True, reverse=True),
    "pale": Style(dim=True),
    "lent": Style(italic=True),
    "bar": Style(reverse=True),
    "cursor": Style(reverse=True, bold=True),
    "edit": Style(underline=True),
    "fail": Style(color="red", bold=True),
    "thin": Style(color="yellow"),
    "ok": Style(color="green"),
    "no data": Style(dim=True),
    **{f"trace{k}": Style(color=name) for k, name in enumerate(("cyan", "magenta", "green", "yellow", "blue", "red"))},
}


class Calculated(Message):
    """Results from the worker."""

    def __init__(self, outcome: Outcome) -> None:
        super().__init__()
        self.outcome = outcome


class Aside(Message):
    """The results of a held state, from the worker."""

    def __init__(self, document: Document, outcome: Outcome) -> None:
        super().__init__()
        self.document = document
        self.outcome = outcome


class Trouble(Message):
    """The worker met an error that is a fault of this program."""

    def __init__(self, generation: int, text: str) -> None:
        super().__init__()
        self.generation = generation
        self.text = text


class Staged(Message):
    """How far the longest stage of the present results has come."""

    def __init__(self, share: float) -> None:
        super().__init__()
        self.share = share


class Progress(Message):
    """How far a longer calculation has come."""

    def __init__(self, number: int, fraction: float) -> None:
        super().__init__()
        self.number = number
        self.fraction = fraction


class Later(Message):
    """Something that a job wants done in the thread of the screen."""

    def __init__(self, do: Callable[[], None]) -> None:
        super().__init__()
        self.do = do


class Finished(Message):
    """A longer calculation is done, or has failed with ``error``."""

    def __init__(self, number: int, work: Work, found: object, error: str = "") -> None:
        super().__init__()
        self.number = number
        self.work = work
        self.found = found
        self.error = error
        self.stopped = False


class Worker:
    """Calculates the newest snapshot: the fast stages in one thread, the slow ones behind them in another.

    A slow stage that cannot be stopped in the middle so never keeps the fast results of a newer edit waiting.
    """

    def __init__(self, post: Callable[[Message], object]) -> None:
        self._post = post
        self._newest: Snapshot | None = None
        self._told = 0.0
        self._moved = threading.Event()  # a newer snapshot has come
        self._slow = Mailbox("slow stages", self._rest)
        self._fast = Mailbox("fast stages", self._begin)

    def want(self, snapshot: Snapshot) -> None:
        self._newest = snapshot
        self._moved.set()
        self._fast.put(snapshot)

    def _begin(self, snapshot: Snapshot) -> None:
        def results() -> Iterator[Outcome]:  # so that an error before the first stage is one of a stage too
            yield from stages(snapshot, lambda: self._newest is not snapshot, self._progress)

        rest = results()
        if self._step(snapshot, rest, FAST):
            self._slow.put((snapshot, rest))

    def _rest(self, item: tuple[Snapshot, Iterator[Outcome]]) -> None:
        if self._step(*item, None):
            self._aside(item[0])

    def _aside(self, snapshot: Snapshot) -> None:
        """What held states still lack, when nothing else is left to calculate."""
        try:
            for document, outcome in asides(snapshot, lambda: self._newest is not snapshot):
                self._send(Aside(document, outcome))
        except Exception as error:
            self._send(Trouble(snapshot.generation, f"{type(error).__name__}: {error}"))

    def _step(self, snapshot: Snapshot, results: Iterator[Outcome], count: int | None) -> bool:
        """Send the next ``count`` stages; whether the rest is still wanted."""
        try:
            for outcome in islice(results, count):
                self._send(Calculated(outcome))
                self._moved.clear()
                if self._newest is not snapshot or self._moved.wait(PAUSE):  # the screen comes first
                    return False
        except Exception as error:  # the sheet must stay open whatever the calculation does
            self._send(Trouble(snapshot.generation, f"{type(error).__name__}: {error}"))
            return False
        return True

    def _progress(self, share: float) -> None:
        if share - self._told >= 0.1 or share < self._told:  # a word now and then; each costs the terminal bytes
            self._told = share
            self._send(Staged(share))

    def _send(self, message: Message) -> None:
        with contextlib.suppress(Exception):  # the program may be closing
            self._post(message)


class Mailbox:
    """A thread with one place for work: the newest item; one that was not taken in time is let go."""

    def __init__(self, name: str, work: Callable[[Any], object]) -> None:
        self._item: Any = None
        self._work = work
        self._wake = threading.Condition()
        threading.Thread(target=self._run, name=name, daemon=True).start()

    def put(self, item: object) -> None:
        with self._wake:
            self._item = item
            self._wake.notify()

    def _run(self) -> None:
        while True:
            with self._wake:
                while self._item is None:
                    self._wake.wait()
                item, self._item = self._item, None
            self._work(item)


class Screenful(Widget, can_focus=True):
    """The whole screen as lines of the present frame."""

    DEFAULT_CSS = "Screenful { width: 100%; height: 100%; background: ansi_default; color: ansi_default; }"

    def __init__(self, desk: Desk) -> None:
        super().__init__()
        self.desk = desk
        self.lines: list[Line] = []

    def render_line(self, y: int) -> Strip:
        width = self.size.width
        if y >= len(self.lines):
            return Strip.blank(width)
        return Strip([Segment(text, STYLES.get(tone, STYLES[""])) for text, tone in self.lines[y]], width)

    def sync(self) -> None:
        """Paint the desk and send what differs from the frame on the screen."""
        width, height = self.size
        if not width or not height:
            return
        try:
            new = frame(self.desk, width, height)
        except Exception as error:  # a view that cannot be made must not take the others with it
            self.desk.view_name, self.desk.mode = "sheet", None
            self.desk.say(f"this view failed, a fault of this program ({type(error).__name__}: {error})", "fail")
            new = frame(self.desk, width, height)
        old, self.lines = self.lines, new
        if len(old) != len(new):
            self.refresh()
            return
        for y, (before, after) in enumerate(zip(old, new, strict=True)):
            if before != after:
                start, end = difference(before, after)
                self.refresh(Region(start, y, min(width, end) - start, 1))

    def on_resize(self, event: Resize) -> None:
        self.lines = []
        self.sync()

    def on_key(self, event: Key) -> None:
        event.stop()
        event.prevent_default()
        character = event.character if event.is_printable else None
        self.guard(lambda: self.desk.key(event.key, character))
        self.sync()

    def guard(self, work: Callable[[], object]) -> None:
        """Do something of the desk; an error of ours is told, and nothing that was typed is lost by it."""
        try:
            work()
        except Exception as error:
            self.desk.mode = None
            self.desk.say(
                f"a fault of this program ({type(error).__name__}: {error}); the project is as it was", "fail"
            )

    def on_paste(self, event: Paste) -> None:
        event.stop()
        self.guard(lambda: self.desk.paste(event.text))
        self.sync()


def difference(before: Line, after: Line) -> tuple[int, int]:
    """The first and the last column (exclusive) in which two lines of one width differ; wide signs count whole."""
    one, two = _cells(before), _cells(after)
    if len(one) != len(two):
        return 0, max(len(one), len(two))
    start = 0
    while start < len(one) and one[start] == two[start]:
        start += 1
    end = len(one)
    while end > start and one[end - 1] == two[end - 1]:
        end -= 1
    return start, end


def _cells(line: Line) -> list[tuple[str, str]]:
    cells: list[tuple[str, str]] = []
    for text, tone in line:
        if text.isascii():
            cells += [(c, tone) for c in text]
        else:
            for segment in Strip([Segment(text)]):
                for character in segment.text:
                    width = Segment(character).cell_length
                    cells += [(character, tone)] * width
    return cells


class BudgetApp(App[int], inherit_bindings=False):
    """Holds the widget, the worker and the timers."""

    ENABLE_COMMAND_PALETTE = False
    CSS = "Screen { background: ansi_default; color: ansi_default; }"

    def __init__(self, desk: Desk) -> None:
        super().__init__(ansi_color=True)
        self.desk = desk
        self.board = Screenful(desk)
        self.animation_level = "none"
        self.worker: Worker | None = None
        self.told_changed = False
        self.job_number = 0

    def compose(self) -> ComposeResult:
        yield self.board

    def on_mount(self) -> None:
        self.board.focus()
        self.desk.leave = lambda: self.exit(0)
        self.desk.clip = self.copy_to_clipboard
        self.desk.calculate = self.start_calculation
        self.desk.start_job = self.start_job
        self.desk.later = self.later
        self.set_interval(WATCH, self.look_at_file)
        self.call_after_refresh(self.begin)  # numpy and pint are loaded by the worker, behind the first paint

    def begin(self) -> None:
        self.worker = Worker(self.post_message)
        self.start_calculation()

    def start_calculation(self) -> None:
        if self.worker is None:
            return
        self.worker.want(self.desk.session.snapshot())
        generation = self.desk.session.generation
        self.set_timer(LATE, lambda: self.late(generation))

    def late(self, generation: int) -> None:
        session = self.desk.session
        if session.generation == generation and not session.complete and not self.desk.pending:
            self.desk.pending = True
            self.board.sync()

    def on_calculated(self, event: Calculated) -> None:
        if self.desk.accept(event.outcome):
            self.board.sync()

    def on_aside(self, event: Aside) -> None:
        if self.desk.session.fill(event.document, event.outcome):
            self.board.sync()

    def on_staged(self, event: Staged) -> None:
        self.desk.share = event.share
        if self.desk.pending:
            self.board.sync()

    def on_trouble(self, event: Trouble) -> None:
        if event.generation == self.desk.session.generation:
            self.desk.say(f"the calculation failed, a fault of this program ({event.text}); undo the edit", "fail")
            self.board.sync()

    def start_job(self, work: Work) -> None:
        """Run a longer calculation in a thread of its own; a newer one takes its place."""
        self.job_number += 1
        number, job = self.job_number, Job(work.label)
        if self.desk.job is not None:
            self.desk.job.stop = True
        self.desk.job = job

        def cancelled() -> bool:
            return job.stop

        def progress(fraction: float) -> None:
            self.post_message(Progress(number, fraction))

        def run() -> None:
            try:
                message = Finished(number, work, work.run(cancelled, progress))
            except Exception as error:  # the sheet must stay open whatever the calculation does
                message = Finished(number, work, None, "" if job.stop else f"{type(error).__name__}: {error}")
            message.stopped = job.stop
            with contextlib.suppress(Exception):
                self.post_message(message)

        threading.Thread(target=run, name="job", daemon=True).start()

    def later(self, do: Callable[[], None]) -> None:
        with contextlib.suppress(Exception):  # the program may be closing
            self.post_message(Later(do))

    def on_progress(self, event: Progress) -> None:
        if event.number == self.job_number and self.desk.job is not None:
            self.desk.job.fraction = event.fraction
            self.board.sync()

    def on_finished(self, event: Finished) -> None:
        work, current = event.work, event.number == self.job_number
        if current:
            self.desk.job = None
        if event.error and current:
            self.desk.say(f"{work.label} failed, a fault of this program ({event.error})", "fail")
        elif not event.error and (work.keeps or (current and not event.stopped)):
            self.board.guard(lambda: work.done(event.found))
        elif current:
            self.desk.say(f"stopped: {work.label}")
        self.board.sync()

    def on_later(self, event: Later) -> None:
        self.board.guard(event.do)
        self.board.sync()

    def look_at_file(self) -> None:
        """Notice a file that someone else has changed."""
        changed = self.desk.session.changed_on_disk()
        if changed and not self.told_changed:
            self.desk.say(f"{self.desk.session.name} was changed on disk by someone else; w asks what to do", "thin")
            self.board.sync()
        self.told_changed = changed


def show(session: Session, *, ascii_only: bool = False) -> int:
    """Run the sheet until the user leaves; returns the exit status."""
    sys.setswitchinterval(0.001)  # a key must not wait for a calculation
    gc.set_threshold(20_000, 20, 50)  # nor for a full collection, which few of our objects need: they have no cycles
    app = BudgetApp(Desk(session, ascii_only))
    status = app.run(mouse=False)
    return status if status is not None else (app.return_code or 0)
