"""A reach and a sweep for people and programs: text, JSON, CSV."""

from __future__ import annotations

import csv
import io
import math
from typing import Any

from budget import quantity
from budget.report import tables, words
from budget.report.text import columns
from budget.study.reach import Reach, Side
from budget.study.sweep import Sweep

FORMAT = 1


def reach_text(found: Reach) -> str:
    """How far the cell can go, in two sentences, and the margin on the way as a table."""
    lines = [words.clean(f"{found.cell.text} is {found.cell.show(found.value)}")]
    lines += [f"  {side_sentence(found, side, up)}" for side, up in ((found.down, False), (found.up, True))]
    if found.failing:
        names = ", ".join(words.clean(f"{row.subject} {row.check}") for row in found.failing)
        lines.append(f"  left aside, for it fails already: {names}")
    rows: list[tuple[str, ...]] = [
        (found.cell.show(p.value), margin_text(p.margin), words.clean(f"{p.subject} {p.check}".strip()))
        for p in found.curve
    ]
    what = "before a check turns thin" if found.thin else "before a check fails"
    lines += ["", f"Margin {what}", *columns((found.cell.spec.title, "margin", "of"), rows, False), ""]
    return "\n".join([*lines, *words.CAUTION]) + "\n"


def side_sentence(found: Reach, side: Side, up: bool) -> str:
    """One direction in words: 'up to 4.76 A; beyond, CV3 converter load fails (climb)'."""
    way = "up" if up else "down"
    show = found.cell.show
    if side.limit is not None and side.check is not None:
        row = side.check
        turn = "fails" if row.status == "fail" else "turns thin" if row.status == "thin" else "turns"
        where = words.corner(row)
        text = f"{way} to {show(side.limit)}; beyond, {row.subject} {row.check} {turn}" + (
            f" ({where})" if where else ""
        )
    elif side.stop:
        text = f"{way} to {show(side.end)} no check turns; beyond, nothing can be calculated: {side.stop}"
    elif side.end == found.value:
        text = f"{way}: it stands at the end of what it can be"
    else:
        text = f"no limit {way} to {show(side.end)}"
    return words.clean(text)


def margin_text(margin: float | None) -> str:
    """A margin of a study: '12 % left', '3 % over'; empty where there is none."""
    if margin is None or not math.isfinite(margin):
        return ""
    return f"{words.percent(margin)} {'left' if margin >= 0.0 else 'over'}"


def reach_json(found: Reach) -> dict[str, Any]:
    """The reach as plain data in SI units."""
    return {
        "format": FORMAT,
        "path": found.cell.text,
        "unit": quantity.KINDS[found.cell.spec.kind].unit,
        "value": found.value,
        "thin": found.thin,
        "parts": list(found.parts),
        "down": _side(found.down),
        "up": _side(found.up),
        "curve": [
            {"value": p.value, "margin": _finite(p.margin), "check": p.check, "subject": p.subject} for p in found.curve
        ],
        "failing": [tables.check_row(row) for row in found.failing],
    }


def _side(side: Side) -> dict[str, Any]:
    return {
        "limit": side.limit,
        "end": side.end,
        "check": tables.check_row(side.check) if side.check else None,
        "stop": side.stop,
    }


def sweep_csv(found: Sweep) -> str:
    """One row a point; values in SI units, the margin as a share of the limit, below 0 where a check fails."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    a, b = (_heading(cell.text, cell.spec.kind) for cell in (found.cell_a, found.cell_b))
    writer.writerow(words.cells((a, b, "status", "margin", "check", "subject", "case", "line", "note")))
    for value_a, row in zip(found.values_a, found.spots, strict=True):
        for value_b, s in zip(found.values_b, row, strict=True):
            margin = _finite(s.margin)
            shown = "" if margin is None else f"{margin:.9g}"
            told = words.cells((s.check, s.subject, s.case, s.line, s.fault))
            writer.writerow((f"{value_a:.9g}", f"{value_b:.9g}", s.status or "none", shown, *told))
    return out.getvalue()


def sweep_json(found: Sweep) -> dict[str, Any]:
    """The sweep as plain data in SI units: margins[i][j] belongs to values i of the first cell and j of the second."""
    return {
        "format": FORMAT,
        "cells": [
            {"path": cell.text, "unit": quantity.KINDS[cell.spec.kind].unit, "values": list(values)}
            for cell, values in ((found.cell_a, found.values_a), (found.cell_b, found.values_b))
        ],
        "parts": list(found.parts),
        "margins": [[_finite(s.margin) for s in row] for row in found.spots],
        "status": [[s.status for s in row] for row in found.spots],
        "checks": [[f"{s.subject} {s.check}".strip() for s in row] for row in found.spots],
        "boundary": [list(point) for point in found.boundary],
        "failing": [tables.check_row(row) for row in found.failing],
    }


def _heading(text: str, kind: str) -> str:
    unit = quantity.KINDS[kind].unit
    return words.clean(f"{text} [{unit}]" if unit else text)


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None
