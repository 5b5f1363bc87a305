"""Values of the file -> SI values, field by field, as the schema describes them.

A reader never stops at the first mistake: it notes each with its path, relative to the row it reads, and goes on with
the field's default. A nested field is unreadable as a whole where a cell that it needs is. ``Reading.broken`` says that
the row lacks something it cannot be calculated without.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any

from budget import quantity
from budget.project import schema
from budget.project.document import Path
from budget.project.problems import Problem, found, printable
from budget.project.schema import Field

LARGEST, SMALLEST = 1e15, 1e-24  # in SI units, of any quantity: what lies beyond would only make overflows
# A henry is a large choke, a farad a large bank; a million of them only make poles that no arithmetic can tell apart.
LARGEST_OF = {"inductance": 1e6, "capacitance": 1e6}
MAX_ROWS = 20_000  # of one table of numbers; a longer one is a mistake
MAX_LADDER = 200  # elements of one ladder


@dataclass(slots=True)
class Reading:
    """What reading one table gave: values by key, and what was wrong on the way."""

    values: dict[str, Any] = field(default_factory=dict)
    problems: list[Problem] = field(default_factory=list)
    broken: bool = False

    def fault(self, path: Path, text: str, *, error: bool = True) -> None:
        self.problems.append(Problem(path, text, error))


def expectation(spec: Field) -> str:
    """What a field takes, in words."""
    if spec.kind == schema.CHOICE:
        return "one of " + ", ".join(spec.choices)
    words = {
        schema.TEXT: "a text in quotes",
        schema.IDENT: "a short name in quotes",
        schema.FILTER: "the id of a filter in quotes",
        schema.PART: "the name of a shelf part in quotes",
        schema.TEXTS: "a list of names",
        schema.TABLE: "a table with " + ", ".join(f.key for f in spec.fields),
        schema.TABLES: "a list of tables with " + ", ".join(f.key for f in spec.fields),
        schema.LADDER: "a list of elements such as { series = { L = '4.7 uH' } } or { shunt = { C = '2.2 uF' } }",
        schema.ROWS: "a list of rows [" + ", ".join(f.key for f in spec.fields) + "]",
        schema.CURVE: "a number, or a list of rows [" + ", ".join(f.key for f in spec.fields) + "]",
        schema.LOADS: "a table of converter ids with a share, a power or 'off'",
    }
    if spec.kind in words:
        return words[spec.kind]
    return f"{quantity.KINDS[spec.kind].label}, such as {quantity.KINDS[spec.kind].example}"


def quantity_value(spec: Field, raw: Any) -> float:
    """The SI value of a quantity cell; raises ValueError with a sentence for the user."""
    kind = quantity.KINDS[spec.kind]
    if isinstance(raw, str):
        value = quantity.parse(raw, kind).si
    elif isinstance(raw, int | float) and not isinstance(raw, bool):
        if isinstance(raw, int) and abs(raw) > 10**300:
            raise ValueError(f"{found(raw)} is too large; {expectation(spec)} was expected.")
        value = float(raw)
        if not math.isfinite(value):
            raise ValueError(f"{found(raw)} is not a number to calculate with; {expectation(spec)} was expected.")
    else:
        raise ValueError(f"{found(raw)} was found; {expectation(spec)} was expected.")
    check_limits(spec, value, raw)
    return value + 0.0  # a zero has no sign


def check_limits(spec: Field, value: float, raw: Any) -> None:
    """Raise ValueError, a sentence, where ``value`` lies outside the limits of its field, or of what is real."""
    if abs(value) > LARGEST_OF.get(spec.kind, LARGEST) or 0.0 < abs(value) < SMALLEST:
        raise ValueError(f"{found(raw)} is beyond anything on a real bus; {expectation(spec)} was expected.")
    low_missed = spec.low is not None and (value <= spec.low if spec.above else value < spec.low)
    high_missed = spec.high is not None and (value >= spec.high if spec.below else value > spec.high)
    if low_missed or high_missed:
        raise ValueError(f"{found(raw)} is out of range; {schema.limits_text(spec, show_limit)} was expected.")


def show_limit(value: float, kind: str) -> str:
    """A limit or default of the schema as text."""
    return quantity.show(value, quantity.KINDS[kind], 6)


def read_table(fields: Iterable[Field], raw: dict[str, Any], out: Reading, at: Path = ()) -> dict[str, Any]:
    """Read the known ``fields`` of the table ``raw`` at the relative path ``at``; unknown keys become warnings."""
    values: dict[str, Any] = {}
    known = set()
    for spec in fields:
        known.add(spec.key)
        if spec.key not in raw:
            if spec.required:
                out.broken = True
                out.fault((*at, spec.key), f"is missing; {expectation(spec)} was expected.")
            values[spec.key] = spec.default
            continue
        value, good = read_field(spec, raw[spec.key], out, (*at, spec.key))
        if not good and spec.required:
            out.broken = True
        values[spec.key] = value if good else spec.default
    for key in raw:
        if key not in known:
            out.fault((*at, key), "is an unknown key; it is kept, and not used.", error=False)
    return values


def read_field(spec: Field, raw: Any, out: Reading, at: Path) -> tuple[Any, bool]:
    """The value of one field and whether it could be read: a reader returns None where it could not."""
    reader = _READERS.get(spec.kind)
    if reader is not None:
        value = reader(spec, raw, out, at)
        return value, value is not None
    try:
        return quantity_value(spec, raw), True
    except ValueError as error:
        out.fault(at, str(error))
        return None, False


def _text(spec: Field, raw: Any, out: Reading, at: Path) -> str | None:
    if not isinstance(raw, str) or (spec.kind == schema.CHOICE and raw not in spec.choices):
        out.fault(at, f"{found(raw)} was found; {expectation(spec)} was expected.")
        return None
    fault = ident_fault(raw) if spec.kind == schema.IDENT else ""
    if fault:
        out.fault(at, fault)
        return None
    return raw


def ident_fault(text: str) -> str:
    """Why ``text`` cannot serve as an id, as a sentence; empty if it can."""
    if not text.strip():
        return "is empty; a short name such as 'CV1' was expected."
    if text != text.strip() or not text.isprintable() or len(text) > 40:
        return f"'{printable(text)}' cannot serve as a name; at most 40 printable characters were expected."
    return ""


def _texts(spec: Field, raw: Any, out: Reading, at: Path) -> tuple[str, ...] | None:
    if not isinstance(raw, list) or not all(isinstance(item, str) for item in raw):
        out.fault(at, f"{found(raw)} was found; {expectation(spec)} was expected.")
        return None
    return tuple(raw)


def _table(spec: Field, raw: Any, out: Reading, at: Path) -> dict[str, Any] | None:
    if not isinstance(raw, dict):
        out.fault(at, f"{found(raw)} was found; {expectation(spec)} was expected.")
        return None
    inner = Reading(problems=out.problems)
    values = read_table(spec.fields, raw, inner, at)
    return None if inner.broken else values


def _list(spec: Field, raw: Any, out: Reading, at: Path) -> list[Any] | None:
    if not isinstance(raw, list):
        out.fault(at, f"{found(raw)} was found; {expectation(spec)} was expected.")
        return None
    most = MAX_LADDER if spec.kind in (schema.LADDER, schema.TABLES) else MAX_ROWS
    if len(raw) > most:
        out.fault(at, f"{len(raw)} rows were found; at most {most} were expected.")
        return None
    return raw


def _tables(spec: Field, raw: Any, out: Reading, at: Path) -> list[dict[str, Any]] | None:
    items = _list(spec, raw, out, at)
    if items is None:
        return None
    if not items and spec.required:
        out.fault(at, f"an empty list was found; {expectation(spec)} was expected.")
        return None
    rows = [_table(spec, item, out, (*at, index)) for index, item in enumerate(items)]
    good = [row for row in rows if row is not None]
    return good if len(good) == len(rows) else None


def _ladder(spec: Field, raw: Any, out: Reading, at: Path) -> list[dict[str, Any]] | None:
    elements = []
    parts = tuple(f for f in schema.BRANCH if f.key != "place")
    items = _list(spec, raw, out, at)
    good = items is not None
    for index, item in enumerate(items or ()):
        where = (*at, index)
        places = [p for p in ("series", "shunt") if isinstance(item, dict) and p in item]
        if len(places) != 1 or not isinstance(item[places[0]], dict):
            out.fault(where, "an element is { series = {...} } or { shunt = {...} }, one of the two.")
            good = False
            continue
        place = places[0]
        before = len(out.problems)
        for key in item:
            if key not in (place, "note"):
                out.fault((*where, key), "is an unknown key; it is kept, and not used.", error=False)
        values = read_table(parts, item[place], out, (*where, place))
        _check_branch(place, values, out, (*where, place))
        # Whatever is wrong with an element, the ladder would be another one without it.
        good = good and not any(p.error and p.path[-1] != "note" for p in out.problems[before:])
        elements.append({"place": place, **values})
    return elements if good else None


def _check_branch(place: str, values: dict[str, Any], out: Reading, at: Path) -> None:
    if place == "series" and values["C"] is not None:
        out.fault((*at, "C"), "a series element with C would block the current; C belongs into a shunt.")
    if place == "shunt" and values["C"] is None and not any(p.path == (*at, "C") for p in out.problems):
        out.fault((*at, "C"), "is missing; a shunt without C would short the line. A capacitance was expected.")
    if values["Rp"] is not None and values["L"] is None and not any(p.path == (*at, "L") for p in out.problems):
        out.fault((*at, "Rp"), "stands without L; Rp lies across the inductance, so L was expected beside it.")
    if values["Cp"] is not None and values["L"] is None and not any(p.path == (*at, "L") for p in out.problems):
        out.fault(
            (*at, "Cp"), "stands without L; it is taken as a capacitor in series, at high frequency.", error=False
        )
    if place == "shunt" and values["saturation"] is not None:
        out.fault((*at, "saturation"), "is for series elements; none was expected in a shunt.")


def _rows(spec: Field, raw: Any, out: Reading, at: Path) -> tuple[tuple[float, ...], ...] | None:
    rows = []
    columns = spec.fields
    items = _list(spec, raw, out, at)
    if items is None:
        return None
    for index, item in enumerate(items):
        if not isinstance(item, list) or len(item) != len(columns):
            names = ", ".join(f.key for f in columns)
            count = f"{len(item)} values" if isinstance(item, list) else found(item)
            out.fault((*at, index), f"{count} were found; a row [{names}] was expected.")
            continue
        row = []
        for column, (part, cell) in enumerate(zip(columns, item, strict=True)):
            try:
                row.append(quantity_value(part, cell))
            except ValueError as error:
                out.fault((*at, index, column), str(error))
        if len(row) == len(columns):
            rows.append(tuple(row))
    return tuple(rows) if len(rows) == len(items) else None


def _curve(spec: Field, raw: Any, out: Reading, at: Path) -> tuple[tuple[float, ...], ...] | None:
    if isinstance(raw, list):
        if not raw:
            out.fault(at, f"an empty list was found; {expectation(spec)} was expected.")
            return None
        rows = _rows(spec, raw, out, at)
        return rows if rows and rising(rows, out, at, "share") else None
    try:
        return ((1.0, quantity_value(spec.fields[-1], raw)),)
    except ValueError as error:
        out.fault(at, str(error))
        return None


def rising(rows: tuple[tuple[float, ...], ...], out: Reading, at: Path, what: str, *, equal: bool = False) -> bool:
    """Whether the first column rises; each row where not is noted (``equal``: two rows at one value are a step)."""
    good = True
    for index, (one, two) in enumerate(itertools.pairwise(rows)):
        if two[0] < one[0] or (two[0] == one[0] and not equal):
            good = False
            out.fault((*at, index + 1, 0), f"the rows must rise in {what}; this one is not above the row before it.")
    return good


def read_load(raw: Any) -> tuple[str, float]:
    """A load of a case as (kind, value): share, power or off; raises ValueError with a sentence."""
    if isinstance(raw, str):
        if raw.strip().lower() == "off":
            return "off", 0.0
        value = quantity.parse(raw, quantity.KINDS["ratio"], quantity.KINDS["power"])
        kind, number = ("power" if value.kind.name == "power" else "share"), value.si
    elif isinstance(raw, int | float) and not isinstance(raw, bool) and abs(raw) < 1e300:
        kind, number = "share", float(raw)
    else:
        raise ValueError(f"{found(raw)} was found; a share (60 %), an output power (12 W) or 'off' was expected.")
    if number < 0:
        raise ValueError(f"{found(raw)} is out of range; a share (60 %), an output power (12 W) or 'off' was expected.")
    return kind, number + 0.0


def _loads(spec: Field, raw: Any, out: Reading, at: Path) -> tuple[tuple[str, tuple[str, float]], ...] | None:
    """The loads that can be read; a converter whose load cannot is as one that is not named."""
    if not isinstance(raw, dict):
        out.fault(at, f"{found(raw)} was found; {expectation(spec)} was expected.")
        return None
    loads = []
    for ident, cell in raw.items():
        try:
            loads.append((ident, read_load(cell)))
        except ValueError as error:
            if ident != "note":  # which every table may hold
                out.fault((*at, ident), str(error))
    return tuple(loads)


_READERS: dict[str, Callable[[Field, Any, Reading, Path], Any]] = {
    schema.TEXT: _text,
    schema.IDENT: _text,
    schema.CHOICE: _text,
    schema.FILTER: _text,
    schema.PART: _text,
    schema.TEXTS: _texts,
    schema.TABLE: _table,
    schema.TABLES: _tables,
    schema.LADDER: _ladder,
    schema.ROWS: _rows,
    schema.CURVE: _curve,
    schema.LOADS: _loads,
}
