"""A view beside the same view of the reference: what differs stands in a line of its own below each row.

Rows are matched by what they stand for (the id of a filter or converter, not its place), columns by their titles. A
number shows sign and amount, and a mark where more or less of it is better or worse; a text shows what it was.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from typing import Any

from budget import quantity
from budget.project import document as doc
from budget.project.document import Document, Path
from budget.ui.plot import Plot, Trace
from budget.ui.view import Cell, Column, Row, Section, View

BETTER, WORSE = "^", "!"
LEGEND = f"{BETTER} better, {WORSE} worse"
_LEAST = 2e-3  # of a value; less is shown only for the cell under the cursor
_POINT = 0.01  # of a margin or share; less of it is shown only there too
_NARROW = 16  # characters of a text that has to fit a narrow column
_NOTHING = 1e-9  # of a value; less is no change at all
_NUMBER = re.compile(r"([+-]?\d+(?:\.\d+)?)\s*(.*)", re.DOTALL)


@dataclass(frozen=True, slots=True)
class _Change:
    """What became of a cell: ``short`` for the line below it, ``words`` for the line about it; ``small`` if tiny."""

    short: str
    words: str
    verdict: int  # 1 better, -1 worse, 0 neither
    small: bool = False
    least: str = ""  # where ``short`` does not fit


Made = dict[Any, tuple[Row, Row, tuple[Column, ...], list[Row]]]  # a row, that of the reference, and what came of them


def against(view: View, was: View, document: Document, before: Document, made: Made) -> View:
    """``view`` with its changes against ``was``; the documents tell which row is which.

    Rows that are the same objects as before are not compared again: ``made`` keeps what came of them.
    """
    old = [{_stable(row.key, before): row for row in s.rows} for s in was.sections]
    sections = []
    for k, section in enumerate(view.sections):
        known = old[k] if k < len(old) else {}
        columns = was.sections[k].columns if k < len(was.sections) else ()
        sections.append(_section(section, known, columns, document, made))
    return replace(view, sections=tuple(sections), plot=_plot(view.plot, was.plot))


def _section(
    section: Section, known: dict[Any, Row], before: tuple[Column, ...], document: Document, made: Made
) -> Section:
    rows: list[Row] = []
    seen = set()
    titles = [column.title for column in section.columns]
    now_and_then = [column.title for column in before]
    if titles == now_and_then:
        place = {k: k for k in range(len(titles))}
    else:
        place = {k: now_and_then.index(title) for k, title in enumerate(titles) if title in now_and_then}
    for row in section.rows:
        name = _stable(row.key, document)
        seen.add(name)
        was = known.get(name)
        if was is None:
            if known:
                row = replace(row, cells=(_noted(row.cells[0], "new since the reference"), *row.cells[1:]))
            rows.append(row)
            if known and row.item is not None:
                rows.append(_riding(row, (Cell("new", tone="pale"),)))
            continue
        old = made.get(name)
        if old is None or old[0] is not row or old[1] is not was or old[2] is not before:
            old = made[name] = (row, was, before, _compared(section.columns, row, was, place))
        rows += old[3]
    gone = [row.cells[0].text.strip() for name, row in known.items() if name not in seen and row.item is not None]
    if gone:
        rows.append(_riding(Row(("gone",), ()), (Cell("gone: " + ", ".join(gone), tone="pale"),)))
    return replace(section, rows=tuple(rows))


def _compared(columns: tuple[Column, ...], row: Row, was: Row, place: dict[int, int]) -> list[Row]:
    """The row with what changed in words, and the line below it; ``place`` leads from a column to that of ``was``."""
    cells, below = list(row.cells), [Cell("")] * len(row.cells)
    told = False
    for k, cell in enumerate(row.cells):
        at = place.get(k, -1)
        if not 0 <= at < len(was.cells):
            continue
        found = change(cell, was.cells[at], columns[k].sense)
        if found is None:
            continue
        cells[k] = _noted(cell, found.words)
        if not found.small:
            told = True
            tone = {1: "ok", -1: "fail"}.get(found.verdict, "pale")
            below[k] = Cell(found.short, align=cell.align, tone=tone, short=found.least)
    if cells == list(row.cells):
        return [row]
    row = replace(row, cells=tuple(cells))
    if not told:
        return [row]
    if not below[0].text:
        below[0] = Cell("change", tone="pale")
    return [row, _riding(row, tuple(below))]


def _riding(row: Row, cells: tuple[Cell, ...]) -> Row:
    return Row(("change", *row.key), cells, depth=row.depth, rides=True)


def _noted(cell: Cell, text: str) -> Cell:
    return replace(cell, change=text)


def change(cell: Cell, was: Cell, sense: int) -> _Change | None:
    """What became of a cell; None where nothing did, or where one of the two is not calculated yet."""
    if cell is was or (cell.text == was.text and cell.value == was.value) or "~" in (cell.text, was.text):
        return None
    verdict = _verdict(cell, was)
    delta = _delta(cell, was)
    if delta is None:
        if cell.text == was.text:
            return None
        then = was.text.strip() or "empty"
        mark = {1: f"{BETTER} ", -1: f"{WORSE} "}.get(verdict, "")
        least = f"{mark}was {was.short.strip()}" if was.short else ""
        while len(least) > _NARROW and " " in least:
            least = least.rpartition(" ")[0]
        near = cell.rank is not None and was.rank is not None and abs(cell.rank - was.rank) < _POINT
        return _Change(f"{mark}was {then}", _words(f"was {then}", "", verdict), verdict, near, least)
    if abs(delta.amount) <= _NOTHING * delta.size:
        return None
    verdict = verdict or (sense if delta.amount > 0 else -sense)
    mark = {1: BETTER, -1: WORSE}.get(verdict, "")
    unit = not delta.kind or delta.kind == "%" or cell.text.rstrip("+").endswith((_unit(delta.kind), "left", "over"))
    texts = [_figure(delta, digits, unit) + mark for digits in (3, 2)]
    then = quantity.show(was.value or 0.0, quantity.KINDS[delta.kind]) if delta.kind in quantity.KINDS else was.text
    words = _words(f"was {then.strip()}", _figure(delta, 3, True), verdict)
    return _Change(texts[0], words, verdict, delta.small, texts[1])


def _words(then: str, amount: str, verdict: int) -> str:
    return ", ".join(part for part in (then, amount, {1: "better", -1: "worse"}.get(verdict, "")) if part)


def _verdict(cell: Cell, was: Cell) -> int:
    """Better or worse by rank, where both have one."""
    if cell.rank is None or was.rank is None:
        return 0
    if abs(cell.rank - was.rank) <= _NOTHING * max(abs(cell.rank), abs(was.rank), 1e-3):
        return 0
    return 1 if cell.rank > was.rank else -1


@dataclass(frozen=True, slots=True)
class _Delta:
    """A difference of two numbers of about ``size``, of a kind of ``quantity``, "%", "dB", or in a ``unit``."""

    amount: float
    size: float
    kind: str
    unit: str = ""
    spaced: bool = True
    places: int = 0

    @property
    def small(self) -> bool:
        least = {"%": 0.1 * _POINT, "dB": 0.05}.get(self.kind, _LEAST * self.size)
        return abs(self.amount) < least


def _delta(cell: Cell, was: Cell) -> _Delta | None:
    """The difference of two numbers; None where they are no two numbers.

    From the numbers behind the texts where both are known, else from the texts, if they are of one unit.
    """
    if cell.value is not None and was.value is not None and cell.kind == was.kind:
        size = max(abs(cell.value), abs(was.value))
        return _Delta(cell.value - was.value, size, cell.kind) if math.isfinite(size) else None
    one, two = _NUMBER.fullmatch(cell.text.strip()), _NUMBER.fullmatch(was.text.strip())
    if one is None or two is None or one[2] != two[2] or any(c.isdigit() for c in one[2]):
        return None
    places = max(len(t[1].partition(".")[2]) for t in (one, two))
    delta = round(float(one[1]) - float(two[1]), places)
    size = max(abs(float(one[1])), abs(float(two[1])))
    return _Delta(delta, size, "", one[2], " " in cell.text.strip(), places) if delta else None


def _unit(kind: str) -> str:
    return quantity.KINDS[kind].unit if kind in quantity.KINDS else kind


def _figure(delta: _Delta, digits: int, with_unit: bool) -> str:
    """A difference with its sign; with its unit where the heading of the column does not have it."""
    sign, size = "+" if delta.amount > 0 else "-", abs(delta.amount)
    if delta.kind in quantity.KINDS:
        number, unit = quantity.show_parts(size, quantity.KINDS[delta.kind], digits)
        return f"{sign}{number} {unit}" if with_unit else f"{sign}{number}{unit.removesuffix(_unit(delta.kind))}"
    if not delta.kind:
        return f"{sign}{size:.{delta.places}f}{' ' if delta.spaced else ''}{delta.unit}"
    size = size * 100 if delta.kind == "%" else size
    number = f"{size:.1f}" if size < 10 else f"{size:.0f}"
    return f"{sign}{number}{' ' + delta.kind if with_unit else ''}".rstrip()


def _stable(key: tuple[Any, ...], document: Document) -> tuple[Any, ...]:
    """The key of a row with the id of a filter, converter, case or limit line in place of its number."""
    if len(key) > 1 and key[0] in ("filter", "converter", "case", "limit") and isinstance(key[1], int):
        ident = doc.get(document, (key[0], key[1], "name" if key[0] == "limit" else "id"))
        if isinstance(ident, str) and ident:
            return (key[0], ident, *key[2:])
    return key


def same_row(path: Path, document: Document, before: Document) -> Path | None:
    """The path in ``before`` of the row that stands at ``path`` in ``document``; None where there is none."""
    name = _stable(path, document)
    if name == path:
        return path
    rows = before.data.get(str(path[0]))
    for index in range(len(rows) if isinstance(rows, list) else 0):
        if _stable((path[0], index), before) == name[:2]:
            return (path[0], index, *path[2:])
    return None


def _plot(plot: Plot | None, was: Plot | None) -> Plot | None:
    """The picture with the curves of the reference faint below its own; those that are the same are drawn once."""
    if plot is None or was is None:
        return plot
    own = {(t.name, t.symbol): t for t in plot.traces}
    faint = []
    for trace in was.traces:
        now = own.get((trace.name, trace.symbol))
        if now is not None and _same(now, trace):
            continue
        kind = "curve" if trace.kind in ("curve", "step") else "dots"
        faint.append(Trace(f"{trace.name} (reference)", ",", trace.x, trace.y, kind, "pale"))
    return replace(plot, traces=(*faint, *plot.traces)) if faint else plot


def _same(one: Trace, two: Trace) -> bool:
    return len(one.x) == len(two.x) and all(
        a == b or math.isclose(a, b, rel_tol=1e-6, abs_tol=1e-12)
        for p, q in ((one.x, two.x), (one.y, two.y))
        for a, b in zip(p, q, strict=True)
    )
