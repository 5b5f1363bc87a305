"""The file as an immutable tree of values as typed; an edit makes a new one.

A document is what ``tomllib`` gives (tables are dicts, arrays are lists), never changed in place: every edit copies the
containers along its path and shares all others, so that an unchanged row is the same object before and after. For each
array of tables at the top, ``origin`` remembers which row of the text a row stems from; that is how comments find
their rows again after rows were moved, renamed or removed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

Path = tuple[str | int, ...]
Tree = dict[str, Any]


@dataclass(frozen=True, slots=True, eq=False)
class Document:
    data: Tree
    text: str = ""  # the text it was read from; "" for one made here
    origin: Mapping[str, tuple[int | None, ...]] = field(default_factory=dict)


def from_data(data: Tree, text: str = "") -> Document:
    """A document of freshly parsed ``data``; its rows stem from the rows of ``text`` one to one."""
    origin = {
        key: tuple(range(len(rows))) if text else (None,) * len(rows) for key, rows in data.items() if is_rows(rows)
    }
    return Document(data, text, origin)


def is_rows(value: object) -> bool:
    """Whether a value is an array of tables."""
    return isinstance(value, list) and bool(value) and all(isinstance(v, dict) for v in value)


def get(document: Document, path: Path, default: Any = None) -> Any:
    """The value at ``path``, or ``default`` where there is none."""
    node: Any = document.data
    for key in path:
        if isinstance(key, str):
            if not isinstance(node, dict) or key not in node:
                return default
            node = node[key]
        else:
            if not isinstance(node, list) or not 0 <= key < len(node):
                return default
            node = node[key]
    return node


def put(document: Document, path: Path, value: Any) -> Document:
    """A document with ``value`` at ``path``; tables on the way are made where they are missing.

    Raises KeyError for a path that leads through something that is not a table or a list.
    """
    return Document(_put(document.data, path, value), document.text, document.origin)


def _put(node: Any, path: Path, value: Any) -> Any:
    key, rest = path[0], path[1:]
    if isinstance(node, list) and isinstance(key, int) and 0 <= key < len(node):
        return [*node[:key], _put(node[key], rest, value) if rest else value, *node[key + 1 :]]
    if isinstance(key, str) and (node is None or isinstance(node, dict)):
        table = dict(node or {})
        table[key] = _put(table.get(key), rest, value) if rest else value
        return table
    raise KeyError(path)


def drop(document: Document, path: Path) -> Document:
    """A document without the key at ``path``; a nested table left empty goes too. Rows are removed by ``remove``."""
    table = get(document, path[:-1])
    if not isinstance(table, dict) or path[-1] not in table:
        return document
    parent = {k: v for k, v in table.items() if k != path[-1]}
    if not parent and len(path) > 2 and isinstance(path[-2], str):
        return drop(document, path[:-1])
    return put(document, path[:-1], parent) if len(path) > 1 else Document(parent, document.text, document.origin)


def insert(document: Document, path: Path, value: Any, origin: int | None = None) -> Document:
    """A document with ``value`` put into the list ``path[:-1]`` before index ``path[-1]``.

    Raises KeyError where something else than a list stands there.
    """
    index = path[-1]
    old = get(document, path[:-1], [])
    if not isinstance(old, list) or not isinstance(index, int):
        raise KeyError(path)
    changed = put(document, path[:-1], [*old[:index], value, *old[index:]])
    return _with_origin(changed, path, lambda o: (*o[:index], origin, *o[index:]), len(old))


def remove(document: Document, path: Path) -> Document:
    """A document without the list item at ``path``; a list left empty goes too."""
    index = path[-1]
    old = get(document, path[:-1])
    if not isinstance(old, list) or not isinstance(index, int) or not 0 <= index < len(old):
        return document
    left = [*old[:index], *old[index + 1 :]]
    changed = put(document, path[:-1], left) if left else drop(document, path[:-1])
    return _with_origin(changed, path, lambda o: (*o[:index], *o[index + 1 :]), len(old))


def move(document: Document, path: Path, to: int) -> Document:
    """A document with the list item at ``path`` moved to index ``to`` of the same list."""
    index, rows = path[-1], get(document, path[:-1])
    if not isinstance(rows, list) or not isinstance(index, int) or not 0 <= index < len(rows):
        return document
    if not 0 <= to < len(rows) or to == index:
        return document
    stems = document.origin.get(str(path[0]), ()) if len(path) == 2 else ()
    stem = stems[index] if index < len(stems) else None
    return insert(remove(document, path), (*path[:-1], to), rows[index], stem)


def _with_origin(document: Document, path: Path, change: Any, before: int) -> Document:
    if len(path) != 2:  # only arrays at the top of the file keep their origin
        return document
    key = str(path[0])
    old = document.origin.get(key, (None,) * before)
    return Document(document.data, document.text, {**document.origin, key: change(old)})
