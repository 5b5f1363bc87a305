"""Good allocations at once: what is near the present one, and a local search by moves and exchanges."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable

import numpy as np

from budget.engine.bounds import fit
from budget.engine.feed import Floats, Indices
from budget.engine.placing import Task
from budget.engine.pool import SAME, Pool, Watch, obeys

_POWERS = (5, 9)  # shares are weighed by their power of 2^5, then of 2^9, in the local search
_NEAR = 200_000  # allocations of a neighbourhood that are looked at


def neighbours(task: Task, moved: int, most: int = _NEAR) -> Indices | None:
    """All allocations of items (A, K) with just ``moved`` items elsewhere, as indices; None if above ``most``.

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
    if math.comb(len(settled), extra) * max(1, filters - 1) ** extra * filters ** len(homeless) > most:
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
