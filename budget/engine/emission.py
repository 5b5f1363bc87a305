"""Conducted emission of every corner against every limit set that the rules name.

Lines of the same clock and order add as phasors, differential and common mode each for themselves; a clock's level at
a line is |DM| + |CM|, the largest of the levels at the ends and the middle of the line's interval. Unrelated clocks add
in the receiver, see ``sweep``. All levels here are r.m.s. values on one line of the bus, in V or A as the limit set
says.

Levels are not kept for every corner: a view asks for those of the corner that it shows (``levels``, ``shares``).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from budget.engine import waveform
from budget.engine.beats import Beat, beats
from budget.engine.lines import MOST, Lines, Source, lines_of, places
from budget.engine.model import LINES, Converter, Project
from budget.engine.network import COMMON
from budget.engine.operating import Operating
from budget.engine.receiver import decibel
from budget.engine.sweep import Tuned, worst

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

NO_ROOM = "no room for the edges"

_AT_ONCE = 500_000  # values of a block of corners and lines
_BEYOND = 1e30  # V or A; stands for what no float holds


@dataclass(frozen=True, slots=True)
class Levels:
    """Lines (L,) of some corners (R,): r.m.s. values [V or A] where the sum of both modes is largest."""

    dm: Floats  # (R, L) measured lines included
    cm: Floats  # (R, L)
    level: Floats  # (R, L) their sum
    no_room: Bools  # (R, N) converters whose duty leaves no room for the edges


@dataclass(frozen=True, slots=True)
class Contributor:
    """A clock's largest visible line at the worst tuning; ``harmonic`` is None where it has no clock frequency."""

    clock: str
    converters: tuple[str, ...]
    harmonic: int | None
    level: float  # dB


@dataclass(frozen=True, slots=True)
class Emission:
    """One limit set in one corner; numbers are None without an operating point, a visible line or room for the edges.

    ``frequency`` [Hz] is where the receiver is tuned; levels and limit in dB in ``unit``, margins in dB.
    """

    limit: str
    unit: str
    basis: str
    case: str
    line: str
    combine: str
    solved: bool
    margin: float | None = None
    frequency: float | None = None
    level: float | None = None
    limit_level: float | None = None
    margin_arithmetic: float | None = None
    margin_rss: float | None = None
    contributors: tuple[Contributor, ...] = ()
    failures: tuple[tuple[str, str], ...] = ()  # ("no room for the edges", converter id)


@dataclass(frozen=True, slots=True)
class Emissions:
    """Emissions of a project: one ``Lines`` a limit set, one row a limit set, case and line."""

    spectra: tuple[Lines, ...]
    rows: tuple[Emission, ...]
    beats: tuple[Beat, ...]
    silent: tuple[str, ...] = ()  # converters that run in some case and have no description of differential noise
    noisy: bool = False  # whether any allocated converter has a description of noise
    unsolved: bool = field(default=False)  # whether a corner was left out for lack of an operating point


def emissions(
    project: Project, operating: Operating, lines: Sequence[int] = (0, 1, 2), previous: Emissions | None = None
) -> Emissions:
    """Check every limit set in every case and in the chosen ``lines`` (indices of ``LINES``).

    ``previous`` results lend their spectra where neither the network nor the clocks nor the limit set changed.
    """
    old = {spectrum.limit: spectrum for spectrum in previous.spectra} if previous else {}
    # what a project of absurd numbers brings out of range ends as a level far above any limit, see levels()
    with np.errstate(all="ignore"):
        spectra, left = [], MOST
        for limit in project.checked:
            spectra.append(lines_of(project, limit, old.get(limit), left))
            left -= spectra[-1].room
        rows = tuple(row for spectrum in spectra for row in _rows(project, operating, spectrum, lines))
    quiet = (not (unit.chop or unit.ripple or unit.spectrum) for unit in project.converters)
    ever: list[bool] = np.asarray(operating.running.any(axis=0)).tolist()
    homes: list[bool] = (operating.home >= 0).tolist()
    return Emissions(
        spectra=tuple(spectra),
        rows=rows,
        beats=beats(project),
        silent=tuple(u.id for u, q, runs in zip(project.converters, quiet, ever, strict=True) if q and runs),
        noisy=any(h and (places(u) or u.spectrum) for u, h in zip(project.converters, homes, strict=True)),
        unsolved=not all(row.solved for row in rows),
    )


def levels(project: Project, operating: Operating, lines: Lines, corners: Sequence[tuple[int, int]]) -> Levels:
    """Levels (R, L) [V or A] of all lines in solved corners, given as indices of cases and of ``LINES``."""
    case, line = _axes(corners)
    size, several = lines.points.shape
    rows = case.size
    dm, cm = np.zeros((rows, size)), np.zeros((rows, size))
    no_room = np.zeros((rows, len(project.converters)), dtype=np.bool_)
    step = max(1, _AT_ONCE // max(1, rows * several))
    with np.errstate(all="ignore"):
        for begin in range(0, size, step):
            end = min(begin + step, size)
            sums: dict[bool, Complex] = {}
            for source in lines.sources:
                if source.start >= end or source.stop <= begin:
                    continue
                a, b = max(source.start, begin), min(source.stop, end)
                value, fits = _drawn(project, operating, source, lines.order[a:b].astype(np.float64), case, line)
                no_room[:, source.converter] |= ~fits
                common = source.place == COMMON
                if common not in sums:
                    sums[common] = np.zeros((rows, end - begin, several), dtype=np.complex128)
                way = source.transfer[a - source.start : b - source.start]
                sums[common][:, a - begin : b - begin] += value[:, :, None] * way
            if sums:
                modes = [
                    np.abs(sums[c]) if c in sums else np.zeros((rows, end - begin, several)) for c in (False, True)
                ]
                at = (modes[0] + modes[1]).argmax(axis=2)[:, :, None]
                for total, mode in zip((dm, cm), modes, strict=True):
                    total[:, begin:end] = np.take_along_axis(mode, at, axis=2)[:, :, 0]
        for unit, where, amount in zip(
            lines.probes.converter.tolist(), lines.probes.line.tolist(), lines.measured.tolist(), strict=True
        ):
            dm[:, where] += amount * operating.running[case, unit]
        level = dm + cm
        if level.size and not level.max() <= _BEYOND:
            dm, cm, level = (np.minimum(np.nan_to_num(x, nan=_BEYOND), _BEYOND) for x in (dm, cm, level))
    return Levels(dm, cm, level, no_room)


def shares(project: Project, operating: Operating, lines: Lines, chosen: Indices, corner: tuple[int, int]) -> Floats:
    """What each converter by itself puts on the lines ``chosen`` (n,) in one corner, shape (n, converter N) [V or A].

    |DM| + |CM| where their sum is largest, plus measured lines; 0 in a corner without an operating point.
    """
    found = np.zeros((chosen.size, len(project.converters)))
    if not operating.solved[corner]:
        return found
    case, line = _axes([corner])
    own: dict[int, Floats] = {}
    with np.errstate(all="ignore"):
        for source in lines.sources:
            mine = np.flatnonzero((chosen >= source.start) & (chosen < source.stop))
            if not mine.size:
                continue
            value, _ = _drawn(project, operating, source, lines.order[chosen[mine]].astype(np.float64), case, line)
            total = own.setdefault(source.converter, np.zeros((chosen.size, lines.points.shape[1])))
            total[mine] += np.abs(value[0][:, None] * source.transfer[chosen[mine] - source.start])
    for unit, total in own.items():
        found[:, unit] = total.max(axis=1)
    for unit, where, amount in zip(lines.probes.converter, lines.probes.line, lines.measured, strict=True):
        found[chosen == where, unit] += amount * operating.running[corner[0], unit]
    return np.asarray(np.minimum(np.nan_to_num(found, nan=_BEYOND), _BEYOND), dtype=np.float64)


def harmonics(
    unit: Converter, place: str, order: Floats, nominal: float, voltage: Floats, current: Floats
) -> tuple[Complex, Bools]:
    """R.m.s. phasors (R, n) [A, or V for "common"] of a running converter, and whether its edges find room (R,).

    ``order`` (n,); ``voltage`` and ``current`` (R,) at its terminals [V, A]; its duty holds at ``nominal`` [V].
    """
    assert unit.frequency
    fits = np.ones(voltage.shape, dtype=np.bool_)
    ripple = unit.ripple
    if place != COMMON and unit.chop is None and ripple is not None:
        amplitude = np.full(voltage.shape, ripple.pp)
        if ripple.shape == "sine":
            shape = waveform.sine(order)[None, :]
        else:
            duty = waveform.duty_at(unit.duty_law, ripple.duty, nominal, voltage)
            fits = waveform.room(duty, 0.0, 0.0)
            shape = waveform.triangle(order, _once(duty))
    else:
        pulse = unit.cm if place == COMMON else unit.chop
        assert pulse is not None
        rise, fall = pulse.rise * unit.frequency, pulse.fall * unit.frequency
        duty = waveform.duty_at(unit.duty_law, pulse.duty, nominal, voltage)
        fits = waveform.room(duty, rise, fall)
        if place == COMMON:
            assert unit.cm is not None
            amplitude = np.full(voltage.shape, unit.cm.swing)
            shape, _ = waveform.trapezoid(order, _once(duty), rise, fall)
        else:
            assert unit.chop is not None
            shape, mean = waveform.trapezoid(order, _once(duty), rise, fall, unit.chop.ripple)
            fits &= mean > 0.0
            amplitude = current / np.where(mean > 0.0, mean, 1.0)
    shape = shape * (np.sqrt(2.0) * waveform.delay(order, unit.phase))
    return amplitude[:, None] * shape, fits


def _once(duty: Floats) -> Floats:
    """One duty for all corners where it is the same in all of them."""
    return duty[:1] if duty.size and (duty == duty[0]).all() else duty


def _axes(corners: Sequence[tuple[int, int]]) -> tuple[Indices, Indices]:
    pairs = np.array(corners, dtype=np.intp).reshape(-1, 2)
    return pairs[:, 0], pairs[:, 1]


def _drawn(
    project: Project, operating: Operating, source: Source, order: Floats, case: Indices, line: Indices
) -> tuple[Complex, Bools]:
    """Phasors (R, n) of a source in the corners, 0 where its converter is off, and whether its edges find room (R,)."""
    k = source.converter
    voltage, current = operating.voltage[case, line, k], operating.current[case, line, k]
    value, fits = harmonics(project.converters[k], source.place, order, project.bus.nominal, voltage, current)
    running = operating.running[case, k]
    if not running.all():
        value = value * running[:, None]
    return value, fits | ~running


def _rows(project: Project, operating: Operating, lines: Lines, chosen: Sequence[int]) -> list[Emission]:
    corners = [(c, k) for c in range(len(project.cases)) for k in chosen]
    solved = [corner for corner in corners if operating.solved[corner]]
    done: dict[tuple[int, int], Emission] = {}
    step = max(1, _AT_ONCE // max(1, lines.points.size, lines.sweep.slot.size))
    for begin in range(0, len(solved), step):
        some = solved[begin : begin + step]
        found = levels(project, operating, lines, some)
        both = worst(lines.sweep, found.level)
        for row, corner in enumerate(some):
            done[corner] = _row(project, operating, lines, corner, found, row, both[0][row], both[1][row])
    return [done.get(corner) or _empty(project, lines, corner, solved=False) for corner in corners]


def _empty(
    project: Project, lines: Lines, corner: tuple[int, int], solved: bool, failed: Indices | None = None
) -> Emission:
    limit = lines.limit
    return Emission(
        limit=limit.name,
        unit=limit.unit,
        basis=limit.basis,
        case=project.cases[corner[0]].id,
        line=LINES[corner[1]],
        combine=project.rules.combine,
        solved=solved,
        failures=tuple((NO_ROOM, project.converters[k].id) for k in failed.tolist()) if failed is not None else (),
    )


def _row(
    project: Project,
    operating: Operating,
    lines: Lines,
    corner: tuple[int, int],
    found: Levels,
    row: int,
    arithmetic: Tuned | None,
    rss: Tuned | None,
) -> Emission:
    failed = np.flatnonzero(found.no_room[row])
    checked = rss if project.rules.combine == "rss" else arithmetic
    if failed.size or checked is None or arithmetic is None or rss is None:
        return _empty(project, lines, corner, True, failed)
    limit = lines.limit
    return Emission(
        limit=limit.name,
        unit=limit.unit,
        basis=limit.basis,
        case=project.cases[corner[0]].id,
        line=LINES[corner[1]],
        combine=project.rules.combine,
        solved=True,
        margin=checked.margin,
        frequency=checked.frequency,
        level=checked.limit - checked.margin,
        limit_level=checked.limit,
        margin_arithmetic=arithmetic.margin,
        margin_rss=rss.margin,
        contributors=_contributors(project, operating, lines, corner[0], found.level[row], checked),
    )


def _contributors(
    project: Project, operating: Operating, lines: Lines, case: int, level: Floats, tuned: Tuned
) -> tuple[Contributor, ...]:
    """The clocks seen at the worst tuning, largest first."""
    sweep = lines.sweep
    seen = np.flatnonzero((sweep.start <= tuned.frequency) & (sweep.end >= tuned.frequency) & (level > 0.0))
    seen = seen[np.lexsort((lines.order[seen], -level[seen]))]
    _, first = np.unique(lines.clock[seen], return_index=True)
    found = []
    for k in seen[np.sort(first)].tolist():
        clock = lines.clocks[int(lines.clock[k])]
        running = [m for m in clock.members if operating.running[case, m]]
        units = [project.converters[m] for m in running]
        ids = tuple(u.id for u in units if places(u) or u.spectrum)
        found.append(Contributor(clock.name, ids, int(lines.order[k]) or None, decibel(float(level[k]))))
    return tuple(found)
