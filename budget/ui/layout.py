"""Which columns of a section are visible, where, and how wide."""

from __future__ import annotations

from dataclasses import dataclass, replace

from rich.cells import cell_len

from budget.ui.view import RIGHT, Row, Section

WIDE = 100  # from this width on, columns take their wide form


def size(text: str) -> int:
    """How many cells of the terminal a text takes."""
    return len(text) if text.isascii() else cell_len(text)


@dataclass(frozen=True, slots=True)
class Slot:
    column: int
    x: int
    width: int


def layout(section: Section, width: int, left: int) -> tuple[Slot, ...]:
    """Columns of ``section`` in ``width`` characters: the first one always, the others from number ``1 + left`` on.

    A column that does not fit is cut only if it is the first of the scrolled ones; what room is left over goes to
    those that may grow.
    """
    columns = section.columns
    widths = [max(c.width, c.wide) if width >= WIDE else c.width for c in columns]
    if left and sum(widths) + len(widths) - 1 <= width:
        left = 0
    chosen = [0]
    room = width - widths[0]
    for index in range(1 + left, len(columns)):
        need = widths[index] + 1
        if need > room:
            if len(chosen) == 1 and room > 4:
                widths[index] = room - 1
                chosen.append(index)
                room = 0
            break
        chosen.append(index)
        room -= need
    for index in chosen:
        extra = min(room, max(0, columns[index].most - widths[index]))
        widths[index] += extra
        room -= extra
    slots, x = [], 0
    for index in chosen:
        slots.append(Slot(index, x, widths[index]))
        x += widths[index] + 1
    return tuple(slots)


def rooms(section: Section, row: Row, width: int, left: int) -> tuple[Slot, ...]:
    """Where the cells of a row stand; the last one, if it is a text, may run on over the empty columns behind it."""
    return run_on(layout(section, width, left), row, width)


def run_on(slots: tuple[Slot, ...], row: Row, width: int) -> tuple[Slot, ...]:
    """``rooms`` for slots that are known."""
    last = len(row.cells) - 1
    shown = slots if not slots or slots[-1].column <= last else tuple(s for s in slots if s.column <= last)
    if len(shown) < len(slots) and shown and shown[-1].column == last and row.cells[last].align != RIGHT:
        return (*shown[:-1], replace(shown[-1], width=width - shown[-1].x))
    return shown


def scroll_to(section: Section, width: int, left: int, column: int) -> int:
    """The least change of ``left`` that brings ``column`` into sight."""
    if column <= 0:
        return 0 if column == 0 else left
    left = min(left, column - 1)
    while left < column - 1 and column not in (slot.column for slot in layout(section, width, left)):
        left += 1
    return left
