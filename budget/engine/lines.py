"""The spectral lines that a limit set can see: clocks, orders, intervals, and each source's way to the receiver.

All of it depends on networks, clocks, tolerances and the limit set alone, not on loads or voltages: it is computed once
for a network and used again until that changes (``same_network``).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Converter, LimitLine, Project
from budget.engine.network import COMMON, SWITCH, TERMINALS, Complex, Job, held, homes, transfers
from budget.engine.receiver import MICRO, band, bandwidth_at
from budget.engine.sweep import ROUNDING, Sweep, plan

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

# Bytes that the lines of all limit sets may take, with what is needed beside them while they are added up (measured); a
# 50 Hz clock up to 50 MHz with both modes and a tolerance, a million lines, takes all of it.
MOST = 440_000_000
_A_LINE, _AMONG_OTHERS, _A_TRANSFER = (
    330,
    160,
    16,
)  # a line, more if there are several clocks, and a way to the receiver


@dataclass(frozen=True, slots=True)
class Clock:
    """Converters in step, or one with a clock of its own; ``name`` is the clock's, or the converter's id."""

    name: str
    members: tuple[int, ...]  # converters that are allocated, in project order
    frequency: float | None
    tolerance: float


@dataclass(frozen=True, slots=True)
class Source:
    """Harmonics of one converter in one mode: lines ``start`` to ``stop``, transfers (lines, E) to the receiver."""

    converter: int
    place: str  # as in ``network.Job``
    start: int
    stop: int
    transfer: Complex  # (stop - start, E), see ``network.transfers``


@dataclass(frozen=True, slots=True)
class Probes:
    """Measured lines (M,) of converters: an r.m.s. current each, which adds to a line of its clock or is one itself."""

    converter: Indices  # (M,)
    line: Indices  # (M,) the line it adds to
    amps: Floats  # (M,) A
    points: Floats  # (M, 3) Hz, low end, middle and upper end of its interval


@dataclass(frozen=True, slots=True)
class Lines:
    """Every line of one limit set, by clock, then by order; arrays (L,), frequencies in Hz.

    A line lies anywhere from ``low`` to ``high``, and is evaluated at E frequencies: low end, middle and upper end, or
    the middle alone where no clock has a tolerance. ``order`` is 0 for a measured line without a clock frequency.
    """

    limit: LimitLine
    key: tuple[object, ...]
    clocks: tuple[Clock, ...]
    clock: Indices  # (L,) index of ``clocks``
    order: Indices  # (L,)
    frequency: Floats  # (L,) nominal
    low: Floats  # (L,)
    high: Floats  # (L,)
    bandwidth: Floats  # (L,) of the receiver at the nominal frequency
    points: Floats  # (L, E) where transfers are taken
    sources: tuple[Source, ...]
    probes: Probes
    measured: Floats  # (M,) largest level of each measured line over its interval, V or A
    sweep: Sweep
    held: tuple[str, ...]  # table filters used beyond the ends of their table
    too_many: bool = False  # more lines than can be added up; all arrays are empty then

    @property
    def room(self) -> int:
        """What they take of ``MOST``."""
        transfers = sum(source.transfer.size for source in self.sources)
        return _a_line(self.clocks) * self.frequency.size + _A_TRANSFER * transfers


def _a_line(found: tuple[Clock, ...]) -> int:
    return _A_LINE + (_AMONG_OTHERS if len(found) > 1 else 0)


def clocks(project: Project) -> tuple[Clock, ...]:
    """The clocks of all allocated converters, in project order of their first members."""
    members: dict[tuple[bool, str], list[int]] = {}
    for k, home in enumerate(homes(project)):
        if home >= 0:
            unit = project.converters[k]
            members.setdefault((bool(unit.clock), unit.clock or unit.id), []).append(k)
    found = []
    for (_, name), group in members.items():
        paced = next((project.converters[k] for k in group if project.converters[k].frequency), None)
        first = paced or project.converters[group[0]]
        found.append(Clock(name, tuple(group), first.frequency or None, first.frequency_tolerance))
    return tuple(found)


def places(unit: Converter) -> tuple[str, ...]:
    """The places (see ``network.Job``) at which a converter makes harmonics of its clock."""
    if not unit.frequency:
        return ()
    differential = (SWITCH,) if unit.chop else (TERMINALS,) if unit.ripple else ()
    return (*differential, COMMON) if unit.cm else differential


def network_key(project: Project, limit: LimitLine) -> tuple[object, ...]:
    """What the lines of a project depend on; equal keys mean that they can be used again."""
    return (
        limit,
        tuple((f.id, f.dm, f.cm, f.attenuation, f.isolation) for f in project.filters),
        tuple(
            (c.id, c.filter, c.lead, c.input, c.frequency, c.frequency_tolerance, c.clock, c.spectrum, places(c))
            + ((c.cm.capacitance, c.cm.shunt) if c.cm else ())
            for c in project.converters
        ),
    )


def lines_of(project: Project, limit: LimitLine, previous: Lines | None = None, most: int = MOST) -> Lines:
    """All lines of the project that the limit set can see; ``previous`` is returned where its network is the same.

    What would take more than ``most`` bytes has no lines and is ``too_many``.
    """
    key = network_key(project, limit)
    if previous is not None and previous.key == key and not previous.too_many and previous.room <= most:
        return previous
    found = clocks(project)
    middle = all(clock.tolerance == 0.0 for clock in found)
    spread = (0.0,) if middle else (-1.0, 0.0, 1.0)

    grids = []
    for clock in found:
        grid = _harmonics(project, clock, limit, most // _a_line(found))
        if grid is None:
            return _too_many(limit, key, found)
        each = len(spread) * sum(len(places(project.converters[k])) for k in clock.members)
        most -= grid.size * (_a_line(found) + _A_TRANSFER * each)
        if most < 0:
            return _too_many(limit, key, found)
        grids.append(grid)
    asked = [_measured(project, clock, grid, limit) for clock, grid in zip(found, grids, strict=True)]

    order, frequency, which, start = [], [], [], []
    count = 0
    for k, (clock, grid, lines) in enumerate(zip(found, grids, asked, strict=True)):
        own = [line for line in lines if line.order < 0]
        start.append(count)
        order += [grid, np.array([line.label for line in own], dtype=np.intp)]
        frequency += [grid * (clock.frequency or 0.0), np.array([line.frequency for line in own])]
        which.append(np.full(grid.size + len(own), k, dtype=np.intp))
        count += grid.size + len(own)
    clock_of = np.concatenate(which) if which else np.zeros(0, dtype=np.intp)
    nominal = np.concatenate(frequency) if frequency else np.zeros(0)
    tolerance = np.array([clock.tolerance for clock in found])[clock_of] if found else np.zeros(0)
    points = nominal[:, None] * (1.0 + tolerance[:, None] * np.array(spread))

    jobs = []
    for k, (clock, grid) in enumerate(zip(found, grids, strict=True)):
        for member in clock.members:
            jobs += [Job(member, place, start[k], start[k] + grid.size) for place in places(project.converters[member])]
    jobs = [job for job in jobs if job.stop > job.start]
    probes = _probes(found, asked, grids, start)
    ways, amount = _levels_of(project, limit, points, jobs, probes)
    bandwidth = bandwidth_at(limit, nominal)
    low, high = nominal * (1.0 - tolerance), nominal * (1.0 + tolerance)
    return Lines(
        limit=limit,
        key=key,
        clocks=found,
        clock=clock_of,
        order=np.concatenate(order) if order else np.zeros(0, dtype=np.intp),
        frequency=nominal,
        low=low,
        high=high,
        bandwidth=bandwidth,
        points=points,
        sources=tuple(Source(j.converter, j.place, j.start, j.stop, way) for j, way in zip(jobs, ways, strict=True)),
        probes=probes,
        measured=amount,
        sweep=plan(limit, clock_of, len(found), low - 0.5 * bandwidth, high + 0.5 * bandwidth),
        held=held(project, *_flat(points, jobs, probes)),
    )


def unfiltered(project: Project, lines: Lines) -> Lines:
    """The same lines with every converter straight on the set-up, without filters and neighbours (``bare``)."""
    jobs = [Job(s.converter, s.place, s.start, s.stop) for s in lines.sources]
    ways, amount = _levels_of(project, lines.limit, lines.points, jobs, lines.probes, alone=True)
    sources = tuple(
        Source(s.converter, s.place, s.start, s.stop, way) for s, way in zip(lines.sources, ways, strict=True)
    )
    return replace(lines, sources=sources, measured=amount)


def _harmonics(project: Project, clock: Clock, limit: LimitLine, most: int) -> Indices | None:
    """Orders of a clock whose interval, widened by half the bandwidth, reaches into the band; None: over ``most``."""
    if clock.frequency is None or not any(places(project.converters[k]) for k in clock.members):
        return np.zeros(0, dtype=np.intp)
    first, last = band(limit)
    widest = 0.5 * max((row[2] for row in limit.bandwidth), default=0.0)
    lowest, highest = clock.frequency * (1.0 - clock.tolerance), clock.frequency * (1.0 + clock.tolerance)
    begin, end = (first - widest) / highest, (last + widest) / lowest
    if not end - begin < most:
        return None
    order = np.arange(max(1, int(begin) - 1), int(end) + 2, dtype=np.intp)
    frequency: Floats = order * np.float64(clock.frequency)
    half = 0.5 * bandwidth_at(limit, frequency)
    above = (order * highest + half) * (1.0 + ROUNDING) >= first
    return order[above & ((order * lowest - half) * (1.0 - ROUNDING) <= last)]


@dataclass(frozen=True, slots=True)
class _Measured:
    converter: int
    frequency: float
    amps: float  # r.m.s.
    order: int  # the harmonic it is added to; -1 for a line of its own
    label: int  # the order by which a line of its own is called; 0: none


def _measured(project: Project, clock: Clock, grid: Indices, limit: LimitLine) -> list[_Measured]:
    """The measured lines of a clock: those that join one of its harmonics, and those that are lines of their own."""
    first, last = band(limit)
    present = set(grid.tolist()) if any(project.converters[k].spectrum for k in clock.members) else set()
    found = []
    for k in clock.members:
        for f, level in project.converters[k].spectrum:
            nearest = max(1, int(np.ceil(f / clock.frequency - 0.5))) if clock.frequency else 0
            amps = MICRO * 10.0 ** (min(level, 6000.0) / 20.0)  # within what a float holds
            if nearest in present:
                found.append(_Measured(k, f, amps, nearest, nearest))
                continue
            half = 0.5 * float(bandwidth_at(limit, np.array([f]))[0])
            above = (f * (1.0 + clock.tolerance) + half) * (1.0 + ROUNDING) >= first
            if above and (f * (1.0 - clock.tolerance) - half) * (1.0 - ROUNDING) <= last:
                found.append(_Measured(k, f, amps, -1, nearest))
    return found


def _probes(found: tuple[Clock, ...], asked: list[list[_Measured]], grids: list[Indices], start: list[int]) -> Probes:
    whose: list[int] = []
    where: list[int] = []
    amps: list[float] = []
    points: list[list[float]] = []
    for clock, lines, grid, begin in zip(found, asked, grids, start, strict=True):
        own = begin + grid.size
        for line in lines:
            whose.append(line.converter)
            amps.append(line.amps)
            points.append([line.frequency * (1.0 + clock.tolerance * side) for side in (-1.0, 0.0, 1.0)])
            where.append(own if line.order < 0 else begin + int(np.searchsorted(grid, line.order)))
            own += line.order < 0
    indices = np.array(whose, dtype=np.intp), np.array(where, dtype=np.intp)
    return Probes(*indices, np.array(amps, dtype=np.float64), np.array(points, dtype=np.float64).reshape(-1, 3))


def _levels_of(
    project: Project, limit: LimitLine, points: Floats, jobs: list[Job], probes: Probes, alone: bool = False
) -> tuple[list[Complex], Floats]:
    """Transfers (lines, E) of the jobs, whose range counts lines, and levels (M,) of the measured lines."""
    ways = transfers(project, limit, *_flat(points, jobs, probes), alone=alone)
    largest = [np.abs(way).max() for way in ways[len(jobs) :]]
    shaped = [way.reshape(-1, points.shape[1]) for way in ways[: len(jobs)]]
    return shaped, probes.amps * np.array(largest, dtype=np.float64)


def _flat(points: Floats, jobs: list[Job], probes: Probes) -> tuple[Floats, list[Job]]:
    """All frequencies in one array, those of the measured lines last, with a job for each source and measured line."""
    several, size = points.shape[1], points.size
    asked = [Job(j.converter, j.place, j.start * several, j.stop * several) for j in jobs]
    asked += [Job(k, TERMINALS, size + 3 * m, size + 3 * m + 3) for m, k in enumerate(probes.converter.tolist())]
    return np.concatenate((points.reshape(-1), probes.points.reshape(-1))), asked


def _too_many(limit: LimitLine, key: tuple[object, ...], found: tuple[Clock, ...]) -> Lines:
    none, no = np.zeros(0), np.zeros(0, dtype=np.intp)
    empty = plan(limit, no, len(found), none, none)
    probes = Probes(no, no, none, none.reshape(-1, 3))
    return Lines(limit, key, found, no, no, none, none, none, none, none[:, None], (), probes, none, empty, (), True)
