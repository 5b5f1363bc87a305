"""Stability of the bus for every case and line: damping, the factor to instability, and the impedance rule.

Damping and the margin come from the eigenvalues of the network closed by the converters' negative conductances (see
``loop`` and ``margin``), with unsaturated inductors. The impedance of each filter against that of its converters is
Middlebrook's rule of design (IEEE IAS annual meeting, 1976): sufficient where it holds, and not necessary.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.cancel import CancelledError
from budget.engine.checks import LEFT_OUT, NO_POINT, CheckRow
from budget.engine.loop import Loop, each_spectrum, least_damped, open_loop
from budget.engine.margin import smallest_factors
from budget.engine.model import LINES, Branch, Converter, Ladder, Project
from budget.engine.operating import Operating
from budget.engine.statespace import StateSpace, state_space

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]

BAND = (10.0, 1e6)  # Hz, where the impedances are compared
_ZOOMS = 12  # of a factor of 8 each
TABLE_FILTER = "known by a table only"
TABLES_LEFT_OUT = "table filters left out"
NOT_RUNNING = "no converter runs behind it"
NO_IMPEDANCE = "no source impedance"
ALWAYS_UNSTABLE = "unstable for any load"
UNDAMPED = "undamped resonance"


@dataclass(frozen=True, slots=True)
class Stability:
    """Axes: case (C), line (3), filter (F) of the project. nan where a corner has no operating point.

    ``damping`` and ``frequency`` are nan for a network without a state; ``margin_db`` is inf if no factor up to 10^6
    makes the bus unstable, and -inf if any factor does.
    """

    solved: Bools  # (C, 3) as in Operating
    stable: Bools  # (C, 3) False where not solved
    damping: Floats  # (C, 3) smallest -Re/|.| of the eigenvalues, a ratio
    frequency: Floats  # (C, 3) Hz, |.|/2pi of that eigenvalue
    margin_db: Floats  # (C, 3) dB
    impedance_db: Floats  # (C, 3, F) dB, nan: no converter runs behind it, or a table; -inf: undamped
    peak: Floats  # (F,) ohm, the greatest source impedance at a filter's output from 10 Hz to 1 MHz; nan for a table
    peak_frequency: Floats  # (F,) Hz


def stability(
    project: Project,
    operating: Operating,
    network: StateSpace | None = None,
    cancelled: Callable[[], bool] | None = None,
) -> Stability:
    """Everything of this module; ``network`` is the project's own ``state_space``, made here if not given.

    Raises :class:`CancelledError` when ``cancelled`` says so, which is asked now and then.
    """

    def ask() -> None:
        if cancelled is not None and cancelled():
            raise CancelledError

    ask()
    network = state_space(project) if network is None else network
    loop = open_loop(project, network)
    solved = operating.solved
    corners = np.flatnonzero(solved)
    g = conductances(operating, network)[corners]
    shape = solved.shape
    damping, frequency, margin = (
        np.full(solved.size, np.nan),
        np.full(solved.size, np.nan),
        np.full(solved.size, np.nan),
    )
    stable = np.zeros(solved.size, dtype=np.bool_)
    different, which = np.unique(g, axis=0, return_inverse=True)
    which = which.reshape(-1)
    if corners.size:
        least = np.full((len(different), 2), np.nan)
        for row, matrix, values in each_spectrum(loop, different):
            ask()
            least[row] = least_damped(matrix, values)
        factors = smallest_factors(loop, different, ask)
        with np.errstate(divide="ignore"):
            levels = 20.0 * np.log10(factors)
        damping[corners], frequency[corners] = least[which, 0], least[which, 1]
        stable[corners] = ~(least[which, 0] < 0.0) & (factors[which] > 0.0)
        margin[corners] = levels[which]
    peak, peak_frequency = source_peaks(project, loop)
    return Stability(
        solved=solved,
        stable=stable.reshape(shape),
        damping=damping.reshape(shape),
        frequency=frequency.reshape(shape),
        margin_db=margin.reshape(shape),
        impedance_db=_impedance_db(operating, peak),
        peak=peak,
        peak_frequency=peak_frequency,
    )


def conductances(operating: Operating, network: StateSpace) -> Floats:
    """i/v [S] of each running converter of the network, shape (Q, N), Q the corners; 0 for others, nan if unsolved."""
    chosen = network.converters
    running = operating.running[:, None, chosen]
    i, v = operating.current[:, :, chosen], operating.voltage[:, :, chosen]
    g: Floats = np.where(running, i / v, 0.0)
    return g.reshape(operating.solved.size, chosen.size)


def _impedance_db(operating: Operating, peak: Floats) -> Floats:
    """Load impedance over the greatest source impedance ``peak`` (F,) [ohm], shape (C, 3, F) in dB."""
    filters = peak.size
    behind = operating.home[None, :] == np.arange(filters)[:, None]  # (F, N)
    power = np.where(operating.running, operating.input_power, 0.0) @ behind.T.astype(np.float64)  # (C, F)
    usable = (power > 0.0) & (peak > 0.0)
    load = operating.filter_voltage**2 / np.where(usable, power, 1.0)[:, None, :]
    ratio = np.where(usable[:, None, :], load / np.where(usable, peak, 1.0)[:, None, :], np.nan)
    with np.errstate(divide="ignore"):
        return np.asarray(20.0 * np.log10(ratio))


# --- source impedance -----------------------------------------------------------------------------------------------


def source_peaks(project: Project, loop: Loop) -> tuple[Floats, Floats]:
    """Greatest source impedance at each filter's output from 10 Hz to 1 MHz [ohm], and its frequency [Hz], (F,) each.

    Looked for in steps that suit the network's own resonances, then narrowed down at every peak that may be the
    highest. nan for a filter that is known by a table only.
    """
    w = _band(np.linalg.eigvals(loop.A).astype(np.complex128) if loop.A.size else np.zeros(0, dtype=np.complex128))
    peak, at = np.full(len(project.filters), np.nan), np.full(len(project.filters), np.nan)
    coarse = source_impedances(project, w)
    for k, part in enumerate(project.filters):
        if part.attenuation:
            continue
        size = np.abs(coarse[k])
        best = int(size.argmax())
        peak[k], at[k] = size[best], w[best]
        top = np.flatnonzero((size[1:-1] >= size[:-2]) & (size[1:-1] >= size[2:]) & (size[1:-1] > 0.5 * size[best])) + 1
        top = top[np.argsort(-size[top])][:24]
        below, above = w[top - 1], w[top + 1]
        for _ in range(_ZOOMS if top.size else 0):
            grid = below[:, None] + (above - below)[:, None] * np.linspace(0.0, 1.0, 17)
            fine = np.abs(source_impedances(project, grid.ravel(), k)[0]).reshape(grid.shape)
            rows, place = np.arange(top.size), fine.argmax(axis=1)
            highest = int(fine[rows, place].argmax())
            if fine[highest, place[highest]] > peak[k]:
                peak[k], at[k] = fine[highest, place[highest]], grid[highest, place[highest]]
            beside = np.clip(place[:, None] + np.array([-1, 1]), 0, 16)
            flatness = fine[rows[:, None], beside].min(axis=1) / fine[rows, place]
            if flatness.min() > 1.0 - 1e-6:
                break
            below, above = grid[rows, beside[:, 0]], grid[rows, beside[:, 1]]
        if top.size and flatness[highest] < 0.99:
            peak[k] = np.inf  # a resonance without loss
    return peak, at / (2.0 * np.pi)


def _band(poles: Complex) -> Floats:
    """Angular frequencies (W,) [rad/s] over the band, close together near the ``poles`` (K,) [rad/s]."""
    low, high = 2.0 * np.pi * BAND[0], 2.0 * np.pi * BAND[1]
    poles = poles[poles.imag >= 0.0]
    width = np.maximum(-poles.real, 1e-12 * np.abs(poles))
    walked = [low]
    while walked[-1] < high and len(walked) < 20_000:
        w = walked[-1]
        nearest = np.sqrt(((w - poles.imag) ** 2 + width**2).min()) if poles.size else np.inf
        walked.append(w + min(0.25 * nearest, 0.3 * w))
    walked[-1] = high
    return np.array(walked)


def source_impedances(project: Project, w: Floats, only: int | None = None) -> Complex:
    """Impedance of the network at each filter's output, without any converter's conductance [ohm], shape (F, W).

    ``w`` (W,) are angular frequencies [rad/s] above zero. With ``only``, the index of a filter, F is 1. Rows of table
    filters are nan. Every ladder and lead stays connected, with the elements that ``statespace`` keeps.
    """
    s = np.asarray(1j * w, dtype=np.complex128)
    names = {part.id: k for k, part in enumerate(project.filters) if not part.attenuation}
    names.pop("", None)
    behind: dict[int, Complex] = {}
    for converter in project.converters:
        home = names.get(converter.filter)
        if home is not None:
            behind[home] = behind.get(home, np.zeros(w.size, dtype=np.complex128)) + _inward(converter, s)
    empty: Complex = np.zeros(w.size, dtype=np.complex128)
    into = {k: _seen(project.filters[k].dm, s, behind.get(k, empty)) for k in names.values()}
    feed = np.asarray(project.bus.resistance + s * project.bus.inductance, dtype=np.complex128)
    rows = range(len(project.filters)) if only is None else (only,)
    out = np.full((len(rows), w.size), complex(np.nan))
    for row, k in enumerate(rows):
        if project.filters[k].attenuation:
            continue
        others = empty
        for other, y in into.items():
            if other != k:
                others = others + y
        z = feed / _one_plus(feed * others)
        for b in project.filters[k].dm:
            z = z + _series(b, s) if b.place == "series" else z / _one_plus(z * _shunt(b, s))
        out[row] = z / _one_plus(z * behind.get(k, empty))
    return out


def _inward(converter: Converter, s: Complex) -> Complex:
    """Admittance of a converter's lead and input ladder [S] at ``s`` (W,) [rad/s], shape (W,)."""
    y = _seen(converter.input, s, np.zeros(s.size, dtype=np.complex128))
    return y / _one_plus((converter.lead.R + s * converter.lead.L) * y)


def _seen(ladder: Ladder, s: Complex, behind: Complex) -> Complex:
    """Admittance [S] seen from the bus side of a ladder at ``s`` (W,) [rad/s] with ``behind`` (W,) at its end."""
    y = behind
    for b in reversed(ladder):
        y = y / _one_plus(_series(b, s) * y) if b.place == "series" else y + _shunt(b, s)
    return y


def _one_plus(x: Complex) -> Complex:
    """1 + x (W,), a ratio; where a resonance without loss is met exactly, the rounding of 1 instead of 0."""
    total = 1.0 + x
    return np.where(total == 0.0, np.finfo(np.float64).eps, total)


def _series(b: Branch, s: Complex) -> Complex:
    """R + (sL || Rp) [ohm] at ``s`` (W,) [rad/s]."""
    z: Complex = s * b.L
    if b.Rp:
        z = z / (1.0 + z / b.Rp) if b.L else z + b.Rp
    return z + b.R


def _shunt(b: Branch, s: Complex) -> Complex:
    """1/(R + 1/sC) [S] at ``s`` (W,) [rad/s]."""
    c: Complex = s * (b.C or 0.0)
    return c / (1.0 + b.R * c)


# --- results --------------------------------------------------------------------------------------------------------

Row = dict[str, object]


def stability_rows(project: Project, found: Stability) -> list[Row]:
    """The part "stability" of the result as plain data: one row for each case and line; what has no value is None."""
    rows: list[Row] = []
    for c, case in enumerate(project.cases):
        for k, line in enumerate(LINES):
            solved = bool(found.solved[c, k])
            filters = [
                {"id": part.id, "impedance_db": _number(found.impedance_db[c, k, f])}
                for f, part in enumerate(project.filters if solved else ())
            ]
            rows.append(
                {
                    "case": case.id,
                    "line": line,
                    "stable": bool(found.stable[c, k]) if solved else None,
                    "damping": _number(found.damping[c, k]),
                    "frequency": _number(found.frequency[c, k]),
                    "margin_db": _number(found.margin_db[c, k]),
                    "filters": filters,
                }
            )
    return rows


def _number(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def stability_checks(project: Project, found: Stability, lines: tuple[int, ...] = (0, 1, 2)) -> tuple[CheckRow, ...]:
    """The rows ``stability`` (of the bus) and ``impedance`` (of each filter), each for its worst corner.

    ``lines`` are the lines that count, as indices of ``LINES``. An unstable corner is worse than any stable one.
    Remarks besides those of ``checks``: "table filters left out" (with what is behind them), "known by a table only",
    "no converter runs behind it", "no source impedance", "unstable for any load", "undamped resonance"
    (the source impedance has no greatest value).
    """
    chosen = np.zeros(found.solved.shape, dtype=np.bool_)
    chosen[:, list(lines)] = True
    return (_stability(project, found, chosen), *_impedance(project, found, chosen))


def _stability(project: Project, found: Stability, chosen: Bools) -> CheckRow:
    wanted = project.rules.stability_margin
    usable = found.solved & chosen
    tables = {part.id for part in project.filters if part.attenuation}
    remarks: tuple[str, ...] = ()
    if any(c.filter in tables for c in project.converters):
        remarks = (TABLES_LEFT_OUT,)
        if not any(c.filter and c.filter not in tables for c in project.converters):
            return _nothing("stability", "bus", wanted, 0.0, (*remarks,), ("filter.dm",))
    if not usable.any():
        return _nothing("stability", "bus", wanted, 0.0, (NO_POINT, *remarks))
    if (chosen & ~found.solved).any():
        remarks = (LEFT_OUT, *remarks)
    # Unstable corners first, by margin; a tie falls to the first corner.
    badness = np.where(usable, np.where(found.stable, 0.0, 1.0), -1.0).ravel()
    level = np.where(badness == badness.max(), found.margin_db.ravel(), np.inf)
    corner = int(level.argmin())
    if not np.isfinite(level[corner]) and level[corner] > 0.0:
        corner = int(badness.argmax())
    case, line = project.cases[corner // 3].id, LINES[corner % 3]
    margin = found.margin_db.ravel()[corner]
    stable = bool(found.stable.ravel()[corner])
    value = _number(margin)
    if margin == -np.inf:
        remarks = (*remarks, ALWAYS_UNSTABLE)
    status = "fail" if not stable or margin < 0.0 else "thin" if margin < wanted else "ok"
    unit = "" if value is None else "dB"
    return CheckRow("stability", "bus", case, line, value, 0.0, wanted, "dB", value, unit, status, remarks=remarks)


def _impedance(project: Project, found: Stability, chosen: Bools) -> Iterator[CheckRow]:
    wanted = project.rules.stability_margin
    for k, part in enumerate(project.filters):
        if part.attenuation:
            yield _nothing("impedance", part.id, wanted, None, (TABLE_FILTER,), ("filter.dm",))
            continue
        if not (found.solved & chosen).any():
            yield _nothing("impedance", part.id, wanted, None, (NO_POINT,))
            continue
        level = np.where(chosen & ~np.isnan(found.impedance_db[:, :, k]), found.impedance_db[:, :, k], np.inf).ravel()
        corner = int(level.argmin())
        if level[corner] == np.inf:
            reason = NOT_RUNNING if found.peak[k] > 0.0 else NO_IMPEDANCE
            yield _nothing("impedance", part.id, wanted, None, (reason,))
            continue
        remarks = (LEFT_OUT,) if (chosen & ~found.solved).any() else ()
        value = _number(level[corner])
        remarks = remarks if value is not None else (*remarks, UNDAMPED)
        status = "thin" if level[corner] < wanted else "ok"
        unit = "" if value is None else "dB"
        case, line = project.cases[corner // 3].id, LINES[corner % 3]
        yield CheckRow(
            "impedance", part.id, case, line, value, None, wanted, "dB", value, unit, status, remarks=remarks
        )


def _nothing(
    check: str,
    subject: str,
    wanted: float,
    limit: float | None,
    remarks: tuple[str, ...],
    missing: tuple[str, ...] = (),
) -> CheckRow:
    return CheckRow(check, subject, None, None, None, limit, wanted, "dB", None, "", "no data", missing, remarks)
