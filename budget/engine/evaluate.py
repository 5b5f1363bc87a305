"""From a project to everything that follows from it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from budget.engine.checks import BEYOND_DATA, CheckRow, dc_checks, emission_checks, in_order, worst_status
from budget.engine.emission import Emissions, emissions
from budget.engine.holdup import HoldUp, hold_up
from budget.engine.inrush import inrush_checks
from budget.engine.model import LINES, Project
from budget.engine.operating import Operating, operating_points
from budget.engine.stability import Stability, stability, stability_checks
from budget.engine.transient import NEAR_OFF, NEAR_ON, NOT_FINISHED, Inrush, inrush


@dataclass(frozen=True, slots=True)
class Energy:
    """What a case takes from the source over its duration [s] at the nominal line; None without an operating point."""

    case: str
    duration: float
    energy_wh: float | None
    charge_ah: float | None


@dataclass(frozen=True, slots=True)
class Result:
    """All results of one project. ``warnings`` are codes: ("beyond data", converter id, case id)."""

    project: Project
    operating: Operating
    checks: tuple[CheckRow, ...]
    energy: tuple[Energy, ...]
    status: str  # the worst of "fail", "thin", "ok"
    warnings: tuple[tuple[str, ...], ...] = ()
    lines: tuple[int, ...] = (0, 1, 2)  # the lines that count, as indices of LINES
    emissions: Emissions | None = None  # None: not computed yet, as for the next two
    stability: Stability | None = None
    inrush: Inrush | None = None
    hold_up: tuple[HoldUp, ...] = ()


def evaluate(project: Project, lines: tuple[int, ...] = (0, 1, 2), previous: Result | None = None) -> Result:
    """Everything at once: the DC part, then emissions, stability, switch-on and surge.

    ``lines`` are the lines that count, as indices of ``LINES``; ``previous`` is a result to reuse what did not change.
    """
    return with_inrush(with_stability(with_emissions(evaluate_dc(project, lines), previous)))


def with_emissions(result: Result, previous: Result | None = None) -> Result:
    """The result with emissions, beats and their check rows.

    Of ``previous``, the result of any project, the spectra are used again where networks and clocks are the same.
    """
    project = result.project
    found = emissions(project, result.operating, result.lines, previous.emissions if previous else None)
    kept = (row for row in result.checks if not row.check.startswith("emission "))
    checks = in_order((*kept, *emission_checks(project, found)))
    return replace(result, checks=checks, status=worst_status(checks), emissions=found)


def carried(result: Result, previous: Result | None) -> Result:
    """The result with the check rows of stages to come taken from ``previous``, until these stages replace them.

    So a view does not lose them for a moment after every edit. Rows of subjects and limit sets that are gone stay out.
    """
    if previous is None:
        return result
    project = result.project
    known = {row.check for row in result.checks}
    subjects = {"bus", *(f.id for f in project.filters), *(c.id for c in project.converters)}
    asked = {f"emission {limit.name}" for limit in project.checked}
    kept = (
        row
        for row in previous.checks
        if row.check not in known
        and row.subject in subjects
        and (not row.check.startswith("emission ") or row.check in asked)
    )
    checks = in_order((*result.checks, *kept))
    return replace(result, checks=checks, status=worst_status(checks))


def with_stability(result: Result, cancelled: Callable[[], bool] | None = None) -> Result:
    """The result with the stability of every corner and its check rows.

    Raises ``transient.CancelledError`` when ``cancelled`` says so, which is asked now and then.
    """
    project = result.project
    found = stability(project, result.operating, cancelled=cancelled)
    kept = (row for row in result.checks if row.check not in ("stability", "impedance"))
    checks = in_order((*kept, *stability_checks(project, found, result.lines)))
    return replace(result, checks=checks, status=worst_status(checks), stability=found)


def with_inrush(
    result: Result,
    cancelled: Callable[[], bool] | None = None,
    progress: Callable[[float], None] | None = None,
) -> Result:
    """The result with switch-on and surge of every case and their check rows.

    Raises ``transient.CancelledError`` when ``cancelled`` says so; ``progress`` is told the share done.
    """
    project = result.project
    found = inrush(project, result.operating, cancelled=cancelled, progress=progress)
    rows = inrush_checks(project, found)
    names = {row.check for row in rows}
    checks = in_order((*(row for row in result.checks if row.check not in names), *rows))
    told = tuple(
        (code, who, run.case, run.event)
        for run in found.runs
        for code, who in run.remarks
        if code in (NEAR_ON, NEAR_OFF, NOT_FINISHED)
    )
    kept = tuple(code for code in result.warnings if code[0] not in (NEAR_ON, NEAR_OFF, NOT_FINISHED))
    warnings = (*kept, *told)
    return replace(result, checks=checks, status=worst_status(checks), inrush=found, warnings=warnings)


def evaluate_dc(project: Project, lines: tuple[int, ...] = (0, 1, 2)) -> Result:
    """Compute the operating points, the checks that rest on them, and the energy of each case.

    ``lines`` are the lines that count in the checks, as indices of ``LINES``.
    """
    operating = operating_points(project)
    checks = dc_checks(project, operating, lines)
    return Result(
        project=project,
        operating=operating,
        checks=checks,
        energy=_energy(project, operating),
        status=worst_status(checks),
        warnings=_warnings(project, operating),
        lines=lines,
        hold_up=hold_up(project, operating),
    )


def _energy(project: Project, operating: Operating) -> tuple[Energy, ...]:
    nominal = LINES.index("nominal")
    rows = []
    for k, case in enumerate(project.cases):
        if case.duration is None:
            continue
        if not operating.solved[k, nominal]:
            rows.append(Energy(case.id, case.duration, None, None))
            continue
        charge = float(operating.bus_current[k, nominal]) * case.duration / 3600.0
        rows.append(Energy(case.id, case.duration, charge * project.bus.nominal, charge))
    return tuple(rows)


def _warnings(project: Project, operating: Operating) -> tuple[tuple[str, ...], ...]:
    """By converter, then by case, both in project order."""
    found = operating.beyond_data.T.nonzero()
    return tuple(
        (BEYOND_DATA, project.converters[converter].id, project.cases[case].id)
        for converter, case in zip(*(axis.tolist() for axis in found), strict=True)
    )
