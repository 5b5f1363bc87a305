"""Beats: where harmonics of unrelated clocks may come so close that their difference falls into a control loop.

A linear sum has no line at the difference |n f1 - m f2|; a notice says that something not linear might make one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.lines import clocks
from budget.engine.model import Project

Floats = NDArray[np.float64]

ORDERS = 3
AUDIBLE = 20e3  # Hz; a beat below this is reported whatever the control bandwidths


@dataclass(frozen=True, slots=True)
class Beat:
    """The range [Hz] of |n f1 - m f2| of two clocks, n and m being ``orders``."""

    clocks: tuple[str, str]
    orders: tuple[int, int]
    low: float
    high: float


def beats(project: Project) -> tuple[Beat, ...]:
    """Every beat that can fall below 20 kHz or the control bandwidth of a converter on either clock.

    By pairs of clocks in project order, then by orders. Only clocks of allocated converters with a frequency count.
    """
    paced = [(clock, clock.frequency) for clock in clocks(project) if clock.frequency is not None]
    frequency = np.array([f for _, f in paced], dtype=np.float64)
    tolerance = np.array([clock.tolerance for clock, _ in paced], dtype=np.float64)
    control = np.array(
        [max(project.converters[k].control_bandwidth or 0.0 for k in clock.members) for clock, _ in paced],
        dtype=np.float64,
    )
    order = np.arange(1.0, ORDERS + 1.0)
    first, second = np.triu_indices(len(paced), 1)
    low, high = (np.multiply.outer(frequency * (1.0 + side * tolerance), order) for side in (-1.0, 1.0))
    low1, high1 = low[first][:, :, None], high[first][:, :, None]
    low2, high2 = low[second][:, None, :], high[second][:, None, :]
    least = np.maximum(np.maximum(low1 - high2, low2 - high1), 0.0)
    most = np.maximum(high1 - low2, high2 - low1)
    bound = np.maximum(np.maximum(control[first], control[second]), AUDIBLE)
    return tuple(
        Beat((paced[first[p]][0].name, paced[second[p]][0].name), (n + 1, m + 1), a, b)
        for p, n, m, a, b in zip(
            *(axis.tolist() for axis in np.nonzero(least < bound[:, None, None])),
            least[least < bound[:, None, None]].tolist(),
            most[least < bound[:, None, None]].tolist(),
            strict=True,
        )
    )
