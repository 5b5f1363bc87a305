"""What views ask of emissions beyond the rows of the result."""

from __future__ import annotations

import numpy as np

from budget.engine.emission import Floats, levels, shares
from budget.engine.lines import Lines, unfiltered
from budget.engine.model import Project
from budget.engine.operating import Operating


def bare_levels(project: Project, operating: Operating, lines: Lines, corner: tuple[int, int]) -> Floats:
    """Levels (L,) [V or A] of all lines in one solved corner, each converter straight on the set-up, for comparison."""
    level: Floats = levels(project, operating, unfiltered(project, lines), [corner]).level[0]
    return level


def parts(project: Project, operating: Operating, lines: Lines, corner: tuple[int, int], tuned: float) -> Floats:
    """Largest visible line of each converter by itself, shape (N,) [V or A], with the receiver tuned to ``tuned`` [Hz].

    Zero for a converter that is not seen there. Clocks in step are taken apart, so the values of one clock may be more
    than its reading.
    """
    seen = np.flatnonzero((lines.sweep.start <= tuned) & (lines.sweep.end >= tuned))
    if not seen.size:
        return np.zeros(len(project.converters))
    found: Floats = shares(project, operating, lines, seen, corner).max(axis=0)
    return found
