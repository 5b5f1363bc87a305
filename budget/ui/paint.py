"""The desk as lines of styled text for a terminal of a given size. Pure: the same desk gives the same lines."""

from __future__ import annotations

from dataclasses import replace

from rich.cells import cell_len, set_cell_size

from budget.project import edits, read, schema
from budget.project.problems import place
from budget.report import words
from budget.session import Session
from budget.ui import plot
from budget.ui.desk import NOT_COMPARED, Ask, Desk, Edit, Pick
from budget.ui.layout import Slot, layout
from budget.ui.sheet import words_only
from budget.ui.view import RIGHT, Cell, Row, Section, View

Span = tuple[str, str]  # text, tone
Line = list[Span]

OWN_CORNER = frozenset({"spectrum", "switchon", "stable", "trials"})  # their titles name the corner
SIDE = 130  # from this width on there is a second pane at the right
SIDE_WIDTH = 52
LEAST_BELOW = 6  # free lines below the sheet from which on the checks stand there
SMALLEST = (60, 12)


def frame(desk: Desk, width: int, height: int) -> list[Line]:
    """``height`` lines of exactly ``width`` cells."""
    desk.width, desk.height = width, height
    if width < SMALLEST[0] or height < SMALLEST[1]:
        text = f"needs {SMALLEST[0]}x{SMALLEST[1]}; this is {width}x{height}"
        return [_fit([(text if y == 0 else "", "")], width, desk.ascii_only) for y in range(height)]
    body = height - 5
    main = width - SIDE_WIDTH - 1 if width >= SIDE else width
    below = body - len(desk.lines()) - 1
    if desk.view().plot is not None:
        lines = _picture(desk, width, body)
        main = width
    elif main < width and desk.view_name == "sheet" and below >= LEAST_BELOW:
        lines = [*_grid(desk, main, body - below), *_panel(desk, desk.make("checks", ()), main, below)]
    else:
        lines = _grid(desk, main, body)
    if isinstance(desk.mode, Pick):
        box = _pick(desk.mode, main, body)[:body]
        lines[: len(box)] = box
    if main < width:
        side = _side(desk, SIDE_WIDTH, body)
        lines = [
            [*line, ("|" if desk.ascii_only else "\u2502", "pale"), *extra]
            for line, extra in zip(lines, side, strict=True)
        ]
    rows = [_title(desk), *lines, *_info(desk), _message(desk, width), _hints(desk, width)]
    return [_fit(row, width, desk.ascii_only) for row in rows]


def plain(line: Line) -> str:
    """A line without its tones."""
    return "".join(text for text, _ in line)


def _fit(line: Line, width: int, ascii_only: bool) -> Line:
    """Cut or fill a line to exactly ``width`` cells; neighbours of one tone become one span."""
    spans: Line = []
    room = width
    for text, tone in line:
        if not text.isprintable():  # no control character of a file may reach the terminal
            text = words_only(text)
        if ascii_only and not text.isascii():
            text = text.encode("ascii", "replace").decode()
        size = len(text) if text.isascii() else cell_len(text)
        if size > room:
            text, size = set_cell_size(text, room), room
        if not text:
            continue
        if spans and spans[-1][1] == tone:
            spans[-1] = (spans[-1][0] + text, tone)
        else:
            spans.append((text, tone))
        room -= size
        if room <= 0:
            break
    if room > 0:
        if spans and spans[-1][1] == "":
            spans[-1] = (spans[-1][0] + " " * room, "")
        else:
            spans.append((" " * room, ""))
    return spans


def _pad(text: str, width: int, align: str) -> str:
    size = len(text) if text.isascii() else cell_len(text)
    if size > width:
        return set_cell_size(text, width)
    return " " * (width - size) + text if align == RIGHT else text + " " * (width - size)


def _size(text: str) -> int:
    return len(text) if text.isascii() else cell_len(text)


def _title(desk: Desk) -> Line:
    session = desk.session
    name = desk.view().title if desk.view_name != "sheet" else session.title
    state = _state(session, desk)
    corner = [] if desk.view_name in OWN_CORNER else [(" | ", "pale"), (desk.corner_title(), "")]
    if session.reference is not None and desk.view_name not in NOT_COMPARED:
        corner += [(" | ", "pale"), (f"vs {words_only(session.reference.name)}", "thin")]
    tail: Line = [*corner, (" | ", "pale"), *state]
    room = desk.width - 11 - sum(_size(text) for text, _ in tail)
    name = name if _size(name) <= room else set_cell_size(name, max(0, room - 2)) + ".."
    return [(" budget ", "bar"), (f" {name}{' *' if session.dirty else ''}", "head"), *tail]


def _state(session: Session, desk: Desk) -> Line:
    if desk.job is not None:
        return [(f"~ {desk.job.label} {desk.job.fraction:.0%}", "thin")]
    if session.outcome is None or (desk.pending and not session.fresh):
        return [("~ calculating", "thin")]
    if desk.pending and not session.complete:
        return [(f"~ switch-on {desk.share:.0%}" if desk.share else "~ calculating", "thin")]
    errors = len(session.outcome.built.errors)
    spans: Line = []
    if errors:
        spans.append((f"! {errors} bad cell{'s' if errors > 1 else ''} (b) ", "fail"))
    result = session.result
    if result is None:
        return [*spans, ("no results", "fail")]
    if session.outcome.built.left_out:
        spans.append((f"! {len(session.outcome.built.left_out)} left out ", "fail"))
    counts = words.counts(result.checks)
    names = {"fail": "FAIL", "thin": "thin", "no data": "no data"}
    spans += [(f"{counts[s]} {name} ", s) for s, name in names.items() if counts[s]]
    if not counts["fail"] and not counts["thin"]:
        spans.append(("ok", "ok"))
    return spans


# -- the grid


def _grid(desk: Desk, width: int, height: int) -> list[Line]:
    desk.scroll(width, height)
    cursor = desk.cursor
    at = desk.row_index()
    stale = desk.pending and not desk.session.fresh
    lines = _rows(desk.view(), width, height, cursor.top, cursor.left, at, cursor.column, stale, desk)
    return lines + [[(" " * width, "")] for _ in range(height - len(lines))]


def _rows(
    view: View, width: int, height: int, top: int, left: int, at: int, column: int, stale: bool, desk: Desk | None
) -> list[Line]:
    """The visible lines of a view; a view of one section keeps its heading in sight."""
    flat = view.flat()
    out: list[Line] = []
    placed: dict[tuple[int, int], tuple[Slot, ...]] = {}
    one = len(view.sections) == 1
    if one and flat:
        out.append(_heading(flat[0][0], width, left))
    for index in range(max(top, 1 if one else 0), len(flat)):
        if len(out) >= height:
            break
        section, row = flat[index]
        current = index == at
        offset = left if current or one else 0
        if (id(section), offset) not in placed:
            placed[id(section), offset] = layout(section, width, offset)
        slots = placed[id(section), offset]
        if row is None:
            out.append(_heading(section, width, offset))
        else:
            out.append(_row(section, row, slots, width, column if current else -1, stale, desk if current else None))
    return out


def _heading(section: Section, width: int, left: int) -> Line:
    slots = layout(section, width, left)
    text, x = "", 0
    for slot in slots:
        column = section.columns[slot.column]
        text += " " * (slot.x - x) + _pad(column.title, slot.width, column.align)
        x = slot.x + slot.width
    more = ">" if slots and slots[-1].column < len(section.columns) - 1 else ""
    if more and len(text) < width:
        text = _pad(text, width - 1, "left") + more
    return [(_pad(text, width, "left"), "heading")]


def _row(
    section: Section, row: Row, slots: tuple[Slot, ...], width: int, column: int, stale: bool, desk: Desk | None
) -> Line:
    spans: Line = []
    x = 0
    last = len(row.cells) - 1
    for slot in slots:
        if slot.column > last:
            break
        cell = row.cells[slot.column]
        if slot.x > x:
            spans.append((" " * (slot.x - x), ""))
        room = slot.width
        if slot.column == last and slot is not slots[-1]:
            room = width - slot.x if cell.align != RIGHT else room  # a last text cell may run on over empty columns
        chosen = column >= 0 and (slot.column == column or (slot.column == last and column > last))
        if chosen and desk is not None and isinstance(desk.mode, Edit) and desk.mode.path is not None:
            spans += _editor(desk.mode, room)
        else:
            text = _text(cell, room, stale)
            if slot.column == 0 and row.depth:
                text = _pad("  " * row.depth + _text(cell, room - 2 * row.depth, stale), room, "left")
            spans.append((text, "cursor" if chosen else cell.tone))
        x = slot.x + room
    if x < width:
        spans.append((" " * (width - x), ""))
    return spans


def _text(cell: Cell, width: int, stale: bool) -> str:
    mark = cell.mark or ("~" if stale and cell.calculated and cell.text and cell.text != "~" else "")
    room = width - len(mark)
    text = cell.text
    if _size(text) > room and cell.short:
        text = cell.short
    if _size(text) > room and cell.align == RIGHT and room > 0:
        text = text[: room - 1] + "+"  # a number is never shown with its end cut off unsaid
    if mark and cell.align == RIGHT:
        return _pad(mark + text, width, RIGHT)
    return mark + _pad(text, room, cell.align)


def _editor(edit: Edit, width: int) -> Line:
    """The text being typed, as much as fits around the caret."""
    start = max(0, edit.caret - width + 1)
    text = edit.text[start : start + width]
    at = edit.caret - start
    caret = text[at] if at < len(text) else " "
    rest = text[at + 1 :]
    filled = " " * max(0, width - len(text[:at]) - 1 - len(rest))
    return [(text[:at], "edit"), (caret, "cursor"), (rest + filled, "edit")]


# -- the second pane of a wide screen


def _side(desk: Desk, width: int, height: int) -> list[Line]:
    """Beside the sheet the fields of its row, beside any other view the checks."""
    if desk.view_name == "sheet":
        view = desk.make("fields", edits.owner(desk.item() or ("bus",)))
    elif desk.view_name == "checks":
        view = desk.make("fields", edits.owner(desk.here()[1].leads or ("bus",)))
    else:
        view = desk.make("checks", ())
    return _panel(desk, view, width, height)


def _picture(desk: Desk, width: int, height: int) -> list[Line]:
    """A view with a picture: the table of its lines beside it where there is room, below it otherwise."""
    picture = desk.view().plot
    assert picture is not None
    row, _ = desk.here()
    picture = replace(picture, cursor=row.mark if row else None)
    least = max(sum(c.width + 1 for c in section.columns) for section in desk.view().sections)
    if width >= SIDE and (least <= SIDE_WIDTH + 8 or height < 30):
        main = width - SIDE_WIDTH - 1
        bar = "|" if desk.ascii_only else "\u2502"
        left = plot.draw(picture, main, height, ascii_only=desk.ascii_only)
        right = _grid(desk, SIDE_WIDTH, height)
        return [[*_fit(one, main, desk.ascii_only), (bar, "pale"), *two] for one, two in zip(left, right, strict=True)]
    table = min(8 if height < 30 else 18, max(4, height // 3))
    return [*plot.draw(picture, width, height - table, ascii_only=desk.ascii_only), *_grid(desk, width, table)]


def _panel(desk: Desk, view: View, width: int, height: int) -> list[Line]:
    """A view with its title, without a cursor, cut to the room there is."""
    stale = desk.pending and not desk.session.fresh
    lines: list[Line] = [[(_pad(f" {view.title}", width, "left"), "panel")]]
    lines += _rows(view, width, height - 1, 0, 0, -1, -1, stale, None)
    lines = [_fit(line, width, desk.ascii_only) for line in lines[:height]]
    return lines + [[(" " * width, "")] for _ in range(height - len(lines))]


# -- the list to choose from


def _pick(pick: Pick, width: int, height: int) -> list[Line]:
    shown = pick.shown()
    index = min(pick.index, max(0, len(shown) - 1))
    room = max(1, height - 3)
    top = max(0, min(index - room // 2, len(shown) - room))
    edge = "-" * width
    lines: list[Line] = [[(_pad(f"- {pick.title}: {pick.query}_ ", width, "left"), "bar")]]
    for k in range(top, min(top + room, len(shown))):
        lines.append(
            [(_pad(f"{'>' if k == index else ' '} {shown[k][0]}", width, "left"), "cursor" if k == index else "")]
        )
    if not shown:
        lines.append([(_pad("  nothing fits; Backspace widens", width, "left"), "pale")])
    lines.append([(edge, "pale")])
    return lines


# -- the lines below


def _info(desk: Desk) -> list[Line]:
    """Two lines about the cell under the cursor; while typing, the text and what it comes to."""
    mode = desk.mode
    if isinstance(mode, Edit):
        return _info_edit(desk, mode)
    row, cell = desk.here()
    if row is None:
        return [[("", "")], [("", "")]]
    summary = desk.view().summary
    if summary:
        info = "; ".join(part for part in (cell.change, cell.info) if part)
        return [[(info, "")], [(_split(summary, desk.width)[0], "head")]]
    if cell.path is None and cell.change:
        return [[(_split(cell.info or cell.text, desk.width)[0], "")], [_changed(cell)]]
    if cell.path is None:
        second = "Enter goes to what it follows from" if cell.leads else ""
        first, rest = _split(cell.info or cell.text, desk.width)
        return [[(first, "")], [(rest, "")] if rest else [(second, "pale")]]
    spec = edits.spec_at(cell.path)
    help_text = spec.help if spec else ""
    where = place(desk.session.document, cell.path)
    problem = _problem(desk, cell)
    if problem:
        first, rest = _split(f"{where}: ! {problem}", desk.width)
        return [[(first, "fail")], [(rest, "") if rest else (_second(spec, cell), "pale")]]
    last = _changed(cell) if cell.change else (_second(spec, cell), "pale")
    return [[(f"{where}: ", "head"), (help_text, "")], [last]]


def _changed(cell: Cell) -> Span:
    """What became of a cell against the reference."""
    tone = "fail" if cell.change.endswith("worse") else "ok" if cell.change.endswith("better") else "head"
    return f"against the reference: {cell.change}", tone


def _split(text: str, width: int) -> tuple[str, str]:
    """A text over two lines, broken at a space."""
    if _size(text) <= width:
        return text, ""
    at = text.rfind(" ", 0, width)
    return (text[:at], text[at + 1 :]) if at > 0 else (text[:width], text[width:])


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


def _info_edit(desk: Desk, edit: Edit) -> list[Line]:
    if edit.refused:
        return [[(edit.refused, "thin")], [("", "")]]
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


def _message(desk: Desk, width: int) -> Line:
    mode = desk.mode
    if isinstance(mode, Ask):
        return [(mode.question, "thin")]
    if isinstance(mode, Edit) and mode.error:
        return [(f"! {mode.error}", "fail")]
    if isinstance(mode, Edit) and mode.path is not None:
        spec = edits.spec_at(mode.path)
        return [(describe(spec) if spec else "", "pale")]
    text = desk.message
    if not text and mode is None and desk.view().summary:
        return [(_split(desk.view().summary, width)[1], "head")]
    if _size(text) > width:  # whole findings as far as they fit, then as much as fits
        at = text.rfind(";", 0, width)
        text = text[:at] if at > width // 2 else text[: width - 3] + "..."
    return [(text, desk.tone)]


def _hints(desk: Desk, width: int) -> Line:
    spans: Line = []
    used = 0
    for key, word in desk.hint_pairs():
        size = len(key) + len(word) + 3
        if used + size > width:
            break
        spans += [(f" {key} ", "bar"), (f"{word} ", "")]
        used += size
    return spans
