"""Proposals of which converter goes behind which filter, side by side: converters down, candidates across."""

from __future__ import annotations

from typing import TYPE_CHECKING

from budget.report import allocation as report
from budget.ui.sheet import Context, words_only
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.allocate import Allocation


def allocation(context: Context) -> View:
    """The candidates of the last search; Enter on one takes it as one edit."""
    found: Allocation | None = context.options.allocation
    result = context.session.result
    if found is None or result is None:
        text = "no search yet: G looks for allocations" if result else "~ calculating"
        return View(
            "allocation", "allocation", (Section((Column("", 60, most=100),), (Row(("none",), (Cell(text),)),)),)
        )
    if not found.candidates:
        rows = [
            Row(("none", k), (Cell(line),)) for k, line in enumerate([report.headline(found), *report.why_none(found)])
        ]
        return View("allocation", "allocation", (Section((Column("", 76, most=140),), tuple(rows)),))
    project = result.project
    now = {c.id: c.filter for c in project.converters}
    columns = [Column("", 18, most=30), Column("now", 6, most=10)]
    columns += [Column(f"no. {k + 1}", 8, most=14) for k, _ in enumerate(found.candidates)]

    def row(key: str, name: str, present: str, texts: list[tuple[str, str]], align: str = "left") -> Row:
        cells = [Cell(words_only(name), tone="head"), Cell(words_only(present))]
        for k, (text, tone) in enumerate(texts):
            info = f"no. {k + 1}: {report.facts(found.candidates[k])}; Enter takes it as one edit"
            cells.append(Cell(words_only(text), None, align, tone, "", info))
        return Row((key, name), tuple(cells))

    rows = [
        row("fact", "state", "", [("FAIL" if c.status == "fail" else c.status, c.status) for c in found.candidates]),
        row("fact", "headroom", "", [(_percent(c.headroom), "") for c in found.candidates], RIGHT),
        row("fact", "emission margin", "", [(_db(c.emission_margin), "") for c in found.candidates], RIGHT),
        row("fact", "filters in use", "", [(str(c.filters_used), "") for c in found.candidates], RIGHT),
        row("fact", "moves", "", [(str(c.moves), "") for c in found.candidates], RIGHT),
    ]
    homes = [dict(c.allocation) for c in found.candidates]
    for unit in project.converters:
        present = now.get(unit.id, "")
        texts = [(("" if h.get(unit.id) == present else "> ") + h.get(unit.id, ""), "") for h in homes]
        rows.append(row("converter", f"{unit.id} {unit.name}", present or "none", texts))
    summary = f"{report.headline(found)}; > marks what moves; Enter on a candidate takes it, u brings it back"
    return View("allocation", "allocation", (Section(tuple(columns), tuple(rows)),), summary=summary)


def _percent(value: float | None) -> str:
    return "" if value is None else f"{value * 100:.1f} %"


def _db(value: float | None) -> str:
    return "" if value is None else f"{value:.1f} dB"
