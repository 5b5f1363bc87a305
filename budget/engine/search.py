"""The allocation with the smallest share: the largest current over what the filter may carry.

Two things run against each other. A local search (moves and exchanges, from several starts) finds good allocations at
once. A rising target closes the gap from below: all splits whose least currents (``feed.least_currents``) stay below
the target are enumerated (``partition``) and looked at exactly; when none does as well as the target, no allocation
does, and the target rises. As soon as the best one known is at or below the target, it is proved to be the best.
"""

from __future__ import annotations

import itertools
import math
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace

import numpy as np

from budget.engine.feed import Bools, Floats, Indices, filter_currents, least_currents
from budget.engine.partition import Split, TooWideError, splits
from budget.engine.placing import Task

SAME = 1e-9  # shares that differ by less are the same
_RESOLUTION = 1e-12  # of admissibility, as in the checks
_POWERS = (5, 9)  # shares are weighed by their power of 2^5, then of 2^9, in the local search
_NEAR = 200_000  # allocations of a neighbourhood that are looked at
_KEPT = 60


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
        for k in np.argsort(shares, kind="stable")[:_KEPT].tolist():
            share = float(shares[k])
            if not math.isfinite(share):
                break
            if len(self.best) >= _KEPT and share > self.best[-1].share:
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
        del self.best[_KEPT:]
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


@dataclass(frozen=True, slots=True)
class Fit:
    """The task at a target: least currents of items (F, K, C) [A], what items may be where (K, F), caps (F,) [A]."""

    low: Floats
    allowed: Bools
    caps: Floats


def fit(task: Task, target: float) -> Fit | None:
    """Least currents of all allocations whose share is at most ``target``; None if there is none for certain."""
    caps = np.full(task.wanted.size, np.inf)
    np.multiply(task.wanted, target, out=caps, where=np.isfinite(task.wanted))
    each = np.zeros((task.present.size, task.wanted.size), dtype=np.bool_)
    for k, members in enumerate(task.items):
        each[list(members)] = task.allowed[k]
    drawn = least_currents(task.feed, each, caps)
    if drawn is None:
        return None
    low = np.stack([drawn[:, list(m)].sum(axis=1) for m in task.items], axis=1)
    fits = (
        (np.isfinite(low) & (low <= caps[:, None, None] * (1.0 + SAME))).all(axis=2).T
    )  # an item too large for the filter on its own
    allowed = task.allowed & fits
    if not allowed.any(axis=1).all() or not _room_for_many(low, caps):
        return None
    return Fit(np.where(allowed.T[:, :, None], low, np.inf), allowed, caps)


def _room_for_many(low: Floats, caps: Floats) -> bool:
    """Whether the hF + 1 largest items can be such that some filter holds h + 1 of them, for every h and case."""
    if not np.isfinite(caps).all():
        return True
    filters, count = low.shape[0], low.shape[1]
    size = -np.sort(-low.min(axis=0), axis=0)  # (K, C) largest first
    return all(
        (size[h * filters - h : h * filters + 1].sum(axis=0) <= caps.max() * (1.0 + SAME)).all()
        for h in range(1, (count - 1) // filters + 1)
    )


def root_bound(task: Task) -> float:
    """A share that no allocation is below, a ratio; inf if there is no allocation at all for certain."""
    high = 1.0
    while fit(task, high) is None:
        high *= 2.0
        if high > 1e12:
            return math.inf
    low = 0.0
    if fit(task, 0.0) is not None:
        return 0.0
    while high - low > 1e-10 * high:
        middle = 0.5 * (low + high)
        if fit(task, middle) is None:
            low = middle
        else:
            high = middle
    return low


def split_of(task: Task, at: Fit) -> tuple[Split, Indices, Indices, Indices]:
    """The split of items with a choice; with the items and filters in its order, and the homes of the other items."""
    filters = at.caps.size
    choice = at.allowed.sum(axis=1) > 1
    fixed = np.where(choice, -1, at.allowed.argmax(axis=1))
    sizes = np.array([len(m) for m in task.items], dtype=np.intp)
    base = np.zeros((filters, task.feed.power.shape[0]))
    most = task.most.copy()
    allowed = at.allowed.copy()
    for k in np.flatnonzero(~choice).tolist():
        base[fixed[k]] += at.low[fixed[k], k]
        most[fixed[k]] -= sizes[k]
    for a, b in task.apart:
        for x, y in ((a, b), (b, a)):
            if fixed[x] >= 0 and fixed[y] < 0:
                allowed[y, fixed[x]] = False
    kinds, classes = item_classes(task), filter_classes(task)
    # a fixed item makes its filter one of a kind, and what is forbidden beside it makes an item so
    seen: dict[tuple[object, ...], int] = {}
    filter_class = np.array(
        [seen.setdefault((int(classes[f]), f if (fixed == f).any() else -1, tuple(allowed[:, f].tolist())), len(seen))
         for f in range(filters)], dtype=np.intp,
    )  # fmt: skip
    free = np.flatnonzero(choice)
    weight = np.where(np.isfinite(at.low), at.low, 0.0).max(axis=(0, 2))
    seen = {}
    item_class = {k: seen.setdefault((int(kinds[k]), tuple(allowed[k].tolist())), len(seen)) for k in free.tolist()}
    top: dict[int, float] = {}
    for k, number in item_class.items():
        top[number] = max(top.get(number, 0.0), float(weight[k]))
    items = np.array(sorted(free.tolist(), key=lambda k: (-top[item_class[k]], item_class[k], k)), dtype=np.intp)
    order = np.array(sorted(range(filters), key=lambda f: (int((filter_class == filter_class[f]).sum()) > 1,
                                                           int(filter_class[f]), f)), dtype=np.intp)  # fmt: skip
    index = {int(k): n for n, k in enumerate(items)}
    low = np.where(allowed.T[:, :, None], at.low, np.inf)
    made = Split(
        low=low[order][:, items],
        base=base[order],
        caps=at.caps[order],
        sizes=sizes[items],
        most=most[order],
        apart=tuple((index[a], index[b]) for a, b in task.apart if a in index and b in index),
        item_class=np.array([item_class[k] for k in items.tolist()], dtype=np.intp),
        filter_class=filter_class[order],
    )
    return made, items, order, fixed


def possible(task: Task, fixed: Indices) -> bool:
    """Whether the items without a choice can be where they must be: ``fixed`` (K,) indices of filters, or -1."""
    sizes = np.array([len(m) for m in task.items], dtype=np.intp)
    if any(fixed[a] >= 0 and fixed[a] == fixed[b] for a, b in task.apart):
        return False
    return all(int(sizes[fixed == f].sum()) <= int(task.most[f]) for f in range(task.wanted.size))


def enumerate_all(
    task: Task,
    target: float,
    watch: Watch,
    ceiling: Callable[[], float],
    take: Callable[[Indices], None],
    distinct: bool = False,
) -> None:
    """Hand blocks of allocations of items (A, K) to ``take``: all, up to equals, with a least share up to ``target``.

    ``distinct``: equal filters and items are told apart all the same. Raises StoppedError or TooWideError before all
    were handed over.
    """
    at = fit(task, target)
    if at is None:
        return
    split, items, order, fixed = split_of(task, at)
    if not possible(task, fixed):
        return
    if distinct:
        split = replace(
            split, item_class=np.arange(items.size, dtype=np.intp), filter_class=np.arange(order.size, dtype=np.intp)
        )
    for block in splits(split, watch.check, lambda: ceiling() / target if target > 0.0 else math.inf):
        home = np.tile(fixed, (block.shape[0], 1))
        home[:, items] = order[block]
        take(home)


def neighbours(task: Task, moved: int) -> Indices | None:
    """All allocations of items (A, K) with just ``moved`` items elsewhere, as indices; None if there are too many.

    Items that have no place yet, or whose converters are apart, are among the moved.
    """
    where = _present(task)
    homeless = [k for k in range(len(task.items)) if where[k] < 0 or not task.allowed[k, where[k]]]
    settled = [k for k in range(len(task.items)) if k not in set(homeless)]
    extra = moved - len(homeless)
    if extra < 0:
        return np.zeros((0, len(task.items)), dtype=np.intp)
    filters = task.wanted.size
    if extra > len(settled):
        return np.zeros((0, len(task.items)), dtype=np.intp)
    if math.comb(len(settled), extra) * max(1, filters - 1) ** extra * filters ** len(homeless) > _NEAR:
        return None
    chosen = _rows(itertools.combinations(settled, extra), extra)
    shifts = _rows(itertools.product(range(1, filters), repeat=extra), extra)
    places = _rows(itertools.product(range(filters), repeat=len(homeless)), len(homeless))
    every = np.tile(where, (chosen.shape[0], shifts.shape[0], places.shape[0], 1))
    first, second, third = np.ogrid[: chosen.shape[0], : shifts.shape[0], : places.shape[0]]
    for n in range(extra):
        who = chosen[:, n]
        to = (where[who][:, None] + shifts[None, :, n]) % filters
        every[first, second, third, who[:, None, None]] = to[:, :, None]
    for n, who_ in enumerate(homeless):
        every[:, :, :, who_] = places[:, n]
    every = every.reshape(-1, len(task.items))
    return every[obeys(task, every)]


def _rows(found: Iterable[tuple[int, ...]], width: int) -> Indices:
    listed = list(found)
    return np.array(listed, dtype=np.intp).reshape(len(listed), width)


def _present(task: Task) -> Indices:
    return np.array(
        [task.present[m[0]] if len({int(task.present[n]) for n in m}) == 1 else -1 for m in task.items], dtype=np.intp
    )


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


def least_shares(task: Task, at: Fit, items: Indices) -> Floats:
    """The share (A,), a ratio, that allocations of items (A, K) have at least, or about, by the currents of ``at``."""
    count, filters, cases = len(task.items), task.wanted.size, task.feed.power.shape[0]
    found = np.zeros(items.shape[0])
    low = np.where(np.isfinite(at.low), at.low, 1e30)
    for start in range(0, items.shape[0], 20_000):
        part = items[start : start + 20_000]
        load = np.zeros((part.shape[0], filters, cases))
        for f in range(filters):
            load[:, f] = (part == f).astype(np.float64) @ low[f].reshape(count, cases)
        load /= np.maximum(task.wanted, 1e-300)[:, None]
        found[start : start + 20_000] = load.max(axis=(1, 2), initial=0.0)
    return found


def improve(task: Task, pool: Pool, watch: Watch, rounds: int, seed: int = 1) -> None:
    """Local search from the present allocation, a greedy one and shaken ones; keeps what it finds in ``pool``.

    Ends early once the pool reaches its aim. Raises StoppedError.
    """
    rng = np.random.default_rng(seed)
    at = _rough(task, pool.aim)
    where = _present(task)
    starts = [_greedy(task, at, where), _greedy(task, at, np.full_like(where, -1))]
    best = None
    for number in range(rounds):
        watch.check()
        if number < len(starts):
            items = starts[number]
        else:
            base = np.array(pool.best[int(rng.integers(min(4, len(pool.best))))].items) if pool.best else best
            if base is None:
                items = _greedy(task, at, np.full_like(where, -1), rng)
            else:
                shaken = rng.permutation(len(task.items))[: int(rng.integers(2, max(3, len(task.items) // 3 + 1)))]
                partial = base.copy()
                partial[shaken] = -1
                items = _greedy(task, at, partial, rng)
        if items is None:
            continue
        for power in _POWERS:
            items = _descend(task, at, items, watch, power)
        best = items
        pool.add(items[None])
        if pool.share() <= pool.aim + SAME:
            return


def _rough(task: Task, aim: float) -> Floats:
    """About what share items take of each filter in each case (F, K, C); of one without a rating, nothing."""
    near = fit(task, aim * 1.02) if aim > 0.0 and math.isfinite(aim) else None
    feed = task.feed
    v = max(feed.source - feed.resistance * feed.power.sum(axis=1).max(initial=0.0) / feed.source, 0.5 * feed.source)
    drawn = np.stack([feed.power[:, list(m)].sum(axis=1) / v for m in task.items])[None]  # (1, K, C)
    if near is not None:
        drawn = np.where(np.isfinite(near.low), near.low, drawn)
    share = drawn / np.maximum(task.wanted, 1e-300)[:, None, None]
    found: Floats = np.minimum(share, 1e12)
    return found


def _greedy(task: Task, at: Floats, partial: Indices, rng: np.random.Generator | None = None) -> Indices | None:
    """Completes ``partial`` (K,), -1 where open: the largest item first, where the share stays lowest."""
    filters = task.wanted.size
    items = np.where((partial >= 0) & task.allowed[np.arange(partial.size), partial], partial, -1)
    sizes = [len(m) for m in task.items]
    load = np.zeros((filters, at.shape[2]))
    room = task.most.copy()
    enemies: dict[int, list[int]] = {}
    for a, b in task.apart:
        enemies.setdefault(a, []).append(b)
        enemies.setdefault(b, []).append(a)
    for k in np.flatnonzero(items >= 0).tolist():
        f = int(items[k])
        if room[f] < sizes[k] or any(items[e] == f and e < k for e in enemies.get(k, ())):
            items[k] = -1
            continue
        load[f] += at[f, k]
        room[f] -= sizes[k]
    open_ = np.flatnonzero(items < 0)
    weight = at.max(axis=(0, 2))[open_]
    if rng is not None:
        weight = weight * rng.uniform(0.7, 1.3, weight.size)
    choice = task.allowed[open_].sum(axis=1)
    for k in open_[np.lexsort((-weight, choice > 1))].tolist():
        fine = task.allowed[k] & (room >= sizes[k])
        for e in enemies.get(k, ()):
            if items[e] >= 0:
                fine[items[e]] = False
        if not fine.any():
            return None
        after = np.where(fine, (load + at[:, k]).max(axis=1), np.inf)
        f = int(after.argmin())
        items[k] = f
        load[f] += at[f, k]
        room[f] -= sizes[k]
    return items


def _descend(task: Task, at: Floats, items: Indices, watch: Watch, power: int) -> Indices:
    """Moves and exchanges of single items while the shares, weighed by the power 2^``power``, fall."""
    count, filters = len(task.items), task.wanted.size
    rows = np.arange(count)
    bound = bool(task.apart) or bool((task.most < task.present.size).any())
    items = items.copy()
    for _ in range(40 * count + 40):
        watch.check()
        load = np.zeros((filters, at.shape[2]))
        np.add.at(load, items, at[items, rows])
        scale = float(load.max(initial=0.0))
        if scale <= 0.0:
            break
        weight = _powered(load / scale, power).sum(axis=1)
        here = at[items, rows]  # (K, C)
        without = _powered((load[items] - here) / scale, power).sum(axis=1)  # (K,) of its own filter
        with_ = _powered((load[:, None] + at) / scale, power).sum(axis=2)  # (F, K)
        gain = without[None] + with_ - weight[items][None] - weight[:, None]
        gain[items, rows] = np.inf
        gain = np.where(task.allowed.T, gain, np.inf)
        # exchanges: item a goes to b's filter and back
        a, b = np.triu_indices(count, 1)
        differ = (items[a] != items[b]) & task.allowed[a, items[b]] & task.allowed[b, items[a]]
        a, b = a[differ], b[differ]
        fa, fb = items[a], items[b]
        one = _powered((load[fa] - here[a] + at[fa, b]) / scale, power).sum(axis=1)
        two = _powered((load[fb] - here[b] + at[fb, a]) / scale, power).sum(axis=1)
        swap = one + two - weight[fa] - weight[fb]
        flat = np.concatenate((gain.ravel(), swap))
        least = -1e-9 * float(weight.sum())
        done = True
        for at_ in np.argsort(flat, kind="stable")[:50].tolist() if bound else [int(flat.argmin())]:
            if flat[at_] >= least:
                break
            changed = items.copy()
            if at_ < gain.size:
                f, k = divmod(at_, count)
                changed[k] = f
            else:
                k = at_ - gain.size
                changed[a[k]], changed[b[k]] = items[b[k]], items[a[k]]
            if not bound or obeys(task, changed[None])[0]:
                items, done = changed, False
                break
        if done:
            break
    return items


def _powered(share: Floats, power: int) -> Floats:
    share = np.minimum(np.maximum(share, 0.0), 3.0)
    for _ in range(power):
        share = share * share
    return share


@dataclass(slots=True)
class Outcome:
    """How far the search got: no share is below ``bound``; ``proved``: none is below the best of the pool.

    ``all_ties``: all allocations that are as good, up to equals, have been looked at.
    """

    bound: float
    proved: bool
    all_ties: bool = False


def even(
    task: Task,
    pool: Pool,
    watch: Watch,
    outcome: Outcome,
    ceiling: float = math.inf,
    told: Callable[[float], None] = lambda _: None,
) -> None:
    """Find the allocation with the smallest share, unless it is above ``ceiling``; ``outcome`` tells how far it got.

    Raises StoppedError.
    """
    outcome.bound, outcome.proved = 0.0, False
    if not task.items:
        pool.add(np.zeros((1, 0), dtype=np.intp))
        outcome.proved = True
        return
    outcome.bound = root = root_bound(task)
    pool.aim = root
    told(root)

    def settled() -> bool:
        if pool.share() <= outcome.bound + SAME or outcome.bound > ceiling + SAME:
            outcome.proved = True
        return outcome.proved

    if root > ceiling + SAME or not math.isfinite(root):
        outcome.proved = True
        return
    for moved in range(3):
        near = neighbours(task, moved)
        if near is None:
            break
        if near.size:
            at = fit(task, max(root, 1.0) * 2.0)
            if at is not None:
                near = near[np.argsort(least_shares(task, at, near), kind="stable")[:200]]
            pool.add(near[:2000])
        if settled():
            return
    improve(task, pool, watch, 6 if len(task.items) < 10 else 30)
    if settled():
        return
    width = 1e-4
    rounds = 0
    while True:
        target = min(max(outcome.bound, 1e-12) * (1.0 + width), ceiling)
        whole = pool.share() <= target
        if whole:
            target = pool.share() + SAME
        try:
            enumerate_all(task, target, watch, lambda: pool.share() + SAME, pool.add)
        except TooWideError:
            break
        outcome.bound = min(target, pool.share())
        told(outcome.bound)
        if settled() or whole or target >= ceiling:
            outcome.proved = True
            outcome.all_ties = pool.share() <= target and pool.ties() < _KEPT
            return
        width *= 4.0
        rounds += 1
    # too many splits fit: go on improving while there is time
    seed = 2
    idle = 0
    while idle < 12:
        before = pool.share()
        improve(task, pool, watch, 40, seed)
        if settled():
            return
        idle = 0 if pool.share() < before - 1e-7 else idle + 1
        seed += 1


class _EnoughError(Exception):
    """The first allocation that will do has been found."""


def decide(task: Task, watch: Watch) -> tuple[Found | None, bool]:
    """An admissible allocation, if one is found, and whether the answer is proved. Raises StoppedError if cancelled."""
    if not task.items:
        return None, False
    if fit(task, 1.0) is None:
        return None, True
    pool = Pool(task, aim=1.0)

    def take(items: Indices) -> None:
        pool.add(items)
        if pool.share() <= 1.0:
            raise _EnoughError

    try:
        improve(task, pool, watch, 4)
        if pool.share() > 1.0:
            enumerate_all(task, 1.0, watch, lambda: 1.0 + SAME, take)
            return None, True
    except _EnoughError:
        pass
    except TooWideError:
        try:
            improve(task, pool, watch, 100, 2)
        except StoppedError:
            if watch.cancelled():
                raise
    except StoppedError:
        if watch.cancelled():
            raise
    return (pool.best[0], True) if pool.share() <= 1.0 else (None, False)


def settle_moves(task: Task, pool: Pool, watch: Watch) -> None:
    """Among allocations with the smallest share, look for one with the fewest moves, near the present allocation."""
    share = pool.share()
    if not math.isfinite(share) or not task.items:
        return
    at = fit(task, share * (1.0 + SAME))
    if at is None:
        return
    for moved in range(len(task.items) + 1):
        watch.check()
        near = neighbours(task, moved)
        if near is None:
            return
        if near.size:
            near = near[least_shares(task, at, near) <= share * (1.0 + 4.0 * SAME) + SAME]
            pool.add(near[:5000])
        if pool.best[0].moves <= moved:
            return
