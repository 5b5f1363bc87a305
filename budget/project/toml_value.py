"""Edits inside one value of a TOML text: the smallest spans that turn the old value into the new one."""

from __future__ import annotations

import re
from collections.abc import Sequence
from itertools import groupby
from typing import Any

from budget.project.toml_dump import inline, key_text, same, value_text
from budget.project.toml_scan import Item, ScanError, Value

Edit = tuple[int, int, str]

_REST_OF_LINE = re.compile(r"[ \t]*(?:#[^\n]*)?\r?\n")


def apply(text: str, start: int, end: int, edits: Sequence[Edit]) -> str:
    """text[start:end] with the edits (spans of `text` and what replaces them) made in it."""
    out: list[str] = []
    at = start
    for first, last, new in sorted(edits, key=lambda edit: edit[:2]):
        if first < at or last > end:
            raise ScanError("edits overlap")
        out += [text[at:first], new]
        at = last
    return "".join(out) + text[at:end]


def align(old: Sequence[Any], new: Sequence[Any]) -> list[int | None]:
    """The old index of each new item: equal items at both ends match, those between match by position."""
    short = min(len(old), len(new))
    front = 0
    while front < short and same(old[front], new[front]):
        front += 1
    back = 0
    while back < short - front and same(old[-1 - back], new[-1 - back]):
        back += 1
    middle = len(new) - front - back
    spare = len(old) - front - back
    ends = range(len(old) - back, len(old))
    return [*range(front), *(front + k if k < spare else None for k in range(middle)), *ends]


class ValueEditor:
    """Collects the edits of one entry; `indent` is that of its line. New line ends are written as a bare newline."""

    def __init__(self, text: str, indent: str) -> None:
        self.text = text
        self.indent = indent
        self.edits: list[Edit] = []

    def change(self, value: Value, old: Any, new: Any, inner: bool = False) -> None:
        """Turn `old`, written at `value`, into `new`; `inner` says that it stands inside another value."""
        if same(old, new):
            return
        if value.kind == "table" and new and isinstance(new, dict) and self.table(value, old, new):
            return
        if value.kind == "array" and value.items and new and isinstance(new, list | tuple):
            self.array(value, old, new)
            return
        text = inline(new) if inner else value_text(new, self.indent)
        self.edits.append((value.start, value.end, text))

    def table(self, value: Value, old: dict[str, Any], new: dict[str, Any]) -> bool:
        """False when the table must be written anew."""
        kept = [key for key in old if key in new]
        if not kept:
            return False
        if any(len(item.path) > 1 for item in value.items):
            return self.dotted(value.items, 0, old, new)
        left = [item for item in value.items if item.path[0] in new]
        self.remove_items(value, {i for i, item in enumerate(value.items) if item.path[0] not in new})
        for item in left:
            self.change(item.value, old[item.path[0]], new[item.path[0]], inner=True)
        added = "".join(f", {key_text(key)} = {inline(new[key])}" for key in new if key not in old)
        if added:
            end = left[-1].value.end
            self.edits.append((end, end, added))
        return True

    def dotted(self, items: Sequence[Item], depth: int, old: dict[str, Any], new: dict[str, Any]) -> bool:
        """Change values in an inline table with dotted keys, if it keeps its keys."""
        mark = len(self.edits)
        if old.keys() != new.keys():
            return False
        for key in old:
            mine = [item for item in items if item.path[depth] == key]
            if len(mine[0].path) == depth + 1:
                self.change(mine[0].value, old[key], new[key], inner=True)
            elif not (isinstance(new[key], dict) and self.dotted(mine, depth + 1, old[key], new[key])):
                del self.edits[mark:]
                return False
        return True

    def array(self, value: Value, old: Sequence[Any], new: Sequence[Any]) -> None:
        order = align(old, new)
        left = {i for i in order if i is not None}
        self.remove_items(value, set(range(len(old))) - left)
        for i, item in zip(order, new, strict=True):
            if i is not None:
                self.change(value.items[i].value, old[i], item, inner=True)
        fresh = [inline(item) for i, item in zip(order, new, strict=True) if i is None]
        if not fresh:
            return
        at = order.index(None)
        if at:
            self.insert_after(value, order[at - 1] or 0, fresh)
        else:
            self.insert_first(value, fresh)

    # -- layout of items

    def line_start(self, at: int) -> int:
        return self.text.rfind("\n", 0, at) + 1

    def begins_line(self, item: Item) -> bool:
        return not self.text[self.line_start(item.start) : item.start].strip()

    def end_of_line(self, value: Value, index: int) -> int | None:
        """The start of the next line, if the item (with its comma) is the last thing on its line."""
        item = value.items[index]
        rest = _REST_OF_LINE.match(self.text, item.value.end if item.comma is None else item.comma + 1)
        return rest.end() if rest else None

    def above(self, value: Value, index: int) -> int:
        """The start of the comment lines above an item that begins its line."""
        floor = value.items[index - 1].value.end if index else value.start
        at = self.line_start(value.items[index].start)
        while True:
            before = self.line_start(at - 1)
            if before <= floor or not self.text[before:at].lstrip().startswith("#"):
                return at
            at = before

    def remove_items(self, value: Value, gone: set[int]) -> None:
        items = value.items
        for _, group in groupby(enumerate(sorted(gone)), key=lambda pair: pair[1] - pair[0]):
            run = [i for _, i in group]
            first, last = run[0], run[-1]
            until = self.end_of_line(value, last)
            if value.kind == "array" and until is not None and self.begins_line(items[first]):
                self.edits.append((self.above(value, first), until, ""))
            elif last + 1 < len(items):
                self.edits.append((items[first].start, items[last + 1].start, ""))
            else:
                self.edits.append((items[first - 1].value.end, items[last].value.end, ""))

    def insert_after(self, value: Value, index: int, fresh: Sequence[str]) -> None:
        item = value.items[index]
        until = self.end_of_line(value, index)
        if until is None:
            self.edits.append((item.value.end, item.value.end, "".join(f", {text}" for text in fresh)))
            return
        if item.comma is None:
            self.edits.append((item.value.end, item.value.end, ","))
        beside = next((other for other in (item, *value.items) if self.begins_line(other)), None)
        indent = self.text[self.line_start(beside.start) : beside.start] if beside else self.indent + "    "
        self.edits.append((until, until, "".join(f"{indent}{text},\n" for text in fresh)))

    def insert_first(self, value: Value, fresh: Sequence[str]) -> None:
        item = value.items[0]
        if self.begins_line(item):
            at = self.above(value, 0)
            indent = self.text[self.line_start(item.start) : item.start]
            self.edits.append((at, at, "".join(f"{indent}{text},\n" for text in fresh)))
        else:
            self.edits.append((item.start, item.start, "".join(f"{text}, " for text in fresh)))
