"""The desk in a terminal: textual brings keys in and lines out, a thread calculates. Only this module knows textual.

One widget covers the screen and has every key. After each key the frame is painted anew as plain data and compared with
the one before; only the spans that differ are sent to the terminal.
"""

from __future__ import annotations

import asyncio
import codecs
import contextlib
import gc
import io
import locale
import os
import signal
import sys
import termios
import threading
import time
import traceback
from collections.abc import Callable, Iterable, Iterator
from functools import partial
from itertools import islice
from typing import Any

from rich.console import Console
from rich.segment import Segment
from rich.style import Style
from textual import constants
from textual._xterm_parser import XTermParser
from textual.app import App, ComposeResult
from textual.drivers import linux_driver
from textual.events import Key, Paste, Resize
from textual.geometry import Region, Size
from textual.message import Message
from textual.messages import Prompt
from textual.strip import Strip
from textual.widget import Widget

from budget.keeping import log
from budget.keeping.signals import Signals
from budget.project.document import Document
from budget.report import words
from budget.session import Outcome, Session, Snapshot, asides, stages
from budget.ui import sharing
from budget.ui.desk import Desk, Job, Work
from budget.ui.escapes import Escapes
from budget.ui.paint import Line, bare, frame
from budget.ui.recovery import Keeper

LATE = 0.05  # seconds after which results that have not come look stale
HEAVY = 0.02  # seconds of processor time to take results and paint them, from which on a key is painted before
PAUSE = 0.03  # seconds between two stages: painting and calculating at once would make both late
PATIENCE = 0.2  # seconds at most, where painting takes long
FAST = 2  # stages that follow an edit at once: DC and emissions
BREATH = 0.1  # seconds between two paints while more keys wait than can be painted
TURN = 0.01  # seconds the rest of the program then has
WATCH = 2.0  # seconds between looks at the file on disk
TICK = 1.0  # seconds between looks whether the terminal is still there and the journal is written

# Red and magenta are the only two of the terminal's own colours that can be read on black and on white alike: against
# the palettes of xterm and of the PC console they keep a contrast of about 3 to 1 or more, where yellow, green and cyan
# fade on white and blue on black. Nothing is italic: screen and tmux turn that into reverse, which is the cursor.
STYLES: dict[str, Style] = {
    "": Style(),
    "head": Style(bold=True),
    "heading": Style(bold=True, underline=True),
    "panel": Style(bold=True, reverse=True),
    "pale": Style(dim=True),
    "lent": Style(dim=True),
    "bar": Style(reverse=True),
    "cursor": Style(reverse=True, bold=True),
    "edit": Style(underline=True),
    "fail": Style(color="red", bold=True),
    "thin": Style(color="magenta"),
    "ok": Style(),
    "no data": Style(dim=True),
    "limit": Style(color="red", bold=True),
    **{f"trace{k}": (Style(bold=True), Style(color="magenta"), Style())[k % 3] for k in range(6)},  # letters tell them
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
    """The worker met an error that is a fault of this program; ``aside``: for a held state, not for the present."""

    def __init__(self, generation: int, text: str, *, aside: bool = False) -> None:
        super().__init__()
        self.generation = generation
        self.text = text
        self.aside = aside


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
        self._screen = threading.Condition()
        self._painted = 0  # results that have reached the screen
        self.heavy = False  # results take long to be painted
        self._slow = Mailbox("slow stages", self._rest)
        self._fast = Mailbox("fast stages", self._begin)

    def want(self, snapshot: Snapshot) -> None:
        with self._screen:
            self._newest = snapshot
            self._screen.notify_all()
        self._fast.put(snapshot)

    def painted(self) -> None:
        """Results have reached the screen: what waited for that may go on."""
        with self._screen:
            self._painted += 1
            self._screen.notify_all()

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
            self._send(Trouble(snapshot.generation, log.told(error), aside=True))

    def _step(self, snapshot: Snapshot, results: Iterator[Outcome], count: int | None) -> bool:
        """Send the next ``count`` stages; whether the rest is still wanted."""
        try:
            for outcome in islice(results, count):
                before = self._painted
                self._send(Calculated(outcome))
                self._rest_a_while(snapshot, before)
                if self._newest is not snapshot:
                    return False
        except Exception as error:  # the sheet must stay open whatever the calculation does
            self._send(Trouble(snapshot.generation, log.told(error)))
            return False
        return True

    def _rest_a_while(self, snapshot: Snapshot, before: int) -> None:
        """Leave the processor to the screen: for a moment, or where painting takes long until it is done."""
        with self._screen:
            if self.heavy:
                self._screen.wait_for(lambda: self._painted > before or self._newest is not snapshot, PATIENCE)
            else:
                self._screen.wait_for(lambda: self._newest is not snapshot, PAUSE)

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
            try:
                self._work(item)
            except Exception as error:  # the thread must live for the next item
                log.record(error)


class Screenful(Widget, can_focus=True):
    """The whole screen as lines of the present frame."""

    DEFAULT_CSS = "Screenful { width: 100%; height: 100%; background: ansi_default; color: ansi_default; }"

    def __init__(self, desk: Desk) -> None:
        super().__init__()
        self.desk = desk
        self.lines: list[Line] = []
        self.painted = 0.0  # when the frame was made last
        self.behind = False  # whether keys came faster than frames, and the last one is still to be painted
        self.met: tuple[str, str] = ("", "")  # the fault met last, and what is told of it

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
        self.painted = time.monotonic()
        new = self.frame(width, height)
        old, self.lines = self.lines, new
        if len(old) != len(new):
            self.refresh()
            return
        for y, (before, after) in enumerate(zip(old, new, strict=True)):
            if before != after:
                start, end = difference(before, after)
                self.refresh(Region(start, y, min(width, end) - start, 1))

    def frame(self, width: int, height: int) -> list[Line]:
        """The desk as lines; where a view cannot be made the sheet, and where that cannot either, bare words."""
        desk = self.desk
        try:
            return frame(desk, width, height)
        except Exception as error:  # a view that cannot be made must not take the others with it
            told = self.told(error)
        mode, message, tone = desk.mode, desk.message, desk.tone
        desk.view_name = "sheet"
        desk.say(f"this view failed{desk.let_go()}, a fault of this program{told}", "fail")
        try:
            return frame(desk, width, height)
        except Exception as error:  # what is open stays, so that a save can still be asked for and answered
            desk.mode = mode
            desk.say(message, tone)
            return bare(desk, width, height, self.told(error))

    def told(self, error: Exception) -> str:
        """What is told of a fault; one that is met again with every paint is written down once."""
        last = traceback.extract_tb(error.__traceback__)[-1:]
        which = f"{type(error).__name__} {error} {last}"
        if which != self.met[0]:
            self.met = (which, log.told(error))
        return self.met[1]

    def on_resize(self, event: Resize) -> None:
        self.lines = []
        self.sync()

    async def on_key(self, event: Key) -> None:
        event.stop()
        event.prevent_default()
        character = event.character if event.is_printable else None
        if self.behind and event.key.startswith("page"):  # how far it goes hangs on what the screen would show
            self.sync()
        self.guard(lambda: self.desk.key(event.key, character), typed=True)
        if self.message_queue_size and time.monotonic() - self.painted < BREATH:
            if not self.behind:
                self.behind = True
                self.call_later(self.catch_up)
            return
        self.sync()
        if self.message_queue_size:  # a long burst: what was painted is sent, and the rest of the program has its turn
            self.post_message(Prompt())
            self._check_refresh()
            await asyncio.sleep(TURN)

    def catch_up(self) -> None:
        """Paint what the last keys of a burst came to."""
        self.behind = False
        self.sync()

    def guard(self, work: Callable[[], object], *, typed: bool = False) -> None:
        """Do something of the desk; an error of ours is told, and nothing that was typed is lost by it.

        ``typed``: for a key, so that what is open may be what failed; it is closed then.
        """
        session = self.desk.session
        before = session.generation
        try:
            work()
        except Exception as error:
            kept = self.desk.let_go() if typed else ""
            if session.generation == before:
                kept += "; the project is as it was"
            else:
                kept += "; the edit was made, u undoes it"
                self.desk.calculate()
            self.desk.say(f"a fault of this program{kept}{self.told(error)}", "fail")

    def on_paste(self, event: Paste) -> None:
        event.stop()
        self.guard(lambda: self.desk.paste(event.text), typed=True)
        self.sync()


class Keys(XTermParser):
    """As textual reads keys, but Esc and a key right behind it are two."""

    def __init__(self, debug: bool = False) -> None:
        self._escapes = Escapes()
        super().__init__(debug)

    def feed(self, data: str) -> Iterable[Message]:
        if not data:  # the end
            return super().feed(data)
        whole = self._escapes(data)
        return super().feed(whole) if whole else ()

    def tick(self) -> Iterable[Message]:
        for event in super().tick():
            self._escapes.waited()
            yield event

    def _sequence_to_key_events(self, sequence: str, alt: bool = False) -> Iterable[Key]:
        if alt:  # an Esc before a key that could have begun a sequence, but did not
            yield Key("escape", None)
        yield from super()._sequence_to_key_events(sequence)


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

    def __init__(self, desk: Desk, keeper: Keeper | None = None) -> None:
        super().__init__(ansi_color=True)
        self.desk = desk
        self.keeper = keeper  # None in tests that need no journal
        self.signals: Signals | None = None
        self.fault: Exception | None = None  # what ended the program, if it was an error of ours
        self.board = Screenful(desk)
        self.animation_level = "none"
        self.worker: Worker | None = None
        self.told_changed = ""
        self.job_number = 0

    def compose(self) -> ComposeResult:
        yield self.board

    def on_mount(self) -> None:
        self.board.focus()
        self.desk.leave = self.leave
        self.desk.clip = self.copy_to_clipboard
        self.desk.calculate = self.start_calculation
        self.desk.start_job = self.start_job
        self.desk.later = self.later
        self.desk.aside = self.aside
        self.set_interval(WATCH, self.look_at_file)
        if self.keeper is not None:
            loop = asyncio.get_running_loop()
            leave = lambda status: loop.call_soon_threadsafe(self.exit, status)  # noqa: E731
            self.signals = Signals(self.keeper.journal.flush, leave)
            self.signals.install()
            self.set_interval(TICK, self.look_around)
        self.call_after_refresh(self.begin)  # numpy and pint are loaded by the worker, behind the first paint

    def leave(self) -> None:
        """End the program, and what it still calculates: workers of a sweep are processes of their own."""
        if self.desk.job is not None:
            self.desk.job.stop = True
        self.exit(0)

    def begin(self) -> None:
        self.worker = Worker(self.post_message)
        self.start_calculation()

    def start_calculation(self) -> None:
        if self.worker is None:
            return
        snapshot = self.desk.session.snapshot()
        if self.worker.heavy:  # what the key did is painted first; in a small project both go in one
            self.call_after_refresh(self.worker.want, snapshot)
        else:
            self.worker.want(snapshot)
        generation = self.desk.session.generation
        self.set_timer(LATE, lambda: self.late(generation))

    def late(self, generation: int) -> None:
        session = self.desk.session
        if session.generation == generation and not session.complete and not self.desk.pending:
            self.desk.pending = True
            self.board.sync()

    def on_calculated(self, event: Calculated) -> None:
        fresh: list[bool] = []
        begun = time.thread_time()
        self.board.guard(lambda: fresh.append(self.desk.accept(event.outcome)))
        if fresh != [False]:
            self.board.sync()
        if self.worker is not None:
            if fresh != [False]:
                self.worker.heavy = time.thread_time() - begun > HEAVY
            self.call_after_refresh(self.worker.painted)

    def on_aside(self, event: Aside) -> None:
        if self.desk.session.fill(event.document, event.outcome):
            self.board.sync()

    def on_staged(self, event: Staged) -> None:
        self.desk.share = event.share
        if self.desk.pending:
            self.board.sync()

    def on_trouble(self, event: Trouble) -> None:
        if event.aside:
            self.desk.say(f"the results of a trial are missing, a fault of this program{event.text}", "fail")
            self.board.sync()
        elif event.generation == self.desk.session.generation:
            self.desk.failed, self.desk.pending = event.generation, True
            self.desk.say(f"the calculation failed (undo the edit), a fault of this program{event.text}", "fail")
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
                message = Finished(number, work, None, "" if job.stop else log.told(error))
            message.stopped = job.stop
            with contextlib.suppress(Exception):
                self.post_message(message)

        threading.Thread(target=run, name="job", daemon=True).start()

    def aside(self, make: Callable[[], Any], done: Callable[[Any], None]) -> None:
        """Calculate something that a view waits for, in a thread of its own."""

        def run() -> None:
            try:
                found = make()
            except Exception as error:  # the sheet must stay open whatever the calculation does
                told = log.told(error)
                self.later(lambda: self.desk.say(f"a part of this view failed, a fault of this program{told}", "fail"))
            else:
                self.later(lambda: done(found))

        threading.Thread(target=run, name="aside", daemon=True).start()

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
            self.desk.say(f"{work.label} failed, a fault of this program{event.error}", "fail")
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
        session = self.desk.session
        if session.lost():
            self.desk.say(f"{session.read_only}: {session.name} is read-only here now, w asks what to do", "thin")
            self.board.sync()
        changed = session.on_disk()
        if changed and changed != self.told_changed:
            self.desk.say(f"{session.name} {changed}; w asks what to do", "thin")
            self.board.sync()
        self.told_changed = changed

    def look_around(self) -> None:
        """Leave where the terminal is gone without a word; say where the journal cannot be written."""
        try:
            termios.tcgetattr(0)
        except termios.error:
            if self.signals is not None:
                self.signals.hurry(128 + signal.SIGHUP)
            self.exit(128 + signal.SIGHUP)
            return
        if self.keeper is not None and self.keeper.tick():
            self.board.sync()
        width, height = os.get_terminal_size(0)
        if (width, height) != self.size and width and height:  # word of it got lost in a storm of sizes
            self.post_message(Resize(Size(width, height), Size(width, height)))

    def _handle_exception(self, error: Exception) -> None:
        self.fault = self.fault or error
        super()._handle_exception(error)

    def panic(self, *renderables: Any) -> None:
        """As textual does it, except that what a thread of its own died of is kept for the log."""
        if self.fault is None and renderables:
            page = Console(file=io.StringIO(), width=120, color_system=None)
            page.print(*renderables)
            self.fault = RuntimeError(page.file.getvalue())  # type: ignore[attr-defined]
        super().panic(*renderables)

    def _print_error_renderables(self) -> None:
        """A traceback goes to the log, never to the terminal of the user."""
        if self.keeper is None:
            super()._print_error_renderables()
        self._exit_renderables.clear()


def show(session: Session, *, ascii_only: bool = False) -> int:
    """Run the sheet until the user leaves; returns the exit status."""
    sys.setswitchinterval(0.001)  # a key must not wait for a calculation
    gc.set_threshold(20_000, 20, 50)  # nor for a full collection, which few of our objects need: they have no cycles
    _listen()
    desk = Desk(session, ascii_only)
    keeper = Keeper(desk)
    sharing.begin(desk, keeper)
    app = BudgetApp(desk, keeper)
    status: int | None = None
    try:
        status = app.run(mouse=False)
    except (Exception, KeyboardInterrupt) as error:  # the terminal went, or a fault of ours; the journal stays
        app.fault = app.fault or (error if isinstance(error, Exception) else None)
    if app.signals is not None and app.signals.status:
        status = app.signals.status
    clean = status == 0 and app.fault is None
    keeper.end(clean=clean)
    session.release()
    if app.signals is not None:
        app.signals.restore()
    _farewell(keeper, app.fault)
    return 1 if app.fault is not None else status if status is not None else 1


def _listen() -> None:
    """Read what the terminal sends as this program means it; textual has no setting for either."""
    if not constants.DISABLE_KITTY_KEY:  # without it nothing stands for the Esc key alone
        linux_driver.XTermParser = Keys  # type: ignore[attr-defined]
    encoding = "utf-8"
    with contextlib.suppress(LookupError):
        encoding = codecs.lookup("utf-8" if sys.flags.utf8_mode else locale.getencoding()).name

    def decoder(_: str) -> Callable[[], codecs.IncrementalDecoder]:
        """A byte that is no text, from a noisy line or a terminal of another encoding, must not end the program."""
        return partial(codecs.getincrementaldecoder(encoding), errors="replace")

    linux_driver.getincrementaldecoder = decoder  # type: ignore[attr-defined,assignment]


def _farewell(keeper: Keeper, fault: Exception | None) -> None:
    """Tell on standard error, once the sheet is closed, where the work is kept and where faults are told."""
    told: list[str] = []
    if fault is not None:
        told.append(f"the sheet was ended by a fault of this program{log.told(fault)}.")
    elif log.recorded():
        told.append(f"faults of this program were met; they are told in {log.recorded()}.")
    told += keeper.kept()
    with contextlib.suppress(OSError, ValueError):
        for line in told:
            print(f"budget: {words.clean(line)}", file=sys.stderr, flush=True)
