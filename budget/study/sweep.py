"""Two cells over their ranges: the worst margin at every point of a grid, calculated on all cores.

Points do not depend on each other, so they go in blocks to any executor of the standard interface. A block that is
lost with its worker is run again, point by point; what was finished is kept. The job that travels is plain data: the
values of the file, the paths of the two cells and the numbers to put there.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import signal
import time
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Executor, Future, ProcessPoolExecutor, wait
from dataclasses import dataclass

from budget.engine.checks import worst_status
from budget.engine.transient import CancelledError
from budget.project.build import Shelf
from budget.project.document import Document, Path, Tree, from_data
from budget.project.problems import ProjectError
from budget.study.paths import Cell, cell_at
from budget.study.probe import Probe, worst

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
    """``spots[i][j]`` belongs to ``values_a[i]`` and ``values_b[j]`` (SI)."""

    cell_a: Cell
    cell_b: Cell
    values_a: tuple[float, ...]
    values_b: tuple[float, ...]
    parts: tuple[str, ...]
    spots: tuple[tuple[Spot, ...], ...]

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
    executor: Executor | None = None,
    cancelled: Callable[[], bool] | None = None,
    progress: Callable[[float], None] | None = None,
) -> Sweep:
    """The worst margin of all checks for every pair of ``values_a`` and ``values_b`` (SI).

    ``executor`` is any of the interface of concurrent.futures, such as the one of a dask.distributed client; it is left
    open. Without one, processes on all cores are started where the work is worth it. Raises ProjectError for cells that
    hold no number, the same cell twice or too many points, ``transient.CancelledError`` when ``cancelled`` says so.
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
    job = Job(document.data, tuple((s.name, s.data) for s in shelves), path_a, path_b, tuple(parts), lines)
    items = [(i, j, float(a), float(b)) for i, a in enumerate(values_a) for j, b in enumerate(values_b)]
    found = _Run(job, items, executor, cancelled, progress).all()
    spots = tuple(tuple(found[i, j] for j in range(len(values_b))) for i in range(len(values_a)))
    return Sweep(cell_a, cell_b, tuple(map(float, values_a)), tuple(map(float, values_b)), job.parts, spots)


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
        self.probe = Probe(document, shelves, job.parts, job.lines, cancelled)

    def spot(self, item: Item) -> Spot:
        a, b = self.cells
        result = self.probe.at((a, item[2]), (b, item[3]))
        if isinstance(result, str):
            return Spot(None, fault=result)
        margin, row = worst(result.checks)
        status = worst_status(result.checks)
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
        cancelled: Callable[[], bool] | None,
        progress: Callable[[float], None] | None,
    ) -> None:
        self.job, self.items, self.given = job, items, executor
        self.cancelled, self.progress = cancelled, progress
        self.found: dict[tuple[int, int], Spot] = {}
        self.tries: dict[tuple[int, int], int] = {}

    def all(self) -> dict[tuple[int, int], Spot]:
        self.look()
        bench = _Bench(self.job, self.cancelled)
        start = time.perf_counter()
        first, rest = self.items[0], self.items[1:]
        self.take([first], [bench.spot(first)])
        each = max(time.perf_counter() - start, 1e-4)
        if self.given is None and each * len(rest) < _ALONE:
            for item in rest:
                self.look()
                self.take([item], [bench.spot(item)])
            return self.found
        workers = _cores()
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
            finally:
                if pool is not None:
                    pool.shutdown(wait=False, cancel_futures=True)
            barren = barren + 1 if len(self.found) == before else 0
            if fresh and barren >= _TRIES:
                raise ProjectError("the workers of the sweep die as soon as they start; nothing can be calculated.")
            rest, executor = self.left(), None  # a pool that lost a worker takes nothing more
        return self.found

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
                        waiting[executor.submit(block, self.job, queue[-1])] = queue[-1]
                        queue.pop()
                    except BrokenExecutor:
                        broken = True
                done, _ = wait(waiting, timeout=_POLL, return_when=FIRST_COMPLETED)
                for future in done:
                    items = waiting.pop(future)
                    try:
                        self.take(items, future.result())
                    except BrokenExecutor:
                        broken = True
                        self.lose(items)
                    except Exception:
                        # An executor of another library has its own words for a dead worker. A fault of ours shows
                        # itself in the next round, which is run by this program's own workers.
                        if self.given is not executor:
                            raise
                        self.lose(items)
        finally:
            for future in waiting:
                future.cancel()

    def lose(self, items: Sequence[Item]) -> None:
        for item in items:
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
    return ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"), initializer=_calm)


def _calm() -> None:
    """Ctrl-C is for the program, which then cancels the sweep; workers would only print where they stood."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
