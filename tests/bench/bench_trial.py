"""What a reference costs: ``python -m tests.bench.bench_trial``. Not collected by pytest.

The same edits on the same desk without and with a reference held: the calculations, which must be the same, and the
time from results to a frame, in processor time. Ratios hold on any machine.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import statistics
import time
from pathlib import Path

from budget import session as sessions
from budget.project import store
from budget.session import Session, stages
from budget.ui.desk import Desk
from budget.ui.paint import frame

PROJECTS = Path(__file__).parents[2] / "projects"
CELL = ("converter", 0, "output", 0, "current")
EDITS = 30


def edits(reference: bool) -> tuple[list[float], int]:
    """Milliseconds from DC results to a frame for each edit, and how many documents were read for it."""
    loaded = store.load(PROJECTS / "heron.toml")
    session = Session(loaded.document, None, loaded.shelves)  # without a file: nothing is written beside the demo
    desk = Desk(session, True)
    for outcome in stages(session.snapshot()):
        desk.accept(outcome)
    if reference:
        desk.key("K", "K")
    frame(desk, 80, 24)
    seen = 0
    real = sessions.build

    def counted(*arguments: object) -> object:
        nonlocal seen
        seen += 1
        return real(*arguments)  # type: ignore[arg-type]

    sessions.build = counted  # type: ignore[assignment]
    try:
        times = []
        for k in range(EDITS):
            session.enter(CELL, f"{4 + k / 20:.2f} A", desk.spot())
            desk.changed("edit")
            outcome = next(stages(session.snapshot()))
            start = time.process_time()
            desk.accept(outcome)
            frame(desk, 80, 24)
            times.append((time.process_time() - start) * 1e3)
    finally:
        sessions.build = real
    return times, seen


def main() -> None:
    plain, one = edits(False)
    held, two = edits(True)
    print(f"evaluations for {EDITS} edits: {one} without a reference, {two} with one (wanted: the same)")
    a, b = statistics.median(plain), statistics.median(held)
    print(f"results to frame, demo: {a:.1f} ms without, {b:.1f} ms with a reference: ratio {b / a:.2f}")


if __name__ == "__main__":
    main()
