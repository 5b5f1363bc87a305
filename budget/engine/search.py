"""The allocation with the smallest share: the largest current over what the filter may carry.

Two things run against each other. A local search (moves and exchanges, from several starts) finds good allocations at
once. A rising target closes the gap from below: all splits whose least currents (``feed.least_currents``) stay below
the target are enumerated (``partition``) and looked at exactly; when none does as well as the target, no allocation
does, and the target rises. As soon as the best one known is at or below the target, it is proved to be the best.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from budget.engine.bounds import Fit, fit, least_shares, root_bound
from budget.engine.descent import improve, neighbours
from budget.engine.feed import Indices
from budget.engine.partition import Split, TooWideError, splits
from budget.engine.placing import Task
from budget.engine.pool import KEPT, SAME, Found, Pool, StoppedError, Watch, filter_classes, item_classes

_BEYOND = 1e9  # times the least share: no rating matters any more
_FEW = 20_000  # allocations near the present one that are looked at first


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
    improve(task, pool, watch, 1)  # so that there is something at once
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
        near = neighbours(task, moved, _FEW)
        if near is None:
            break
        if near.size:
            watch.check()
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
    while True:
        target = min(max(outcome.bound, 1e-12) * (1.0 + width), ceiling)
        if target > _BEYOND * max(root, 1.0):  # ratings do not matter any more: what else is asked for cannot be met
            outcome.bound, outcome.proved = math.inf, True
            return
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
            outcome.all_ties = pool.share() <= target and pool.ties() < KEPT
            return
        width *= 4.0
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


def split_of(task: Task, at: Fit) -> tuple[Split, Indices, Indices, Indices]:
    """The split of items with a choice, and indices: its items (I,) and filters (F,), and where the others are (K,).

    The last is -1 for items with a choice.
    """
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
