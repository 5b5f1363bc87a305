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
from budget.engine.emission import Contributor
from budget.engine.evaluate import Result
from budget.engine.model import LINES
from budget.engine.stability import stability_rows
from budget.engine.transient import as_json as as_json_runs
from budget.report import words
from budget.report.numbers import Number, numbers

FORMAT = 1


def as_json(result: Result, warnings: Sequence[str]) -> dict[str, Any]:
    """The result in the shape of the contract's section 3; parts still to come are empty lists."""
    return {
        "format": FORMAT,
        "title": result.project.title,
        "status": result.status,
        "checks": [check_row(row) for row in result.checks],
        "operating": operating(result),
        "emissions": emissions(result),
        "beats": beats(result),
        "inrush": as_json_runs(result.inrush) if result.inrush else [],
        "stability": stability(result),
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
        "hold_up": [{"id": h.id, "case": h.case, "capacitance": h.capacitance} for h in result.hold_up],
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


def emissions(result: Result) -> list[dict[str, Any]]:
    """One entry per limit set, case and line; no numbers where there is no operating point or nothing is seen."""
    return [
        {
            "limit": row.limit,
            "case": row.case,
            "line": row.line,
            "combine": row.combine,
            "margin": _number(row.margin),
            "frequency": _number(row.frequency),
            "level": _number(row.level),
            "limit_level": _number(row.limit_level),
            "margin_arithmetic": _number(row.margin_arithmetic),
            "margin_rss": _number(row.margin_rss),
            "basis": row.basis,
            "contributors": [
                {"clock": c.clock, "converters": list(c.converters), "harmonic": c.harmonic, "level": _number(c.level)}
                for c in row.contributors
            ],
        }
        for row in (result.emissions.rows if result.emissions else ())
    ]


def stability(result: Result) -> list[dict[str, Any]]:
    """One entry per case and chosen line; a corner without an operating point has no numbers."""
    if result.stability is None:
        return []
    chosen = {LINES[k] for k in result.lines}
    return [row for row in stability_rows(result.project, result.stability) if row["line"] in chosen]


def beats(result: Result) -> list[dict[str, Any]]:
    """Where harmonics of unrelated clocks may meet."""
    return [
        {"clocks": list(beat.clocks), "orders": list(beat.orders), "from": _number(beat.low), "to": _number(beat.high)}
        for beat in (result.emissions.beats if result.emissions else ())
    ]


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
    project = result.project
    found = numbers(result, None)
    if not found.bus:
        return []

    def row(name: str, values: dict[str, Number], allowed: float | None) -> tuple[str, ...]:
        def show(key: str, unit: str) -> str:
            return words.show(values[key].value, unit) if key in values else ""

        share = ""
        if allowed and "current" in values:
            share = f"{values['current'].value / allowed:.0%}".replace("%", " %")
        flows = (show("out", "W"), show("taken", "W"), show("current", "A"))
        return (name.rstrip(), *flows, share, show("voltage", "V"), show("heat", "W"))

    def units(members: list[int]) -> list[tuple[str, ...]]:
        names = ((n, project.converters[n]) for n in members)
        return [row(f"  {u.id} {words.clean(u.name)}", found.converters[n], None) for n, u in names]

    home = result.operating.home
    rows = [row(f"bus {words.clean(project.bus.name)}", found.bus, project.bus.rating)]
    for f, part in enumerate(project.filters):
        rows.append(row(f"{part.id} {words.clean(part.name)}", found.filters[f], found.allowed[f]))
        rows += units(np.nonzero(home == f)[0].tolist())
    loose = np.nonzero(home < 0)[0].tolist()
    if loose:
        rows += [("not allocated", *[""] * 6), *units(loose)]
    return rows


EMISSION_HEAD = ("limit set", "margin", "at", "level", "limit", "corner", "largest contributors", "basis")
_SHOWN = 3  # contributors of a row; the JSON has all


def emission_table(result: Result) -> list[tuple[str, ...]]:
    """Each limit set at the corner with the smallest margin, with what contributes most there."""
    if result.emissions is None:
        return []
    rows: list[tuple[str, ...]] = []
    for check in result.checks:
        if not check.check.startswith("emission ") or check.margin is None:
            continue
        row = next(
            r
            for r in result.emissions.rows
            if (f"emission {r.limit}", r.case, r.line) == (check.check, check.case, check.line)
        )
        rows.append(
            (
                words.clean(row.limit),
                words.margin(check),
                words.frequency(row.frequency),
                words.show(row.level, row.unit),
                words.show(row.limit_level, row.unit),
                words.corner(check),
                ", ".join(_contributor(c, row.unit) for c in row.contributors[:_SHOWN]),
                words.BASIS.get(row.basis, row.basis),
            )
        )
    return rows


def _contributor(part: Contributor, unit: str) -> str:
    order = f" x{part.harmonic}" if part.harmonic else ""
    return f"{words.clean(part.clock)}{order} {words.show(part.level, unit)}"


STABILITY_HEAD = ("corner", "state", "margin", "least damping", "at")


def stability_table(result: Result) -> list[tuple[str, ...]]:
    """The corner with the smallest margin, and its least damped mode."""
    found = result.stability
    if found is None or not found.solved[:, list(result.lines)].any():
        return []
    lines = list(result.lines)
    margins = np.where(found.solved, found.margin_db, np.inf)[:, lines]
    c, i = np.unravel_index(int(margins.argmin()), margins.shape)
    k = lines[int(i)]
    margin, damping, at = (float(x[c, k]) for x in (found.margin_db, found.damping, found.frequency))
    return [
        (
            words.clean(f"{result.project.cases[int(c)].id}, {LINES[k]} line"),
            "stable" if found.stable[c, k] else "UNSTABLE",
            words.stability_margin(margin),
            f"{damping:.3g}" if math.isfinite(damping) else "",
            words.frequency(at) if math.isfinite(at) else "",
        )
    ]


RUN_HEAD = ("switch-on and surge", "bus peak", "bus i2t", "largest filter peak", "highest terminals", "last start")


def run_table(result: Result) -> list[tuple[str, ...]]:
    """Each case and event with its peaks, and when the last converter starts."""
    rows: list[tuple[str, ...]] = []
    for run in result.inrush.runs if result.inrush else ():
        peaks = [(f.peak, f.id) for f in run.filters if f.peak is not None]
        volts = [(c.peak_voltage, c.id) for c in run.converters if c.peak_voltage is not None]
        starts = [c.runs_at for c in run.converters if c.runs_at is not None]
        rows.append(
            (
                words.clean(f"{run.case}, {run.event}"),
                words.show(run.bus_peak, "A"),
                words.show(run.bus_i2t, "A^2 s"),
                f"{words.show(max(peaks)[0], 'A')} {max(peaks)[1]}" if peaks else "",
                f"{words.show(max(volts)[0], 'V')} {max(volts)[1]}" if volts else "",
                words.seconds(max(starts)) if starts else "",
            )
        )
    return rows


HOLD_UP_HEAD = ("hold-up of", "case", "capacitance needed")


def hold_up_table(result: Result) -> list[tuple[str, ...]]:
    """What each converter that shall run on without the bus needs at its input."""
    return [
        (words.clean(h.id), words.clean(h.case), words.farads(h.capacitance) or "out of reach") for h in result.hold_up
    ]


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
            writer.writerow(words.cells((name, *(cells[key] for key in CSV_HEAD))))
    return out.getvalue()
