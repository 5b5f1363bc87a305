"""What is told below the grid about the cell under the cursor: whole texts first, then as many lines as there are."""

from __future__ import annotations

from budget.project import edits, read, schema
from budget.project.problems import place
from budget.ui.desk import Desk, Edit
from budget.ui.layout import rooms, size
from budget.ui.view import Cell, Row

Span = tuple[str, str]  # text, tone
Line = list[Span]

MORE = "... (=)"  # the end of what was cut; the key shows all of it
_COLUMN = 74  # characters of a line of the whole text, where the terminal has them


def about(desk: Desk) -> list[Line]:
    """Everything there is to say about the cell under the cursor, a paragraph each."""
    row, cell = desk.here()
    if row is None:
        return []
    told = _paragraphs(desk, cell)
    text = cell.text.strip()
    if _is_cut(desk, row, cell) and not any(text in plain(line) for line in told):
        told.insert(1, [(text, "")])
    return [line for line in told if plain(line)]


def _paragraphs(desk: Desk, cell: Cell) -> list[Line]:
    summary = desk.view().summary
    if summary:
        return [[("; ".join(part for part in (cell.change, cell.info) if part), "")], [(summary, "head")]]
    changed: list[Line] = [[_changed(cell)]] if cell.change else []
    if cell.path is None:
        lead = "Enter goes to what it follows from" if cell.leads else ""
        return [[(cell.info or cell.text, "")], *changed, [(lead, "pale")]]
    spec = edits.spec_at(cell.path)
    where = place(desk.session.document, cell.path)
    second: Line = [(_second(spec, cell), "pale")]
    problem = _problem(desk, cell)
    if problem:
        return [[(f"{where}: ! {problem}", "fail")], second]
    return [[(f"{where}: ", "head"), (spec.help if spec else "", "")], *changed, second]


def _changed(cell: Cell) -> Span:
    """What became of a cell against the reference."""
    tone = "fail" if cell.change.endswith("worse") else "ok" if cell.change.endswith("better") else "head"
    return f"against the reference: {cell.change}", tone


def _is_cut(desk: Desk, row: Row, cell: Cell) -> bool:
    """Whether the column of the cell is too narrow for its text."""
    section, cursor = desk.lines()[desk.row_index()][0], desk.cursor
    column = min(cursor.column, len(row.cells) - 1)
    room = next((s.width for s in rooms(section, row, desk.grid_width, cursor.left) if s.column == column), 0)
    indent = 2 * row.depth if column == 0 else 0
    return size(cell.text) + len(cell.mark) > room - indent


def _problem(desk: Desk, cell: Cell) -> str:
    """What is wrong with the cell; for the name of a marked row, what is wrong with the row."""
    outcome = desk.session.outcome
    problems = outcome.built.problems if outcome and cell.path is not None else ()
    for p in problems:
        if edits.cell_of(p.path) == cell.path:
            return p.text
    if cell.mark == "!" and cell.path is not None:
        base = edits.owner(cell.path)
        for p in problems:
            if p.error and p.path[: len(base)] == base:
                return f"{p.place} {p.text}"
    return ""


def _second(spec: schema.Field | None, cell: Cell) -> str:
    return "; ".join(part for part in (cell.info, describe(spec) if spec else "") if part)


def describe(spec: schema.Field) -> str:
    """Unit, default and limits of a field in words."""
    from budget import quantity

    parts = []
    cell = spec.fields[-1] if spec.kind == schema.CURVE else spec
    if cell.kind in quantity.KINDS:
        kind = quantity.KINDS[cell.kind]
        parts.append(f"unit {kind.unit}" if kind.unit else "a fraction or %")
        limits = schema.limits_text(cell, read.show_limit)
        if limits:
            parts.append(limits)
    if spec.choices:
        parts.append("one of " + ", ".join(spec.choices))
    if spec.otherwise:
        parts.append(f"default {spec.otherwise}")
    elif isinstance(spec.default, float) and spec.kind in quantity.KINDS:
        parts.append(f"default {read.show_limit(spec.default, spec.kind)}")
    elif isinstance(spec.default, str) and spec.default:
        parts.append(f"default {spec.default}")
    if spec.required:
        parts.append("needed")
    return "; ".join(parts)


def typing(desk: Desk, edit: Edit) -> list[Line]:
    """While typing: the text around the caret with what it comes to, and what the field means."""
    if edit.refused:
        return [[(edit.refused, "thin")]]
    before, after = edit.text[: edit.caret], edit.text[edit.caret :]
    caret, rest = (after[:1] or " "), after[1:]
    label = edit.label or (place(desk.session.document, edit.path) if edit.path else "")
    room = max(10, desk.width - len(label) - 24)
    if len(before) > room:
        before = before[-room:]
    spec = edits.spec_at(edit.path) if edit.path else None
    comes_to = _comes_to(spec, edit.text)
    first: Line = [(f"{label}: ", "head"), (before, ""), (caret, "cursor"), (rest, "")]
    if comes_to:
        first.append((f"  = {comes_to}", "pale"))
    return [first, [(spec.help if spec else "", "pale")]]  # its unit, default and limits stand on the message line


def _comes_to(spec: schema.Field | None, text: str) -> str:
    """What the text typed so far is worth, where it is more than a plain number with a unit."""
    if spec is None or not text.strip():
        return ""
    from budget.ui.sheet import scaled

    shown = scaled(spec, text)
    return shown if shown and shown != text.strip() else ""


def everything(desk: Desk) -> list[str]:
    """All about the cell, then the message, in lines to be read one after the other."""
    width = max(10, min(_COLUMN, desk.width - 4))
    out: list[str] = []
    for text in [*(plain(line) for line in about(desk)), desk.message]:
        out += [text[a:b] for a, b in breaks(text, width)] if text else []
    return out


# -- lines


def plain(line: Line) -> str:
    """A line without its tones."""
    return "".join(text for text, _ in line)


def breaks(text: str, width: int) -> list[tuple[int, int]]:
    """Where the lines of a text begin and end, broken at a space where there is one."""
    out: list[tuple[int, int]] = []
    start = 0
    while True:
        end = start + _fitting(text[start : start + width + 1], width)
        if end == len(text):
            return [*out, (start, end)]
        at = end if text[end] == " " else text.rfind(" ", start, end)
        at = at if at > start else max(end, start + 1)
        out.append((start, at))
        start = at + 1 if text[at : at + 1] == " " else at


def _fitting(text: str, width: int) -> int:
    """How many characters of a text fit into ``width`` cells."""
    if text.isascii():
        return min(len(text), width)
    n = used = 0
    while n < len(text) and (used := used + size(text[n])) <= width:
        n += 1
    return n


def part(line: Line, start: int, end: int) -> Line:
    """The characters ``start`` to ``end`` of a line, in their tones."""
    out: Line = []
    for text, tone in line:
        if start < len(text) and end > 0 and text[max(0, start) : end]:
            out.append((text[max(0, start) : end], tone))
        start, end = start - len(text), end - len(text)
    return out


def placed(paragraphs: list[Line], width: int, room: int) -> list[Line]:
    """At most ``room`` lines of paragraphs, the longest cut first; the last line of what is cut says so."""
    wrapped = [[part(p, *at) for at in breaks(plain(p), width)] for p in paragraphs]
    keep = [len(lines) for lines in wrapped]
    while sum(keep) > room and max(keep) > 1:
        keep[max(range(len(keep)), key=lambda k: (keep[k], k))] -= 1
    while sum(keep) > room:
        keep.pop()
    out: list[Line] = []
    for k, (lines, count) in enumerate(zip(wrapped, keep, strict=False)):
        out += lines[:count]
        if count < len(lines) or (k == len(keep) - 1 and len(keep) < len(wrapped)):
            out[-1] = ended(out[-1], width, MORE)
    return out


def ended(line: Line, width: int, end: str) -> Line:
    """A line with ``end`` behind it, cut at a word where there is no room for it."""
    text = plain(line)
    if size(text) + 1 + len(end) > width:
        n = _fitting(text, width - len(end) - 1)
        at = text.rfind(" ", 0, n + 1)
        line = part(line, 0, at if at > n // 2 else n)
    return [*line, (f" {end}", line[-1][1] if line else "")]
