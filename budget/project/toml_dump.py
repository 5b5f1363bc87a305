"""TOML text for data that has no text of its own yet, in a shape that depends on the data's structure alone.

Scalars and keys are written by tomli_w. Arrays and tables are composed here, because tomli_w chooses between a block
and an inline array by line length, so that a longer name would re-write the whole table.
"""

from __future__ import annotations

from datetime import date, datetime, time
from functools import lru_cache
from typing import Any

import tomli_w

from budget.project.toml_scan import Path

_SCALARS: tuple[type, ...] = (bool, int, float, str, datetime, date, time)  # a bool is an int, a datetime a date


def same(a: Any, b: Any) -> bool:
    """Deep equality of TOML values that tells types apart: 1, 1.0 and true differ; nan equals nan; the order of keys
    does not matter."""
    if a is b and a is not None:
        return True
    if isinstance(a, dict) and isinstance(b, dict):
        return a.keys() == b.keys() and all(same(a[key], b[key]) for key in a)
    if isinstance(a, list | tuple) and isinstance(b, list | tuple):
        return len(a) == len(b) and all(same(x, y) for x, y in zip(a, b, strict=True))
    kind = next((kind for kind in _SCALARS if isinstance(a, kind)), None)
    if kind is None or kind is not next((kind for kind in _SCALARS if isinstance(b, kind)), None):
        return False
    if isinstance(a, float):
        return float.__repr__(a) == float.__repr__(b)  # nan, and the sign of zero
    if isinstance(a, datetime | date | time):
        return bool(a.isoformat() == b.isoformat())  # one instant in two time zones is two values
    return bool(a == b)


@lru_cache(maxsize=1024)
def key_text(name: str) -> str:
    """A key, quoted where it must be."""
    return tomli_w.dumps({name: 0})[: -len(" = 0\n")]


def path_text(path: Path) -> str:
    """A dotted key."""
    return ".".join(map(key_text, path))


def inline(value: Any) -> str:
    """A value on one line."""
    if isinstance(value, dict):
        if not value:
            return "{}"
        return "{ " + ", ".join(f"{key_text(key)} = {inline(item)}" for key, item in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(inline, value)) + "]"
    return tomli_w.dumps({"k": value})[len("k = ") : -1]


def value_text(value: Any, indent: str = "") -> str:
    """The value of an entry: an array of tables or of arrays has a line for each item, all else is on one line."""
    if isinstance(value, list | tuple) and any(isinstance(item, dict | list | tuple) for item in value):
        return "[\n" + "".join(f"{indent}    {inline(item)},\n" for item in value) + indent + "]"
    return inline(value)


def entry_text(path: Path, value: Any, indent: str = "") -> str:
    """`key = value` with its line end."""
    return f"{indent}{path_text(path)} = {value_text(value, indent)}\n"


def is_rows(value: Any) -> bool:
    """Whether a value can be written as `[[name]]` blocks."""
    return isinstance(value, list | tuple) and len(value) > 0 and all(isinstance(row, dict) for row in value)


def row_text(path: Path, row: dict[str, Any]) -> str:
    """One `[[name]]` block."""
    return f"[[{path_text(path)}]]\n" + "".join(entry_text((key,), value) for key, value in row.items())


def has_own_block(path: Path, value: Any) -> bool:
    """Whether a new table that is in no row gets a header: the tables at the top do, and named parts such as
    [shelf.filter.NAME] (a table of tables, and the tables in it). Other tables are inline."""
    if not isinstance(value, dict):
        return len(path) == 1 and is_rows(value)
    tables = any(isinstance(item, dict) for item in value.values())
    return len(path) == 1 or (len(path) == 2 and tables) or len(path) == 3


def block_texts(path: Path, value: Any) -> list[str]:
    """The blocks of a table (with its named parts) or of an array of tables."""
    if not isinstance(value, dict):
        return [row_text(path, row) for row in value]
    inner = {key: item for key, item in value.items() if isinstance(item, dict) and has_own_block((*path, key), item)}
    own = "".join(entry_text((key,), item) for key, item in value.items() if key not in inner)
    texts = [f"[{path_text(path)}]\n{own}"] if own or not inner else []
    for key, item in inner.items():
        texts += block_texts((*path, key), item)
    return texts


def dump(data: dict[str, Any]) -> str:
    """The text of a document: values at the top first, then a block for each table and each row, in the order given."""
    head = "".join(entry_text((key,), value) for key, value in data.items() if not has_own_block((key,), value))
    texts = [head] if head else []
    for key, value in data.items():
        if has_own_block((key,), value):
            texts += block_texts((key,), value)
    return "\n".join(texts)
