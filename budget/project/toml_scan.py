"""Where things stand in a TOML text: blocks, entries, values and comments, as offsets.

The standard library reads the data but says nothing of positions. This scanner finds positions only: it takes the text
to be valid and leaves the meaning of scalars to tomllib.
"""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

Path = tuple[str, ...]


class ScanError(ValueError):
    """The text is not laid out as expected (or is no valid TOML)."""


@dataclass(frozen=True, slots=True)
class Item:
    """One item of an inline array or table; `path` is its (dotted) key, empty in an array; `comma` is where the
    comma after it stands, None without one."""

    path: Path
    start: int
    value: Value
    comma: int | None


@dataclass(frozen=True)
class Value:
    """The span of a value in ``text``."""

    kind: Literal["scalar", "array", "table"]
    start: int
    end: int
    text: str

    @cached_property
    def items(self) -> tuple[Item, ...]:
        """The items of an inline array or table, looked for when somebody asks: most values stay as they are."""
        if self.kind == "scalar":
            return ()
        reader = _Reader(self.text)
        reader.at = self.start + 1
        return tuple(reader.array() if self.kind == "array" else reader.table())


@dataclass(frozen=True, slots=True)
class Entry:
    """`path = value` in a block. `lead` is where the comment lines above it begin, `start` the start of its own
    line, `key` where the key begins, `end` the start of the next line."""

    path: Path
    lead: int
    start: int
    key: int
    value: Value
    end: int


@dataclass(frozen=True, slots=True)
class Block:
    """A header with its entries, or (path empty) what stands before the first header.

    It covers `lead` (comment lines that belong to the header) to `end` (its last entry and comment lines touching
    that); `body` is the start of the line after the header. What lies between two blocks belongs to neither.
    """

    path: Path
    array: bool
    lead: int
    body: int
    end: int
    entries: tuple[Entry, ...]


@dataclass(frozen=True, slots=True)
class Scan:
    """The blocks in the order of the text, the first one being the part before any header; all comment spans."""

    blocks: tuple[Block, ...]
    comments: tuple[tuple[int, int], ...]


@dataclass(frozen=True, slots=True)
class _Statement:
    kind: Literal["blank", "comment", "header", "entry"]
    start: int
    end: int
    path: Path = ()
    array: bool = False
    key: int = 0
    value: Value | None = None


_SPACE = re.compile(r"[ \t]*")
_COMMENT = re.compile(r"#[^\r\n]*")
_LINE_END = re.compile(r"\r?\n|\Z")
_BARE = re.compile(r"[A-Za-z0-9_-]+")
_STRING = re.compile(
    r'"""(?:\\.|[^\\])*?"""(?:"{0,2})' r"|'''.*?'''(?:'{0,2})" r'|"(?:\\.|[^"\\\n])*"' r"|'[^'\n]*'",
    re.DOTALL,
)
# What stands in an inline array or table: text that is none of what follows, comments, strings, and brackets.
_INSIDE = re.compile(rf"[^\[\]{{}}#\"']+|#[^\r\n]*|{_STRING.pattern}|[\[\]{{}}]", re.DOTALL)
_ATOM = re.compile(r"\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d[^\s,\]}#]*|[^\s,\[\]{}#=\"']+")


class _Reader:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.comments: list[tuple[int, int]] = []

    def fail(self) -> ScanError:
        return ScanError(f"unexpected text in line {self.text.count(chr(10), 0, self.at) + 1}")

    def peek(self, token: str) -> bool:
        return self.text.startswith(token, self.at)

    def expect(self, token: str) -> None:
        if not self.peek(token):
            raise self.fail()
        self.at += len(token)

    def take(self, pattern: re.Pattern[str]) -> str:
        found = pattern.match(self.text, self.at)
        if found is None:
            raise self.fail()
        self.at = found.end()
        return found.group()

    def comment(self) -> bool:
        if not self.peek("#"):
            return False
        start = self.at
        self.take(_COMMENT)
        self.comments.append((start, self.at))
        return True

    def gap(self) -> None:
        """White space, line ends and comments, as allowed inside an array."""
        while True:
            while self.at < len(self.text) and self.text[self.at] in " \t\r\n":
                self.at += 1
            if not self.comment():
                return

    def path(self) -> Path:
        names: list[str] = []
        while True:
            self.take(_SPACE)
            if self.peek('"') or self.peek("'"):
                names.append(tomllib.loads("k = " + self.take(_STRING))["k"])
            else:
                names.append(self.take(_BARE))
            self.take(_SPACE)
            if not self.peek("."):
                return tuple(names)
            self.at += 1

    def value(self) -> Value:
        start = self.at
        if self.peek("[") or self.peek("{"):
            kind: Literal["array", "table"] = "array" if self.peek("[") else "table"
            self.skip()
            return Value(kind, start, self.at, self.text)
        self.take(_STRING if self.peek('"') or self.peek("'") else _ATOM)
        return Value("scalar", start, self.at, self.text)

    def skip(self) -> None:
        """Go behind the closing bracket of an array or table."""
        depth = 0
        while True:
            token = self.take(_INSIDE)
            if token in ("[", "{"):
                depth += 1
            elif token in ("]", "}"):
                depth -= 1
                if not depth:
                    return
            elif token[0] == "#":
                self.comments.append((self.at - len(token), self.at))

    def array(self) -> list[Item]:
        """The items from behind the opening bracket on."""
        items: list[Item] = []
        self.gap()
        while not self.peek("]"):
            item = self.at
            items.append(Item((), item, self.value(), self.comma("]")))
        return items

    def comma(self, close: str) -> int | None:
        """Go on to the next item or the closing bracket."""
        self.gap()
        if self.peek(close):
            return None
        at = self.at
        self.expect(",")
        self.gap()
        return at

    def table(self) -> list[Item]:
        """The items from behind the opening bracket on."""
        # Later editions of TOML allow line ends, comments and a last comma in here; reading them costs nothing.
        items: list[Item] = []
        self.gap()
        while not self.peek("}"):
            key = self.at
            path = self.path()
            self.expect("=")
            self.take(_SPACE)
            items.append(Item(path, key, self.value(), self.comma("}")))
        return items

    def statement(self) -> _Statement:
        start = self.at
        self.take(_SPACE)
        key = self.at
        kind: Literal["blank", "comment", "header", "entry"]
        path: Path = ()
        array, value = False, None
        if self.peek("#"):
            kind = "comment"
        elif self.at == len(self.text) or self.peek("\n") or self.peek("\r\n"):
            kind = "blank"
        elif self.peek("["):
            kind, array = "header", self.peek("[[")
            self.at += 2 if array else 1
            path = self.path()
            self.expect("]]" if array else "]")
        else:
            kind, path = "entry", self.path()
            self.expect("=")
            self.take(_SPACE)
            value = self.value()
        self.take(_SPACE)
        self.comment()
        self.take(_LINE_END)
        return _Statement(kind, start, self.at, path, array, key, value)


def scan(text: str) -> Scan:
    """Cut a valid TOML text (without byte order mark) into blocks. Raises ScanError where it cannot."""
    reader = _Reader(text)
    lines: list[_Statement] = []
    while reader.at < len(text):
        lines.append(reader.statement())
    blank = next((i for i, line in enumerate(lines) if line.kind != "blank"), len(lines))
    heads = [i for i, line in enumerate(lines) if line.kind == "header"]
    firsts = [_first_of_header(lines, i, blank) for i in heads]
    ends = [*firsts, len(lines)]
    blocks = [_preamble(lines, ends[0], blank)]
    for head, first, end in zip(heads, firsts, ends[1:], strict=True):
        line = lines[head]
        inside = _entries(lines, head + 1, end, blank)
        blocks.append(Block(line.path, line.array, lines[first].start, line.end, _end(lines, head, end), inside))
    return Scan(tuple(blocks), tuple(reader.comments))


def _comments_above(lines: list[_Statement], i: int) -> int:
    while i and lines[i - 1].kind == "comment":
        i -= 1
    return i


def _first_of_header(lines: list[_Statement], head: int, blank: int) -> int:
    """The first line that belongs to a header: comments right above it, or one blank line away from it unless they
    are the heading of the file or touch what stands before them."""
    first = _comments_above(lines, head)
    if first == head and head > 1 and lines[head - 1].kind == "blank":
        above = _comments_above(lines, head - 1)
        if above < head - 1 and above > blank and lines[above - 1].kind == "blank":
            return above
    return first


def _entries(lines: list[_Statement], begin: int, end: int, blank: int) -> tuple[Entry, ...]:
    found: list[Entry] = []
    for i in range(begin, end):
        line = lines[i]
        if line.value is None:
            continue
        first = max(begin, _comments_above(lines, i))
        if first <= blank:  # the heading of the file is not a remark on its first key
            first = i
        found.append(Entry(line.path, lines[first].start, line.start, line.key, line.value, line.end))
    return tuple(found)


def _end(lines: list[_Statement], begin: int, end: int) -> int:
    last = max(i for i in range(begin, end) if lines[i].kind in ("header", "entry"))
    while last + 1 < end and lines[last + 1].kind == "comment":
        last += 1
    return lines[last].end


def _preamble(lines: list[_Statement], end: int, blank: int) -> Block:
    entries = _entries(lines, 0, end, blank)
    if entries:
        return Block((), False, 0, 0, _end(lines, 0, end), entries)
    last = max((line.end for line in lines[:end] if line.kind == "comment"), default=0)
    return Block((), False, 0, last, last, ())
