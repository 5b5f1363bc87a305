"""Filter currents of many allocations at once, and what they are at least.

``filter_currents`` is the method of ``operating`` for many homes of the same converters: Newton from no load, with the
same proof. Only the lowest source voltage is looked at: with a higher source every voltage of the (upper) solution is
higher and every current smaller, so no other line is worse or lacks an operating point that this one has.

``least_currents`` bounds the currents of all allocations that keep every filter within a given current. A constant
power load draws the less, the higher its voltage. So with upper bounds on all voltages (first the source's) every
converter draws at least what it would there; the bus node then lies at least the drop of all these currents below the
source; and what the other filters may not carry, a filter must, which is a drop in its resistance. The new voltages are
upper bounds again, and the steps repeat (derived). With filters filled to the limit, the bounds are nearly exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

_STEPS = 200
_TINY = 1e-150
_AT_ONCE = 400_000  # values of a block of allocations, cases and converters
_ROUNDS = 100  # of bounding; each gains a factor of about the relative drop, some 1e-2 to 1e-1


@dataclass(frozen=True, slots=True)
class Feed:
    """The bus without its allocation: converters N, cases C, filters F."""

    source: float  # V, the lowest
    resistance: float  # ohm, of the bus
    filter: Floats  # (F,) ohm
    lead: Floats  # (N,) ohm
    power: Floats  # (C, N) W


def filter_currents(feed: Feed, home: Indices) -> Floats:
    """Currents (A, C, F) [A] of allocations ``home`` (A, N), indices of filters; inf where there is no solution."""
    cases, count = feed.power.shape
    filters = feed.filter.size
    found = np.empty((home.shape[0], cases, filters))
    step = max(1, _AT_ONCE // max(1, cases * (count + filters)))
    for start in range(0, home.shape[0], step):
        part = home[start : start + step]
        rows = part.repeat(cases, axis=0)
        power = np.tile(feed.power, (part.shape[0], 1))
        found[start : start + step] = _solve(feed, rows, power).reshape(-1, cases, filters)
    return found


def _solve(feed: Feed, home: Indices, power: Floats) -> Floats:
    """Newton of ``operating._solve`` for rows (R,) of homes and powers (R, N): currents (R, F), inf if unsolved."""
    count, filters, source = home.shape[1], feed.filter.size, feed.source
    out = np.full((home.shape[0], filters), np.inf)
    if not count:
        out[:] = 0.0
        return out
    tolerance = source * np.finfo(np.float64).eps * (16.0 + np.sqrt(count))
    rows = np.arange(home.shape[0])
    node, behind = np.full(rows.size, source), np.full((rows.size, filters), source)
    double, knee = 2.0 * power, 2.0 * np.sqrt(feed.lead * power)
    flat = home + filters * rows[:, None]
    for _ in range(_STEPS):
        at_filter = np.take_along_axis(behind, home, axis=1)
        room = at_filter - knee
        alive = (room.min(axis=1) >= -tolerance) & (behind.min(axis=1) > 0.0)
        room = np.maximum(room, 0.0)
        root = np.sqrt(room * (at_filter + knee))
        with np.errstate(all="ignore"):  # rows that are not alive
            current = double / (at_filter + root)
            steep = current / np.maximum(root, _TINY)
        size = rows.size * filters
        through = np.bincount(flat.ravel(), current.ravel(), size).reshape(-1, filters)
        slope = np.bincount(flat.ravel(), steep.ravel(), size).reshape(-1, filters)
        with np.errstate(all="ignore"):
            excess = behind + feed.filter * through - node[:, None]
            excess_node = node + feed.resistance * through.sum(axis=1) - source
            done = alive & (np.maximum(np.abs(excess).max(axis=1), np.abs(excess_node)) <= tolerance)
            arrived = (np.abs(excess) <= tolerance) & (feed.resistance == 0.0)
            excess = np.where(arrived, 0.0, excess)
            pivot = np.where(arrived, 1.0, 1.0 - feed.filter * slope)
            regular = alive & (pivot.min(axis=1) > 0.0)
            pivot = np.where(pivot > 0.0, pivot, 1.0)
            pivot_node = 1.0 - feed.resistance * (slope / pivot).sum(axis=1)
            regular &= pivot_node > 0.0
            fall = (excess_node + feed.resistance * (slope * excess / pivot).sum(axis=1)) / pivot_node
            behind = behind - (excess + fall[:, None]) / pivot
            node = node - fall
        out[rows[done]] = through[done]
        going = regular & ~done
        if not going.all():
            rows, home, node, behind = rows[going], home[going], node[going], behind[going]
            if not rows.size:
                break
            double, knee = double[going], knee[going]
            flat = home + filters * np.arange(rows.size)[:, None]
    return out


def least_currents(feed: Feed, allowed: Bools, caps: Floats) -> Floats | None:
    """What each converter draws at least behind each filter, shape (F, N, C) [A]; inf where it must not or cannot be.

    Holds for every allocation within ``allowed`` (N, F) that keeps the filters within ``caps`` (F,) [A], which may be
    inf. None where there is no such allocation for certain: the bus cannot carry it, or the caps cannot.
    """
    cases, count = feed.power.shape
    filters = feed.filter.size
    node = np.full(cases, feed.source)
    behind = np.full((cases, filters), feed.source)
    power = feed.power[:, None, :]  # (C, 1, N)
    knee = 2.0 * np.sqrt(feed.lead * power)
    closed = ~allowed.T[None]  # (1, F, N)
    only = (allowed.sum(axis=1) == 1)[None, None]
    others = np.array([caps[np.arange(filters) != f].sum() for f in range(filters)])
    drawn = np.zeros((cases, filters, count))
    for _ in range(_ROUNDS):
        if behind.min() <= 0.0:
            return None
        with np.errstate(all="ignore"):
            v = behind[:, :, None]
            drawn = 2.0 * power / (v + np.sqrt(np.maximum(v - knee, 0.0) * (v + knee)))
        drawn = np.where(closed | (v < knee), np.inf, drawn)
        least = drawn.min(axis=1)  # (C, N)
        total = least.sum(axis=1)
        if not np.isfinite(total).all() or (total > caps.sum() * (1.0 + 1e-9)).any():
            return None
        fixed = np.where(only & ~closed, drawn, 0.0).sum(axis=2)  # (C, F)
        carried = np.maximum(fixed, total[:, None] - others)
        node = feed.source - feed.resistance * total
        before, behind = behind, node[:, None] - feed.filter * np.maximum(carried, 0.0)
        if np.abs(before - behind).max(initial=0.0) <= 1e-14 * feed.source:
            break
    found: Floats = drawn.transpose(1, 2, 0)
    return found
