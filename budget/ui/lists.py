"""Views that list: the load cases by converters, the checks, what cannot be read, and the help."""

from __future__ import annotations

import textwrap
from dataclasses import replace

from budget import glossary
from budget.project import edits, schema
from budget.project.document import Path
from budget.report import words
from budget.ui import commands
from budget.ui.sheet import Context, behind, rank, rows_of, value_cell, words_only
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View


def loads(context: Context) -> View:
    """The load-case matrix: converters down, cases across."""
    document = context.session.document
    cases = rows_of(document, "case")
    columns = [Column("converter", 20, most=30)]
    columns += [Column(words_only(str(case.get("id", f"case {k + 1}"))), 11, RIGHT, most=16) for k, case in cases]
    rows = []
    for key in ("name", "duration", "note"):
        spec = schema.CASE.field(key)
        assert spec is not None
        head = Cell(spec.title, tone="head", info=spec.help)
        cells = [_in_case(value_cell(context, ("case", k, key)), k) for k, _ in cases]
        rows.append(Row(("case-field", key), (head, *cells)))
    for _, unit in rows_of(document, "converter"):
        ident = str(unit.get("id", "?"))
        head = Cell(words_only(f"{ident} {unit.get('name', '')}".strip()))
        cells = [_in_case(value_cell(context, ("case", k, "load", ident)), k) for k, _ in cases]
        rows.append(Row(("load", ident), (head, *cells)))
    if not cases:
        columns.append(Column("full", 40))
        note = Cell("everything at 100 %; n adds a load case", tone="pale", item=("case",))
        rows = [Row(r.key, (r.cells[0], note)) for r in rows]
    return View("loads", "load cases", (Section(tuple(columns), tuple(rows)),))


def _in_case(cell: Cell, index: int) -> Cell:
    return replace(cell, align=RIGHT, item=("case", index))


def checks(context: Context) -> View:
    """All checks from worst to best; Enter goes to the cell behind one."""
    result = context.session.result
    rows = []
    for row in words.by_severity(result.checks if result else ()):
        lead = behind(row, context.session.document)
        info = words.sentence(row)
        status = "FAIL" if row.status == "fail" else row.status
        texts = (
            (status, "left"),
            (row.check, "left"),
            (row.subject, "left"),
            (words.show(row.value, row.unit), RIGHT),
            (words.show(row.limit, row.unit), RIGHT),
            (words.margin(row), RIGHT),
            (", ".join(w for w in (row.case, row.line) if w), "left"),
            (words.note(row), "left"),
        )
        cells = [
            Cell(words_only(t), None, align, row.status if not k else "", "", info, leads=lead, calculated=True)
            for k, (t, align) in enumerate(texts)
        ]
        cells[0] = replace(cells[0], rank=rank(row))
        kind = {"ratio": "%", "dB": "dB"}.get(row.margin_unit, "")
        cells[5] = replace(cells[5], value=row.margin if kind else None, kind=kind)
        rows.append(Row(("check", row.check, row.subject), tuple(cells)))
    if not rows:
        rows.append(Row(("none",), (Cell("~" if context.session.outcome is None else "nothing to check"),)))
    columns = (
        Column("state", 7),
        Column("check", 15),
        Column("of", 7, most=14),
        Column("value", 9, RIGHT),
        Column("limit", 9, RIGHT),
        Column("margin", 11, RIGHT, sense=1),
        Column("where", 16, most=24),
        Column("note", 20, most=60),
    )
    return View("checks", "checks, worst first", (Section(columns, tuple(rows)),))


def faults(context: Context) -> View:
    """What is wrong with the entries, and warnings; Enter goes to the cell."""
    outcome = context.session.outcome
    rows = []
    for k, p in enumerate(outcome.built.problems if outcome else ()):
        lead = edits.cell_of(p.path)
        cells = (
            Cell("error" if p.error else "warning", tone="fail" if p.error else "thin", info=p.sentence()),
            Cell(": ".join(x for x in (p.source, p.place) if x)),
            Cell(p.text),
        )
        shown = tuple(Cell(words_only(c.text), tone=c.tone, info=p.sentence(), leads=lead) for c in cells)
        rows.append(Row(("fault", k), shown))
    for k, code in enumerate(outcome.result.warnings if outcome and outcome.result else ()):
        text = words.engine_warning(code)
        rows.append(
            Row(("warning", k), (Cell("warning", tone="thin", info=text), Cell(code[1]), Cell(text, info=text)))
        )
    if not rows:
        rows.append(Row(("none",), (Cell("nothing: every cell can be read"),)))
    columns = (Column("kind", 8), Column("where", 24, most=36), Column("what", 44, most=110))
    return View("faults", "bad cells and warnings", (Section(columns, tuple(rows)),))


def help_view(context: Context) -> View:
    """Every key, the words used, and the cautions."""
    rows: list[Row] = []

    def line(key: str, text: str, tone: str = "") -> None:
        rows.append(Row(("help", len(rows)), (Cell(key, tone="head"), Cell(text, tone=tone))))

    def wrapped(key: str, text: str, tone: str = "") -> None:
        for k, part in enumerate(textwrap.wrap(text, 60)):
            line("" if k else key, part, tone)

    wrapped("caution", " ".join(words.CAUTION), "thin")
    for group, title in commands.GROUPS.items():
        line("", "")
        line(title, "")
        for command in commands.COMMANDS:
            if command.group == group:
                wrapped(commands.keys_text(command), command.label)
    line("", "")
    line("Words", "")
    for word, meaning in glossary.WORDS:
        wrapped(word, meaning)
    return View(
        "help",
        "help: Esc goes back",
        (Section((Column("keys", 18), Column("what they do", 60, most=110)), tuple(rows)),),
    )


def subjects(context: Context) -> list[tuple[str, Path]]:
    """Everything that can be gone to by name: id and name, and the row."""
    found: list[tuple[str, Path]] = [("bus", ("bus",))]
    for key in ("filter", "converter"):
        for index, row in rows_of(context.session.document, key):
            found.append((words_only(f"{row.get('id', '?')} {row.get('name', '')}".strip()), (key, index)))
    return found
