"""A result for people: plain text for a terminal or a pipe, and markdown for a document."""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence

from budget.engine.evaluate import Result
from budget.engine.model import LINES
from budget.report import tables, words

# Bold and the three colours that every palette has; the word beside them says the same.
_TONES = {"fail": "\x1b[1;31m", "thin": "\x1b[33m", "ok": "\x1b[32m", "no data": "\x1b[2m"}
_END = "\x1b[0m"
_LONGEST = 500
_RIGHT = {
    "value",
    "limit",
    "wanted",
    "output",
    "input",
    "current",
    "of allowed",
    "terminals",
    "heat",
    "energy",
    "charge",
    "at",
    "level",
}


def as_text(name: str, result: Result, warnings: Sequence[str], *, colour: bool = False) -> str:
    """The report of one file as text; ``colour`` adds ANSI colours to the words that state a status."""
    lines = [_headline(name, result, colour), _scope(result), ""]
    for title, head, rows in _sections(result):
        if rows:
            lines += [title, *columns(head, rows, colour), ""]
    if warnings:
        lines += ["Warnings", *(f"  {words.clean(w)}" for w in warnings), ""]
    lines += words.CAUTION
    return "\n".join(lines) + "\n"


def _sections(result: Result) -> tuple[tuple[str, tuple[str, ...], list[tuple[str, ...]]], ...]:
    """The tables of a report: title, headings and rows; one without rows is left out."""
    return (
        ("Checks, worst first", tables.CHECK_HEAD, tables.check_table(result.checks)),
        ("Worst over these corners", tables.FLOW_HEAD, tables.flow_table(result)),
        ("Emissions, worst corner of each limit set", tables.EMISSION_HEAD, tables.emission_table(result)),
        ("Stability, worst corner", tables.STABILITY_HEAD, tables.stability_table(result)),
        ("Switch-on and surge", tables.RUN_HEAD, tables.run_table(result)),
        ("Hold-up", tables.HOLD_UP_HEAD, tables.hold_up_table(result)),
        ("Energy at the nominal line", tables.ENERGY_HEAD, tables.energy_table(result)),
    )


def _headline(name: str, result: Result, colour: bool) -> str:
    status = _tone(result.status.upper(), result.status) if colour else result.status.upper()
    title = words.clean(result.project.title or name)
    return f"{title}: {status} ({words.summary(result.checks)})"


def _scope(result: Result) -> str:
    cases = ", ".join(case.id for case in result.project.cases)
    lines = ", ".join(LINES[k] for k in result.lines)
    return f"cases {cases}; lines {lines}"


def _tone(text: str, status: str) -> str:
    return f"{_TONES[status]}{text}{_END}"


def columns(head: tuple[str, ...], rows: list[tuple[str, ...]], colour: bool) -> list[str]:
    """A table as lines; a cell that is longer than any name has a right to be is cut, since all others are as wide."""
    rows = [tuple(cell if len(cell) <= _LONGEST else f"{cell[: _LONGEST - 3]}..." for cell in row) for row in rows]
    used = [i for i in range(len(head)) if any(row[i] for row in rows)]
    widths = {i: max(len(head[i]), *(_width(row[i]) for row in rows)) for i in used}

    def line(row: tuple[str, ...], tint: bool) -> str:
        cells = []
        for i in used:
            room = " " * (widths[i] - _width(row[i]))
            cell = room + row[i] if head[i] in _RIGHT else row[i] + room
            cells.append(_tone(cell, row[i]) if tint and head[i] == "status" else cell)
        return ("  " + "  ".join(cells)).rstrip()

    return [line(head, False), *(line(row, colour) for row in rows)]


def _width(text: str) -> int:
    """How many columns a terminal gives a text; rich would know, and takes longer to load than to calculate a bus."""
    if text.isascii():
        return len(text)
    marks = sum(unicodedata.combining(c) != 0 for c in text)
    return len(text) - marks + sum(unicodedata.east_asian_width(c) in "WF" for c in text)


def as_markdown(name: str, result: Result, warnings: Sequence[str]) -> str:
    """The report of one file as markdown."""
    lines = [f"# {escape(result.project.title or name)}", ""]
    lines += [f"**{result.status}**: {words.summary(result.checks)}; {escape(_scope(result))}.", ""]
    for title, head, rows in _sections(result):
        if not rows:
            continue
        lines += [f"## {title}", "", "| " + " | ".join(head) + " |"]
        lines.append("|" + "|".join("---:" if h in _RIGHT else "---" for h in head) + "|")
        lines += ["| " + " | ".join(escape(cell.strip()) for cell in row) + " |" for row in rows]
        lines.append("")
    if warnings:
        lines += ["## Warnings", "", *(f"- {escape(w)}" for w in warnings), ""]
    lines += ["> " + line for line in words.CAUTION]
    return "\n".join(lines) + "\n"


def escape(text: str) -> str:
    """The user's text as markdown that shows it as it is, in a table as well; the backslash goes first."""
    text = words.clean(text)
    for sign in "\\|`*_<>[]&~#":
        text = text.replace(sign, "\\" + sign)
    return text
