"""Waveforms of runs that advance side by side, kept within a bounded number of points."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

POINTS = 6000  # of a waveform; beyond, it is thinned
_PENDING = 20_000  # points of all waveforms together that wait to be sorted


class Waves:
    """Points of several runs, added as they come."""

    def __init__(self, count: int, width: int) -> None:
        """``count`` runs with ``width`` outputs each."""
        self._kept = [(np.zeros(0), np.zeros((0, width))) for _ in range(count)]
        self._new: list[tuple[Indices, Floats, Floats]] = []
        self._pending = 0

    def add(self, runs: Indices, time: Floats, values: Floats) -> None:
        """Points at ``time`` (m, T) [s] of the ``runs`` (m,), indices; ``values`` (m, T, W) [A] and [V]."""
        self._new.append((runs, time, values))
        self._pending += time.size
        if self._pending > _PENDING:
            self._sort()

    def sorted(self) -> list[tuple[Floats, Floats]]:
        """Time (K,) [s] and values (K, W) [A] and [V] of each run."""
        self._sort()
        return self._kept

    def _sort(self) -> None:
        for run, (time, values) in enumerate(self._kept):
            chosen = [(t[k], y[k]) for m, t, y in self._new for k in np.flatnonzero(m == run).tolist()]
            if not chosen:
                continue
            time = np.concatenate((time, *(t for t, _ in chosen)))
            values = np.concatenate((values, *(y for _, y in chosen)))
            while time.size > POINTS:
                time, values = thinned(time, values)
            self._kept[run] = time, values
        self._new.clear()
        self._pending = 0


def thinned(time: Floats, values: Floats) -> tuple[Floats, Floats]:
    """Half as many points: of four in a row the least and the greatest of each output, in their order.

    ``time`` (K,) [s], ``values`` (K, W) [A] and [V]; no peak is lost, and none moves by more than three points.
    """
    whole = time.size // 4 * 4
    block = values[:whole].reshape(-1, 4, values.shape[1])
    low, high = block.min(axis=1), block.max(axis=1)
    rising = block.argmin(axis=1) <= block.argmax(axis=1)
    pair = np.stack((np.where(rising, low, high), np.where(rising, high, low)), axis=1)
    kept = np.concatenate((pair.reshape(-1, values.shape[1]), values[whole:]))
    return np.concatenate((time[:whole].reshape(-1, 4)[:, (0, 3)].ravel(), time[whole:])), kept
