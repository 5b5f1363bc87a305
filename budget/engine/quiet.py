"""The largest emission margin among admissible allocations: each one computed, or a climb where they are many.

The emissions of an allocation are those of the whole bus, so no bound is known that would leave some out: ``quiet`` is
proved only where all admissible allocations were few enough to compute the emissions of each.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from budget.engine.candidates import moved
from budget.engine.descent import improve, neighbours
from budget.engine.emission import emissions
from budget.engine.feed import Indices
from budget.engine.model import Project
from budget.engine.operating import operating_points
from budget.engine.partition import TooWideError
from budget.engine.placing import Task
from budget.engine.pool import Found, Pool, StoppedError, Watch, exact_shares, obeys, order_of, spread
from budget.engine.search import Outcome, enumerate_all, even

MOST = 3000  # admissible allocations whose emissions are computed one by one


@dataclass(slots=True)
class Margins:
    """The smallest emission margin [dB] of each allocation that was looked at, by its filters of items."""

    project: Project
    told: Callable[[Found, float], None] = lambda one, margin: None  # of every one better than all before
    known: dict[tuple[int, ...], float] = field(default_factory=dict)

    def of(self, one: Found) -> float:
        """Over limit sets and corners; inf if nothing is seen, -inf where one has no answer."""
        margin = self.known.get(one.items)
        if margin is None:
            filters, units = self.project.filters, self.project.converters
            places = tuple((c.id, filters[f].id) for c, f in zip(units, one.home, strict=True))
            margin = smallest_margin(moved(self.project, places))
            if not self.known or margin > max(self.known.values()):
                self.told(one, margin)
            self.known[one.items] = margin
        return margin


def smallest_margin(project: Project) -> float:
    """The smallest emission margin [dB] over limit sets, cases and lines.

    inf if no line is seen, -inf where a duty leaves no room for the edges or an operating point is missing.
    """
    found = emissions(project, operating_points(project))
    if any(row.failures or not row.solved for row in found.rows):
        return -math.inf
    return min((row.margin for row in found.rows if row.margin is not None), default=math.inf)


def admissible_start(task: Task, pool: Pool, watch: Watch, outcome: Outcome) -> None:
    """Something admissible to start from in ``pool``; the whole search only if there is nothing at once.

    Raises StoppedError.
    """
    for moves in range(3):
        near = neighbours(task, moves, 2000)
        if near is not None and near.size:
            pool.add(near)
    improve(task, pool, watch, 6)
    if pool.share() > 1.0:
        even(task, pool, watch, outcome)


def quiet(task: Task, pool: Pool, watch: Watch, margins: Margins) -> tuple[list[Found], str]:
    """Admissible allocations by margin, the largest first; and why not all were looked at.

    The reason is "" if all were, "too many", or "stopped" where the watch ended it.
    """
    known = {f.items: f for f in (*pool.best, *pool.by_moves.values()) if f.share <= 1.0}
    reason = ""
    try:
        for one in list(known.values())[:5]:
            margins.of(one)
        every = _admissible(task, watch)
        if every is not None:
            for one in every:
                known[one.items] = one
                watch.check()
                margins.of(one)
        else:
            reason = "too many"
            _climb(task, known, watch, margins)
    except StoppedError:
        reason = "stopped"
    if not margins.known:
        margins.of(next(iter(known.values())))

    def key(one: Found) -> tuple[float, int, tuple[float, int, tuple[int, ...]]]:
        return -round(margins.known[one.items], 9), one.moves, order_of(one)

    return sorted((known[k] for k in margins.known), key=key), reason


def _admissible(task: Task, watch: Watch) -> list[Found] | None:
    """All admissible allocations, equals not counted as one; None if they are many."""
    found: list[Found] = []

    def take(items: Indices) -> None:
        shares = exact_shares(task, items)
        for k in np.flatnonzero(shares <= 1.0).tolist():
            found.append(_found(task, items[k], float(shares[k])))
        if len(found) > MOST:
            raise TooWideError

    try:
        enumerate_all(task, 1.0, watch, lambda: math.inf, take, distinct=True)
    except TooWideError:
        return None
    return found


def _climb(task: Task, known: dict[tuple[int, ...], Found], watch: Watch, margins: Margins) -> None:
    """Moves and exchanges as long as the margin grows, from the best by margin, then from the next."""
    done: set[tuple[int, ...]] = set()
    rng = np.random.default_rng(3)
    while True:
        ranked = sorted(margins.known, key=lambda k: -margins.known[k])
        base = next((k for k in ranked if k not in done), None)
        if base is None:
            return
        done.add(base)
        block = _around(task, np.array(base))
        block = block[rng.permutation(block.shape[0])]
        shares = exact_shares(task, block)
        best = margins.known[base]
        for k in np.flatnonzero(shares <= 1.0).tolist():
            watch.check()
            one = _found(task, block[k], float(shares[k]))
            if one.items in margins.known:
                continue
            known[one.items] = one
            if margins.of(one) > best + 1e-9:
                break


def _found(task: Task, items: Indices, share: float) -> Found:
    home = spread(task, items[None])[0]
    moves = int((home != task.present).sum())
    return Found(tuple(home.tolist()), tuple(items.tolist()), share, len(set(home.tolist())), moves)


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
