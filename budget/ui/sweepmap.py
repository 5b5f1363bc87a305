"""Two cells over their ranges as a map: the first across, the second up, a sign a point for its worst margin."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from budget.project.document import Document
from budget.report import words
from budget.study.paths import Cell as Number
from budget.ui.plot import number
from budget.ui.reach import STALE, parts_in_words
from budget.ui.sheet import Context
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.study.sweep import Spot, Sweep

FAILS, THIN, NONE, FREE = "#", "t", "?", "."
LEGEND = "0-9 tenths of the limit left, t thin, # fails, ? no result, . no number"
_HEAD = 12  # columns of the values of the second cell
_WIDTHS = ((11, 5), (17, 3))  # up to so many values of the first cell, this width; more of them, one character
_NUMBERS = 7  # width of a column of numbers


@dataclass(frozen=True, slots=True)
class Axis:
    """A cell with the values it takes (SI)."""

    cell: Number
    values: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Swept:
    """What was asked, of which document, and the answer once it is there."""

    a: Axis
    b: Axis
    parts: tuple[str, ...]
    aside: bool
    document: Document
    found: Sweep | None = None
    state: str = "~ calculating; it is shown here when it is done"
    token: object = field(default_factory=object)


def sweep_map(context: Context) -> View:
    """One row for each value of the second cell, the largest on top; one column for each of the first."""
    swept: Swept | None = context.options.sweep
    if swept is None:
        return _only("map", "no sweep yet: P, on a number that was entered, takes the first of its two cells")
    title = words.clean(f"{swept.a.cell.text} across, {swept.b.cell.text} up")
    title = ("" if swept.document is context.session.document else STALE) + title
    found = swept.found
    if found is None:
        return _only(title, swept.state)
    table = context.options.as_table
    now = _nearest(swept.a), _nearest(swept.b)
    columns = [Column(found.cell_b.spec.title, _HEAD, RIGHT)]
    width = _NUMBERS if table else next((w for most, w in _WIDTHS if len(found.values_a) <= most), 1)
    heads = _headings(found.values_a, found.cell_a.spec.kind, width)
    columns += [Column(text, width, RIGHT) for text in heads]
    rows = []
    for j in reversed(range(len(found.values_b))):
        cells = [_head(found, j)]
        for i in range(len(found.values_a)):
            cells.append(_cell(found, i, j, width, table=table, here=(i, j) == now))
        rows.append(Row(("b", found.values_b[j]), tuple(cells)))
    return View("map", title, (Section(tuple(columns), tuple(rows)),), summary=_summary(swept, table))


def _only(title: str, text: str) -> View:
    row = Row(("none",), (Cell(words.clean(text)),))
    return View("map", title, (Section((Column("", 76, most=140),), (row,)),))


def _summary(swept: Swept, table: bool) -> str:
    legend = "% of the limit left, below 0 where a check fails" if table else LEGEND
    other = "map" if table else "numbers"
    now = "" if table else "[ ] now, "
    counted = parts_in_words(swept.parts)
    if swept.found is not None and swept.found.failing:
        counted += f" but for {', '.join(f'{row.subject} {row.check}' for row in swept.found.failing)}"
    return words.clean(f"{legend}; {now}counted: {counted}; A: {other}, Enter puts both in, E: CSV")


def sign(spot: Spot) -> str:
    """A point in one character."""
    if spot.margin is None:
        return NONE
    if spot.status == "fail" or spot.margin < 0.0:
        return FAILS
    if spot.status == "thin":
        return THIN
    return str(min(9, int(spot.margin * 10.0))) if math.isfinite(spot.margin) else FREE


def _cell(found: Sweep, i: int, j: int, width: int, *, table: bool, here: bool) -> Cell:
    spot = found.spots[i][j]
    one = sign(spot)
    tone = {FAILS: "fail", THIN: "thin", NONE: "pale", FREE: "pale"}.get(one, "ok")
    if table:
        text, mark = _percent(spot), {FAILS: "!", THIN: "t"}.get(one, "")
    else:
        text, mark = (f"[{one * (width - 2)}]" if here and width > 2 else one * width), ""
    return Cell(text, None, RIGHT, tone, mark, words.clean(_words(found, i, j)))


def _percent(spot: Spot) -> str:
    if spot.margin is None:
        return NONE
    if not math.isfinite(spot.margin):
        return FREE
    percent = spot.margin * 100.0
    if abs(percent) < 100.0:
        return f"{percent:.{2 if abs(percent) < 1.0 else 1}f}"
    return f"{percent:.0f}" if abs(percent) < 1e5 else "far"


def _words(found: Sweep, i: int, j: int) -> str:
    """A point in a sentence: both values, and whose margin it is."""
    from budget.report.study import margin_text

    spot = found.spots[i][j]
    at = f"{found.cell_a.show(found.values_a[i])}, {found.cell_b.show(found.values_b[j])}: "
    if spot.margin is None:
        return at + spot.fault
    state = "FAIL" if spot.status == "fail" else spot.status
    of = f"{spot.subject} {spot.check}".strip()
    where = ", ".join(part for part in (spot.case, f"{spot.line} line" if spot.line else "") if part)
    margin = margin_text(spot.margin) or "no check has a number"
    return at + ", ".join(part for part in (state, margin, of + (f" ({where})" if where else "")) if part)


def _head(found: Sweep, j: int) -> Cell:
    """The value of the second cell, and where on its way across a check turns."""
    b = found.values_b[j]
    turns = [found.cell_a.show(a) for a, at in found.boundary if at == b]
    text = f"{found.cell_b.text} {found.cell_b.show(b)}: "
    text += f"a check turns near {', '.join(turns)}" if turns else "no check turns on the way across"
    return Cell(found.cell_b.show(b), None, RIGHT, "head", "", words.clean(text))


def _headings(values: Sequence[float], kind: str, width: int) -> list[str]:
    """The values as far as they fit in columns of ``width``, with as many digits as tell them apart; else nothing."""
    for digits in (4, 3, 2, 1):
        texts = [number(value, kind, digits).replace(" ", "") for value in values]
        if max(map(len, texts)) <= width:
            return texts if len(set(texts)) == len(texts) else [""] * len(texts)
    return [""] * len(values)


def _nearest(axis: Axis) -> int | None:
    """The value nearest to what stands in the cell; None where that lies outside the range."""
    value = axis.cell.value
    if value is None or not min(axis.values) <= value <= max(axis.values):
        return None
    return min(range(len(axis.values)), key=lambda k: abs(axis.values[k] - value))


def point_of(found: Sweep, key: tuple[Any, ...], column: int) -> tuple[float, float] | None:
    """The values of the point in a row and column of the map; None beside it."""
    if key[:1] != ("b",) or not 1 <= column <= len(found.values_a):
        return None
    return found.values_a[column - 1], float(key[1])


def csv_map(context: Context) -> str:
    """The table behind the map."""
    from budget.report.study import sweep_csv

    swept: Swept | None = context.options.sweep
    return sweep_csv(swept.found) if swept is not None and swept.found is not None else ""
