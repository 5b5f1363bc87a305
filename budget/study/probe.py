"""One trial of a study: a document with other numbers in some cells, calculated as far as the study asks.

A trial costs what changed: unread rows stay read, and spectra are used again where networks and clocks are the same.

The margin of a check is put on one scale, the share of its limit that is left: 0 is where it turns, and a margin of
m dB is 1 - 10^(-m / 20). For a check that asks for a distance to its limit, the turn to "thin" is measured likewise.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence

from budget.engine.checks import CheckRow
from budget.engine.evaluate import Result, evaluate_dc, with_emissions, with_inrush, with_stability
from budget.project.build import Cache, Shelf, build
from budget.project.document import Document
from budget.project.problems import ProjectError
from budget.study.paths import Cell, put

PARTS = ("dc", "emissions", "stability", "inrush")
Key = tuple[str, str]  # check, subject


class Probe:
    """Calculates variants of one document; a probe belongs to one thread.

    ``parts`` are what is calculated beside the DC part, ``lines`` the lines that count, as indices of ``LINES``.
    """

    def __init__(
        self,
        document: Document,
        shelves: Iterable[Shelf],
        parts: Sequence[str] = ("dc",),
        lines: tuple[int, ...] = (0, 1, 2),
        cancelled: Callable[[], bool] | None = None,
    ) -> None:
        unknown = [part for part in parts if part not in PARTS]
        if unknown:
            raise ProjectError(f"'{unknown[0]}' cannot be calculated; the parts are: {', '.join(PARTS)}.")
        self.document = document
        self.shelves = tuple(shelves)
        self.parts = tuple(parts)
        self.lines = lines
        self.cancelled = cancelled
        self.cache = Cache()
        self.previous: Result | None = None
        built = build(document, self.shelves, self.cache)
        self.known = {(p.path, p.text) for p in built.errors}
        self.faults = tuple(p.sentence() for p in built.errors)

    def at(self, *settings: tuple[Cell, float]) -> Result | str:
        """The result with these values in these cells; a sentence where there is none.

        Raises ``transient.CancelledError`` when the switch-on calculation was cancelled.
        """
        document = self.document
        try:
            for cell, value in settings:
                document = put(document, self.shelves, cell, value)
        except ProjectError as error:
            return str(error)
        built = build(document, self.shelves, self.cache)
        new = next((p for p in built.errors if (p.path, p.text) not in self.known), None)
        if new is not None:
            return new.sentence()
        if built.project is None:
            return built.errors[0].sentence() if built.errors else "the bus cannot be read, so nothing is calculated."
        result = evaluate_dc(built.project, self.lines)
        if "emissions" in self.parts:
            result = with_emissions(result, self.previous)
            self.previous = result
        if "stability" in self.parts:
            result = with_stability(result)
        if "inrush" in self.parts:
            result = with_inrush(result, self.cancelled)
        return result


def turned(row: CheckRow, thin: bool) -> bool:
    """Whether a check fails, or with ``thin`` is thin or fails."""
    return row.status == "fail" or (thin and row.status == "thin")


def room(row: CheckRow, thin: bool) -> float:
    """The share of its limit that a check has left before it fails, or with ``thin`` before it turns thin.

    Infinite for a check without a number that does not fail, -1 for one that does: a failure without a measure.
    """
    bad = turned(row, thin)
    if row.margin is None or (row.limit is None and not thin):
        return -1.0 if bad else math.inf
    margin = row.margin
    if row.margin_unit == "dB":
        if thin and row.wanted is not None:  # a wanted level lies below its limit, a wanted distance above 0
            level = row.check.startswith("emission ") and row.limit is not None
            margin -= row.limit - row.wanted if level and row.limit is not None else row.wanted
        left = 1.0 - math.pow(10.0, min(-margin, 400.0) / 20.0)
    elif thin and row.wanted is not None and row.limit and row.value is not None:
        left = (row.wanted - row.value) / row.limit
    else:
        left = margin
    return min(left, -1e-12) if bad else max(left, 0.0)


def worst(rows: Iterable[CheckRow], thin: bool = False) -> tuple[float, CheckRow | None]:
    """The smallest room of any check and the check that has it; (inf, None) where none has a number or fails."""
    least, which = math.inf, None
    for row in rows:
        left = room(row, thin)
        if left < least:
            least, which = left, row
    return least, which
