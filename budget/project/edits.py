"""What a user does to a document: each function takes one and returns another; nothing here knows a screen.

A cell is named by its path: keys and indices from the top of the file, with one liberty: an element of a ladder is one
table whose ``place`` is a field, so ("filter", 0, "dm", 2, "L") is the L of the third element, be it series or shunt.
"""

from __future__ import annotations

import copy
import re
from collections.abc import Iterable, Mapping
from functools import lru_cache
from types import MappingProxyType
from typing import Any

from budget import quantity
from budget.project import document as doc
from budget.project import read, schema, starter, toml_dump
from budget.project.build import Shelf
from budget.project.document import Document, Path, Tree
from budget.project.problems import ProjectError, found
from budget.project.schema import Field

PLACES = ("series", "shunt")
_LISTS = (schema.TABLES, schema.LADDER, schema.ROWS, schema.CURVE)
_STRANGE = "this cell stands in something that is not a table; mend that first."


@lru_cache(maxsize=8192)
def spec_at(path: Path) -> Field | None:
    """The schema's field for a cell, ``None`` for a path that is no cell."""
    fields, rest = _table_of(path)
    spec: Field | None = None
    for key in rest:
        if spec is not None and spec.kind == schema.LOADS:
            return schema.LOAD if isinstance(key, str) else None
        if isinstance(key, int):
            if spec is None or spec.kind not in _LISTS:
                return None
            if spec.kind in (schema.ROWS, schema.CURVE) and fields is spec.fields:  # a column of the row
                spec = fields[key] if 0 <= key < len(fields) else None
                fields = ()
                continue
            fields = spec.fields  # of the item
            continue
        spec = next((f for f in fields if f.key == key), None)
        if spec is None:
            return None
        fields = spec.fields if spec.kind == schema.TABLE else ()
    return spec


def _table_of(path: Path) -> tuple[tuple[Field, ...], Path]:
    if len(path) >= 3 and path[0] == "shelf":
        return (schema.shelf_table(str(path[1])).fields, path[3:]) if path[1] in schema.SHELVES else ((), ())
    if path and path[0] == "shelf_files":
        return (schema.SHELF_FILES,), path
    table = schema.TABLES_BY_KEY.get(str(path[0])) if path else None
    if table is None:
        return (), ()
    return table.fields, path[2:] if table.many else path[1:]


def owner(path: Path) -> Path:
    """The row, shelf part or single table that a cell belongs to."""
    if path and path[0] == "shelf":
        return path[:3]
    table = schema.TABLES_BY_KEY.get(str(path[0])) if path else None
    return path[:2] if table is not None and table.many else path[:1]


def stored_path(document: Document, path: Path) -> Path:
    """Where the value of a cell stands in the file: the path with ``series`` or ``shunt`` put in."""
    base = owner(path)
    if len(path) == len(base) + 3 and str(path[len(base)]) in ("dm", "cm", "input"):
        element = doc.get(document, path[: len(base) + 2])
        if isinstance(element, dict) and path[-1] != "place":
            return (*path[:-1], _place(element), path[-1])
    return path


def _place(element: Any) -> str:
    return next((p for p in PLACES if isinstance(element, dict) and p in element), "series")


def cell_of(path: Path) -> Path:
    """The cell a problem is about: its path without ``series`` and ``shunt``."""
    return tuple(k for i, k in enumerate(path) if not (k in PLACES and i and isinstance(path[i - 1], int)))


def part_of(document: Document, shelves: Iterable[Shelf], path: Path) -> Tree:
    """The shelf part that lends its fields to the row of ``path``; an empty table if none does."""
    base = owner(path)
    if not base or base[0] not in schema.SHELVES:
        return {}
    name = doc.get(document, (*base, "part"))
    if not isinstance(name, str) or not name:
        return {}
    for data in (document.data, *(s.data for s in shelves)):
        shelf = data.get("shelf")
        named = shelf.get(base[0]) if isinstance(shelf, dict) else None
        if isinstance(named, dict) and isinstance(named.get(name), dict):
            return {k: v for k, v in named[name].items() if k not in ("id", "part", "filter")}
    return {}


def shelf_part(document: Document, shelves: Iterable[Shelf], path: Path) -> Tree:
    """The fields of the shelf part at ``path``, ("shelf", table, name), in this file or a shelf file."""
    for data in (document.data, *(s.data for s in shelves)):
        found = doc.get(Document(data), path) if path[:1] == ("shelf",) else None
        if isinstance(found, dict):
            return found
    return {}


def shelf_names(document: Document, shelves: Iterable[Shelf], key: str) -> tuple[str, ...]:
    """Names of all shelf parts for ``key``, filter or converter."""
    names: dict[str, None] = {}
    for data in (document.data, *(s.data for s in shelves)):
        shelf = data.get("shelf")
        named = shelf.get(key) if isinstance(shelf, dict) else None
        names.update(dict.fromkeys(named if isinstance(named, dict) else ()))
    return tuple(names)


def value_at(document: Document, shelves: Iterable[Shelf], path: Path) -> tuple[Any, bool]:
    """The value of a cell as stored, and whether it comes from the shelf."""
    base = owner(path)
    rest = path[len(base) :]
    row = doc.get(document, base)
    if rest and (row is None or (isinstance(row, dict) and rest[0] not in row)):
        part = part_of(document, shelves, path) if row is not None else shelf_part(document, shelves, base)
        if rest[0] in part:
            lent = Document({"row": part})
            fake: Path = ("row", *rest)
            if len(rest) == 3 and rest[0] in ("dm", "cm", "input"):
                element = doc.get(lent, fake[:-1])
                if rest[-1] == "place":
                    return _place(element), True
                fake = (*fake[:-1], _place(element), rest[-1])
            return doc.get(lent, fake), True
    if rest and rest[-1] == "place":
        return _place(doc.get(document, path[:-1])), False
    return doc.get(document, stored_path(document, path)), False


def typed(value: Any) -> str:
    """A stored value as the text one would type to get it."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, list):
        return ", ".join(typed(v) for v in value)
    try:
        return str(value)
    except ValueError:  # Python refuses to write out a number of thousands of digits
        return hex(value)


def stored(spec: Field, text: str) -> Any:
    """Typed text as the value to store; raises ProjectError with a sentence where the field cannot take it."""
    text = text.strip()
    if spec is schema.LOAD:
        return _checked(text, read.read_load)
    if spec.kind in (schema.TEXT, schema.PART, schema.FILTER):
        if any(not c.isprintable() for c in text) or len(text) > 2000:
            raise ProjectError("a text of printable characters on one line was expected.")
        return text
    if spec.kind == schema.IDENT:
        fault = read.ident_fault(text)
        if fault:
            raise ProjectError(fault)
        return text
    if spec.kind == schema.CHOICE:
        if text not in spec.choices:
            raise ProjectError(f"{found(text)} was found; {read.expectation(spec)} was expected.")
        return text
    if spec.kind == schema.TEXTS:
        if not text.isprintable():
            raise ProjectError("names of printable characters, with commas between, were expected.")
        return [part.strip() for part in text.split(",") if part.strip()]
    cell = spec.fields[-1] if spec.kind == schema.CURVE else spec
    if cell.kind not in quantity.KINDS:
        raise ProjectError(f"{read.expectation(spec)} was expected; its own lines are below.")
    return _checked(text, lambda raw: read.quantity_value(cell, raw))


def _checked(text: str, reader: Any) -> Any:
    """The number or text to store, after ``reader`` has accepted it; a number only where that loses nothing typed."""
    raw: Any = text
    if re.fullmatch(r"0|-?[1-9]\d{0,14}", text, re.ASCII):
        raw = int(text)
    elif re.fullmatch(r"-?\d{1,15}\.\d{1,15}", text, re.ASCII) and repr(float(text)) == text:
        raw = float(text)
    try:
        reader(raw)
    except ValueError as error:
        raise ProjectError(str(error)) from error
    return raw


def enter(document: Document, shelves: Iterable[Shelf], path: Path, text: str) -> Document:
    """A document with ``text`` typed into the cell ``path``; empty text clears it.

    Raises ProjectError with a sentence where the cell cannot take it; an id is renamed everywhere it is used.
    """
    spec = spec_at(path)
    if spec is None:
        raise ProjectError("this cell is calculated and cannot be typed into.")
    if isinstance(path[-1], int) and spec.kind in _LISTS:
        raise ProjectError("this is a whole row; its own cells can be typed into.")
    if not text.strip():
        return clear(document, path)
    if path[0] == "shelf" and doc.get(document, owner(path)) is None:
        raise ProjectError("this part is kept in another file; D on the shelf copies it into this one.")
    value = stored(spec, text)
    if spec.kind == schema.FILTER and value not in ("", *ids(document, "filter")):
        names = ", ".join(ids(document, "filter")) or "none"
        raise ProjectError(f"{found(value)} does not exist; the filters are: {names}.")
    if spec.kind == schema.PART and value not in shelf_names(document, shelves, str(path[0])):
        raise ProjectError(f"{found(value)} is not on the shelf.")
    if spec.kind == schema.IDENT:
        return rename(document, path, value)
    owned = own(document, shelves, path)
    if path[-1] == "place":
        element = doc.get(owned, path[:-1])
        if not isinstance(element, dict):
            raise ProjectError(_STRANGE)
        if value in element and _place(element) == value:
            return document
        rest = {k: v for k, v in element.items() if k not in PLACES}
        return doc.put(owned, path[:-1], {**rest, value: element.get(_place(element), {})})
    if _stands(owned, stored_path(owned, path), value):
        return document
    try:
        owned = _with_needed(owned, path)
        return doc.put(owned, stored_path(owned, path), value)
    except KeyError as error:
        raise ProjectError(_STRANGE) from error


def _stands(document: Document, path: Path, value: Any) -> bool:
    """Whether exactly this value is stored there already."""
    nothing = object()
    return toml_dump.same(doc.get(document, path, nothing), value)


def own(document: Document, shelves: Iterable[Shelf], path: Path) -> Document:
    """A document in which the row has a copy of the nested field that its shelf part lends it."""
    base = owner(path)
    rest = path[len(base) :]
    row = doc.get(document, base)
    if len(rest) > 1 and isinstance(row, dict) and rest[0] not in row:
        part = part_of(document, shelves, path)
        if rest[0] in part:
            return doc.put(document, (*base, rest[0]), copy.deepcopy(part[str(rest[0])]))
    return document


def _with_needed(document: Document, path: Path) -> Document:
    """Where a first field of a nested table is typed, the others it cannot do without get typical values."""
    key = path[-2] if len(path) >= 2 else ""
    spec = spec_at(path[:-1]) if isinstance(key, str) else None
    if spec is not None and spec.kind == schema.TABLE and not doc.get(document, path[:-1]):
        needed = {f.key for f in spec.fields if f.required}
        values = {k: v for k, v in starter.NESTED.get(spec.key, {}).items() if k in needed}
        return doc.put(document, path[:-1], values) if values else document
    return document


def clear(document: Document, path: Path) -> Document:
    """A document with the cell emptied: back to its default, or to what the shelf lends.

    Raises ProjectError for a field the row cannot do without.
    """
    spec = spec_at(path)
    if spec is None or path[-1] == "place":
        raise ProjectError("this cell cannot be emptied.")
    if isinstance(path[-1], int) or spec.kind == schema.IDENT:
        raise ProjectError(f"{spec.title} cannot be left empty; {read.expectation(spec)} was expected.")
    if spec.kind == schema.FILTER:
        at = stored_path(document, path)
        return doc.put(document, at, "") if doc.get(document, at, "") != "" else document
    nested = spec.kind != schema.LOADS and len(path) > len(owner(path)) + 1
    if spec.required and (nested or not _lent(document, path)):
        raise ProjectError(f"{spec.title} cannot be left empty; {read.expectation(spec)} was expected.")
    at = stored_path(document, path)
    dropped = doc.drop(document, at)
    # An element of a ladder and a shelf part stay what they are when their last field has gone.
    whole = at[:-1] if len(at) > len(path) else owner(path) if path[0] == "shelf" else ()
    return (
        doc.put(dropped, whole, {})
        if whole and dropped is not document and doc.get(dropped, whole) is None
        else dropped
    )


def _lent(document: Document, path: Path) -> bool:
    return bool(doc.get(document, (*owner(path), "part")))


def ids(document: Document, key: str) -> tuple[str, ...]:
    """The ids of all rows of a table that have one."""
    rows = document.data.get(key)
    column = "name" if key == "limit" else "id"
    if not isinstance(rows, list):
        return ()
    return tuple(r[column] for r in rows if isinstance(r, dict) and isinstance(r.get(column), str))


def _taken(document: Document, key: str) -> tuple[str, ...]:
    """The ids that a new row of a table cannot have."""
    if key in schema.SHELVES:
        return (*ids(document, "filter"), *ids(document, "converter"))
    return (*ids(document, key), *(schema.LIMIT_SETS if key == "limit" else ()))


def _rows(document: Document, key: str) -> list[tuple[int, Tree]]:
    """The rows of a table with their numbers; whatever else stands there is none."""
    rows = document.data.get(key)
    return [(i, r) for i, r in enumerate(rows) if isinstance(r, dict)] if isinstance(rows, list) else []


def free_id(document: Document, key: str, like: str) -> str:
    """An id not taken, the stem of ``like`` with the first number that is free: FL1 -> FL4."""
    taken = _taken(document, key)
    stem = like.rstrip("0123456789")[:30] or "row"
    number = 1
    while f"{stem}{number}" in taken:
        number += 1
    return f"{stem}{number}"


def rename(document: Document, path: Path, new: str) -> Document:
    """A document with the id at ``path`` renamed wherever it is used; raises ProjectError where it is taken."""
    key, index = str(path[0]), path[1]
    column = "name" if key == "limit" else "id"
    old = doc.get(document, (key, index, column))
    fault = read.ident_fault(new)
    if fault:
        raise ProjectError(fault)
    if new == old:
        return document
    if new in _taken(document, key):
        raise ProjectError(f"{found(new)} is taken; a new name was expected.")
    first = next((i for i, row in _rows(document, key) if row.get(column) == old), None)
    try:
        document = doc.put(document, (key, index, column), new)
    except KeyError as error:
        raise ProjectError(_STRANGE) from error
    if not isinstance(old, str) or index != first:  # of two rows with one id, others mean the first
        return document
    if key == "filter":
        for i, row in _rows(document, "converter"):
            if row.get("filter") == old:
                document = doc.put(document, ("converter", i, "filter"), new)
    elif key == "converter":
        for i, row in _rows(document, "case"):
            loads = row.get("load")
            if isinstance(loads, dict) and old in loads:
                renamed = {(new if k == old else k): v for k, v in loads.items() if k != new}
                document = doc.put(document, ("case", i, "load"), renamed)
    elif key == "limit":
        names = doc.get(document, ("rules", "emissions"))
        if isinstance(names, list) and old in names:
            document = doc.put(document, ("rules", "emissions"), [new if n == old else n for n in names])
    return document


def new_row(document: Document, key: str, at: int, **values: Any) -> tuple[Document, Path]:
    """A document with a new row of typical values before index ``at``, and the path of the row."""
    row = copy.deepcopy({**starter.ROWS[key], **values})
    column = "name" if key == "limit" else "id"
    row[column] = free_id(document, key, row[column])
    return insert_row(document, (key, at), row)


def loads_of(document: Document, path: Path) -> dict[str, Any]:
    """What each case asks of the converter at ``path``, by the id of the case."""
    ident = doc.get(document, (*path, "id"))
    cases = document.data.get("case")
    rows = [case for case in cases if isinstance(case, dict)] if isinstance(cases, list) else []
    loads = {str(case.get("id")): case.get("load") for case in rows}
    return {case: load[ident] for case, load in loads.items() if isinstance(load, dict) and ident in load}


def insert_row(
    document: Document, path: Path, row: Tree, loads: Mapping[str, Any] = MappingProxyType({})
) -> tuple[Document, Path]:
    """A document with ``row`` put in at ``path``; its id is numbered on where it is taken.

    ``loads`` (by the id of a case) is what the cases shall ask of it, for a converter.
    """
    key = str(path[0])
    column = "name" if key == "limit" else "id"
    if len(path) == 2 and key in schema.TABLES_BY_KEY:
        ident = row.get(column)
        if not isinstance(ident, str) or ident in _taken(document, key):
            row = {**row, column: free_id(document, key, ident if isinstance(ident, str) else key)}
    try:
        document = doc.insert(document, path, copy.deepcopy(row))
        for index, case in enumerate(document.data.get("case", []) if loads else ()):
            if isinstance(case, dict) and case.get("id") in loads:
                document = doc.put(document, ("case", index, "load", row[column]), loads[str(case["id"])])
        return document, path
    except KeyError as error:
        raise ProjectError("no row can be put in here: what stands there is not a list; mend that first.") from error


def remove_row(document: Document, path: Path) -> Document:
    """A document without the row at ``path``; what referred to it lets go of it."""
    key = str(path[0])
    ident = doc.get(document, (*path, "name" if key == "limit" else "id"))
    document = doc.remove(document, path)
    if len(path) != 2 or not isinstance(ident, str) or ident in ids(document, key):
        return document
    if key == "filter":
        for i, row in _rows(document, "converter"):
            if row.get("filter") == ident:
                document = doc.put(document, ("converter", i, "filter"), "")
    elif key == "converter":
        for i, row in _rows(document, "case"):
            loads = row.get("load")
            if isinstance(loads, dict) and ident in loads:
                document = doc.drop(document, ("case", i, "load", ident))
    elif key == "limit":
        names = doc.get(document, ("rules", "emissions"))
        if isinstance(names, list) and ident in names:
            document = doc.put(document, ("rules", "emissions"), [n for n in names if n != ident])
    return document


def new_item(document: Document, shelves: Iterable[Shelf], path: Path) -> tuple[Document, Path]:
    """A document with one more item in a nested list (ladder, outputs, rows of numbers), and the item's path.

    ``path`` is the list itself (then the item starts it, or joins its end) or an item (then it goes behind that).
    """
    spec = spec_at(path[: len(owner(path)) + 1])
    if spec is None or spec.kind not in (*_LISTS, schema.TABLE):
        raise ProjectError("there is no list here to add to.")
    try:
        return _with_item(document, shelves, path, spec)
    except KeyError as error:
        raise ProjectError(_STRANGE) from error


def _with_item(document: Document, shelves: Iterable[Shelf], path: Path, spec: Field) -> tuple[Document, Path]:
    base = owner(path)
    at, rest = path[: len(base) + 1], path[len(base) :]
    document = own(document, shelves, (*at, 0))
    old = doc.get(document, at)
    if spec.kind == schema.TABLE:
        if isinstance(old, dict):
            raise ProjectError(f"{spec.title} is there already; its lines are below.")
        return doc.put(document, at, copy.deepcopy(starter.NESTED[spec.key])), at
    if spec.kind == schema.CURVE and old is not None and not isinstance(old, list):
        rows = [["20 %", old], ["100 %", old]]  # the one number becomes a curve with the same value at both ends
        return doc.put(document, at, rows), (*at, 0)
    if not isinstance(old, list) or not old:
        return doc.put(document, at, copy.deepcopy(starter.LISTS[spec.key])), (*at, 0)
    index = len(old)
    if len(rest) > 1 and isinstance(rest[1], int) and 0 <= rest[1] < len(old):
        index = rest[1] + 1
    plain = spec.kind in (schema.ROWS, schema.CURVE)
    model = _between(spec, old, index) if plain else copy.deepcopy(starter.LISTS[spec.key][0])
    return doc.insert(document, (*at, index), model), (*at, index)


def _between(spec: Field, rows: list[Any], index: int) -> Any:
    """A row to put in before ``index``: the one above it, with a first column between its neighbours or beyond them.

    Rows that must rise still do; where a neighbour cannot be read, it is a copy of the row above.
    """
    above = copy.deepcopy(rows[index - 1])
    column = spec.fields[0]
    try:
        low = read.quantity_value(column, rows[index - 1][0])
        high = read.quantity_value(column, rows[index][0]) if index < len(rows) else 0.0
    except (ValueError, TypeError, LookupError):
        return above
    if column.kind == "ratio":
        middle = (low + high) / 2 if high else low * 1.1
    else:
        middle = (low * high) ** 0.5 if high else low * 2
    return [read.show_limit(middle, column.kind), *above[1:]] if isinstance(above, list) else above


def to_filter(document: Document, index: int, ident: str) -> Document:
    """A document with converter number ``index`` moved behind filter ``ident`` ("": behind none)."""
    if doc.get(document, ("converter", index, "filter"), "") == ident:
        return document
    return doc.put(document, ("converter", index, "filter"), ident)
