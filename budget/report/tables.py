"""A result as rows: the JSON of the contract, and the tables that text, markdown and CSV share."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from budget.engine.checks import CheckRow
from budget.engine.evaluate import Result
from budget.engine.model import LINES
from budget.engine.operating import allowed_current
from budget.report import words

FORMAT = 1


def as_json(result: Result, warnings: Sequence[str]) -> dict[str, Any]:
    """The result in the shape of the contract's section 3; parts still to come are empty lists."""
    return {
        "format": FORMAT,
        "title": result.project.title,
        "status": result.status,
        "checks": [check_row(row) for row in result.checks],
        "operating": operating(result),
        "emissions": [],
        "beats": [],
        "inrush": [],
        "stability": [],
        "energy": [
            {
                "case": e.case,
                "duration": e.duration,
                "energy_wh": _number(e.energy_wh),
                "charge_ah": _number(e.charge_ah),
            }
            for e in result.energy
        ],
        "warnings": list(warnings),
    }


def dumps(documents: dict[str, Any] | list[dict[str, Any]]) -> str:
    """JSON text, ASCII throughout; a NaN would be a fault of ours and raises ValueError."""
    return json.dumps(documents, indent=1, allow_nan=False)


def check_row(row: CheckRow) -> dict[str, Any]:
    """One check as the contract names its parts; numbers that there are not are None."""
    return {
        "check": row.check,
        "subject": row.subject,
        "case": row.case,
        "line": row.line,
        "value": _number(row.value),
        "limit": _number(row.limit),
        "wanted": _number(row.wanted),
        "unit": row.unit,
        "margin": _number(row.margin),
        "margin_unit": row.margin_unit,
        "status": row.status,
        "note": words.note(row),
    }


def operating(result: Result) -> list[dict[str, Any]]:
    """One entry per case and line, with what flows where; a corner without a solution has no lists."""
    op, project = result.operating, result.project
    entries: list[dict[str, Any]] = []
    for c, case in enumerate(project.cases):
        for k in result.lines:
            entry: dict[str, Any] = {"case": case.id, "line": LINES[k], "solved": bool(op.solved[c, k])}
            if entry["solved"]:
                volts, amps = float(op.bus_voltage[c, k]), float(op.bus_current[c, k])
                entry["bus"] = {
                    "voltage": _number(volts),
                    "current": _number(amps),
                    "power": _number(volts * amps),
                }
                entry["filters"] = [
                    {"id": f.id, "current": _number(i), "output_voltage": _number(v), "loss": _number(p)}
                    for f, i, v, p in zip(
                        project.filters,
                        op.filter_current[c, k].tolist(),
                        op.filter_voltage[c, k].tolist(),
                        op.filter_loss[c, k].tolist(),
                        strict=True,
                    )
                ]
                entry["converters"] = [
                    {
                        "id": u.id,
                        "output_power": _number(po),
                        "input_power": _number(pi),
                        "current": _number(i),
                        "voltage": _number(v),
                        "loss": _number(p),
                    }
                    for u, po, pi, i, v, p in zip(
                        project.converters,
                        op.output_power[c].tolist(),
                        op.input_power[c].tolist(),
                        op.current[c, k].tolist(),
                        op.voltage[c, k].tolist(),
                        op.loss[c].tolist(),
                        strict=True,
                    )
                ]
            entries.append(entry)
    return entries


def _number(value: float | None) -> float | None:
    """JSON has neither nan (a voltage that is nowhere) nor inf (values past the largest float)."""
    return value if value is not None and math.isfinite(value) else None


CHECK_HEAD = ("status", "check", "subject", "value", "limit", "wanted", "margin", "corner", "note")


def check_table(rows: Iterable[CheckRow]) -> list[tuple[str, ...]]:
    """The checks from worst to best as text."""
    return [
        (
            row.status,
            row.check,
            row.subject,
            words.show(row.value, row.unit),
            words.show(row.limit, row.unit),
            words.show(row.wanted, row.unit),
            words.margin(row),
            words.corner(row),
            words.note(row),
        )
        for row in words.by_severity(rows)
    ]


FLOW_HEAD = ("", "output", "input", "current", "of allowed", "terminals", "heat")


def flow_table(result: Result) -> list[tuple[str, ...]]:
    """Bus, filters and converters with the largest current, power and heat and the lowest voltage of any corner."""
    op, project = result.operating, result.project
    lines = list(result.lines)
    solved = op.solved[:, lines]
    if not solved.any():
        return []

    def most(values: Any) -> float:
        return float(np.max(values[:, lines][solved]))

    def least(values: Any) -> float:
        return float(np.min(values[:, lines][solved]))

    allowed = allowed_current(project)
    share = most(op.bus_current) / project.bus.rating if project.bus.rating else None
    rows: list[tuple[str, ...]] = [
        (
            f"bus {words.clean(project.bus.name)}".strip(),
            "",
            words.show(most(op.bus_voltage * op.bus_current), "W"),
            words.show(most(op.bus_current), "A"),
            words.share(share) if share is not None else "",
            words.show(least(op.bus_voltage), "V"),
            words.show(most(op.bus_loss), "W"),
        )
    ]

    def converter(n: int) -> tuple[str, ...]:
        unit = project.converters[n]
        placed = op.home[n] >= 0
        return (
            f"  {unit.id} {words.clean(unit.name)}".rstrip(),
            words.show(float(np.max(op.output_power[:, n])), "W"),
            words.show(float(np.max(op.input_power[:, n])), "W"),
            words.show(most(op.current[:, :, n]), "A"),
            "",
            words.show(least(op.voltage[:, :, n]), "V") if placed else "",
            words.show(float(np.max(op.loss[:, n])), "W"),
        )

    for f, part in enumerate(project.filters):
        amps = most(op.filter_current[:, :, f])
        limit = float(allowed[f])
        rows.append(
            (
                f"{part.id} {words.clean(part.name)}".rstrip(),
                "",
                words.show(most(op.filter_current[:, :, f] * op.filter_voltage[:, :, f]), "W"),
                words.show(amps, "A"),
                words.share(amps / limit) if limit > 0 and math.isfinite(limit) else "",
                words.show(least(op.filter_voltage[:, :, f]), "V"),
                words.show(most(op.filter_loss[:, :, f]), "W"),
            )
        )
        rows += [converter(n) for n in np.nonzero(op.home == f)[0].tolist()]
    loose = np.nonzero(op.home < 0)[0].tolist()
    if loose:
        rows.append(("not allocated", *[""] * 6))
        rows += [converter(n) for n in loose]
    return rows


ENERGY_HEAD = ("case", "duration", "energy", "charge")


def energy_table(result: Result) -> list[tuple[str, ...]]:
    """What each case with a duration takes from the source."""
    return [
        (
            e.case,
            words.duration(e.duration),
            words.amount(e.energy_wh, "Wh") if e.energy_wh is not None else "no operating point",
            words.amount(e.charge_ah, "Ah") if e.charge_ah is not None else "",
        )
        for e in result.energy
    ]


CSV_HEAD = (
    "check",
    "subject",
    "case",
    "line",
    "value",
    "limit",
    "wanted",
    "unit",
    "margin",
    "margin_unit",
    "status",
    "note",
)


def as_csv(named: Sequence[tuple[str, Result]]) -> str:
    """Every check of every file, one a line, with plain SI numbers."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(("file", *CSV_HEAD))
    for name, result in named:
        for row in result.checks:
            cells = check_row(row)
            writer.writerow((words.clean(name), *(cells[key] for key in CSV_HEAD)))
    return out.getvalue()
