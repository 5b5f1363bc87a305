"""Cells by a text one can type: ``CV3.output.0.current``, ``climb.load.CV3``, ``bus.resistance``.

The first part is the id of a filter or converter, of a load case or a limit line, or the name of a single table; then
come fields, and for the items of a list their numbers from 0. Where an id says two things, ``converter.``, ``filter.``,
``case.`` or ``limit.`` before it says which; ``converter.#2`` is the second row, whatever it is called. A name with
dots in it stands in double quotes: ``"FL.1".dm.0.L``.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from budget import quantity
from budget.project import document as doc
from budget.project import edits, read, schema
from budget.project.build import Shelf
from budget.project.document import Document, Path
from budget.project.problems import ProjectError, found, place, printable
from budget.project.schema import Field

_PART = re.compile(r'"((?:[^"\\]|\\.)*)"|([^."]+)')
_LISTS = (schema.TABLES, schema.LADDER, schema.ROWS, schema.CURVE)
_MANY = tuple(key for key, table in schema.TABLES_BY_KEY.items() if table.many)
_SINGLE = tuple(key for key, table in schema.TABLES_BY_KEY.items() if not table.many)
_SHOWN = 12  # names of a list in an error


@dataclass(frozen=True, slots=True)
class Cell:
    """A cell that holds a number: ``spec`` says which numbers it takes, ``value`` what it holds in SI units.

    ``value`` is the field's default where nothing was entered, and None where there is no default either.
    """

    path: Path
    text: str
    spec: Field
    value: float | None

    def show(self, value: float) -> str:
        """A value as one would type it into the cell."""
        return quantity.show(value, quantity.KINDS[self.spec.kind], 6)

    def typed(self, value: float) -> str:
        """A value as text that reads back to the last bit."""
        return f"{value!r} W" if self.spec.key == "load" and self.spec.kind == "power" else repr(value)


def resolve(document: Document, shelves: Iterable[Shelf], text: str) -> Path:
    """The path of the cell that ``text`` names.

    Raises ProjectError, a sentence with what is possible, where there is no such cell.
    """
    shelves = tuple(shelves)
    parts = _split(text)
    fault: ProjectError | None = None
    for base, rest in _bases(document, parts):
        try:
            return _walk(document, shelves, base, rest, text)
        except ProjectError as error:
            fault = fault or error
    if fault is not None:
        raise fault
    names = [_quoted(name) for key in _MANY for name in edits.ids(document, key)]
    raise ProjectError(
        f"{found(text)}: nothing here is called {found(parts[0])}; a path starts with one of: "
        f"{_listed([*_SINGLE, *names], 40)}."
    )


def text_of(document: Document, path: Path) -> str:
    """The shortest text that ``resolve`` reads as ``path``: with the table in front where an id is not enough."""
    base = edits.owner(path)
    rest = ".".join(_words(path, base))
    for head in _heads(document, base):
        text = ".".join(p for p in (head, rest) if p)
        found_base = next((b for b, more in _bases(document, _split(text)) if len(more) == len(path) - len(base)), None)
        if found_base == base:
            return text
    return ".".join([*map(str, base), rest])


def cell_at(document: Document, shelves: Iterable[Shelf], path: Path) -> Cell:
    """The number at ``path``; raises ProjectError, a sentence, where the cell holds anything else."""
    shelves = tuple(shelves)
    where = place(document, path)
    spec = edits.spec_at(path)
    if spec is None:
        raise ProjectError(f"{where} is no cell; the cell of a number was expected.")
    raw = edits.value_at(document, shelves, path)[0]
    if spec is schema.LOAD:
        return _load_cell(document, path, raw, where)
    if spec.kind == schema.CURVE and not isinstance(raw, list) and not isinstance(path[-1], int):
        spec = spec.fields[-1]
    if spec.kind in schema.PLAIN:
        raise ProjectError(f"{where} holds a text; the cell of a number was expected.")
    if spec.kind not in quantity.KINDS:
        raise ProjectError(f"{where} holds several cells; one of them was expected, the cell of a number.")
    if raw is None:
        value = float(spec.default) if isinstance(spec.default, int | float) else None
    else:
        try:
            value = read.quantity_value(spec, raw)
        except ValueError as error:
            raise ProjectError(f"{where}: {error}") from error
    return Cell(path, text_of(document, path), spec, value)


def _load_cell(document: Document, path: Path, raw: Any, where: str) -> Cell:
    kind, value = "share", 1.0
    if raw is not None:
        try:
            kind, value = read.read_load(raw)
        except ValueError as error:
            raise ProjectError(f"{where}: {error}") from error
    if kind == "off":
        raise ProjectError(f"{where} is switched off; a share (60 %) or an output power (12 W) was expected.")
    spec = Field("load", "power" if kind == "power" else "ratio", schema.LOAD.help, low=0.0)
    return Cell(path, text_of(document, path), spec, value)


def put(document: Document, shelves: Iterable[Shelf], cell: Cell, value: float) -> Document:
    """A document with ``value`` (SI) in the cell; raises ProjectError where the cell does not take it."""
    return edits.enter(document, shelves, cell.path, cell.typed(value))


def number(cell: Cell, text: str) -> float:
    """The SI value of a ``text`` typed for the cell, such as an end of a range; raises ProjectError."""
    try:
        return read.quantity_value(cell.spec, text)
    except ValueError as error:
        raise ProjectError(f"{cell.text}: {error}") from error


def _split(text: str) -> list[str]:
    parts, at = [], 0
    while at < len(text):
        match = _PART.match(text, at)
        if match is None:
            break
        quoted, plain = match.groups()
        parts.append(re.sub(r"\\(.)", r"\1", quoted) if plain is None else plain.strip())
        at = match.end()
        if at < len(text) and (text[at] != "." or at + 1 == len(text)):
            at = -1
            break
        at += 1
    if not parts or at < len(text):
        raise ProjectError(f"{found(text)} is no path; one like CV3.output.0.current or bus.resistance was expected.")
    return parts


def _quoted(name: str) -> str:
    if name and not re.search(r'[."\\]', name) and name == name.strip():
        return name
    return '"' + name.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _bases(document: Document, parts: list[str]) -> Iterator[tuple[Path, list[str]]]:
    """What the first parts may mean, the likeliest first: the path of a row or table, and the parts behind it."""
    head = parts[0]
    for key in ("filter", "converter", "case", "limit"):
        index = _row_called(document, key, head)
        if index is not None:
            yield (key, index), parts[1:]
    if head in _SINGLE:
        yield (head,), parts[1:]
    if head in _MANY and len(parts) > 1:
        match = re.fullmatch(r"#([1-9][0-9]{0,5})", parts[1])
        index = int(match[1]) - 1 if match else _row_called(document, head, parts[1])
        if index is not None and doc.get(document, (head, index)) is not None:
            yield (head, index), parts[2:]
    if head == "shelf" and len(parts) > 2:
        yield ("shelf", parts[1], parts[2]), parts[3:]


def _heads(document: Document, base: Path) -> Iterator[str]:
    if len(base) == 2 and isinstance(base[1], int):
        key = str(base[0])
        name = doc.get(document, (*base, "name" if key == "limit" else "id"))
        if isinstance(name, str) and name:
            yield _quoted(name)
            yield f"{key}.{_quoted(name)}"
        yield f"{key}.#{base[1] + 1}"
    else:
        yield ".".join(_quoted(str(part)) for part in base)


def _row_called(document: Document, key: str, name: str) -> int | None:
    rows = document.data.get(key)
    column = "name" if key == "limit" else "id"
    if not isinstance(rows, list):
        return None
    return next((i for i, row in enumerate(rows) if isinstance(row, dict) and row.get(column) == name), None)


def _walk(document: Document, shelves: tuple[Shelf, ...], base: Path, rest: list[str], text: str) -> Path:
    """The path below a row or table, field by field."""
    path = base
    fields: tuple[Field, ...] = _fields_of(base)
    spec: Field | None = None
    for part in rest:
        where = place(document, path)
        if spec is None or spec.kind == schema.TABLE:
            names = [f.key for f in fields]
            if part not in names:
                raise ProjectError(f"{found(text)}: {where} has no {found(part)}; it has: {_listed(names, 40)}.")
            spec = next(f for f in fields if f.key == part)
            fields = spec.fields
            path = (*path, part)
        elif spec.kind == schema.LOADS:
            known = edits.ids(document, "converter")
            if part not in known:
                names = [_quoted(name) for name in known]
                raise ProjectError(
                    f"{found(text)}: no converter is called {found(part)}; there are: {_listed(names, 40)}."
                )
            spec, path = schema.LOAD, (*path, part)
        elif spec.kind in _LISTS and isinstance(path[-1], str):
            items = edits.value_at(document, shelves, path)[0]
            count = len(items) if isinstance(items, list) else 0
            if not re.fullmatch(r"[0-9]{1,6}", part) or int(part) >= count:
                there = f"it has: {_listed([str(k) for k in range(count)], _SHOWN)}" if count else "it has no items"
                raise ProjectError(f"{found(text)}: {where} has no item {found(part)}; {there}.")
            path = (*path, int(part))
            fields = spec.fields
            if spec.kind in (schema.TABLES, schema.LADDER):
                spec = Field(spec.key, schema.TABLE, spec.help, fields=fields)
        elif spec.kind in (schema.ROWS, schema.CURVE):  # a column of a row of numbers
            names = [f.key for f in fields]
            if part in names:
                column = names.index(part)
            elif re.fullmatch(r"[0-9]", part) and int(part) < len(names):
                column = int(part)
            else:
                raise ProjectError(f"{found(text)}: {where} has no {found(part)}; it has: {_listed(names, 40)}.")
            spec, path = fields[column], (*path, column)
        else:
            raise ProjectError(f"{found(text)}: {where} is one cell, and there is nothing called {found(part)} in it.")
    whole = spec is None or spec.kind in (schema.TABLE, schema.LOADS)
    whole = whole or (spec is not None and spec.kind in _LISTS and (isinstance(path[-1], int)))
    if whole:
        names = (
            list(edits.ids(document, "converter")) if spec and spec.kind == schema.LOADS else [f.key for f in fields]
        )
        raise ProjectError(f"{found(text)} is not one cell; one of these was expected behind it: {_listed(names, 40)}.")
    return path


def _fields_of(base: Path) -> tuple[Field, ...]:
    if base[0] == "shelf":
        if base[1] not in schema.SHELVES:
            raise ProjectError(f"the shelf has no {found(base[1])}; it has: {', '.join(schema.SHELVES)}.")
        return schema.shelf_table(str(base[1])).fields
    return schema.TABLES_BY_KEY[str(base[0])].fields


def _words(path: Path, base: Path) -> list[str]:
    """The parts behind the row; the column of a row of numbers by its name."""
    rest = path[len(base) :]
    words = [_quoted(str(key)) for key in rest]
    if len(rest) == 3 and isinstance(rest[1], int) and isinstance(rest[2], int):
        spec = edits.spec_at(path)
        words[2] = spec.key if spec is not None else words[2]
    return words


def _listed(names: list[str], limit: int) -> str:
    shown = ", ".join(printable(name, 44) for name in names[:limit])
    return shown + (f" and {len(names) - limit} more" if len(names) > limit else "") or "none"
