"""The checks that follow from the DC operating points alone: one row per check and subject, for its worst corner.

A row carries codes instead of sentences; the reports word them. ``missing`` names fields that were not entered, and
``remarks`` are:

- "not allocated": the converter has no filter, so there is nothing to check;
- "no operating point": not one corner of those that count has a solution;
- "unsolved corners left out": some have none, and the row speaks for the others;
- "never runs": every case switches the converter off;
- "beyond data": a case loads the converter above its last efficiency point, whose efficiency was held.

Rows of emissions have remarks of their own, some with ids after a colon ("without a noise description: CV5, CV7"):

- "no room for the edges": the duty of these converters leaves none in that corner, which is a failure without a number;
- "without a noise description": these run, and nothing says what differential noise they make;
- "no noise source": no converter behind a filter has one, so there is nothing to add up;
- "no line in the band": whatever makes noise makes none that the receiver would see;
- "table held beyond its ends": these filters are used beyond the ends of their attenuation table;
- "limit from memory": the points of the limit set were not read in the standard;
- "no receiver bandwidth": the limit line has no bandwidth rows, and lines are taken one by one;
- "too many lines": more than can be added up.

Where the limit was not entered the row still gives the worst value and its corner, with the status "no data".
A limit of zero (a rating derated to nothing) has no ratio: the margin is None, and any value above it fails. A value
within 1e-12 of a limit is at it, with a margin of 0, so that 1.1 V times 3 A does not overload a 3.3 W converter.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.emission import NO_ROOM, Emission, Emissions
from budget.engine.lines import Lines
from budget.engine.model import LINES, Project
from budget.engine.operating import ROUNDING, Operating, derating

NOT_ALLOCATED = "not allocated"
NO_POINT = "no operating point"
LEFT_OUT = "unsolved corners left out"
NEVER_RUNS = "never runs"
BEYOND_DATA = "beyond data"
SILENT = "without a noise description"
NO_SOURCE = "no noise source"
NO_LINE = "no line in the band"
TABLE_HELD = "table held beyond its ends"
FROM_MEMORY = "limit from memory"
NO_BANDWIDTH = "no receiver bandwidth"
TOO_MANY = "too many lines"

ORDER = (  # of the rows, by the first words of their checks
    "allocation",
    "operating point",
    "bus current",
    "filter current",
    "filter voltage",
    "converter load",
    "input low",
    "input high",
    "inrush peak",
    "inrush i2t",
    "bus inrush",
    "breaker i2t",
    "overshoot",
    "start",
    "emission",
    "stability",
    "impedance",
)
_RANK = {check: k for k, check in enumerate(ORDER)}
_DB = 1e-9  # dB; a level this close to a limit is at it


@dataclass(frozen=True, slots=True)
class CheckRow:
    """One check of one subject at its worst corner; ``value``, ``limit`` and ``wanted`` in the SI unit ``unit``."""

    check: str
    subject: str  # an id, or "bus"
    case: str | None
    line: str | None
    value: float | None
    limit: float | None
    wanted: float | None
    unit: str  # "A", "V", "W", "dBuV", "dBuA", ""
    margin: float | None
    margin_unit: str  # "ratio", "dB", or "" if there is none
    status: str  # "fail", "thin", "ok", "no data"
    missing: tuple[str, ...] = ()  # fields not entered, as "bus.rating"
    remarks: tuple[str, ...] = ()  # codes, see the module


def worst_status(rows: Iterable[CheckRow]) -> str:
    """The worst of "fail", "thin" and "ok"; rows without data do not count."""
    found = {row.status for row in rows}
    return "fail" if "fail" in found else "thin" if "thin" in found else "ok"


def in_order(rows: Iterable[CheckRow]) -> tuple[CheckRow, ...]:
    """The rows by check in the fixed order of ``ORDER``; rows of one check stay as they stand."""
    return tuple(sorted(rows, key=lambda row: _RANK["emission" if row.check.startswith("emission ") else row.check]))


def emission_checks(project: Project, found: Emissions) -> tuple[CheckRow, ...]:
    """One row for each limit set, at the corner with the smallest margin by the rules' ``combine``."""
    return tuple(_emission(project, found, spectrum) for spectrum in found.spectra)


def _emission(project: Project, found: Emissions, spectrum: Lines) -> CheckRow:
    limit = spectrum.limit
    rows = [row for row in found.rows if row.limit == limit.name]
    solved = [row for row in rows if row.solved]
    remarks = []
    if found.silent and found.noisy:
        remarks.append(f"{SILENT}: {', '.join(found.silent)}")
    if spectrum.held:
        remarks.append(f"{TABLE_HELD}: {', '.join(spectrum.held)}")
    if not limit.bandwidth:
        remarks.append(NO_BANDWIDTH)
    if limit.basis == "memory":
        remarks.append(FROM_MEMORY)

    def row(worst: Emission | None, status: str, first: str = "") -> CheckRow:
        told = (*((first,) if first else ()), *remarks)
        case, line = (worst.case, worst.line) if worst else (None, None)
        if worst is None or worst.margin is None or worst.limit_level is None:
            return CheckRow(
                f"emission {limit.name}", "bus", case, line, None, None, None, limit.unit, None, "", status, (), told
            )
        wanted = worst.limit_level - project.rules.emission_margin
        margin = 0.0 if abs(worst.margin) <= _DB else worst.margin
        return CheckRow(
            f"emission {limit.name}",
            "bus",
            case,
            line,
            worst.level,
            worst.limit_level,
            wanted,
            limit.unit,
            margin,
            "dB",
            status,
            (),
            told,
        )

    if spectrum.too_many:
        return row(None, "no data", TOO_MANY)
    if not found.noisy:
        return row(None, "no data", NO_SOURCE)
    if not solved:
        return row(None, "no data", NO_POINT)
    if len(solved) < len(rows):
        remarks.insert(0, LEFT_OUT)
    failed = next((r for r in solved if r.failures), None)
    if failed is not None:
        return row(failed, "fail", f"{NO_ROOM}: {', '.join(ident for _, ident in failed.failures)}")
    seen = [r for r in solved if r.margin is not None]
    if not seen:
        return row(None, "ok", NO_LINE)
    worst = min(seen, key=lambda r: r.margin if r.margin is not None else 0.0)
    assert worst.margin is not None
    status = "fail" if worst.margin < -_DB else "thin" if worst.margin < project.rules.emission_margin - _DB else "ok"
    return row(worst, status)


def dc_checks(project: Project, operating: Operating, lines: tuple[int, ...] = (0, 1, 2)) -> tuple[CheckRow, ...]:
    """All rows of this module, by check in a fixed order, then by subject in project order.

    ``lines`` are the lines that count, as indices of ``LINES``.
    """
    chosen = np.zeros((1, 3, 1), dtype=np.bool_)
    chosen[:, list(lines)] = True
    return (
        *_allocation(project, operating),
        _operating_point(project, operating, chosen),
        _bus_current(project, operating, chosen),
        *_filter_current(project, operating, chosen),
        *_filter_voltage(project),
        *_converter_load(project, operating),
        *_input_voltage(project, operating, chosen, lower=True),
        *_input_voltage(project, operating, chosen, lower=False),
    )


def _allocation(project: Project, operating: Operating) -> Iterator[CheckRow]:
    for converter, home in zip(project.converters, operating.home.tolist(), strict=True):
        status = "fail" if home < 0 else "ok"
        yield CheckRow("allocation", converter.id, None, None, None, None, None, "", None, "", status)


def _operating_point(project: Project, operating: Operating, chosen: NDArray[np.bool_]) -> CheckRow:
    unsolved = np.flatnonzero(~operating.solved & chosen[:, :, 0])
    case, line = _corner(project, int(unsolved[0])) if unsolved.size else (None, None)
    status = "fail" if unsolved.size else "ok"
    return CheckRow("operating point", "bus", case, line, None, None, None, "", None, "", status)


def _bus_current(project: Project, operating: Operating, chosen: NDArray[np.bool_]) -> CheckRow:
    rating = project.bus.rating
    worst = _Worst(operating.bus_current[:, :, None], operating.solved[:, :, None], chosen, lower=False)
    return worst.row(0, project, "bus current", "bus", "A", rating, "bus.rating", project.rules.bus_load)


def _filter_current(project: Project, operating: Operating, chosen: NDArray[np.bool_]) -> Iterator[CheckRow]:
    worst = _Worst(operating.filter_current, operating.solved[:, :, None], chosen, lower=False)
    degrees, share = project.bus.temperature, project.rules.filter_load
    for k, part in enumerate(project.filters):
        limit = part.rated_current
        if limit is not None:
            limit *= derating(degrees, part.derate_from, part.derate_to)
        yield worst.row(k, project, "filter current", part.id, "A", limit, "filter.rated_current", share)


def _filter_voltage(project: Project) -> Iterator[CheckRow]:
    for part in project.filters:
        yield _judge(
            "filter voltage", part.id, None, "high", project.bus.high, "V", part.max_voltage, "filter.max_voltage"
        )


def _converter_load(project: Project, operating: Operating) -> Iterator[CheckRow]:
    """Output power does not depend on the line, and is known whether or not the bus can carry the case."""
    worst = operating.output_power.argmax(axis=0)
    values = operating.output_power.max(axis=0).tolist()
    beyond = set(np.flatnonzero(operating.beyond_data.any(axis=0)).tolist())
    degrees, share = project.bus.temperature, project.rules.converter_load
    for k, (converter, home, case) in enumerate(
        zip(project.converters, operating.home.tolist(), worst.tolist(), strict=True)
    ):
        limit = converter.rated_power * derating(degrees, converter.derate_from, converter.derate_to)
        if home < 0:
            yield _nothing("converter load", converter.id, "W", limit, share, NOT_ALLOCATED)
            continue
        remarks = (BEYOND_DATA,) if k in beyond else ()
        yield _judge(
            "converter load",
            converter.id,
            project.cases[case].id,
            None,
            values[k],
            "W",
            limit,
            "converter.rated_power",
            share,
            remarks,
        )


def _input_voltage(
    project: Project, operating: Operating, chosen: NDArray[np.bool_], lower: bool
) -> Iterator[CheckRow]:
    """The lower limit counts where the converter runs; the upper one always, for its terminals see the voltage."""
    check, field = ("input low", "converter.min_input") if lower else ("input high", "converter.max_input")
    counted = np.ones_like(operating.running) if not lower else operating.running
    worst = _Worst(operating.voltage, operating.solved[:, :, None], chosen & counted[:, None, :], lower)
    runs = set(np.flatnonzero(counted.any(axis=0)).tolist())
    for k, (converter, home) in enumerate(zip(project.converters, operating.home.tolist(), strict=True)):
        limit = converter.min_input if lower else converter.max_input
        if home < 0:
            yield _nothing(check, converter.id, "V", limit, None, NOT_ALLOCATED)
        elif k not in runs:
            yield _nothing(check, converter.id, "V", limit, None, NEVER_RUNS)
        else:
            yield worst.row(k, project, check, converter.id, "V", limit, field)


class _Worst:
    """The worst corner of every subject: the greatest value, or the least for a lower limit; the first corner on a tie.

    The limit of a row is the same in all corners, so the worst value has the smallest margin, also where the limit is
    zero or missing.
    """

    __slots__ = ("best", "corner", "left_out", "lower")

    def __init__(
        self,
        values: NDArray[np.float64],  # (C, 3, K)
        solved: NDArray[np.bool_],  # (C, 3, 1)
        counted: NDArray[np.bool_],  # (C or 1, 3, K or 1)
        lower: bool,
    ) -> None:
        usable = solved & counted
        idle = np.inf if lower else -np.inf
        corners = np.where(usable, values, idle).reshape(solved.size, values.shape[2])
        at = corners.argmin(axis=0) if lower else corners.argmax(axis=0)
        best = corners.min(axis=0) if lower else corners.max(axis=0)
        unsolved = counted & ~solved
        self.lower = lower
        self.corner: list[int] = at.tolist()
        self.best: list[float] = best.tolist()
        self.left_out: list[bool] = np.broadcast_to(unsolved.any(axis=(0, 1)), best.shape).tolist()

    def row(
        self,
        k: int,
        project: Project,
        check: str,
        subject: str,
        unit: str,
        limit: float | None,
        field: str,
        share: float | None = None,
    ) -> CheckRow:
        value = self.best[k]
        if value in (np.inf, -np.inf):
            return _nothing(check, subject, unit, limit, share, NO_POINT)
        case, line = _corner(project, self.corner[k])
        remarks = (LEFT_OUT,) if self.left_out[k] else ()
        return _judge(check, subject, case, line, value, unit, limit, field, share, remarks, self.lower)


def _corner(project: Project, flat: int) -> tuple[str, str]:
    return project.cases[flat // 3].id, LINES[flat % 3]


def _judge(
    check: str,
    subject: str,
    case: str | None,
    line: str | None,
    value: float,
    unit: str,
    limit: float | None,
    field: str,
    share: float | None = None,
    remarks: tuple[str, ...] = (),
    lower: bool = False,
) -> CheckRow:
    """Compare one value with its limit and with the wanted ``share`` of it."""
    if limit is None:
        missing = (field,)
        return CheckRow(check, subject, case, line, value, None, None, unit, None, "", "no data", missing, remarks)
    wanted = None if share is None else limit * share
    room = _room(limit, value, lower)
    margin = room / limit if limit else None
    if room < 0.0:
        status = "fail"
    elif wanted is not None and _room(wanted, value, lower) < 0.0:
        status = "thin"
    else:
        status = "ok"
    margin_unit = "" if margin is None else "ratio"
    return CheckRow(
        check, subject, case, line, value, limit, wanted, unit, margin, margin_unit, status, remarks=remarks
    )


def _room(limit: float, value: float, lower: bool) -> float:
    room = value - limit if lower else limit - value
    return 0.0 if abs(room) <= ROUNDING * abs(limit) else room


def _nothing(check: str, subject: str, unit: str, limit: float | None, share: float | None, remark: str) -> CheckRow:
    wanted = None if limit is None or share is None else limit * share
    return CheckRow(check, subject, None, None, None, limit, wanted, unit, None, "", "no data", remarks=(remark,))
