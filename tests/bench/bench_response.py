"""Times of the numbers behind a filter view: ``python tests/bench/bench_response.py``. Not collected by pytest."""

from __future__ import annotations

import time
from collections.abc import Callable
from statistics import median

import numpy as np

from budget.engine.damping import best_damping
from budget.engine.model import Branch
from budget.engine.response import Feed, insertion_loss, output_impedance, peaks

STAGE = (
    Branch("series", L=4.7e-6, R=8e-3, Rp=900.0, Cp=9e-12),
    Branch("shunt", C=3.3e-6, R=4e-3, L=5e-9),
    Branch("shunt", C=22e-6, R=0.55, L=15e-9),
)
FEED = Feed(0.05, 1e-6)
F = np.geomspace(10.0, 1e8, 1000)


def milliseconds(work: Callable[[], object], repeats: int = 20) -> float:
    """Median of ``repeats`` runs."""
    work()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return median(times) * 1e3


def main() -> None:
    for stages in (1, 2, 4, 8):
        ladder = STAGE * stages

        def magnitude(f: np.ndarray, ladder: tuple[Branch, ...] = ladder) -> np.ndarray:
            return np.abs(output_impedance(ladder, f, FEED))

        curve = magnitude(F)
        rows = {
            "loss": milliseconds(lambda ladder=ladder: insertion_loss(ladder, F)),
            "impedance": milliseconds(lambda magnitude=magnitude: magnitude(F)),
            "peaks": milliseconds(lambda curve=curve, magnitude=magnitude: peaks(F, curve, magnitude)),
            "damping": milliseconds(lambda ladder=ladder: best_damping(ladder, 2, FEED)),
        }
        print(f"{len(ladder):3d} elements: " + ", ".join(f"{name} {ms:.2f} ms" for name, ms in rows.items()))


if __name__ == "__main__":
    main()
