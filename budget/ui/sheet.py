"""The main view: the bus, each filter with its converters beneath it, and what is not allocated."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.engine.model import LINES
from budget.project import document as doc
from budget.project import edits
from budget.project.document import Path
from budget.report import words
from budget.report.numbers import Corner, Number, Numbers, corner_index, numbers
from budget.session import Session
from budget.ui import guide
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.checks import CheckRow
    from budget.engine.evaluate import Result

PENDING = "~"
BAR = 5

COLUMNS = (
    Column("name", 16, most=30, wide=24),
    Column("out W", 6, RIGHT),
    Column("in W", 6, RIGHT, sense=-1),
    Column("in A", 6, RIGHT, sense=-1),
    Column("of allowed", 11, RIGHT, sense=-1),
    Column("at V", 6, RIGHT),
    Column("heat W", 6, RIGHT, sense=-1),
    Column("worst check", 16, most=34, wide=26),
    Column("emits dB", 8, RIGHT, sense=-1),
    Column("rated", 7, RIGHT),
    Column("filter", 7),
    Column("load", 7, RIGHT),
    Column("lead R", 8, RIGHT),
    Column("note", 12, most=30),
)


BOTH, DM, CM = "both", "dm", "cm"
Cells = dict[tuple[Path, str, bool], tuple[tuple[Any, ...], Cell]]


@dataclass(frozen=True, slots=True)
class Options:
    """What the views of emissions show: which limit set, which mode, the unfiltered level beside it, a clock's scan."""

    limit: int = 0
    mode: str = BOTH
    bare: bool = False
    common: bool = False  # the filter view: common mode in place of differential
    run: int | None = None  # the switch-on view: which case and event; None is the worst
    voltages: bool = False
    log_time: bool = True
    filter: int = 0  # the stability view
    scan: Any = None
    allocation: Any = None  # the last search for an allocation
    wishes: tuple[tuple[str, ...], ...] = ()  # what the next one must obey
    reach: Any = None  # how far a cell can go, as last asked
    sweep: Any = None  # the last sweep of two cells
    first: Any = None  # the first cell of a sweep, while the second is looked for
    as_table: bool = False  # the map of a sweep as numbers


Memo = dict[str, tuple[tuple[Any, ...], Any]]
Order = Callable[[Memo, str, tuple[Any, ...], Callable[[], Any]], None]


@dataclass(frozen=True, slots=True)
class Context:
    """What a view is made from: the session, the corner shown, the cells that cannot be read, the subject in focus."""

    session: Session
    corner: Corner | None
    bad: frozenset[Path]
    subject: Path
    ascii_only: bool = False
    options: Options = Options()
    cells: Cells = field(default_factory=dict)  # made before, see ``value_cell``
    memo: Memo = field(default_factory=dict)
    order: Order = lambda memo, name, made_of, make: None

    def once(self, name: str, made_of: tuple[Any, ...], make: Callable[[], Any]) -> Any:
        """What ``make`` gives, from before if all it is ``made_of`` are still the same objects."""
        old = self.memo.get(name)
        if old is None or not all(a is b for a, b in zip(old[0], made_of, strict=True)):
            old = (made_of, make())
            self.memo[name] = old
        return old[1]

    def fetch(self, name: str, made_of: tuple[Any, ...], make: Callable[[], Any]) -> Any:
        """What ``make`` gives, calculated aside and kept like that of ``once``; None as long as it is not there.

        For what takes so long that a key would wait: the view is made anew when it has come.
        """
        for first in (True, False):
            old = self.memo.get(name)
            if old is not None and all(a is b for a, b in zip(old[0], made_of, strict=True)):
                return old[1]
            if first:
                self.order(self.memo, name, made_of, make)
        return None


KIND_OF = {"W": "power", "A": "current", "V": "voltage"}
_LEVEL = {"ok": 0, "no data": 1, "thin": 2, "fail": 3}


def rank(row: CheckRow) -> float:
    """A number that tells whether a check came out better: by its state first, then by its margin."""
    margin = row.margin if row.margin is not None else 0.0
    return -1e6 * _LEVEL[row.status] + max(-1e5, min(1e5, margin))


def figure(value: float | None, unit: str) -> str:
    """A number for a column whose heading names the unit: only the prefix stays with it."""
    if value is None:
        return ""
    number, scaled = quantity.show_parts(value, quantity.KINDS[KIND_OF[unit]])
    return number + scaled.removesuffix(unit)


def bar(share: float, ascii_only: bool) -> str:
    """A share as a small bar with its number; more than all of it is marked."""
    full, empty = ("#", ".") if ascii_only else ("\u2588", "\u2591")
    filled = max(0, min(BAR, round(share * BAR)))
    percent = f"{share * 100:.0f}" if share < 99.995 else ">9999"
    return f"{full * filled}{empty * (BAR - filled)} {percent + '%':>5}"


def sheet(context: Context) -> View:
    """The sheet as a view; it works without results too, with every calculated cell pending."""
    maker = _Maker(context)
    document = context.session.document
    rows = [maker.bus()]
    filters = rows_of(document, "filter")
    converters = rows_of(document, "converter")
    known = {f["id"] for _, f in filters if isinstance(f.get("id"), str)}
    behind_it: dict[str, list[Row]] = {}
    for n, unit in converters:
        behind_it.setdefault(str(unit.get("filter")), []).append(maker.row(("converter", n), unit, maker.converter))
    for index, part in filters:
        rows.append(maker.row(("filter", index), part, maker.filter))
        rows += behind_it.get(part["id"], []) if isinstance(part.get("id"), str) else []
    loose = [(n, unit) for n, unit in converters if str(unit.get("filter", "")) not in known or not unit.get("filter")]
    first = guide.beginning(context.session)
    if first:
        rows.append(Row(("start",), (Cell(first, tone="pale"),)))
    if loose:
        rows.append(
            Row(("loose",), (Cell("not allocated", tone="head", info="These draw nothing: give each a filter."),))
        )
        rows += [maker.row(("converter", n), unit, maker.converter) for n, unit in loose]
    return View("sheet", "sheet", (Section(COLUMNS, tuple(rows)),))


def _checks(result: Result, corner: Corner | None) -> tuple[CheckRow, ...]:
    """The checks of all corners, or what the operating point of one corner alone says."""
    at = corner_index(result, corner)
    if at is None:
        return result.checks
    from budget.engine.evaluate import evaluate_dc

    one = replace(result.project, cases=(result.project.cases[at[0]],))
    return evaluate_dc(one, (at[1],)).checks


def rows_of(document: doc.Document, key: str) -> list[tuple[int, dict[str, Any]]]:
    """The rows of an array of tables with their indices, whatever else stands there left out."""
    rows = document.data.get(key)
    return [(i, r) for i, r in enumerate(rows) if isinstance(r, dict)] if isinstance(rows, list) else []


def worst_of(rows: Iterable[CheckRow]) -> CheckRow | None:
    """The row that matters most; one without data only where there is nothing else."""
    ranked = words.by_severity(rows)
    return next((row for row in ranked if row.status != "no data"), ranked[0] if ranked else None)


def behind(row: CheckRow, document: doc.Document, at: Path | None = None) -> Path:
    """The cell that a check leads to: the entry whose change would mend it or give it its data."""
    keys = {
        "bus current": "rating",
        "operating point": "resistance",
        "filter current": "rated_current",
        "filter voltage": "max_voltage",
        "allocation": "filter",
        "converter load": "rated_power",
        "input low": "min_input",
        "input high": "max_input",
        "inrush peak": "inrush_peak",
        "bus inrush": "inrush_peak",
        "inrush i2t": "inrush_i2t",
        "breaker i2t": "breaker_i2t",
        "overshoot": "max_surge",
        "start": "turn_on",
        "stability": "inductance",
        "impedance": "dm",
    }
    if row.check.startswith("emission "):
        return ("rules", "emissions")
    key = keys.get(row.check, "note")
    if row.subject == "bus":
        return ("bus", key)
    at = at or next(
        (
            (table, index)
            for table in ("filter", "converter")
            for index, entry in rows_of(document, table)
            if entry.get("id") == row.subject
        ),
        None,
    )
    if at is None:
        return ("bus", "low")
    missing = [m.split(".")[-1] for m in row.missing if m.startswith(str(at[0]))]
    return (*at, missing[0] if missing else key)


class _Maker:
    """Makes rows; holds the numbers of the corner and the checks by subject."""

    def __init__(self, context: Context) -> None:
        self.context = context
        self.session = context.session
        result = self.session.result
        corner = context.corner
        self.numbers: Numbers | None = (
            context.once("numbers", (result, corner), lambda: numbers(result, corner)) if result else None
        )
        self.place: dict[str, dict[str, int]] = {
            "filter": {f.id: k for k, f in enumerate(result.project.filters)} if result else {},
            "converter": {c.id: k for k, c in enumerate(result.project.converters)} if result else {},
        }
        self.checks: dict[str, list[CheckRow]] = {}
        for row in context.once("checks", (result, corner), lambda: _checks(result, corner)) if result else ():
            self.checks.setdefault(row.subject, []).append(row)
        self.outcome = self.session.outcome is not None
        made_of = (self.session.latest("emissions"), corner, context.options)
        self.emission: _Emission | None = context.once("emission", made_of, lambda: _emission(context))

    def row(self, path: Path, entry: dict[str, Any], make: Callable[[int, dict[str, Any]], Row]) -> Row:
        """A row from before if nothing that it shows has changed: an edit of one makes one anew."""
        context, document = self.context, self.session.document
        made_of = (
            entry,
            self.session.outcome,
            self.emission,
            context.corner,
            context.options,
            context.bad,
            document.data.get("shelf"),
            self.session.shelves,
            document.data.get("case") if context.corner else None,
        )
        found: Row = context.once(f"row {path}", made_of, lambda: make(int(path[1]), entry))
        return found

    def bus(self) -> Row:
        data = self.session.document.data.get("bus")
        name = data.get("name", "") if isinstance(data, dict) else ""
        found = self.numbers.bus if self.numbers else {}
        rating = self.session.result.project.bus.rating if self.session.result else None
        line = self.context.corner[1] if self.context.corner else None
        cells = (
            self.name(("bus",), f"bus {edits.typed(name)}".strip(), ("bus", "name")),
            *self.flow(found, rating, ("bus",), "bus", 0, ("bus", line) if line else None),
            self.check("bus", ("bus",)),
            self.emits("bus", "bus"),
            self.typed(("bus", "rating")),
            Cell(),
            Cell(),
            self.typed(("bus", "resistance")),
            self.typed(("bus", "note"), "left"),
        )
        return Row(("bus",), cells, ("bus",))

    def filter(self, index: int, part: dict[str, Any]) -> Row:
        path: Path = ("filter", index)
        ident = part.get("id")
        k = self.place["filter"].get(ident) if isinstance(ident, str) else None
        found = self.numbers.filters[k] if self.numbers and k is not None else {}
        allowed = self.numbers.allowed[k] if self.numbers and k is not None else None
        cells = (
            self.name(path, f"{ident or '?'} {part.get('name', '')}".strip(), (*path, "name")),
            *self.flow(found, allowed, path, "filter", k, None),
            self.check(ident, path),
            self.emits("filter", ident),
            self.typed((*path, "rated_current")),
            Cell(),
            Cell(),
            Cell(),
            self.typed((*path, "note"), "left"),
        )
        return Row(path, cells, path)

    def converter(self, index: int, unit: dict[str, Any]) -> Row:
        path: Path = ("converter", index)
        ident = unit.get("id")
        k = self.place["converter"].get(ident) if isinstance(ident, str) else None
        found = self.numbers.converters[k] if self.numbers and k is not None else {}
        home = self.place["filter"].get(str(unit.get("filter", "")))
        allowed = self.numbers.allowed[home] if self.numbers and home is not None else None
        cells = (
            self.name(path, f"{ident or '?'} {unit.get('name', '')}".strip(), (*path, "name")),
            *self.flow(found, allowed, path, "converter", k, None),
            self.check(ident, path),
            self.emits("converter", ident),
            self.typed((*path, "rated_power")),
            self.typed((*path, "filter"), "left"),
            self.load(ident),
            self.typed((*path, "lead", "R")),
            self.typed((*path, "note"), "left"),
        )
        return Row(path, cells, path, depth=1)

    def name(self, path: Path, text: str, cell: Path) -> Cell:
        bad = any(p[: len(path)] == path for p in self.context.bad)
        tone = "head" if path[0] != "converter" else ""
        return Cell(words_only(text), cell, tone=tone, mark="!" if bad else "")

    def flow(
        self,
        found: dict[str, Number],
        allowed: float | None,
        path: Path,
        kind: str,
        index: int | None,
        volts: Path | None,
    ) -> tuple[Cell, ...]:
        """The calculated cells of a row: out, in, current, share, voltage, heat."""
        leads = {"bus": (*path, "resistance"), "filter": (*path, "rated_current")}
        lead: Path = leads.get(kind, (*path, "output", 0, "current"))
        at = {"bus": "voltage where the filters are tied", "filter": "voltage behind it"}
        labels = {
            "out": ("W", "output power"),
            "taken": ("W", "input power"),
            "current": ("A", "input current"),
            "voltage": ("V", at.get(kind, "voltage at its terminals")),
            "heat": ("W", "heat"),
        }
        cells: dict[str, Cell] = {}
        for key, (unit, what) in labels.items():
            number = found.get(key)
            info = ""
            if number:
                info = f"{what} {words.show(number.value, unit)}" + (f" in {number.corner}" if number.corner else "")
                if key == "heat" and self.numbers and index is not None:
                    info += f": {self.numbers.heat.get((kind, index), '')}"
            text = figure(number.value, unit) if number else self.none()
            value, of = (number.value if number else None), KIND_OF[unit]
            cells[key] = Cell(text, align=RIGHT, info=info, leads=lead, calculated=True, value=value, kind=of)
        if volts:
            cells["voltage"] = replace(cells["voltage"], leads=volts)
        current = found.get("current")
        share = Cell("", align=RIGHT, calculated=True)
        if current and allowed is not None:
            ratio = current.value / allowed if allowed > 0 else (0.0 if current.value == 0 else 1e9)
            of = {"bus": "bus rating", "filter": "allowed current"}.get(kind, "current its filter allows")
            info = f"{words.show(current.value, 'A')} of {words.show(allowed, 'A')}, the {of}"
            info += f", in {current.corner}" if current.corner else ""
            tone = "fail" if ratio > 1 and kind != "converter" else ""
            if kind != "converter":
                lead = (*path, "rating" if kind == "bus" else "rated_current")
            share = Cell(bar(ratio, self.context.ascii_only), None, RIGHT, tone, "", info, leads=lead, calculated=True)
            share = replace(share, value=ratio, kind="%")
        elif not self.outcome:
            share = Cell(PENDING, align=RIGHT, calculated=True)
        return cells["out"], cells["taken"], cells["current"], share, cells["voltage"], cells["heat"]

    def none(self) -> str:
        return "-" if self.outcome else PENDING

    def check(self, ident: Any, path: Path) -> Cell:
        rows = self.checks.get(ident, []) if isinstance(ident, str) else []
        row = worst_of(rows)
        if row is None:
            bad = next((p for p in sorted(self.context.bad, key=str) if p[: len(path)] == path), (*path, "name"))
            text = "left out" if self.outcome else PENDING
            return Cell(text, tone="fail" if self.outcome else "", mark="!" if self.outcome else "", leads=bad)
        lead = behind(row, self.session.document, path if path[0] != "bus" else None)
        text = words.brief(row)
        info = words.sentence(row)
        lacking = sum(r.status == "no data" for r in rows)
        if lacking and row.status != "no data":
            info += f"; {lacking} without data"
        cell = Cell(words.verdict(row), None, "left", row.status, "", info, text, leads=lead, calculated=True)
        return replace(cell, rank=rank(row))

    def emits(self, kind: str, ident: Any) -> Cell:
        """What a row adds to the reading of the receiver at its worst tuning."""
        found = self.emission
        if found is None:
            waits = self.session.outcome is None and bool(doc.get(self.session.document, ("rules", "emissions")))
            return Cell(PENDING if waits else "", calculated=True, align=RIGHT)
        level = found.level(kind, ident)
        what = {"bus": "reading of the receiver", "filter": "sum of the converters behind it"}.get(
            kind, "its own share"
        )
        info = f"{what} at {words.frequency(found.frequency)}, {found.where}" + (
            f": {level:.1f} {found.unit}" if level is not None else ": not seen there"
        )
        text = f"{level:.1f}" if level is not None else "-"
        return Cell(text, None, RIGHT, "", "", info, calculated=True, value=level, kind="dB")

    def typed(self, path: Path, align: str = RIGHT) -> Cell:
        return value_cell(self.context, path, align)

    def load(self, ident: Any) -> Cell:
        corner = self.context.corner
        if corner is None:
            return Cell("", info="the load of one case: choose a case with o, or see all of them with l")
        for index, case in rows_of(self.session.document, "case"):
            if case.get("id") == corner[0]:
                return value_cell(self.context, ("case", index, "load", str(ident)), RIGHT)
        return Cell("")


@dataclass(frozen=True, slots=True)
class _Emission:
    """Shares of the reading at the worst tuning of the limit set and corner shown, in V or A."""

    frequency: float
    where: str
    unit: str
    reading: float  # dB
    shares: dict[Any, float]  # by the id of a filter or converter

    def level(self, kind: str, ident: Any) -> float | None:
        if kind == "bus":
            return self.reading
        value = self.shares.get(ident, 0.0)
        return 20.0 * math.log10(value / 1e-6) if value > 0.0 else None


def _emission(context: Context) -> _Emission | None:
    from budget.ui.spectrum import shown

    found = shown(context)
    if found is None:
        return None
    result, lines, at = found
    assert result.emissions is not None
    case, line = result.project.cases[at[0]].id, LINES[at[1]]
    key = (lines.limit.name, case, line)
    row = next((r for r in result.emissions.rows if (r.limit, r.case, r.line) == key), None)
    if row is None or row.frequency is None or row.level is None:
        return None
    from budget.engine.inspection import parts

    own = parts(result.project, result.operating, lines, at, row.frequency).tolist()
    shares = {f.id: 0.0 for f in result.project.filters}
    for unit, value in zip(result.project.converters, own, strict=True):
        shares[unit.id] = value
        if unit.filter in shares:
            shares[unit.filter] += value
    return _Emission(row.frequency, f"{row.limit} in {case}, {line} line", row.unit, row.level, shares)


def stale(context: Context, result: Result) -> str:
    """A mark before the title of a view whose results are those from before the last edit."""
    return "" if result is context.session.result else "~ before the edit: "


def words_only(text: str) -> str:
    """Text of the file for the screen: control characters become ``?``."""
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else "?" for c in text)


def value_cell(context: Context, path: Path, align: str = RIGHT) -> Cell:
    """A cell for the value at ``path``: scaled if it can be read, as typed if not, its default in a paler tone.

    A cell is made again only when its row, or the shelf that may lend to it, is another object than before.
    """
    document, shelves = context.session.document, context.session.shelves
    bad = path in context.bad
    made_of = (doc.get(document, edits.owner(path)), document.data.get("shelf"), shelves)
    key = (path, align, bad)
    old = context.cells.get(key)
    if old is not None and all(a is b for a, b in zip(old[0], made_of, strict=True)):
        return old[1]
    cell = _value_cell(context, path, align, bad)
    context.cells[key] = (made_of, cell)
    return cell


def _value_cell(context: Context, path: Path, align: str, bad: bool) -> Cell:
    session = context.session
    spec = edits.spec_at(path)
    value, lent = edits.value_at(session.document, session.shelves, path)
    if spec is None:
        return Cell(words_only(edits.typed(value)), align=align)
    text = words_only(edits.typed(value))
    info = f"as typed: {text}" if text else ""
    tone = "lent" if lent else ""
    if value is None or value == "":
        tone, text = "pale", default_text(spec)
        info = "not entered" + (f"; taken as {text}" if text else "")
    stands = spec.default if value is None or value == "" else value
    found = None if bad or stands is None else reading(spec, stands)
    if found is not None and tone != "pale":
        text = found[0]
    if lent:
        info += "; from the shelf"
    number, kind = found[1:] if found else (None, "")
    return Cell(text, path, align, tone, "!" if bad else "", info, value=number, kind=kind)


def scaled(spec: Any, value: Any) -> str | None:
    """A stored value in engineering units, None where it is no quantity or cannot be read."""
    found = reading(spec, value)
    return found[0] if found else None


def reading(spec: Any, value: Any) -> tuple[str, float | None, str] | None:
    """A stored value in engineering units, with its number and kind; None if it is no quantity or cannot be read."""
    from budget.project import read, schema

    try:
        if spec is schema.LOAD:
            sort, number = read.read_load(value)
            kind = "power" if sort == "power" else "ratio"
            return "off" if sort == "off" else quantity.show(number, quantity.KINDS[kind]), number, kind
        cell = spec.fields[-1] if spec.kind == schema.CURVE and not isinstance(value, list) else spec
        if cell.kind in quantity.KINDS:
            number = read.quantity_value(cell, value)
            if cell.kind == "time" and number >= 60.0:
                return f"{number / 3600:.4g} h" if number >= 3600.0 else f"{number / 60:.4g} min", number, "time"
            return quantity.show(number, quantity.KINDS[cell.kind]), number, cell.kind
    except ValueError:
        return None
    return None


def default_text(spec: Any) -> str:
    """The default of a field in words."""
    if isinstance(spec.default, float) and spec.kind in quantity.KINDS:
        return quantity.show(spec.default, quantity.KINDS[spec.kind])
    if isinstance(spec.default, str):
        return spec.default
    return spec.otherwise.replace("_", " ") if spec.otherwise else ""
