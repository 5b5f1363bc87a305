"""Two cells over their ranges: the worst margin at every point of a grid, calculated on all cores.

Points do not depend on each other, so they go in blocks to any executor of the standard interface. A block that is
lost with its worker is run again, point by point; what was finished is kept. The job that travels is plain data: the
values of the file, the paths of the two cells and the numbers to put there.
"""

from __future__ import annotations

import contextlib
import math
import multiprocessing
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, ProcessPoolExecutor, wait
from dataclasses import dataclass, field
from multiprocessing import resource_tracker
from multiprocessing.connection import wait as wait_for

from budget.engine.checks import CheckRow, worst_status
from budget.engine.transient import CancelledError
from budget.project.build import Shelf
from budget.project.document import Document, Path, Tree, from_data
from budget.project.problems import ProjectError
from budget.study.paths import Cell, cell_at
from budget.study.probe import Key, Probe, worst

MOST = 100_000  # points of a sweep
_BLOCK = 0.5  # s of work in a block: what a cancelled sweep may still wait for
_ALONE = 0.6  # s; less than this is done sooner here than by workers that first have to start
_POLL = 0.05  # s between two looks at ``cancelled``
_TRIES = 3  # of a point whose worker dies
LOST = "the worker died each time this point was calculated."


@dataclass(frozen=True, slots=True)
class Spot:
    """One point. ``margin``: the least margin of any check as a share of its limit, below 0 where one fails.

    ``margin`` is infinite where no check has a number, and None where nothing could be calculated: ``fault`` says why.
    ``status`` is "fail", "thin", "ok" or "" then; ``check``, ``subject``, ``case`` and ``line`` say whose margin it is.
    """

    margin: float | None
    status: str = ""
    check: str = ""
    subject: str = ""
    case: str = ""
    line: str = ""
    fault: str = ""


@dataclass(frozen=True, slots=True)
class Sweep:
    """``spots[i][j]`` belongs to ``values_a[i]`` and ``values_b[j]`` (SI).

    ``failing`` are the checks that were left aside; ``again`` points were run more than once.
    """

    cell_a: Cell
    cell_b: Cell
    values_a: tuple[float, ...]
    values_b: tuple[float, ...]
    parts: tuple[str, ...]
    spots: tuple[tuple[Spot, ...], ...]
    failing: tuple[CheckRow, ...] = ()
    again: int = field(default=0, compare=False)

    @property
    def boundary(self) -> tuple[tuple[float, float], ...]:
        """Where a check turns, as points (a, b) between neighbours of which one fails and one does not.

        Interpolated in a straight line where both have a margin, half-way elsewhere; no finer than the grid.
        """
        found = []
        for i, row in enumerate(self.spots):
            for j, spot in enumerate(row):
                if j + 1 < len(row) and (share := _between(spot, row[j + 1])) is not None:
                    b0, b1 = self.values_b[j], self.values_b[j + 1]
                    found.append((self.values_a[i], b0 + share * (b1 - b0)))
                if i + 1 < len(self.spots) and (share := _between(spot, self.spots[i + 1][j])) is not None:
                    a0, a1 = self.values_a[i], self.values_a[i + 1]
                    found.append((a0 + share * (a1 - a0), self.values_b[j]))
        return tuple(sorted(found))


def _between(one: Spot, two: Spot) -> float | None:
    if one.margin is None or two.margin is None or (one.margin < 0.0) == (two.margin < 0.0):
        return None
    if not math.isfinite(one.margin) or not math.isfinite(two.margin):
        return 0.5
    return one.margin / (one.margin - two.margin)


@dataclass(frozen=True, slots=True)
class Job:
    """What a worker needs; plain data, the same for every block of a sweep."""

    data: Tree
    shelves: tuple[tuple[str, Tree], ...]
    path_a: Path
    path_b: Path
    parts: tuple[str, ...]
    lines: tuple[int, ...]
    aside: tuple[Key, ...] = ()


Item = tuple[int, int, float, float]  # place in the grid, values


def steps(cell: Cell, low: float, high: float, count: int, *, factors: bool = False) -> tuple[float, ...]:
    """``count`` values from ``low`` to ``high`` (SI), evenly spaced or by equal ``factors``; raises ProjectError."""
    if not (math.isfinite(low) and math.isfinite(high)):
        raise ProjectError(f"{cell.text}: the range has an end that is no number.")
    if low > high:
        raise ProjectError(
            f"{cell.text}: the range runs from {cell.show(low)} down to {cell.show(high)}; "
            "its ends are exchanged, the lower one was expected first."
        )
    if count < 1 or count > MOST:
        raise ProjectError(f"{cell.text}: {count} steps were found; 1 to {MOST} were expected.")
    if factors and low <= 0.0:
        raise ProjectError(f"{cell.text}: the range starts at {cell.show(low)}; equal factors need a start above 0.")
    if count == 1 or low == high:
        return (low,)
    if factors:
        inner = [low * (high / low) ** (k / (count - 1)) for k in range(1, count - 1)]
    else:
        inner = [low + (high - low) * k / (count - 1) for k in range(1, count - 1)]
    return (low, *inner, high)


def sweep(
    document: Document,
    shelves: Iterable[Shelf],
    path_a: Path,
    values_a: Sequence[float],
    path_b: Path,
    values_b: Sequence[float],
    *,
    parts: Sequence[str] = ("dc",),
    lines: tuple[int, ...] = (0, 1, 2),
    aside: bool = False,
    executor: Executor | None = None,
    workers: int | None = None,
    cancelled: Callable[[], bool] | None = None,
    progress: Callable[[float], None] | None = None,
) -> Sweep:
    """The worst margin of all checks for every pair of ``values_a`` and ``values_b`` (SI).

    ``aside`` leaves those out that fail as the project stands, which else may be all there is to see.
    ``executor`` is any of the interface of concurrent.futures, such as the one of a dask.distributed client; it is left
    open. ``workers`` is how many calls it works on at once (default: the cores of this machine). Without an executor,
    processes on all cores are started where the work is worth it. Raises ProjectError for cells that hold no number,
    the same cell twice or too many points, ``transient.CancelledError`` when ``cancelled`` says so.
    """
    shelves = tuple(shelves)
    cell_a, cell_b = cell_at(document, shelves, path_a), cell_at(document, shelves, path_b)
    if path_a == path_b:
        raise ProjectError(f"{cell_a.text} was found twice; two different cells were expected.")
    if not values_a or not values_b:
        raise ProjectError(f"{(cell_b if values_a else cell_a).text}: no values were found; one or more were expected.")
    if len(values_a) * len(values_b) > MOST:
        raise ProjectError(f"{len(values_a) * len(values_b)} points were found; at most {MOST} were expected.")
    probe = Probe(document, shelves, parts, lines)
    if probe.faults:
        raise ProjectError(f"the project has to be mended first: {probe.faults[0]}")
    now = probe.at() if aside else ""
    failing = () if isinstance(now, str) else tuple(row for row in now.checks if row.status == "fail")
    names = tuple((row.check, row.subject) for row in failing)
    job = Job(document.data, tuple((s.name, s.data) for s in shelves), path_a, path_b, tuple(parts), lines, names)
    items = [(i, j, float(a), float(b)) for i, a in enumerate(values_a) for j, b in enumerate(values_b)]
    run = _Run(job, items, executor, workers or _cores(), cancelled, progress)
    found = run.all()
    spots = tuple(tuple(found[i, j] for j in range(len(values_b))) for i in range(len(values_a)))
    values = tuple(map(float, values_a)), tuple(map(float, values_b))
    return Sweep(cell_a, cell_b, *values, job.parts, spots, failing, len(run.lost))


def block(job: Job, items: Sequence[Item]) -> list[Spot]:
    """Calculate some points of a sweep; this is what a worker runs."""
    bench = _Bench(job)
    return [bench.spot(item) for item in items]


class _Bench:
    """One probe for all points that are calculated in one place."""

    def __init__(self, job: Job, cancelled: Callable[[], bool] | None = None) -> None:
        document = from_data(job.data)
        shelves = tuple(Shelf(name, data) for name, data in job.shelves)
        self.cells = cell_at(document, shelves, job.path_a), cell_at(document, shelves, job.path_b)
        self.aside = frozenset(job.aside)
        self.probe = Probe(document, shelves, job.parts, job.lines, cancelled)

    def spot(self, item: Item) -> Spot:
        a, b = self.cells
        result = self.probe.at((a, item[2]), (b, item[3]))
        if isinstance(result, str):
            return Spot(None, fault=result)
        rows = tuple(row for row in result.checks if (row.check, row.subject) not in self.aside)
        margin, row = worst(rows)
        status = worst_status(rows)
        if row is None:
            return Spot(margin, status)
        return Spot(margin, status, row.check, row.subject, row.case or "", row.line or "")


class _Run:
    """One sweep on its way: blocks go out, spots come in, and what is lost goes out again."""

    def __init__(
        self,
        job: Job,
        items: list[Item],
        executor: Executor | None,
        workers: int,
        cancelled: Callable[[], bool] | None,
        progress: Callable[[float], None] | None,
    ) -> None:
        self.job, self.items, self.given, self.workers = job, items, executor, workers
        self.cancelled, self.progress = cancelled, progress
        self.found: dict[tuple[int, int], Spot] = {}
        self.tries: dict[tuple[int, int], int] = {}  # of points that may be what killed a worker of our own
        self.lost: set[tuple[int, int]] = set()

    def all(self) -> dict[tuple[int, int], Spot]:
        each = self.alone()
        rest = self.left()
        workers = self.workers
        size = max(1, min(int(_BLOCK / each), math.ceil(len(rest) / (4 * workers))))
        executor, barren = self.given, 0
        while rest:
            suspects = [item for item in rest if item[:2] in self.tries]
            fresh = [item for item in rest if item[:2] not in self.tries]
            before = len(self.found)
            blocks = [fresh[k : k + size] for k in range(0, len(fresh), size)]
            # What was lost with a worker goes out alone, one at a time: then it is known which point kills workers.
            count, ahead = (workers, 4 * workers) if fresh else (1, 1)
            pool = None
            if executor is None:
                executor = pool = _pool(count)
            try:
                self.round(executor, blocks or [[item] for item in suspects], ahead)
            except BaseException:  # cancelled, or Ctrl-C: nobody waits for what the workers are at
                if pool is not None:
                    _end(pool)
                raise
            finally:
                if pool is not None:
                    pool.shutdown(wait=False, cancel_futures=True)
            barren = barren + 1 if len(self.found) == before and pool is not None else 0
            if fresh and barren >= _TRIES:
                raise ProjectError("the workers of the sweep die as soon as they start; nothing can be calculated.")
            rest, executor = self.left(), None  # a pool that lost a worker takes nothing more
            workers = min(workers, _cores())
        return self.found

    def alone(self) -> float:
        """Calculate points here as long as the rest is done sooner than workers start; the time a point takes [s].

        That is the longest so far: a point that cannot be calculated takes next to none.
        """
        each = 1e-4
        bench = _Bench(self.job, self.cancelled)
        for count, item in enumerate(self.items, 1):
            self.look()
            start = time.perf_counter()
            self.take([item], [bench.spot(item)])
            each = max(each, time.perf_counter() - start)
            if self.given is not None or each * (len(self.items) - count) > _ALONE:
                break
        return each

    def left(self) -> list[Item]:
        """The points still to be calculated; those whose worker died too often are given up."""
        for item in self.items:
            if self.tries.get(item[:2], 0) >= _TRIES and item[:2] not in self.found:
                self.found[item[:2]] = Spot(None, fault=LOST)
        return [item for item in self.items if item[:2] not in self.found]

    def round(self, executor: Executor, blocks: list[list[Item]], ahead: int) -> None:
        """Send blocks out and take in what comes back; returns when all have come back, or the executor is broken.

        No more than ``ahead`` blocks wait in the executor, so that a cancelled sweep ends soon.
        """
        waiting: dict[Future[list[Spot]], list[Item]] = {}
        queue = list(reversed(blocks))
        broken = False
        try:
            while waiting or (queue and not broken):
                self.look()
                while queue and len(waiting) < ahead and not broken:
                    try:
                        with _undisturbed():
                            future = executor.submit(block, self.job, queue[-1])
                        waiting[future] = queue.pop()
                    except BrokenExecutor:
                        broken = True
                    except Exception:  # as below; a cluster that is gone takes nothing
                        if self.given is not executor:
                            raise
                        broken = True
                done, _ = wait(waiting, timeout=_POLL, return_when=FIRST_COMPLETED)
                for future in done:
                    items = waiting.pop(future)
                    try:
                        self.take(items, future.result())
                    except BrokenExecutor:
                        broken = True
                        self.lose(items, executor)
                    except Exception:
                        # An executor of another library has its own words for a dead worker. A fault of ours shows
                        # itself in the next round, which is run by this program's own workers.
                        if self.given is not executor:
                            raise
                        self.lose(items, executor)
        finally:
            # Those of a pool of our own are called off with it: its thread takes it ill if they were called off before.
            for future in waiting if executor is self.given else ():
                future.cancel()

    def lose(self, items: Sequence[Item], executor: Executor) -> None:
        for item in items:
            self.lost.add(item[:2])
            if executor is not self.given:  # there a worker may die of anything, and then they all are suspects
                self.tries[item[:2]] = self.tries.get(item[:2], 0) + 1

    def take(self, items: Sequence[Item], spots: Sequence[Spot]) -> None:
        for item, spot in zip(items, spots, strict=True):
            self.found[item[:2]] = spot
        if self.progress is not None:
            self.progress(len(self.found) / len(self.items))

    def look(self) -> None:
        if self.cancelled is not None and self.cancelled():
            raise CancelledError


def _cores() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _pool(workers: int) -> Executor:
    """Fresh processes: a fork of a program with threads may wait for a lock for ever."""
    _start_tracker()
    return ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"), initializer=_calm)


def _start_tracker() -> None:
    """Start the process in which Python keeps account of what worker processes share.

    It takes along the file behind standard error, and has none while a screen stands in for that. It would also tell
    the user, where the program was killed, what it cleans up.
    """
    before = os.environ.get("PYTHONWARNINGS")
    os.environ["PYTHONWARNINGS"] = ",".join(filter(None, (before, "ignore:resource_tracker")))
    try:
        with contextlib.redirect_stderr(sys.__stderr__) if _no_file(sys.stderr) else contextlib.nullcontext():
            resource_tracker.ensure_running()
    finally:
        if before is None:
            del os.environ["PYTHONWARNINGS"]
        else:
            os.environ["PYTHONWARNINGS"] = before


def _no_file(stream: object) -> bool:
    try:
        return stream is not None and int(stream.fileno()) < 0  # type: ignore[attr-defined]
    except (OSError, AttributeError, ValueError):  # multiprocessing knows what to do
        return False


@contextlib.contextmanager
def _undisturbed() -> Iterator[None]:
    """Ctrl-C waits while a worker is started: it would reach the worker too, and print where that stood.

    What is started with the signal held back goes on holding it back.
    """
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


def _calm() -> None:
    """How a worker begins: Ctrl-C is for the program, which then ends the sweep; and a worker ends with the program."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    threading.Thread(target=_end_with_parent, name="parent", daemon=True).start()


def _end_with_parent() -> None:
    """However the program ended: killed, with its terminal, or past its own way out."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        wait_for([parent.sentinel])
        os._exit(1)


def _end(pool: Executor) -> None:
    """End the workers of a pool of our own at once; a block may hold points that take seconds."""
    for process in list((getattr(pool, "_processes", None) or {}).values()):
        process.terminate()
