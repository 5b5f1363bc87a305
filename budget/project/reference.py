"""The reference of the file format in the README, written from the schema so that no field is described twice."""

from __future__ import annotations

from collections.abc import Iterator

from budget import quantity
from budget.project import schema
from budget.project.schema import Field, Table

_HEAD = ("| Field | Takes | Default | Limits | Meaning |", "|---|---|---|---|---|")
_SHAPES = {
    schema.TEXT: "text",
    schema.IDENT: "short name",
    schema.FILTER: "id of a filter",
    schema.PART: "name of a part",
    schema.TEXTS: "list of names",
    schema.TABLE: "table",
    schema.TABLES: "list of tables",
    schema.LADDER: "ladder",
    schema.LOADS: "table by converter id",
}
_PLACE = next(f for f in schema.BRANCH if f.key == "place")


def markdown() -> str:
    """One markdown section for each table of the file: every field with what it takes, default, limits, meaning."""
    lines: list[str] = []
    for table in schema.TABLES_BY_KEY.values():
        lines += [*_section(table), ""]
    lines += ["#### Ladder element", "", f"`series` or `shunt`: {_PLACE.help} The fields of either:", "", *_HEAD]
    lines += _rows(tuple(f for f in schema.BRANCH if f is not _PLACE), "")
    return "\n".join(lines)


def _section(table: Table) -> list[str]:
    name = f"[[{table.key}]]" if table.many else f"[{table.key}]"
    return [f"#### `{name}`", "", table.help, "", *_HEAD, *_rows(table.fields, "")]


def _rows(fields: tuple[Field, ...], before: str) -> Iterator[str]:
    """A line for each field, those of a nested table or the columns of a row beneath it; ``note`` is told once."""
    for field in fields:
        if field is schema.NOTE:
            continue
        yield _row(f"{before}{field.key}", field)
        if field.kind == schema.LOADS:
            yield _row(f"{before}{field.key}.ID", schema.LOAD)
        elif field.kind == schema.TABLE:
            yield from _rows(field.fields, f"{before}{field.key}.")
        elif field.kind != schema.LADDER and field.fields:
            yield from _rows(field.fields, f"{before}{field.key}: ")


def _row(name: str, field: Field) -> str:
    return f"| `{name}` | {_takes(field)} | {_default(field)} | {_limits(field)} | {field.help} |"


def _takes(field: Field) -> str:
    if field is schema.LOAD:
        return "ratio or W or `off`"
    if field.kind == schema.CHOICE:
        return " or ".join(f"`{choice}`" for choice in field.choices)
    columns = ", ".join(column.key for column in field.fields)
    if field.kind == schema.ROWS:
        return f"list of [{columns}]"
    if field.kind == schema.CURVE:
        return f"one number, or list of [{columns}]"
    if field.kind in _SHAPES:
        return _SHAPES[field.kind]
    kind = quantity.KINDS[field.kind]
    return " or ".join((kind.unit, *kind.also)) if kind.unit else "ratio"


def _default(field: Field) -> str:
    if field.required:
        return "needed"
    if field.otherwise:
        return field.otherwise
    if isinstance(field.default, float):
        return _show(field.default, field.kind)
    return f"`{field.default}`" if isinstance(field.default, str) and field.default else ""


def _limits(field: Field) -> str:
    return schema.limits_text(field, _show) if field.kind in quantity.KINDS else ""


def _show(value: float, kind: str) -> str:
    return quantity.show(value, quantity.KINDS[kind], digits=6)
