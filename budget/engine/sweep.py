"""The receiver tuned over the whole band: the smallest distance to the limit line, exactly.

A line is seen while the receiver is tuned from its start to its end, both included. Between two such ends the reading
is constant, and it is not lower at an end than beside it; the limit line falls or rises steadily between its corners
and is lowest at a step. So the smallest distance is met at an end of an interval, a corner of the limit or an end of
the band: the candidates. The reading there, for many corners of the project at once:

1. Each clock's largest visible line. Lines of one clock may overlap, so this is a maximum over ranges: a line that
   covers ``len`` slots is entered at two places of the level floor(log2 len) of a sparse table, and the levels are
   pushed down, O(S log S) for S slots.
2. The sum over the clocks: the steps of all clocks in one order along frequency, and their running sum.
3. A running sum rounds; every candidate that could still be the best is added up again clock by clock.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import LimitLine
from budget.engine.receiver import MICRO, band, limit_at

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

ROUNDING = 1e-12  # relative; intervals this close touch
_TIE = 1e-10  # dB


@dataclass(frozen=True, slots=True)
class Level:
    """One level of the sparse table: how lines (2n or n,) enter the places (m,), see ``np.maximum.reduceat``."""

    width: int  # slots that one entry covers
    lines: Indices  # (2n,) by place
    first: Indices  # (m,) of each place, in ``lines``
    place: Indices  # (m,) slots


@dataclass(frozen=True, slots=True)
class Sweep:
    """All of the sweep that does not depend on levels; Q candidates, S slots, L lines."""

    candidate: Floats  # (Q,) Hz, rising
    limit: Floats  # (Q,) dB
    start: Floats  # (L,) Hz, with room for rounding
    end: Floats  # (L,) Hz
    slot: Indices  # (S,) first candidate of each slot, plus clock x (Q + 1): rising
    clock_start: Indices  # (G + 1,) slots of each clock
    levels: tuple[Level, ...]  # widest first, every power of two down to 1
    merged: Indices  # (S,) slots in the order of their candidates
    last: Indices  # (Q,) how many of them have begun at each candidate


@dataclass(frozen=True, slots=True)
class Tuned:
    """The worst tuning of one corner: where, reading of every clock there (G,) in V or A, and the margin in dB."""

    frequency: float
    limit: float  # dB
    reading: float  # V or A
    margin: float  # dB
    clocks: Floats  # (G,) each clock's largest visible line, V or A


def plan(limit: LimitLine, clock: Indices, count: int, start: Floats, end: Floats) -> Sweep:
    """Prepare the sweep over lines (L,) of ``count`` clocks that are seen from ``start`` to ``end`` (L,) [Hz].

    Every line must reach into the band of the limit line.
    """
    first, last = band(limit)
    corners = np.array([p[0] for p in limit.points])
    candidate = _distinct(np.concatenate((np.clip(start, first, last), np.clip(end, first, last), corners)))
    start, end = start - ROUNDING * np.abs(start), end * (1.0 + ROUNDING)
    size = candidate.size + 1
    opens = clock * size + np.searchsorted(candidate, start, side="left")
    closes = clock * size + np.searchsorted(candidate, end, side="right")
    slot = _distinct(np.concatenate((opens, closes)))
    begin, stop = np.searchsorted(slot, opens), np.searchsorted(slot, closes)
    del opens, closes
    position = slot % size
    merged = np.argsort(position, kind="stable")
    return Sweep(
        candidate=candidate,
        limit=limit_at(limit, candidate),
        start=start,
        end=end,
        slot=slot,
        clock_start=np.searchsorted(slot, np.arange(count + 1) * size),
        levels=_levels(begin, stop),
        merged=merged,
        last=np.searchsorted(position[merged], np.arange(candidate.size), side="right"),
    )


def _distinct(values: NDArray[Any]) -> NDArray[Any]:
    """Sorted, each once; ``np.unique`` goes through a hash table, which is slow for a million numbers."""
    values = np.sort(values)
    new = np.ones(values.size, dtype=np.bool_)
    np.not_equal(values[1:], values[:-1], out=new[1:])
    return values[new]


def _levels(begin: Indices, stop: Indices) -> tuple[Level, ...]:
    found: list[Level] = []
    depth = np.frexp((stop - begin).astype(np.float64))[1] - 1
    for k in range(int(depth.max()) if depth.size else 0, -1, -1):
        lines = np.flatnonzero(depth == k)
        places = begin[lines]
        if k:
            lines, places = np.concatenate((lines, lines)), np.concatenate((places, stop[lines] - (1 << k)))
        order = np.argsort(places, kind="stable")
        places = places[order]
        new = np.ones(places.size, dtype=np.bool_)
        np.not_equal(places[1:], places[:-1], out=new[1:])
        first = np.flatnonzero(new)
        found.append(Level(1 << k, lines[order], first, places[first]))
    return tuple(found)


def largest(sweep: Sweep, level: Floats) -> Floats:
    """Each clock's largest visible line in every slot, (R, S) [V or A], from the levels of all lines (R, L)."""
    table = np.zeros((level.shape[0], sweep.slot.size))
    for k, entry in enumerate(sweep.levels):
        if k:
            shifted = table[:, : -entry.width].copy()
            np.maximum(table[:, entry.width :], shifted, out=table[:, entry.width :])
        if entry.lines.size:
            values = level[:, entry.lines]
            if entry.first.size < entry.lines.size:
                values = np.maximum.reduceat(values, entry.first, axis=1)
            table[:, entry.place] = np.maximum(table[:, entry.place], values)
    return table


def worst(sweep: Sweep, level: Floats) -> tuple[list[Tuned | None], list[Tuned | None]]:
    """The worst tuning for each corner (R,), arithmetic and root-sum-square; None where no line is seen.

    ``level`` (R, L) are the levels of all lines [V or A].
    """
    table = largest(sweep, level) if level.size else np.zeros((level.shape[0], 0))
    return _worst(sweep, table, 1), _worst(sweep, table, 2)


def _worst(sweep: Sweep, table: Floats, power: int) -> list[Tuned | None]:
    found: list[Tuned | None] = []
    if not table.size:
        return [None] * table.shape[0]
    # With a million lines each of these is megabytes by the dozen, so none stays longer than it must.
    terms = table if power == 1 else table * table
    steps = np.diff(terms, axis=1, prepend=0.0)
    del terms
    running = np.zeros((table.shape[0], sweep.slot.size + 1))
    np.cumsum(steps[:, sweep.merged], axis=1, out=running[:, 1:])
    del steps
    # each addition rounds by at most half an ulp of the largest partial sum; twice that for the steps themselves
    doubt = 2.0 * np.finfo(np.float64).eps * sweep.slot.size * running.max(axis=1, initial=0.0)
    ratio = running[:, sweep.last]
    del running
    allowed = (MICRO * 10.0 ** (sweep.limit / 20.0)) ** power
    ratio /= allowed
    for row in range(table.shape[0]):
        slack = doubt[row] / allowed
        least = (ratio[row] - slack).max()
        could = np.flatnonzero(ratio[row] + slack >= least * (1.0 - 1e-9))
        found.append(_exact(sweep, table[row], could, power))
    return found


def _exact(sweep: Sweep, table: Floats, could: Indices, power: int) -> Tuned | None:
    """The best of some candidates, added up clock by clock; on a tie the lowest frequency."""
    clocks = sweep.clock_start.size - 1
    at_once = max(1, 300_000 // clocks)
    best: tuple[float, int, Floats] | None = None
    for begin in range(0, could.size, at_once):
        some = could[begin : begin + at_once]
        wanted = np.arange(clocks) * (sweep.candidate.size + 1) + some[:, None]
        at = np.searchsorted(sweep.slot, wanted, side="right") - 1
        here = at >= sweep.clock_start[:-1]
        values = np.where(here, table[np.maximum(at, 0)], 0.0)
        total = values.sum(axis=1) if power == 1 else np.sqrt((values * values).sum(axis=1))
        seen = total > 0.0
        margin = np.where(seen, sweep.limit[some] - 20.0 * np.log10(np.where(seen, total, 1.0) / MICRO), np.inf)
        k = int(np.argmax(margin <= margin.min() + _TIE))
        if np.isfinite(margin[k]) and (best is None or margin[k] < best[0] - _TIE):
            best = float(margin[k]), int(some[k]), values[k]
    if best is None:
        return None
    margin_db, q, values = best
    total_value = float(values.sum() if power == 1 else np.sqrt((values * values).sum()))
    return Tuned(float(sweep.candidate[q]), float(sweep.limit[q]), total_value, margin_db, values)
