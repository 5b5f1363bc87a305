"""Waveforms of runs that advance side by side, kept within a bounded number of points."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Values = NDArray[np.floating[Any]]

POINTS = 6000  # of a waveform; beyond, it is thinned
FEWEST = 1000  # of a waveform, where there are many
_ROOM = 8_000_000  # numbers of all waveforms together, by which their points are counted
_PENDING = 20_000  # points of all waveforms together that wait to be sorted
_WAITING = 1_000_000  # numbers


class Waves:
    """Points of several runs, added as they come. Of many runs with many outputs fewer points, in single precision."""

    def __init__(self, count: int, width: int) -> None:
        """``count`` runs with ``width`` outputs each."""
        full = count * width * POINTS
        self.points = POINTS if full <= _ROOM else max(FEWEST, _ROOM // max(1, count * width))
        self._type = np.float64 if full <= _ROOM else np.float32
        self._kept = [(np.zeros(0), np.zeros((0, width), dtype=self._type)) for _ in range(count)]
        self._new: list[tuple[Indices, Floats, Values]] = []
        self._pending = 0
        self._most = min(_PENDING, max(1, _WAITING // max(1, width)))

    def add(self, runs: Indices, time: Floats, values: Floats) -> None:
        """Points at ``time`` (m, T) [s] of the ``runs`` (m,), indices; ``values`` (m, T, W) [A] and [V]."""
        self._new.append((runs, time, values.astype(self._type, copy=False)))
        self._pending += time.size
        if self._pending > self._most:
            self._sort()

    def sorted(self) -> list[tuple[Floats, Values]]:
        """Time (K,) [s] and values (K, W) [A] and [V] of each run."""
        self._sort()
        return self._kept

    def _sort(self) -> None:
        chosen: list[list[tuple[Floats, Values]]] = [[] for _ in self._kept]
        for runs, t, y in self._new:
            for k, run in enumerate(runs.tolist()):
                chosen[run].append((t[k], y[k]))
        for run, new in enumerate(chosen):
            if not new:
                continue
            time = np.concatenate((self._kept[run][0], *(t for t, _ in new)))
            values = np.concatenate((self._kept[run][1], *(y for _, y in new)))
            while time.size > self.points:
                time, values = thinned(time, values)
            self._kept[run] = time, values
        self._new.clear()
        self._pending = 0


def thinned(time: Floats, values: Values) -> tuple[Floats, Values]:
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
