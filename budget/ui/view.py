"""What a view shows, as plain data: sections of rows of cells. Nothing here draws, and nothing knows textual."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from budget.project.document import Path
from budget.ui.plot import Plot

LEFT, RIGHT = "left", "right"


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell. ``path`` says where its value stands in the document; a cell without one is calculated.

    ``short`` is shown where ``text`` does not fit. ``info`` is the line about it below the grid; ``item`` is the row,
    case or list item that row commands act on where that differs from the row's own.
    """

    text: str = ""
    path: Path | None = None
    align: str = LEFT
    tone: str = ""
    mark: str = ""
    info: str = ""
    short: str = ""
    item: Path | None = None
    leads: Path | None = None  # the cell that Enter leads to
    calculated: bool = False  # looks stale while results are pending
    value: float | None = None  # the number behind the text, of ``kind`` (of quantity.KINDS, "%" or "dB")
    kind: str = ""
    rank: float | None = None  # where worse and better do not follow from the number: the larger is better
    change: str = ""  # in words, against the reference


@dataclass(frozen=True, slots=True)
class Row:
    """One line of cells; ``item`` is the thing in the document it stands for, ``key`` finds the row again."""

    key: tuple[Any, ...]
    cells: tuple[Cell, ...]
    item: Path | None = None
    depth: int = 0
    mark: tuple[float, float] | None = None  # the point of the view's picture that this row is about
    rides: bool = False  # belongs to the row above; the cursor passes it by


@dataclass(frozen=True, slots=True)
class Column:
    title: str
    width: int
    align: str = LEFT
    most: int = 0  # may grow up to this width where there is room
    wide: int = 0  # its width on a wide screen
    sense: int = 0  # 1 where more is better, -1 where less is, 0 where neither


@dataclass(frozen=True, slots=True)
class Section:
    columns: tuple[Column, ...]
    rows: tuple[Row, ...]


@dataclass(frozen=True, slots=True)
class View:
    name: str
    title: str
    sections: tuple[Section, ...] = field(default=())
    plot: Plot | None = None
    summary: str = ""  # a line about the whole, shown while the cell under the cursor has nothing to say

    def flat(self) -> list[tuple[Section, Row | None]]:
        """Every line from top to bottom; None stands for the heading of a section."""
        lines: list[tuple[Section, Row | None]] = []
        for section in self.sections:
            lines.append((section, None))
            lines += [(section, row) for row in section.rows]
        return lines
