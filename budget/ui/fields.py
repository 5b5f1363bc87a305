"""Views of what was entered: every field of one thing, with its ladders, outputs and curves as tables."""

from __future__ import annotations

from typing import Any

from budget.project import document as doc
from budget.project import edits, schema
from budget.project.document import Path
from budget.project.problems import place
from budget.project.schema import Field
from budget.report import words
from budget.ui.sheet import Context, rows_of, value_cell
from budget.ui.view import LEFT, RIGHT, Cell, Column, Row, Section, View

_MAIN = (Column("", 20, most=24), Column("value", 20, most=26), Column("meaning", 36, most=90))


def fields(context: Context) -> View:
    """Every field of the subject: a row, a shelf part, or a table that stands once."""
    base = context.subject
    document = context.session.document
    many = len(base) > 1
    title = place(document, base) if many else str(base[0])
    table = schema.shelf_table(str(base[1])) if base[0] == "shelf" else schema.TABLES_BY_KEY[str(base[0])]
    return View("fields", title, sections(context, base, table.fields))


def sections(context: Context, base: Path, specs: tuple[Field, ...], head: str = "") -> tuple[Section, ...]:
    """The fields in the order of the schema: runs of plain ones, and a section for each list."""
    plain: list[Row] = []
    parts: list[Section] = []
    first = (Column(head, _MAIN[0].width, most=_MAIN[0].most), *_MAIN[1:])
    for spec in specs:
        path = (*base, spec.key)
        value, lent = edits.value_at(context.session.document, context.session.shelves, path)
        if spec.kind == schema.LOADS:
            continue
        if spec.kind == schema.TABLE:
            plain += _nested(context, path, spec, value)
        elif spec.kind in schema.NESTED and isinstance(value, list) and value:
            if plain:
                parts.append(Section(first, tuple(plain)))
                plain = []
            parts.append(_list(context, path, spec, value, lent))
            first = (Column("", _MAIN[0].width, most=_MAIN[0].most), *_MAIN[1:])
        elif spec.kind in schema.NESTED and not (spec.kind == schema.CURVE and value is not None):
            mark = "!" if path in context.bad else ""
            text = "none; n adds it" if value is None or value == [] else "cannot be read"
            plain.append(_line(spec.key, Cell(text, None, RIGHT, "pale", mark, item=path), spec.help, path))
        else:
            plain.append(_line(spec.title, value_cell(context, path, _align(spec)), spec.help, path))
            if spec.key == "hold_up_to":
                plain += _hold_up(context, base)
    return (*parts, Section(first, tuple(plain))) if plain else tuple(parts)


def _hold_up(context: Context, base: Path) -> list[Row]:
    """What hold-up needs at the input of a converter: the largest capacitance over the cases, calculated."""
    ident = doc.get(context.session.document, (*base, "id"))
    result = context.session.result
    needs = [h for h in result.hold_up if h.id == ident] if result else []
    if not needs:
        return []
    worst = max(needs, key=lambda h: float("inf") if h.capacitance is None else h.capacitance)
    text = words.farads(worst.capacitance) or "out of reach"
    info = "; ".join(f"{h.case}: {words.farads(h.capacitance) or 'out of reach'}" for h in needs)
    cell = Cell(text, None, RIGHT, "", "", f"needed at its input, from the low line, by case: {info}", calculated=True)
    return [
        _line(
            "hold up needs",
            cell,
            f"Calculated: input capacitance for that time (case {worst.case}).",
            (*base, "=hold_up"),
        )
    ]


def _align(spec: Field) -> str:
    return LEFT if spec.kind in schema.PLAIN else RIGHT


def _line(title: str, cell: Cell, meaning: str, path: Path, item: Path | None = None) -> Row:
    return Row(path, (Cell(title, tone="head"), cell, Cell(meaning, tone="pale")), item)


def _nested(context: Context, path: Path, spec: Field, value: Any) -> list[Row]:
    if not isinstance(value, dict):
        mark = "!" if path in context.bad else ""
        text = "none; n adds it" if value is None else "cannot be read"
        return [_line(spec.key, Cell(text, None, RIGHT, "pale", mark, item=path), spec.help, path)]
    rows = []
    for inner in spec.fields:
        cell = value_cell(context, (*path, inner.key), _align(inner))
        rows.append(_line(f"{spec.key} {inner.title}", cell, inner.help, (*path, inner.key), path))
    return rows


_WIDTHS = {schema.CHOICE: 7, schema.TEXT: 10}


def _list(context: Context, path: Path, spec: Field, value: list[Any], lent: bool) -> Section:
    """A list as a table, one item a row."""
    title = spec.key + (" (from the shelf)" if lent else "")
    columns = [Column(title, 12, most=22)]
    columns += [
        Column(f.key, _WIDTHS.get(f.kind, max(8, len(f.key))), "left" if f.kind in _WIDTHS else RIGHT)
        for f in spec.fields
    ]
    rows = []
    by_column = spec.kind in (schema.ROWS, schema.CURVE)
    for index, item in enumerate(value):
        at = (*path, index)
        mark = "!" if at in context.bad else ""
        name = Cell(f"{index + 1}", tone="head", mark=mark, info=f"{spec.key}, item {index + 1}: {spec.help}")
        cells = [value_cell(context, (*at, c if by_column else f.key)) for c, f in enumerate(spec.fields)]
        cells = [Cell(c.text, c.path, "left" if f.kind in _WIDTHS else RIGHT, c.tone, c.mark, c.info)
                 for c, f in zip(cells, spec.fields, strict=True)]  # fmt: skip
        if not isinstance(item, list if by_column else dict):
            cells = [Cell("cannot be read", tone="pale")]
        rows.append(Row(at, (name, *cells), at))
    return Section(tuple(columns), tuple(rows))


def rules(context: Context) -> View:
    return View("rules", "rules", sections(context, ("rules",), schema.RULES.fields))


def project(context: Context) -> View:
    """Title and author, the shelf files, and what the tool is not."""
    first, *rest = sections(context, ("project",), schema.PROJECT.fields)
    files = _line("shelf files", value_cell(context, ("shelf_files",), LEFT), schema.SHELF_FILES.help, ("shelf_files",))
    return View("project", "project", (Section(first.columns, (*first.rows, files)), *rest))


def limits(context: Context) -> View:
    """The limit lines of the user's own, each with its points."""
    parts: list[Section] = []
    for index, _ in rows_of(context.session.document, "limit"):
        base: Path = ("limit", index)
        for section in sections(context, base, schema.LIMIT.fields, place(context.session.document, base)):
            rows = tuple(Row(r.key, r.cells, r.item or base) for r in section.rows)
            parts.append(Section(section.columns, rows))
    built_in = ", ".join(schema.LIMIT_SETS)
    last = Cell("n adds a limit line of your own", tone="pale", info=f"Built in, by name in the rules: {built_in}.")
    parts.append(Section((Column("", 40, most=76),), (Row(("limit",), (last,), ("limit",)),)))
    return View("limits", "limit lines of your own", tuple(parts))


def shelf(context: Context) -> View:
    """Every shelf part: where it stands and who uses it; those of this file can be changed."""
    document = context.session.document
    rows: list[Row] = []
    sources = [("this file", document.data), *((s.name, s.data) for s in context.session.shelves)]
    for name, data in sources:
        for key in schema.SHELVES:
            named = doc.get(doc.Document(data), ("shelf", key), {})
            for part, entry in named.items() if isinstance(named, dict) else ():
                users = [r.get("id", "?") for _, r in rows_of(document, key) if r.get("part") == part]
                here = name == "this file"
                path: Path = ("shelf", key, part)
                info = "Enter shows its fields" + ("" if here else f"; kept in {name}, D copies it into this file")
                note = entry.get("note", "") if isinstance(entry, dict) else ""
                cells = (
                    Cell(part, tone="head", info=info, leads=path),
                    Cell(key),
                    Cell(name),
                    Cell(", ".join(map(str, users)) or "not used", tone="" if users else "pale"),
                    Cell(str(note), tone="pale"),
                )
                rows.append(Row((*path, name), cells, path if here else None))
    rows.append(Row(("shelf",), (Cell("n adds a part", tone="pale"),), ("shelf",)))
    columns = (
        Column("part", 16, most=24),
        Column("kind", 10),
        Column("stands in", 12, most=20),
        Column("used by", 18, most=40),
        Column("note", 20, most=60),
    )
    return View("shelf", "shelf of parts", (Section(columns, tuple(rows)),))
