"""Allocations that were worked out exactly: their shares, what is equal among them, and the best to keep.

The share of an allocation is the largest current over what the filter may carry, over filters in use and cases.
"""

from __future__ import annotations

import itertools
import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from budget.engine.feed import Bools, Floats, Indices, filter_currents
from budget.engine.placing import Task

SAME = 1e-9  # shares that differ by less are the same
KEPT = 60
_RESOLUTION = 1e-12  # of admissibility, as in the checks


class StoppedError(Exception):
    """The time is over, or the user said stop."""


@dataclass(slots=True)
class Watch:
    """When to stop; a part of the time can be lent by ``until``."""

    deadline: float  # of time.monotonic
    cancelled: Callable[[], bool] = lambda: False

    def check(self) -> None:
        """Raise :class:`StoppedError` when it is time."""
        if time.monotonic() >= self.deadline or self.cancelled():
            raise StoppedError

    def until(self, seconds: float) -> Watch:
        """The same watch with at most so many seconds [s] left."""
        return Watch(min(self.deadline, time.monotonic() + seconds), self.cancelled)

    def left(self) -> float:
        """Seconds [s] to the end, at least 0."""
        return max(0.0, self.deadline - time.monotonic())


@dataclass(frozen=True, slots=True)
class Found:
    """One allocation, exactly: filters of converters (N,) and items (K,), share, and how many converters move."""

    home: tuple[int, ...]
    items: tuple[int, ...]
    share: float
    used: int
    moves: int


@dataclass(slots=True)
class Pool:
    """The best allocations seen, and the best for each number of moves."""

    task: Task
    best: list[Found] = field(default_factory=list)
    by_moves: dict[int, Found] = field(default_factory=dict)
    visited: int = 0
    changed: Callable[[Found], None] = lambda _: None
    aim: float = -math.inf  # a share that is as good as any
    alike: list[Indices] = field(default_factory=list)  # classes of filters, indices (M,)
    equal: list[Indices] = field(default_factory=list)  # classes of items, indices (M,)

    def __post_init__(self) -> None:
        """Look for what is equal."""
        self.alike, self.equal = _several(filter_classes(self.task)), _several(item_classes(self.task))

    def share(self) -> float:
        """The smallest share so far; inf if there is none."""
        return self.best[0].share if self.best else math.inf

    def ties(self) -> int:
        """How many of those kept are as good as the best."""
        return sum(f.share <= self.share() + SAME for f in self.best)

    def add(self, items: Indices) -> None:
        """Work out the shares of allocations of items (A, K), indices of filters, and keep the best."""
        task = self.task
        shares = exact_shares(task, items)
        self.visited += items.shape[0]
        for k in np.argsort(shares, kind="stable")[:KEPT].tolist():
            share = float(shares[k])
            if not math.isfinite(share):
                break
            if len(self.best) >= KEPT and share > self.best[-1].share:
                near = self.by_moves
                if near and share >= max(f.share for f in near.values()):
                    break
            self._keep(fewest_moves(task, items[k], self.alike, self.equal), share)

    def _keep(self, items: Indices, share: float) -> None:
        chosen = tuple(items.tolist())
        if any(f.items == chosen for f in self.best):
            return
        task = self.task
        home = spread(task, items[None])[0]
        moves = int((home != task.present).sum())
        one = Found(tuple(home.tolist()), chosen, share, len(set(home.tolist())), moves)
        better = share < self.share() - SAME or (share < self.share() + SAME and moves < self.best[0].moves)
        self.best.append(one)
        self.best.sort(key=order_of)
        del self.best[KEPT:]
        known = self.by_moves.get(moves)
        if known is None or share < known.share:
            self.by_moves[moves] = one
        if better:
            self.changed(one)


def order_of(one: Found) -> tuple[float, int, tuple[int, ...]]:
    """By share, by moves where shares are the same, and then in a fixed order."""
    return (round(one.share / SAME) * SAME, one.moves, one.items)


def spread(task: Task, items: Indices) -> Indices:
    """Filters of converters (A, N) from the filters of items (A, K), as indices."""
    home = np.zeros((items.shape[0], task.present.size), dtype=np.intp)
    for k, members in enumerate(task.items):
        home[:, list(members)] = items[:, k, None]
    return home


def exact_shares(task: Task, items: Indices) -> Floats:
    """The largest current over what the filter may carry, a ratio (A,), of allocations of items (A, K).

    From the operating points; inf without one. 0 where only filters without a rating are used.
    """
    current = filter_currents(task.feed, spread(task, items))
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(current > 0.0, current / task.wanted, 0.0)
    share = np.where(np.isinf(current), np.inf, share)
    found: Floats = share.max(axis=(1, 2), initial=0.0)
    near = (found > 1.0) & (found <= 1.0 + _RESOLUTION)
    found[near] = 1.0
    return found


def obeys(task: Task, items: Indices) -> Bools:
    """Which allocations of items (A, K) obey everything but the ratings: True (A,)."""
    fine = task.allowed[np.arange(len(task.items)), items].all(axis=1)
    for a, b in task.apart:
        fine &= items[:, a] != items[:, b]
    sizes = np.array([len(m) for m in task.items], dtype=np.intp)
    if (task.most < task.present.size).any():
        for f in range(task.wanted.size):
            fine &= (sizes * (items == f)).sum(axis=1) <= task.most[f]
    return np.asarray(fine, dtype=np.bool_)


def item_classes(task: Task) -> Indices:
    """Equal numbers (K,), as indices, for items that nothing tells apart but their names."""
    seen: dict[tuple[object, ...], int] = {}
    special = {k for pair in task.apart for k in pair}
    found = []
    for k, members in enumerate(task.items):
        parts = sorted((float(task.feed.lead[n]), tuple(task.feed.power[:, n].tolist())) for n in members)
        key: tuple[object, ...] = (tuple(parts), tuple(task.allowed[k].tolist()), k if k in special else -1)
        found.append(seen.setdefault(key, len(seen)))
    return np.array(found, dtype=np.intp)


def filter_classes(task: Task) -> Indices:
    """Equal numbers (F,), as indices, for filters that nothing tells apart but their names and their attenuation."""
    seen: dict[tuple[object, ...], int] = {}
    found = []
    for f in range(task.wanted.size):
        key = (float(task.wanted[f]), float(task.feed.filter[f]), int(task.most[f]), tuple(task.allowed[:, f].tolist()))
        found.append(seen.setdefault(key, len(seen)))
    return np.array(found, dtype=np.intp)


def _several(kinds: Indices) -> list[Indices]:
    """The members of each class that has more than one."""
    groups = [np.flatnonzero(kinds == kind) for kind in np.unique(kinds)]
    return [group for group in groups if group.size > 1]


def fewest_moves(task: Task, items: Indices, alike: list[Indices], equal: list[Indices]) -> Indices:
    """Of all allocations that equal this one (K,) up to equal filters and items, indices of one with few moves.

    ``alike`` are the classes of several filters, ``equal`` those of several items, indices (M,) each.
    """
    where = np.array([task.present[m[0]] for m in task.items], dtype=np.intp)
    sizes = np.array([len(m) for m in task.items], dtype=np.intp)
    found = items.copy()
    for members in alike:
        stay = np.zeros((members.size, members.size))  # weight of items of filter a that would find themselves at b
        for a, f in enumerate(members.tolist()):
            for b, g in enumerate(members.tolist()):
                stay[a, b] = sizes[(found == f) & (where == g)].sum()
        best = _assign(stay)
        renamed = found.copy()
        for a, f in enumerate(members.tolist()):
            renamed[found == f] = members[best[a]]
        found = renamed
    for group in equal:
        places = found[group].tolist()
        left = []
        for k in group.tolist():
            if int(where[k]) in places:
                places.remove(int(where[k]))
                found[k] = where[k]
            else:
                left.append(k)
        for k, f in zip(left, places, strict=True):
            found[k] = f
    return found


def _assign(weight: Floats) -> tuple[int, ...]:
    """A permutation of large total weight: the best for up to six, else greedily the largest first."""
    size = weight.shape[0]
    if size <= 6:
        return max(itertools.permutations(range(size)), key=lambda p: sum(weight[a, b] for a, b in enumerate(p)))
    free, found = set(range(size)), [-1] * size
    for at in np.argsort(-weight, axis=None, kind="stable").tolist():
        a, b = divmod(at, size)
        if found[a] < 0 and b in free:
            found[a] = b
            free.discard(b)
    return tuple(found)
