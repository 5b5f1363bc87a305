"""The desk as lines of styled text for a terminal of a given size. Pure: the same desk gives the same lines."""

from __future__ import annotations

import unicodedata
from dataclasses import replace
from functools import cache

from rich.cells import cell_len, set_cell_size

from budget.project import edits
from budget.report import words
from budget.session import Session
from budget.ui import plot
from budget.ui.desk import NOT_COMPARED, Ask, Desk, Edit, Pick
from budget.ui.layout import Slot, layout, run_on, size
from budget.ui.sheet import words_only
from budget.ui.told import MORE, Line, about, breaks, describe, ended, part, placed, plain, typing
from budget.ui.view import RIGHT, Cell, Row, Section, View

__all__ = ["Line", "frame", "plain"]

OWN_CORNER = frozenset({"spectrum", "switchon", "stable", "trials", "reach", "map"})  # their titles tell it
SIDE = 130  # from this width on there is a second pane at the right
SIDE_WIDTH = 52
LEAST_BELOW = 6  # free lines below the sheet from which on the checks stand there
SMALLEST = (60, 12)
LEAST_PICTURE = 11  # lines from which on a picture leaves room for its table
BELOW = 3  # lines below the grid for what is told of the cell and for the message
NAME = 28  # characters of a view's name before which words behind it are left out
ALWAYS = ("?", "Space")  # keys that stand on every hint line: they lead to all others
CUT = "+"  # the end of a text that goes on
_SIGNS = {"\u00b5": "u", "\u03bc": "u", "\u2126": "O", "\u03a9": "O", "\u00b0": "o", "\u00d7": "x", "\u2212": "-"}


def frame(desk: Desk, width: int, height: int) -> list[Line]:
    """``height`` lines of exactly ``width`` cells."""
    desk.width, desk.height = width, height
    if width < SMALLEST[0] or height < SMALLEST[1]:
        text = f"needs {SMALLEST[0]}x{SMALLEST[1]}; this is {width}x{height}"
        told = [text[start:end] for start, end in breaks(text, width)][:height]
        return [_fit([(line, "")], width, desk.ascii_only) for line in [*told, *[""] * (height - len(told))]]
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
    rows = [_title(desk), *lines, *_below(desk, width), _hints(desk, width)]
    return [_fit(row, width, desk.ascii_only) for row in rows]


def bare(desk: Desk, width: int, height: int, told: str) -> list[Line]:
    """The screen where not even the sheet can be painted: words that cannot fail, and the keys that help still."""
    texts = [
        f"The sheet cannot be painted, a fault of this program{told}.",
        "Nothing is lost. Keys that work: u undo, w save, W save under another name, q quit.",
    ]
    if isinstance(desk.mode, Ask):
        texts += [desk.mode.question, "  ".join(f"{key} {label}" for key, (label, _) in desk.mode.options.items())]
    elif isinstance(desk.mode, Edit):
        texts += [f"{desk.mode.label}: {desk.mode.text}", desk.mode.error]
    else:
        texts.append(desk.message)
    lines: list[Line] = []
    for text in texts:
        rest = words_only(text)
        while rest:
            lines.append([(rest[:width], "")])
            rest = rest[width:]
    lines = [*lines[:height], *([[("", "")]] * max(0, height - len(lines)))]
    return [_fit(line, width, desk.ascii_only) for line in lines]


def _fit(line: Line, width: int, ascii_only: bool) -> Line:
    """Cut or fill a line to exactly ``width`` cells; neighbours of one tone become one span."""
    spans: Line = []
    room = width
    for text, tone in line:
        if not text.isprintable():  # no control character of a file may reach the terminal
            text = words_only(text)
        if ascii_only and not text.isascii():
            text = "".join(map(_ascii, text))
        taken = size(text)
        if taken > room:
            text, taken = set_cell_size(text, room), room
        if not text:
            continue
        if spans and spans[-1][1] == tone:
            spans[-1] = (spans[-1][0] + text, tone)
        else:
            spans.append((text, tone))
        room -= taken
        if room <= 0:
            break
    if room > 0:
        if spans and spans[-1][1] == "":
            spans[-1] = (spans[-1][0] + " " * room, "")
        else:
            spans.append((" " * room, ""))
    return spans


@cache
def _ascii(character: str) -> str:
    """What stands for a character where only ASCII can be shown, in as many cells."""
    if character.isascii():
        return character
    cells = cell_len(character)
    alone = _SIGNS.get(character) or unicodedata.normalize("NFKD", character)[:1]
    return alone if cells == 1 and alone.isascii() and alone.isprintable() else "?" * cells


def _pad(text: str, width: int, align: str) -> str:
    taken = size(text)
    if taken > width:
        return set_cell_size(text, width - 1) + CUT if width > 1 else set_cell_size(text, width)
    return " " * (width - taken) + text if align == RIGHT else text + " " * (width - taken)


def _title(desk: Desk) -> Line:
    session = desk.session
    name = desk.view().title if desk.view_name != "sheet" else session.title
    wanted = min(size(name) + 2 * session.dirty, NAME)
    for brevity in range(3):
        tail = _tail(desk, brevity)
        room = desk.width - 11 - sum(size(text) for text, _ in tail)
        if room >= wanted:
            break
    name = name if size(name) <= room else set_cell_size(name, max(0, room - 2)) + ".."
    return [(" budget ", "bar"), (f" {name}{' *' if session.dirty else ''}", "head"), *tail]


def _tail(desk: Desk, brevity: int) -> Line:
    """What stands behind the name of the view; the briefer, the fewer words, until the name has room."""
    session = desk.session
    corner: Line = []
    if desk.view_name not in OWN_CORNER:
        brief = "worst" if desk.corner is None else ", ".join(desk.corner)
        corner = [(" | ", "pale"), (brief if brevity else desk.corner_title(), "")]
    if session.reference is not None and desk.view_name not in NOT_COMPARED:
        corner += [(" | ", "pale"), (f"vs {words_only(session.reference.name)}", "thin")]
    if session.read_only:
        corner = [(" | ", "pale"), ("read-only", "thin"), *corner]
    state = _state(session, desk)
    some = [span for span in state if span[1] != "no data"]
    return [*corner, (" | ", "pale"), *(some if brevity == 2 and some else state)]


def _state(session: Session, desk: Desk) -> Line:
    if desk.job is not None:
        return [(f"~ {desk.job.label} {desk.job.fraction:.0%}", "thin")]
    if desk.failed == session.generation:
        return [("! calculation failed", "fail")]
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
        gap = "<" if slot.column > 1 and x and slot is slots[1] else " "  # more columns at the left
        text += gap * (slot.x - x) + _pad(column.title, slot.width, column.align)
        x = slot.x + slot.width
    if slots and slots[-1].column < len(section.columns) - 1:  # more columns at the right
        text = _pad(text[: width - 1], width - 1, "left") + ">"
    return [(_pad(text, width, "left"), "heading")]


def _row(
    section: Section, row: Row, slots: tuple[Slot, ...], width: int, column: int, stale: bool, desk: Desk | None
) -> Line:
    spans: Line = []
    x = 0
    last = len(row.cells) - 1
    for slot in run_on(slots, row, width):
        cell = row.cells[slot.column]
        if slot.x > x:
            spans.append((" " * (slot.x - x), ""))
        room = slot.width
        chosen = column >= 0 and (slot.column == column or (slot.column == last and column > last))
        if chosen and desk is not None and isinstance(desk.mode, Edit) and desk.mode.path is not None:
            spans += _editor(desk.mode, room)
        else:
            indent = 2 * row.depth if slot.column == 0 else 0
            text = " " * indent + _text(cell, max(1, room - indent), stale)
            spans.append((text, "cursor" if chosen else cell.tone))
        x = slot.x + room
    if x < width:
        spans.append((" " * (width - x), ""))
    return spans


def _text(cell: Cell, width: int, stale: bool) -> str:
    """The text of a cell; one that does not fit, number or not, is never shown with its end cut off unsaid."""
    mark = cell.mark or ("~" if stale and cell.calculated and cell.text and cell.text != "~" else "")
    room = width - len(mark)
    text = cell.short if cell.short and size(cell.text) > room else cell.text
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
    if height < LEAST_PICTURE:
        return _grid(desk, width, height)
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
    head = f"- {pick.title} " if pick.text else f"- {pick.title}: {pick.query}_ "
    lines: list[Line] = [[(_pad(head, width, "left"), "bar")]]
    for k in range(top, min(top + room, len(shown))):
        lines.append(
            [(_pad(f"{'>' if k == index else ' '} {shown[k][0]}", width, "left"), "cursor" if k == index else "")]
        )
    if not shown:
        lines.append([(_pad("  nothing fits; Backspace widens", width, "left"), "pale")])
    lines.append([(edge, "pale")])
    return lines


# -- the lines below


def _below(desk: Desk, width: int) -> list[Line]:
    """Three lines: what is told of the cell under the cursor, or typed; then the message, which ends on the last one.

    A message has one line; a question, a refusal or a mishap as many as it needs.
    """
    mode = desk.mode
    message = _message(desk)
    paragraphs = typing(desk, mode) if isinstance(mode, Edit) else about(desk)
    needed = len(breaks(plain(message), width)) if plain(message) else 0
    if isinstance(mode, Edit):
        taken = min(max(needed, 1), BELOW - 1)
    else:
        taken = min(needed, BELOW if isinstance(mode, Ask) or desk.tone in ("fail", "thin") else 1)
    if isinstance(mode, Edit):
        upper = paragraphs[: BELOW - taken]
    else:
        upper = placed(paragraphs, width, BELOW - taken) if taken < BELOW else []
    lower = placed([message], width, taken) if needed > 1 else [message][:taken]
    if taken == 1 and needed > 1:
        lower = [_shortened(message, width)]
    return [*upper, *[[("", "")]] * (BELOW - len(upper) - len(lower)), *lower]


def _shortened(message: Line, width: int) -> Line:
    """Whole findings of a message as far as they fit, else as much as fits."""
    text = plain(message)
    at = text.rfind(";", 0, width - len(MORE) - 1)
    return ended(part(message, 0, at + 1) if at > width // 2 else message, width, MORE)


def _message(desk: Desk) -> Line:
    mode = desk.mode
    if isinstance(mode, Ask):
        return [(mode.question, "thin")]
    if isinstance(mode, Edit) and mode.error:
        return [(f"! {mode.error}", "fail")]
    if isinstance(mode, Edit) and mode.path is not None:
        spec = edits.spec_at(mode.path)
        return [(describe(spec) if spec else "", "pale")]
    return [(desk.message, desk.tone)]


def _hints(desk: Desk, width: int) -> Line:
    """As many keys as fit, and always those that lead to all others."""
    pairs = desk.hint_pairs()
    always = [pair for pair in pairs if pair[0] in ALWAYS]
    room = width - sum(len(key) + len(word) + 3 for key, word in always)
    shown: list[tuple[str, str]] = []
    for key, word in pairs:
        room -= 0 if (key, word) in always else len(key) + len(word) + 3
        if room < 0:
            break
        if (key, word) not in always:
            shown.append((key, word))
    spans: Line = []
    for key, word in [*shown, *always]:
        spans += [(f" {key} ", "bar" if key.strip() else ""), (f"{word} ", "")]
    return spans
