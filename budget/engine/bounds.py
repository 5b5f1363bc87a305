"""What an allocation takes at least: currents of items under a target, and the share that no allocation is below."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from budget.engine.feed import Bools, Floats, Indices, least_currents
from budget.engine.placing import Task
from budget.engine.pool import SAME


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
