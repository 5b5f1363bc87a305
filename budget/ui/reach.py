"""How far one cell can go: the two limits, and the least margin of all checks over the values on the way."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.project.document import Document
from budget.report import words
from budget.study.paths import Cell as Number
from budget.ui.plot import Plot, Trace
from budget.ui.sheet import Context
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.study.reach import Point, Reach, Side

STALE = "~ before the edit: "
NAMES = {"dc": "DC", "emissions": "emissions", "stability": "stability", "inrush": "switch-on"}
_COLUMNS = (
    Column("", 4),
    Column("", 12, RIGHT, most=14),
    Column("margin", 12, RIGHT, most=14),
    Column("of", 28, most=70),
)
_LOG = 20.0  # so many times the present value, and a scale of factors shows more
_DEEPEST = -0.25  # what lies further beyond a limit is drawn at the lower edge


@dataclass(frozen=True, slots=True)
class Asked:
    """What was asked, of which document, and what is known of it; ``waits`` are the parts still to be counted in."""

    cell: Number
    document: Document
    thin: bool = False
    found: Reach | None = None
    waits: tuple[str, ...] = ()
    fault: str = ""
    token: object = field(default_factory=object)


def parts_in_words(parts: tuple[str, ...]) -> str:
    """'DC, emissions and stability'."""
    names = [NAMES[part] for part in parts]
    return " and ".join(part for part in (", ".join(names[:-1]), names[-1]) if part)


def reach(context: Context) -> View:
    """Both limits, what fails already, and every value that was tried; above them the curve."""
    asked: Asked | None = context.options.reach
    if asked is None:
        return _only("how far", "Q, on a number that was entered, asks how far it can go")
    value = asked.cell.show(asked.cell.value or 0.0)
    turn = "turns thin" if asked.thin else "fails"
    title = words.clean(f"{asked.cell.text} = {value}, before a check {turn}")
    title = ("" if asked.document is context.session.document else STALE) + title
    if asked.found is None:
        text = asked.fault or ("~ calculating" if asked.waits else "stopped before there was a result; Q asks again")
        return _only(title, text)
    found = asked.found
    sides = (("down", found.down, False), ("up", found.up, True))
    rows = [_side(found, name, side, up) for name, side, up in sides]
    if found.failing:
        names = ", ".join(f"{row.subject} {row.check}" for row in found.failing)
        text = words.clean(f"fails already, so left aside: {names}")
        rows.append(Row(("aside",), (Cell(text, tone="fail", info=text),)))
    rows += [_point(found, point) for point in found.curve]
    title_of = found.cell.spec.title
    columns = (_COLUMNS[0], Column(title_of, 12, RIGHT, most=14), *_COLUMNS[2:])
    return View("reach", title, (Section(columns, tuple(rows)),), _picture(found), _summary(asked))


def _only(title: str, text: str) -> View:
    row = Row(("none",), (Cell(words.clean(text)),))
    return View("reach", title, (Section((Column("", 76, most=140),), (row,)),))


def _summary(asked: Asked) -> str:
    assert asked.found is not None
    known = parts_in_words(asked.found.parts)
    waits = f"~ with {parts_in_words(asked.waits)} in work; so far {known}" if asked.waits else f"counted: {known}"
    other = "fails" if asked.thin else "turns thin"
    return f"{waits}; o now, < > limits; Enter puts a value in, A: before a check {other}, Q asks again"


def _side(found: Reach, name: str, side: Side, up: bool) -> Row:
    from budget.report.study import side_sentence

    text = side_sentence(found, side, up)
    at = side.end if side.limit is None else side.limit
    info = text if side.check is None else f"just beyond: {words.sentence(side.check)}"
    return Row(("side", name), (Cell(text, tone="head", info=info),), mark=(at, _percent(_margin_at(found, at))))


def _point(found: Reach, point: Point) -> Row:
    from budget.report.study import margin_text

    now = point.value == found.value
    of = words.clean(f"{point.subject} {point.check}".strip())
    margin = margin_text(point.margin) or "no number"
    bad = ("thin" if found.thin else "fail") if point.margin < 0.0 else ""
    info = f"{found.cell.show(point.value)}: {margin}" + (f", {of}" if of else "")
    cells = (
        Cell("now" if now else "", tone="head", info=info),
        Cell(found.cell.show(point.value), None, RIGHT, info=info),
        Cell(margin, None, RIGHT, bad, "!" if point.margin < 0.0 else "", info),
        Cell(of, info=info),
    )
    return Row(("point", point.value), cells, mark=(point.value, _percent(point.margin)))


def _percent(margin: float) -> float:
    return 100.0 * max(margin, _DEEPEST) if math.isfinite(margin) else math.nan


def _margin_at(found: Reach, value: float) -> float:
    return next((p.margin for p in found.curve if p.value == value), math.inf)


def value_of(found: Reach, key: tuple[Any, ...]) -> float | None:
    """The value that a row is about; None for one that has no value to put in."""
    if key[0] == "point":
        return float(key[1])
    if key[0] == "side":
        return (found.down if key[1] == "down" else found.up).limit
    return None


def _picture(found: Reach) -> Plot:
    """The margin in percent of the limit that decides, a line at zero, the present value and the limits."""
    known = [p for p in found.curve if math.isfinite(p.margin)]
    positive = [p.value for p in known if p.value > 0.0]
    log = found.value > 0.0 and bool(positive) and max(positive) > _LOG * found.value
    if log:
        known = [p for p in known if p.value > 0.0]
    ends = [p.value for p in known]
    traces: tuple[Trace, ...] = ()
    if known:
        curve = Trace("margin", "*", ends, [_percent(p.margin) for p in known])
        zero = Trace("limit", "-", [min(ends), max(ends)], [0.0, 0.0], tone="limit")
        marks = [(found.down.limit, "<"), (found.up.limit, ">"), (found.value, "o")]
        dots = [
            Trace(sign, sign, [at], [_percent(_margin_at(found, at))], "dots", "head")
            for at, sign in marks
            if at is not None and math.isfinite(_margin_at(found, at))
        ]
        traces = (zero, curve, *dots)
    x_range = (min(ends), max(ends)) if known else None
    kind = found.cell.spec.kind if found.cell.spec.kind in quantity.KINDS else ""
    empty = "no check has a number at any of these values"
    return Plot(traces, kind, "% left", log_x=log, x_range=x_range, empty=empty)
