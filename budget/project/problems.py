"""What is wrong with a project file, as sentences that name the place."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from budget.project.document import Document, Path, get
from budget.project.schema import TABLES_BY_KEY


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing the user has to know: ``path`` is the cell, ``text`` says what was found and what was expected.

    An error makes the file unusable for the command line; a warning does not. ``source`` names the file where it is
    not the project's own (a shelf file), ``place`` the cell in words.
    """

    path: Path
    text: str
    error: bool = True
    source: str = ""
    place: str = ""

    def sentence(self) -> str:
        parts = [p for p in (printable(self.source, 60), self.place) if p]
        return ": ".join([*parts, self.text])


class ProjectError(Exception):
    """A file that cannot be used at all, or a change that cannot be made; ``str()`` is a sentence for the user."""


def printable(text: str, limit: int = 30) -> str:
    """User text for a message: control characters shown as ``?``, shortened to ``limit`` characters."""
    short = text if len(text) <= limit else text[: limit - 3] + "..."
    return "".join(c if c.isprintable() else "?" for c in short)


def found(value: Any) -> str:
    """What was found, in words the user can recognise in the file."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f"'{printable(value)}'"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return "a list" if value else "an empty list"
    if isinstance(value, int) and abs(value) >= 10**30:
        return "a number of more than 30 digits"  # Python refuses to write out thousands of them
    return printable(str(value))


def row_name(table: str, row: Any, index: int) -> str:
    """A row in words: its id where it has one, else its number."""
    label = TABLES_BY_KEY[table].label if table in TABLES_BY_KEY else table
    key = "name" if table == "limit" else "id"
    ident = row.get(key) if isinstance(row, dict) else None
    if isinstance(ident, str) and ident:
        return f"{label} {printable(ident)}"
    return f"{label} number {index + 1}"


def place(document: Document, path: Path) -> str:
    """The place of a cell in words: 'converter CV3, chop, duty'."""
    if not path:
        return ""
    words: list[str] = []
    rest: tuple[str | int, ...] = path[1:]
    if path[0] == "shelf" and len(path) >= 3:
        words.append(f"shelf {path[1]} {printable(str(path[2]))}")
        rest = path[3:]
    elif len(path) >= 2 and isinstance(path[1], int):
        words.append(row_name(str(path[0]), get(document, path[:2]), path[1]))
        rest = path[2:]
    else:
        words.append(printable(str(path[0])))
    return ", ".join([*words, *_inner(str(path[1] if path[0] == "shelf" and len(path) > 1 else path[0]), rest)])


def _inner(table: str, rest: Path) -> list[str]:
    """The way inside a row; the second index of a list of numbers is a column, and has a name."""
    field = TABLES_BY_KEY[table].field(str(rest[0])) if table in TABLES_BY_KEY and rest else None
    words = [f"item {key + 1}" if isinstance(key, int) else printable(str(key)) for key in rest]
    if field is not None and len(rest) == 3 and isinstance(rest[1], int) and isinstance(rest[2], int):
        words[1] = f"row {rest[1] + 1}"
        words[2] = field.fields[rest[2]].key if rest[2] < len(field.fields) else words[2]
    return words
