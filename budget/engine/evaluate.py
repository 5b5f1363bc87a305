"""From a project to everything that follows from it."""

from __future__ import annotations

from dataclasses import dataclass

from budget.engine.checks import BEYOND_DATA, CheckRow, dc_checks, worst_status
from budget.engine.model import LINES, Project
from budget.engine.operating import Operating, operating_points


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


def evaluate(project: Project, lines: tuple[int, ...] = (0, 1, 2)) -> Result:
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
