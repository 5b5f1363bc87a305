"""Writes changed data back into the TOML text it came from, so that what the user wrote around the values survives.

The text is cut into blocks and entries (toml_scan); old and new data are walked side by side and only what differs is
cut out, put in or moved. The result is read back and compared before it is handed on; should it ever differ, the data
is written anew with all comments kept at its end.
"""

from __future__ import annotations

import re
from bisect import bisect_left
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

from budget.project import toml_load
from budget.project.toml_dump import block_texts, dump, entry_text, has_own_block, is_rows, path_text, row_text, same
from budget.project.toml_scan import Block, Entry, Path, ScanError, scan
from budget.project.toml_value import Edit, ValueEditor, align, apply

__all__ = ["FALLBACK", "Rendered", "dump", "render", "same"]

FALLBACK = (
    "The layout of the file could not be kept: its values were written anew, and all comments were kept at the end "
    "of the file."
)
_BOM = "\ufeff"
_TOP = "the file"


@dataclass(frozen=True, slots=True)
class Rendered:
    """A text to be saved, and sentences that tell the user what could not stay where it was."""

    text: str
    notes: tuple[str, ...]


def render(old_text: str, new: dict[str, Any], origin: Mapping[str, tuple[int | None, ...]]) -> Rendered:
    """The old text with the data `new` in it.

    `old_text` is valid TOML in any style, with its line ends as read. `origin` maps the name of a top-level array of
    tables to the index in the old text of each of its new rows (None for a new row); rows of a name that is missing
    match by position. Unchanged data gives the old text byte for byte. The result always reads back as `new`.
    """
    mark = _BOM if old_text.startswith(_BOM) else ""
    text = old_text.removeprefix(mark)
    line_end = "\r\n" if re.search(r"\r?\n", text + "\n")[0] == "\r\n" else "\n"  # type: ignore[index]
    # Whatever surprises this module, the user's values must reach the file: any error leads to the fallback.
    try:
        done = _render(text, new, origin, line_end)
        if same(toml_load.loads(done.text), new):
            return Rendered(mark + done.text, done.notes)
    except Exception:
        pass
    fresh = dump(new)
    comments = _all_comments(text)
    if comments:
        fresh += "\n" * bool(fresh) + _kept_block("the text before it was written anew", comments)
    return Rendered(mark + fresh.replace("\n", line_end), (FALLBACK,))


def _render(text: str, new: dict[str, Any], origin: Mapping[str, tuple[int | None, ...]], line_end: str) -> Rendered:
    closed = text if text.endswith("\n") or not text else text + line_end
    work = _Surgery(closed, line_end)
    work.table(work.root, toml_load.loads(text), new, _TOP, origin)
    out = work.text()
    missing = Counter(work.comments_in(0, len(closed)))
    missing.subtract(_all_comments(out))
    lost = list((+missing).elements())
    if lost:
        work.keep("the text before the change", lost)
        out = work.text()
    if closed != text:
        out = out.removesuffix(line_end)
    return Rendered(out, tuple(work.notes))


def _all_comments(text: str) -> list[str]:
    try:
        return [text[start:end].rstrip() for start, end in scan(text).comments]
    except ScanError:  # too much is kept rather than too little
        return [line[line.index("#") :].rstrip() for line in text.splitlines() if "#" in line]


def _kept_block(label: str, comments: Sequence[str]) -> str:
    plain = "".join(char if char.isprintable() else "?" for char in label)
    return f"# kept from {plain}:\n" + "".join(f"{comment}\n" for comment in comments)


def _remarks(gap: str) -> list[str]:
    """The comments of a text without anything else but blank lines."""
    return [line.strip() for line in gap.splitlines() if line.strip()]


@dataclass(slots=True, eq=False)
class _Part:
    """A stretch of the file in the order of output: a block of the old text with its edits, or a new text; then the
    gap up to the next part. The gap belongs to the place, not to the block: it stays when blocks move."""

    block: Block | None
    gap: str
    fresh: str = ""
    edits: list[Edit] = field(default_factory=list)
    gone: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class _Leaf:
    part: _Part
    entry: Entry


@dataclass(slots=True, eq=False)
class _Node:
    """A table: the part with its header, if any; the last entry that defines it by dotted keys, if any."""

    path: Path
    in_row: bool
    part: _Part | None = None
    dotted: tuple[_Leaf, Path] | None = None
    children: dict[str, _Node | _Leaf | list[_Node]] = field(default_factory=dict)

    def child(self, name: str) -> _Node:
        found = self.children.setdefault(name, _Node((*self.path, name), self.in_row))
        if isinstance(found, list):
            return found[-1]
        if isinstance(found, _Leaf):
            raise ScanError(f"{name} is a value and a table")
        return found

    def leaves(self) -> list[_Leaf]:
        found: list[_Leaf] = []
        for child in self.children.values():
            if isinstance(child, _Leaf):
                found.append(child)
            else:
                for node in child if isinstance(child, list) else [child]:
                    found += node.leaves()
        return found

    def parts(self) -> list[_Part]:
        found = [self.part] if self.part else []
        for child in self.children.values():
            if not isinstance(child, _Leaf):
                for node in child if isinstance(child, list) else [child]:
                    found += node.parts()
        return found


def _tree(parts: list[_Part]) -> _Node:
    root = _Node((), False)
    for part in parts:
        block = part.block
        assert block is not None
        node = root
        if block.path:
            for name in block.path[:-1]:
                node = node.child(name)
            if block.array:
                rows = node.children.setdefault(block.path[-1], [])
                if not isinstance(rows, list):
                    raise ScanError(f"{block.path[-1]} is a table and an array of tables")
                node = _Node((*node.path, block.path[-1]), True)
                rows.append(node)
            else:
                node = node.child(block.path[-1])
        node.part = part
        for entry in block.entries:
            leaf = _Leaf(part, entry)
            holder = node
            for depth, name in enumerate(entry.path[:-1], 1):
                holder = holder.child(name)
                holder.dotted = (leaf, entry.path[:depth])
            holder.children[entry.path[-1]] = leaf
    return root


class _Surgery:
    """The parts of one file while they are being changed."""

    def __init__(self, text: str, line_end: str) -> None:
        self.source = text
        self.line_end = line_end
        found = scan(text)
        self.comments = found.comments
        ends = [*(block.lead for block in found.blocks[1:]), len(text)]
        self.parts = [_Part(block, text[block.end : until]) for block, until in zip(found.blocks, ends, strict=True)]
        self.root = _tree(self.parts)
        self.kept: list[str] = []
        self.notes: list[str] = []

    # -- output

    def text(self) -> str:
        out = ""
        for part in self.parts:
            if part.gone:
                out += part.gap if _remarks(part.gap) else ""
            elif part.block:
                out += apply(self.source, part.block.lead, part.block.end, part.edits) + part.gap
            else:
                out += part.fresh + part.gap
        if self.parts[-1].gone and not _remarks(self.parts[-1].gap):
            out = out.rstrip("\r\n") + self.line_end if out.strip() else ""
        for block in self.kept:
            if out and not re.search(r"(?:\A|\n)[ \t]*\r?\n\Z", out):
                out += self.line_end
            out += block
        return out

    def native(self, text: str) -> str:
        return text.replace("\n", self.line_end)

    def keep(self, label: str, comments: Sequence[str]) -> None:
        """Put the comments of something removed at the end of the file."""
        if comments:
            self.kept.append(self.native(_kept_block(label, comments)))
            noun = "comments" if len(comments) > 1 else "comment"
            verb = "were" if len(comments) > 1 else "was"
            self.notes.append(f"The {noun} of {label} {verb} kept at the end of the file.")

    def comments_in(self, start: int, end: int) -> list[str]:
        first, last = (bisect_left(self.comments, (at, 0)) for at in (start, end))
        return [self.source[a:b].rstrip() for a, b in self.comments[first:last]]

    def in_order(self, parts: list[_Part]) -> list[_Part]:
        if len(parts) < 2:
            return parts
        place = {id(part): k for k, part in enumerate(self.parts)}
        return sorted(parts, key=lambda part: place[id(part)])

    # -- tables

    def table(
        self,
        node: _Node,
        old: dict[str, Any],
        new: dict[str, Any],
        where: str,
        origin: Mapping[str, tuple[int | None, ...]] | None = None,
    ) -> None:
        """Change one table; `origin` is given for the table at the top alone."""
        for key, was in old.items():
            child = node.children[key]
            name = key if node is self.root else f"{key} of {where}"
            if key not in new:
                self.remove(child, name)
                continue
            now = new[key]
            if isinstance(child, list) and is_rows(now):
                order: Sequence[int | None] = align(was, now)
                if origin is not None:
                    order = origin.get(key, tuple(i if i < len(was) else None for i in range(len(now))))
                self.rows(child, was, now, order, key if node is self.root else name)
            elif isinstance(child, _Node) and isinstance(now, dict):
                self.table(child, was, now, name)
            elif isinstance(child, _Leaf) and not (node is self.root and was == [] and is_rows(now)):
                self.value(child, was, now, name)
            else:
                self.remove(child, name)
                self.add(node, key, now)
        for key in new:
            if key not in old:
                self.add(node, key, new[key])
        if not new and old and node.part is None:
            self.leave_empty(node)

    def value(self, leaf: _Leaf, was: Any, now: Any, name: str) -> None:
        if same(was, now):
            return
        entry = leaf.entry
        indent = self.source[entry.start : entry.key]
        editor = ValueEditor(self.source, indent)
        editor.change(entry.value, was, now)
        leaf.part.edits += [(start, end, self.native(text)) for start, end, text in editor.edits]
        lost = [comment for start, end, _ in editor.edits for comment in self.comments_in(start, end)]
        if lost:
            above = "".join(f"{indent}{comment}\n" for comment in lost)
            leaf.part.edits.append((entry.start, entry.start, self.native(above)))
            self.notes.append(f"Comments inside {name} were moved to the lines above it.")

    def add(self, node: _Node, key: str, value: Any) -> None:
        """Write a key that the table does not have."""
        path = (*node.path, key)
        if not node.in_row and node.dotted is None and has_own_block(path, value):
            live = [part for part in (node.parts() if node.path else []) if not part.gone]
            after = max(live, key=self.parts.index) if live else self.parts[-1]
            for text in block_texts(path, value):
                after = self.insert_after(after, text)
        elif node.part is None and node.dotted:
            leaf, prefix = node.dotted
            indent = self.source[leaf.entry.start : leaf.entry.key]
            self.insert(leaf.part, leaf.entry.end, entry_text((*prefix, key), value, indent))
        else:
            node.part = node.part or self.insert_header(node)
            self.add_to_block(node.part, key, value)

    def add_to_block(self, part: _Part, key: str, value: Any) -> None:
        block = part.block
        if block is None:
            part.fresh += self.native(entry_text((key,), value))
        elif block.entries:
            last = block.entries[-1]
            self.insert(part, last.end, entry_text((key,), value, self.source[last.start : last.key]))
        elif block.path:
            self.insert(part, block.body, entry_text((key,), value))
        else:
            self.open_preamble(part, entry_text((key,), value))

    def leave_empty(self, node: _Node) -> None:
        """A table that only its contents defined has lost them all and must be said to exist."""
        if node.dotted:
            leaf, prefix = node.dotted
            indent = self.source[leaf.entry.start : leaf.entry.key]
            self.insert(leaf.part, leaf.entry.end, entry_text(prefix, {}, indent))
        else:
            node.part = self.insert_header(node)

    def insert(self, part: _Part, at: int, text: str) -> None:
        part.edits.append((at, at, self.native(text)))

    def open_preamble(self, part: _Part, text: str) -> None:
        """The first entry above all headers, below the heading of the file."""
        assert part.block is not None
        if not part.edits:
            before = "\n" if part.block.end else ""
            if not part.gap.startswith(("\n", "\r\n")) and len(self.parts) > 1:
                part.gap = self.line_end + part.gap
            text = before + text
        self.insert(part, part.block.end, text)

    def insert_header(self, node: _Node) -> _Part:
        """A header for a table that had none, before the first of its parts."""
        first = min(node.parts(), key=self.parts.index)
        part = _Part(None, self.line_end, self.native(f"[{path_text(node.path)}]\n"))
        self.parts.insert(self.parts.index(first), part)
        return part

    def insert_after(self, place: _Part, text: str) -> _Part:
        part = _Part(None, place.gap, self.native(text))
        at = self.parts.index(place)
        if place.block and not place.block.path and not place.block.end and not place.edits:
            place.gap = ""
        else:
            place.gap = self.line_end
        if not part.gap and at + 1 < len(self.parts):
            part.gap = self.line_end
        self.parts.insert(at + 1, part)
        return part

    def remove(self, child: _Node | _Leaf | list[_Node], name: str) -> None:
        comments: list[str] = []
        if isinstance(child, _Leaf):
            comments = self.cut(child)
        else:
            for node in child if isinstance(child, list) else [child]:
                comments += self.cut_node(node)
        self.keep(f"removed {name}", comments)

    def cut(self, leaf: _Leaf) -> list[str]:
        entry = leaf.entry
        leaf.part.edits.append((entry.lead, entry.end, ""))
        return self.comments_in(entry.lead, entry.end)

    def cut_node(self, node: _Node) -> list[str]:
        comments: list[str] = []
        parts = self.in_order(node.parts())
        for part in parts:
            part.gone = True
            if part.block:
                comments += self.comments_in(part.block.lead, part.block.end)
        for part, after in pairwise(parts):
            if self.parts[self.parts.index(part) + 1] is after:
                comments += _remarks(part.gap)
                part.gap = ""
        for leaf in node.leaves():
            if not leaf.part.gone:
                comments += self.cut(leaf)
        return comments

    # -- rows of an array of tables

    def rows(
        self,
        nodes: list[_Node],
        old: Sequence[dict[str, Any]],
        new: Sequence[dict[str, Any]],
        order: Sequence[int | None],
        name: str,
    ) -> None:
        """Remove, move, add and change `[[name]]` blocks; `order` gives the old index of each new row."""
        sources: list[int | None] = []
        taken: set[int] = set()
        for k in range(len(new)):
            i = order[k] if k < len(order) else None
            sources.append(None if i is None or not 0 <= i < len(nodes) or i in taken else i)
            taken.update(() if i is None else (i,))
        left = [i for i in sources if i is not None]
        if sources == list(range(len(nodes))):
            for i, row in enumerate(new):
                self.table(nodes[i], old[i], row, _row_name(name, old[i], i))
            return
        self.gather(nodes)
        anchor = nodes[0].part
        for i in range(len(nodes)):
            if i not in taken:
                self.remove(nodes[i], _row_name(name, old[i], i))
        if left != sorted(left):
            self.move([nodes[i] for i in left])
        before: _Part | None = None
        pending: list[str] = []
        for i, row in zip(sources, new, strict=True):
            if i is not None:
                before = self.run(nodes[i])[-1]
                for text in pending:
                    self.insert_before(self.run(nodes[i])[0], text)
                pending = []
            elif before:
                before = self.insert_after(before, row_text(nodes[0].path, row))
            else:
                pending.append(row_text(nodes[0].path, row))
        for text in pending:
            assert anchor is not None
            self.insert_before(anchor, text)
        for i, row in zip(sources, new, strict=True):
            if i is not None:
                self.table(nodes[i], old[i], row, _row_name(name, old[i], i))

    def insert_before(self, place: _Part, text: str) -> None:
        self.parts.insert(self.parts.index(place), _Part(None, self.line_end, self.native(text)))

    def run(self, node: _Node) -> list[_Part]:
        """The parts of a row that stand together with its header."""
        parts = node.parts()
        own = set(map(id, parts))
        start = end = self.parts.index(parts[0])
        while end < len(self.parts) and id(self.parts[end]) in own:
            end += 1
        return self.parts[start:end]

    def gather(self, nodes: list[_Node]) -> None:
        """Bring sub-blocks that stand apart from their rows to them, so that rows can be moved."""
        for node in nodes:
            run = self.run(node)
            inside = set(map(id, run))
            last = run[-1]
            for part in self.in_order(node.parts()):
                if id(part) in inside:
                    continue
                at = self.parts.index(part)
                if _remarks(part.gap):
                    self.parts[at - 1].gap += part.gap
                del self.parts[at]
                part.gap, last.gap = last.gap, self.line_end
                self.parts.insert(self.parts.index(last) + 1, part)
                last = part

    def move(self, nodes: list[_Node]) -> None:
        """Put rows, in the order given, into the places that they occupy together."""
        runs = [self.run(node) for node in nodes]
        places = sorted(runs, key=lambda run: self.parts.index(run[0]))
        gaps = [run[-1].gap for run in places]
        filled = {id(place[0]): run for place, run in zip(places, runs, strict=True)}
        moving = {id(part) for run in runs for part in run}
        parts: list[_Part] = []
        for part in self.parts:
            if id(part) in filled:
                parts += filled[id(part)]
            elif id(part) not in moving:
                parts.append(part)
        for run, gap in zip(runs, gaps, strict=True):
            run[-1].gap = gap
        self.parts = parts


def _row_name(name: str, row: dict[str, Any], index: int) -> str:
    for key in ("id", "name"):
        if isinstance(row.get(key), str) and row[key]:
            return f"{name} {row[key]}"
    return f"{name} {index + 1}"
