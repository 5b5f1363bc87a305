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
from dataclasses import dataclass, replace

import numpy as np

from budget.engine.bounds import fit, root_bound
from budget.engine.checks import CheckRow
from budget.engine.descent import improve, neighbours
from budget.engine.emission import emissions
from budget.engine.evaluate import Result, evaluate
from budget.engine.feed import Indices
from budget.engine.model import Project
from budget.engine.operating import operating_points
from budget.engine.partition import TooWideError
from budget.engine.placing import Constraints, Task, task_of
from budget.engine.pool import (
    SAME,
    Found,
    Pool,
    StoppedError,
    Watch,
    exact_shares,
    filter_classes,
    obeys,
    order_of,
    spread,
)
from budget.engine.relax import Relaxation, Shortfall, relaxations, shortfall
from budget.engine.search import Outcome, enumerate_all, even, settle_moves

GOALS = ("even", "fewest", "quiet")
TIME = 10.0  # s
_QUIET_MOST = 3000  # admissible allocations whose emissions are computed one by one
_RANK = {"": 0.5, "ok": 0, "no data": 0, "thin": 0, "fail": 1}


@dataclass(frozen=True, slots=True)
class Candidate:
    """One admissible allocation. ``headroom`` is a ratio, None if no filter in use has a rating; margins in dB.

    ``status`` and ``worst`` (check, subject) come from all checks; "" and None while the search goes on, and where it
    was stopped before they were made.
    """

    allocation: tuple[tuple[str, str], ...]  # (converter id, filter id), in project order
    filters_used: int
    headroom: float | None
    emission_margin: float | None
    moves: int
    status: str = ""
    worst: tuple[str, str] | None = None


@dataclass(frozen=True, slots=True)
class Allocation:
    """What was found. ``best`` is the best candidate by the goal alone; ``candidates`` are ranked with their checks.

    ``gap``: by how much an allocation that was not found could be better at most, in ``gap_unit``: "headroom" (a
    ratio) or "filters"; None if nothing is known. 0 when ``proved``. ``unrated``: filters without a rating, which take
    nothing new. ``note`` codes: "no limit set" (``quiet`` has nothing to go by, the headroom decides instead),
    "stopped" (by time or by the user), "too many" (no complete search was tried).
    """

    goal: str
    proved: bool
    candidates: tuple[Candidate, ...]
    best: Candidate | None
    gap: float | None
    gap_unit: str
    visited: int  # allocations worked out exactly
    seconds: float
    shortfall: Shortfall | None = None
    relaxations: tuple[Relaxation, ...] = ()
    unrated: tuple[str, ...] = ()
    note: tuple[str, ...] = ()


def allocate(
    project: Project,
    goal: str = "even",
    constraints: Constraints | None = None,
    candidates: int = 5,
    time_limit: float = TIME,
    cancelled: Callable[[], bool] = lambda: False,
    progress: Callable[[Candidate, float | None], None] = lambda best, bound: None,
    finish: Callable[[Project], Result] = evaluate,
    explain: bool = True,
) -> Allocation:
    """Search for at most ``time_limit`` [s], or until ``cancelled`` says so; then check the best few completely.

    ``progress`` hears of every better admissible allocation at once, with the headroom that none can exceed, as far as
    known (None with ``quiet``). The checks of the candidates come on top of the time, and where nothing is admissible
    the search for what would help, which takes as much time again at most and is left out without ``explain``. Raises
    ValueError for an unknown goal or id.
    """
    if goal not in GOALS:
        raise ValueError(f'there is no goal "{goal}": use one of {", ".join(GOALS)}')
    search = _Search(project, goal, constraints or Constraints(), time_limit, cancelled, progress)
    return search.run(max(1, candidates), finish, explain)


def as_json(found: Allocation) -> dict[str, object]:
    """The result as plain data for a JSON file."""
    return {
        "format": 1,
        "goal": found.goal,
        "proved": found.proved,
        "gap": found.gap,
        "gap_unit": found.gap_unit,
        "candidates": [
            {
                "allocation": dict(c.allocation),
                "filters_used": c.filters_used,
                "headroom": c.headroom,
                "emission_margin": c.emission_margin,
                "moves": c.moves,
                "status": c.status,
                "worst": None if c.worst is None else {"check": c.worst[0], "subject": c.worst[1]},
            }
            for c in found.candidates
        ],
    }


def moved(project: Project, allocation: tuple[tuple[str, str], ...]) -> Project:
    """The project with its converters behind these filters."""
    home = dict(allocation)
    return replace(project, converters=tuple(replace(c, filter=home.get(c.id, c.filter)) for c in project.converters))


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
        self.margins: dict[tuple[int, ...], float] = {}

    def run(self, count: int, finish: Callable[[Project], Result], explain: bool) -> Allocation:
        if not self.project.filters and self.project.converters:
            return self._nothing(Shortfall("no filters"), proved=True)
        task = task_of(self.project, self.constraints)
        if not isinstance(task, Task):
            return self._nothing(Shortfall("contradiction", constraints=task), proved=True)
        pool = Pool(task, changed=self._better)
        outcome = Outcome(0.0, False)
        goal = self.goal
        if goal == "quiet" and not self.project.checked:
            self.note.append("no limit set")
            goal = "even"
        try:
            if goal == "fewest":
                self._fewest(task, pool, outcome)
            elif goal == "quiet":
                self._admissible_start(task, pool, outcome)
            else:
                even(task, pool, self.watch, outcome, told=self._told)
        except StoppedError:
            self._stopped()
        if pool.share() > 1.0:
            return self._inadmissible(task, pool, outcome, explain)
        if goal == "quiet":
            return self._finished(*self._quiet(task, pool), None, "dB", pool, count, finish)
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

    def _admissible_start(self, task: Task, pool: Pool, outcome: Outcome) -> None:
        """Something admissible for ``quiet`` to start from; the whole search only if there is nothing at once."""
        for moves in range(3):
            near = neighbours(task, moves, 2000)
            if near is not None and near.size:
                pool.add(near)
        improve(task, pool, self.watch, 6)
        if pool.share() > 1.0:
            even(task, pool, self.watch, outcome)

    def _quiet(self, task: Task, pool: Pool) -> tuple[list[Found], bool]:
        """Admissible allocations by margin, the largest first, and whether all were looked at."""
        watch = self.watch
        known = {f.items: f for f in (*pool.best, *pool.by_moves.values()) if f.share <= 1.0}
        complete = False
        try:
            start = list(known.values())[:5]
            for one in start:
                self._margin(one)
            every = self._admissible(task, watch)
            if every is not None:
                for one in every:
                    known[one.items] = one
                    watch.check()
                    self._margin(one)
                complete = True
            else:
                self._climb(task, known, watch)
        except StoppedError:
            self._stopped()
        if not complete and not self.note:
            self.note.append("too many")
        if complete:
            self.note.clear()
        if not self.margins:
            self._margin(next(iter(known.values())))
        found = sorted((known[k] for k in self.margins), key=lambda f: (-round(self.margins[f.items], 9), f.moves,
                                                                       order_of(f)))  # fmt: skip
        return found, complete

    def _admissible(self, task: Task, watch: Watch) -> list[Found] | None:
        """All admissible allocations, equals not counted as one; None if they are many."""
        found: list[Found] = []

        def take(items: Indices) -> None:
            shares = exact_shares(task, items)
            for k in np.flatnonzero(shares <= 1.0).tolist():
                found.append(_found(task, items[k], float(shares[k])))
            if len(found) > _QUIET_MOST:
                raise TooWideError

        try:
            enumerate_all(task, 1.0, watch, lambda: math.inf, take, distinct=True)
        except TooWideError:
            return None
        return found

    def _climb(self, task: Task, known: dict[tuple[int, ...], Found], watch: Watch) -> None:
        """Moves and exchanges as long as the margin grows, from the best by margin, then from the next."""
        done: set[tuple[int, ...]] = set()
        rng = np.random.default_rng(3)
        while True:
            ranked = sorted(self.margins, key=lambda k: -self.margins[k])
            base = next((k for k in ranked if k not in done), None)
            if base is None:
                return
            done.add(base)
            block = _around(task, np.array(base))
            block = block[rng.permutation(block.shape[0])]
            shares = exact_shares(task, block)
            best = self.margins[base]
            for k in np.flatnonzero(shares <= 1.0).tolist():
                watch.check()
                one = _found(task, block[k], float(shares[k]))
                if one.items in self.margins:
                    continue
                known[one.items] = one
                if self._margin(one) > best + 1e-9:
                    break

    def _margin(self, one: Found) -> float:
        """The smallest emission margin [dB] over limit sets and corners; inf if nothing is seen, -inf if one fails."""
        known = self.margins.get(one.items)
        if known is not None:
            return known
        project = moved(self.project, self._ids(one))
        margin = smallest_margin(project)
        if not self.margins or margin > max(self.margins.values()):
            self.progress(self._candidate(one, margin), None)
        self.margins[one.items] = margin
        return margin

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
        for one in found[:count]:
            if checked and self.watch.cancelled():
                self._stopped()
                checked.append(self._candidate(one))
                continue
            result = finish(moved(self.project, self._ids(one)))
            margin = _margin_of(result)
            checked.append(
                replace(
                    self._candidate(one, math.inf if margin is None else margin),
                    status=result.status,
                    worst=_worst(result),
                )
            )
        ranked = sorted(checked, key=lambda c: _RANK[c.status])  # stable: by goal, then by moves within
        return Allocation(
            goal=self.goal,
            proved=proved,
            candidates=tuple(ranked),
            best=checked[0] if checked else None,
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
            best=None,
            gap=None,
            gap_unit="headroom",
            visited=0,
            seconds=time.monotonic() - self.begun,
            shortfall=reason,
            unrated=tuple(f.id for f in self.project.filters if f.rated_current is None),
            note=tuple(self.note),
        )

    def _ids(self, one: Found) -> tuple[tuple[str, str], ...]:
        filters = self.project.filters
        return tuple((c.id, filters[f].id) for c, f in zip(self.project.converters, one.home, strict=True))

    def _candidate(self, one: Found, margin: float = math.inf) -> Candidate:
        rated = any(self.project.filters[f].rated_current is not None for f in one.home)
        headroom = max(0.0, 1.0 - one.share) if rated else None
        seen = margin if math.isfinite(margin) else None
        return Candidate(self._ids(one), one.used, headroom, seen, one.moves)

    def _better(self, one: Found) -> None:
        if one.share <= 1.0 and self.goal != "quiet":
            self.progress(self._candidate(one), self.bound)

    def _told(self, bound: float) -> None:
        self.bound = 1.0 - bound

    def _stopped(self) -> None:
        if "stopped" not in self.note:
            self.note.append("stopped")


def smallest_margin(project: Project) -> float:
    """The smallest emission margin [dB] over limit sets, cases and lines.

    inf if no line is seen, -inf where a duty leaves no room for the edges or an operating point is missing.
    """
    found = emissions(project, operating_points(project))
    if any(row.failures or not row.solved for row in found.rows):
        return -math.inf
    return min((row.margin for row in found.rows if row.margin is not None), default=math.inf)


def _margin_of(result: Result) -> float | None:
    rows = result.emissions.rows if result.emissions else ()
    return min((row.margin for row in rows if row.margin is not None), default=None)


def _worst(result: Result) -> tuple[str, str] | None:
    """The worst row: by status, and then by margin, 20 dB counting as much as a ratio of 1."""
    rank = {"fail": 0, "thin": 1, "ok": 2}

    def key(row: CheckRow) -> tuple[int, float]:
        if row.margin is None:
            return rank[row.status], -math.inf if row.status == "fail" else math.inf
        return rank[row.status], row.margin / (20.0 if row.margin_unit == "dB" else 1.0)

    rows = [row for row in result.checks if row.status in rank]
    if not rows:
        return None
    row = min(rows, key=key)
    return row.check, row.subject


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


def _found(task: Task, items: Indices, share: float) -> Found:
    home = spread(task, items[None])[0]
    return Found(
        tuple(home.tolist()),
        tuple(items.tolist()),
        share,
        len(set(home.tolist())),
        int((home != task.present).sum()),
    )


def _around(task: Task, items: Indices) -> Indices:
    """Every allocation (A, K) one move or one exchange away."""
    block = []
    for k in range(items.size):
        for f in np.flatnonzero(task.allowed[k]).tolist():
            if f != items[k]:
                one = items.copy()
                one[k] = f
                block.append(one)
    for a, b in itertools.combinations(range(items.size), 2):
        if items[a] != items[b]:
            one = items.copy()
            one[a], one[b] = items[b], items[a]
            block.append(one)
    if not block:
        return np.zeros((0, items.size), dtype=np.intp)
    every = np.array(block, dtype=np.intp)
    return every[obeys(task, every)]


def _restricted(task: Task, chosen: tuple[int, ...]) -> Task:
    """The task with these filters alone; the others keep their numbers, but take nothing."""
    allowed = np.zeros_like(task.allowed)
    allowed[:, list(chosen)] = task.allowed[:, list(chosen)]
    wanted = task.wanted.copy()
    closed = [f for f in range(wanted.size) if f not in chosen]
    wanted[closed] = 0.0
    return replace(task, allowed=allowed, wanted=wanted)
