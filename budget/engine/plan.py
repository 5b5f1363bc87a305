"""The frequency plan: which harmonics can meet in one receiver bandwidth, and where one clock would do best."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from budget.engine.emission import Emissions, emissions
from budget.engine.lines import Lines
from budget.engine.model import Converter, Project
from budget.engine.operating import Operating


@dataclass(frozen=True, slots=True)
class Meeting:
    """Lines of two clocks that one receiver bandwidth can hold: the lowest such pair, and how many there are."""

    clocks: tuple[str, str]
    orders: tuple[int, int]  # of the lowest pair; 0 for a measured line
    low: float  # Hz, where the receiver may be tuned to see both
    high: float
    count: int


def meetings(lines: Lines) -> tuple[Meeting, ...]:
    """All pairs of clocks whose lines the receiver can see together inside the band, in the order of the clocks."""
    start, end = lines.low - lines.bandwidth / 2, lines.high + lines.bandwidth / 2
    first, last = lines.limit.points[0][0], lines.limit.points[-1][0]
    start, end = np.maximum(start, first), np.minimum(end, last)
    groups = [np.flatnonzero(lines.clock == k) for k in range(len(lines.clocks))]
    groups = [group for group in groups if group.size]
    owns = [(start[group], end[group]) for group in groups]
    sorts = [(np.sort(s), np.sort(e)) for s, e in owns]
    found = []
    for a, (one, (begin, stop)) in enumerate(zip(groups, owns, strict=True)):
        for b in range(a + 1, len(groups)):
            # Closed intervals that touch: for each of ``one``, those of ``two`` that start before its end.
            starts, ends = sorts[b]
            count = starts.searchsorted(stop, side="right") - ends.searchsorted(begin)
            several = count > 0
            if several.any():
                found.append(
                    _meeting(lines, start, end, int(one[several.argmax()]), groups[b], int(count[several].sum()))
                )
    return tuple(found)


def _meeting(lines: Lines, start: np.ndarray, end: np.ndarray, i: int, two: np.ndarray, count: int) -> Meeting:
    """The lowest pair of two clocks: line ``i`` and the first of ``two`` that it touches."""
    touching = two[(start[two] <= end[i]) & (end[two] >= start[i])]
    j = int(touching[0])
    names = (lines.clocks[int(lines.clock[i])].name, lines.clocks[int(lines.clock[j])].name)
    low, high = max(start[i], start[j]), min(end[i], end[j])
    orders = (int(lines.order[i]), int(lines.order[j]))
    return Meeting(names, orders, float(low), float(high), count)


@dataclass(frozen=True, slots=True)
class Scan:
    """The worst margin [dB] over all corners and limit sets as one clock is moved; nan where nothing is seen."""

    clock: str
    frequency: tuple[float, ...]
    margin: tuple[float, ...]
    present: float  # Hz, where the clock is now
    best: float | None  # Hz, the frequency of the largest margin
    best_margin: float | None


def scan(
    project: Project,
    operating: Operating,
    clock: str,
    low: float,
    high: float,
    points: int = 61,
    cancelled: Callable[[], bool] = lambda: False,
    progress: Callable[[float], None] = lambda _: None,
) -> Scan | None:
    """Move ``clock`` (a clock's name, or the id of a converter with one of its own) from ``low`` to ``high`` [Hz].

    Loads and voltages stay, so the operating points do. Where the largest margin is reached more than once, or almost
    (within 0.05 dB), the frequency nearest to the present one is named. None if ``cancelled`` said so.
    """
    members = [c for c in project.converters if (c.clock or c.id) == clock and c.frequency]
    if not members:
        raise ValueError(f"no clock is called {clock}")
    present = members[0].frequency or 0.0
    frequencies = np.geomspace(low, high, points) if high > low else np.array([low])
    if low <= present <= high:
        frequencies = np.unique(np.append(frequencies, present))
    margins = []
    previous: Emissions | None = None
    for k, f in enumerate(frequencies.tolist()):
        if cancelled():
            return None
        moved = replace(project, converters=tuple(_moved(c, members, f) for c in project.converters))
        previous = emissions(moved, operating, (0, 1, 2), previous)
        seen = [row.margin for row in previous.rows if row.margin is not None]
        failed = any(row.failures for row in previous.rows)
        margins.append(min(seen) if seen and not failed else float("nan"))
        progress((k + 1) / frequencies.size)
    found = np.array(margins)
    best = None
    if np.isfinite(found).any():
        top = np.nanmax(found)
        close = np.flatnonzero(found >= top - 0.05)
        best = int(close[np.argmin(np.abs(np.log(frequencies[close] / present)))])
    return Scan(
        clock,
        tuple(frequencies.tolist()),
        tuple(margins),
        present,
        float(frequencies[best]) if best is not None else None,
        float(found[best]) if best is not None else None,
    )


def _moved(converter: Converter, members: list[Converter], frequency: float) -> Converter:
    return replace(converter, frequency=frequency) if any(converter is m for m in members) else converter
