"""Which converter goes behind which filter: the best few allocations by a goal, with what is proved about them.

- ``even``: the largest headroom, that is the smallest (wanted - current)/wanted over filters in use, cases and lines;
- ``fewest``: the fewest filters in use, and of these the largest headroom;
- ``quiet``: the largest of the smallest emission margins among admissible allocations.

An allocation is admissible when every converter has a filter, every corner an operating point, and the headroom is not
negative. ``proved`` is claimed only when a search over all allocations finished: see ``search``. Of ``quiet`` that is
so when all admissible allocations were few enough to compute the emissions of each.

Headrooms that differ by less than 1e-9 are the same, and then fewer moves count. Next to the best by the goal, the
candidates hold the best with fewer moves each, as far as they are admissible: what the last moves are worth is seen.
"""

from __future__ import annotations

import itertools
import math
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from budget.engine.bounds import fit, root_bound
from budget.engine.candidates import Allocation, Candidate, Places, all_checks, judged, moved, ranked
from budget.engine.descent import improve
from budget.engine.evaluate import Result
from budget.engine.model import Project
from budget.engine.placing import Constraints, Task, task_of
from budget.engine.pool import SAME, Found, Pool, StoppedError, Watch, filter_classes, order_of
from budget.engine.quiet import Margins, admissible_start, quiet
from budget.engine.relax import Relaxation, Shortfall, relaxations, shortfall
from budget.engine.search import Outcome, even, settle_moves

GOALS = ("even", "fewest", "quiet")
TIME = 10.0  # s


def allocate(
    project: Project,
    goal: str = "even",
    constraints: Constraints | None = None,
    candidates: int = 5,
    time_limit: float = TIME,
    cancelled: Callable[[], bool] = lambda: False,
    progress: Callable[[Candidate, float | None], None] = lambda best, bound: None,
    finish: Callable[[Project], Result] | None = None,
    explain: bool = True,
) -> Allocation:
    """Search for at most ``time_limit`` [s], or until ``cancelled`` says so; then check the best few completely.

    ``progress`` hears of every better admissible allocation at once, and of every better bound with the best so far:
    the headroom that none can exceed, as far as known; with ``fewest`` how many filters none can do with less; None
    with ``quiet``. The checks of the candidates come on top of the time, and where nothing is admissible the search for
    what would help, which takes as much time again at most and is left out without ``explain``. ``finish`` makes the
    checks of a candidate (default: all of them), and stages that it leaves out are said to be unchecked. Raises
    ValueError for an unknown goal or id.
    """
    if goal not in GOALS:
        raise ValueError(f'there is no goal "{goal}": use one of {", ".join(GOALS)}')
    search = _Search(project, goal, constraints or Constraints(), time_limit, cancelled, progress)
    return search.run(max(1, candidates), finish or all_checks(cancelled=cancelled), explain)


class _Search:
    def __init__(
        self,
        project: Project,
        goal: str,
        constraints: Constraints,
        time_limit: float,
        cancelled: Callable[[], bool],
        progress: Callable[[Candidate, float | None], None],
    ) -> None:
        self.project, self.goal, self.constraints = project, goal, constraints
        self.begun = time.monotonic()
        self.watch = Watch(self.begun + time_limit, cancelled)
        self.time_limit = time_limit
        self.progress = progress
        self.bound: float | None = None
        self.note: list[str] = []
        self.few = 1
        self.sought = goal  # the goal that the search goes by
        self.margins = Margins(project, lambda one, margin: progress(self._candidate(one, margin), None))
        self.top: tuple[tuple[float, ...], Candidate] | None = None  # the best told so far

    def run(self, count: int, finish: Callable[[Project], Result], explain: bool) -> Allocation:
        if not self.project.filters and self.project.converters:
            return self._nothing(Shortfall("no filters"), proved=True)
        task = task_of(self.project, self.constraints)
        if not isinstance(task, Task):
            return self._nothing(Shortfall("contradiction", constraints=task), proved=True)
        pool = Pool(task, changed=self._better)
        outcome = Outcome(0.0, False)
        if self.goal == "quiet" and not self.project.checked:
            self.note.append("no limit set")
            self.sought = "even"
        goal = self.sought
        try:
            if goal == "fewest":
                self._fewest(task, pool, outcome)
            elif goal == "quiet":
                admissible_start(task, pool, self.watch, outcome)
            else:
                even(task, pool, self.watch, outcome, told=self._told)
        except StoppedError:
            self._stopped()
        if pool.share() > 1.0:
            return self._inadmissible(task, pool, outcome, explain)
        if goal == "quiet":
            found, reason = quiet(task, pool, self.watch, self.margins)
            self.note = []
            if reason == "stopped":
                self._stopped()
            elif reason:
                self.note.append(reason)
            return self._finished(found, not reason, None, "dB", pool, count, finish)
        try:
            if outcome.all_ties:
                pass
            elif goal == "fewest":
                kept = _restricted(task, pool.best[0].home)
                part = Pool(kept)
                part.best = list(pool.best)
                settle_moves(kept, part, self.watch)
                pool.best = part.best
            else:
                settle_moves(task, pool, self.watch)
        except StoppedError:
            if not outcome.proved:
                self._stopped()
        if not outcome.proved and not self.note:
            self.note.append("too many")
        fine = [f for f in {*pool.best, *pool.by_moves.values()} if f.share <= 1.0]
        if goal == "fewest":
            least = min(f.used for f in fine)
            fine.sort(key=lambda f: (f.used, order_of(f)))
            gap, unit = (
                (float(least - self.few), "filters")
                if self.few < least
                else (fine[0].share - outcome.bound, "headroom")
            )
        else:
            fine.sort(key=order_of)
            gap, unit = fine[0].share - outcome.bound, "headroom"
        return self._finished(
            _few(fine, count), outcome.proved, 0.0 if outcome.proved else max(gap, 0.0), unit, pool, count, finish
        )

    # --- goals ----------------------------------------------------------------------------------------------------

    def _fewest(self, task: Task, pool: Pool, outcome: Outcome) -> None:
        """Leaves allocations with the fewest filters in ``pool``, and in ``few`` how many are proved to be needed."""
        if task.items:
            improve(task, pool, self.watch, 4)
        needed = {int(row.argmax()) for row in task.allowed if row.sum() == 1}
        usable = np.flatnonzero(task.allowed.any(axis=0)).tolist()
        self.few = max(1, len(needed)) if task.items else 0
        enough = len(usable)
        for size in range(self.few, len(usable) + 1):
            first = Pool(task, changed=pool.changed)
            for _, only in self._rivals(task, needed, usable, size)[:20]:
                part = Pool(only, changed=pool.changed, aim=1.0)
                improve(only, part, self.watch, 8)
                pool.visited += part.visited
                if part.share() <= 1.0:
                    first.add(np.array([f.items for f in part.best], dtype=np.intp))
                    break
            if first.share() <= 1.0:
                pool.best, pool.by_moves, enough = first.best, first.by_moves, size
                break
        proved = True
        for size in range(self.few, enough + 1):
            rivals = self._rivals(task, needed, usable, size)
            found = Pool(task, changed=pool.changed)
            if size == enough and pool.share() <= 1.0:
                found.add(np.array([f.items for f in pool.best], dtype=np.intp))
            open_: list[float] = []
            state = Outcome(0.0, False)
            for number, (bound, only) in enumerate(rivals):
                ceiling = min(1.0, found.share())
                if bound > ceiling + SAME:
                    continue
                part, state = Pool(only, changed=found.changed), Outcome(bound, False)
                last = size == enough and number == len(rivals) - 1
                try:
                    watch = self.watch if last else self.watch.until(max(1.0, self.watch.left() / 2.0))
                    even(only, part, watch, state, ceiling=ceiling)
                except StoppedError:
                    if self.watch.cancelled():
                        self._stopped()
                pool.visited += part.visited
                if part.best:
                    found.add(np.array([f.items for f in part.best], dtype=np.intp))
                if not state.proved:
                    open_.append(max(bound, state.bound))
            if found.share() <= 1.0:
                pool.best, pool.by_moves = found.best, found.by_moves
                outcome.proved = proved and not open_
                outcome.all_ties = len(rivals) == 1 and state.all_ties
                outcome.bound = min([found.share(), *open_])
                if self.watch.left() <= 0.0 and not outcome.proved:
                    self._stopped()
                return
            proved &= not open_
            if proved:
                self.few = size + 1
                self._tell()
        if pool.share() <= 1.0:
            self._stopped()
            return
        even(task, pool, self.watch, outcome)  # nothing is admissible, and what is closest to it is told

    def _rivals(self, task: Task, needed: set[int], usable: list[int], size: int) -> list[tuple[float, Task]]:
        """The choices of ``size`` filters, equals once, that may be enough, with the share that none is below."""
        classes = filter_classes(task)
        seen: set[tuple[int, ...]] = set()
        rivals = []
        for chosen in itertools.combinations(usable, size):
            kind = tuple(sorted(int(classes[f]) for f in chosen))
            if kind in seen or not needed <= set(chosen):
                continue
            self.watch.check()
            seen.add(kind)
            only = _restricted(task, chosen)
            if only.allowed.any(axis=1).all() and fit(only, 1.0) is not None:
                rivals.append((root_bound(only), only))
        rivals.sort(key=lambda rival: rival[0])
        return rivals

    # --- results --------------------------------------------------------------------------------------------------

    def _finished(
        self,
        found: list[Found],
        proved: bool,
        gap: float | None,
        unit: str,
        pool: Pool,
        count: int,
        finish: Callable[[Project], Result],
    ) -> Allocation:
        checked: list[Candidate] = []
        for place, one in enumerate(found[:count]):
            candidate = replace(self._candidate(one), place=place)
            checked.append(judged(candidate, finish(moved(self.project, candidate.allocation))))
        if self.watch.cancelled():
            self._stopped()
        return Allocation(
            goal=self.goal,
            proved=proved,
            candidates=ranked(tuple(checked)),
            gap=0.0 if proved else gap,
            gap_unit=unit,
            visited=pool.visited,
            seconds=time.monotonic() - self.begun,
            unrated=tuple(f.id for f in self.project.filters if f.rated_current is None),
            note=tuple(self.note),
        )

    def _inadmissible(self, task: Task, pool: Pool, outcome: Outcome, explain: bool) -> Allocation:
        best = pool.best[0] if pool.best else None
        proved = outcome.proved or outcome.bound > 1.0 + SAME
        if best is None and not proved:
            return self._nothing(Shortfall("not found"), proved=False)
        reason = shortfall(self.project, task, best)
        helps: tuple[Relaxation, ...] = ()
        if explain and not self.watch.cancelled():
            watch = Watch(time.monotonic() + self.time_limit, self.watch.cancelled)
            helps = relaxations(self.project, self.constraints, task, best, watch)
        found = self._nothing(reason, proved)
        return replace(found, relaxations=helps, visited=pool.visited, seconds=time.monotonic() - self.begun)

    def _nothing(self, reason: Shortfall, proved: bool) -> Allocation:
        return Allocation(
            goal=self.goal,
            proved=proved,
            candidates=(),
            gap=None,
            gap_unit="headroom",
            seconds=time.monotonic() - self.begun,
            shortfall=reason,
            unrated=tuple(f.id for f in self.project.filters if f.rated_current is None),
            note=tuple(self.note),
        )

    def _ids(self, one: Found) -> Places:
        filters = self.project.filters
        return tuple((c.id, filters[f].id) for c, f in zip(self.project.converters, one.home, strict=True))

    def _candidate(self, one: Found, margin: float | None = None) -> Candidate:
        rated = any(self.project.filters[f].rated_current is not None for f in one.home)
        headroom = max(0.0, 1.0 - one.share) if rated else None
        seen = self.margins.known.get(one.items, math.inf) if margin is None else margin
        return Candidate(self._ids(one), one.used, headroom, seen if math.isfinite(seen) else None, one.moves)

    def _better(self, one: Found) -> None:
        """Tell of an admissible allocation, unless a better one was told before."""
        if one.share > 1.0 or self.sought == "quiet":
            return
        rank = (one.used if self.sought == "fewest" else 0, round(one.share / SAME), one.moves)
        if self.top is None or rank < self.top[0]:
            self.top = (rank, self._candidate(one))
            self._tell()

    def _told(self, bound: float) -> None:
        self.bound = 1.0 - bound
        if self.top is not None:
            self._tell()

    def _tell(self) -> None:
        if self.top is not None:
            self.progress(self.top[1], float(self.few) if self.sought == "fewest" else self.bound)

    def _stopped(self) -> None:
        why = "stopped" if self.watch.cancelled() else "time over"
        if "stopped" not in self.note and why not in self.note:
            self.note.append(why)


def _few(found: list[Found], count: int) -> list[Found]:
    """The best, then the best with ever fewer moves, and then those that follow the best."""
    chosen = found[:1]
    for one in found[1:]:
        if one.moves < min(c.moves for c in chosen):
            chosen.append(one)
    chosen = chosen[:1] + chosen[1:][-(count - 1) :] if count > 1 else chosen[:1]
    for one in found:
        if len(chosen) >= count:
            break
        if one not in chosen:
            chosen.append(one)
    place = {f.items: k for k, f in enumerate(found)}
    return sorted(chosen, key=lambda f: place[f.items])


def _restricted(task: Task, chosen: tuple[int, ...]) -> Task:
    """The task with these filters alone; the others keep their numbers, but take nothing."""
    allowed = np.zeros_like(task.allowed)
    allowed[:, list(chosen)] = task.allowed[:, list(chosen)]
    wanted = task.wanted.copy()
    closed = [f for f in range(wanted.size) if f not in chosen]
    wanted[closed] = 0.0
    return replace(task, allowed=allowed, wanted=wanted)
