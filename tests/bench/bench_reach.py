"""Times of a reach and of a sweep: ``python -m tests.bench.bench_reach``. Not collected by pytest.

Wanted: a DC check within 100 ms (24 converters), emissions within a second (the demo). With stability too it is the
last stage of what the sheet shows.
"""

from __future__ import annotations

import time
from pathlib import Path

from budget.project import store
from budget.study.paths import cell_at, resolve
from budget.study.reach import reach
from budget.study.sweep import steps, sweep
from tests.bench.bench_sheet import project_text

DEMO = Path(__file__).parents[2] / "projects" / "heron.toml"
DC = ("CV3.output.0.current", "bus.resistance", "bus.low", "FL1.dm.0.R", "case1.load.CV1")
EMISSIONS = ("CV3.output.0.current", "CV3.frequency", "FL2.dm.0.L", "CV7.lead.L")


def main() -> None:
    for name, loaded, paths, parts in (
        ("24 converters", store.parse(project_text(), None, "bench"), DC, ("dc",)),
        ("demo", store.load(DEMO), EMISSIONS, ("dc", "emissions")),
        ("with stability", store.load(DEMO), EMISSIONS[:2], ("dc", "emissions", "stability")),
    ):
        for text in paths:
            path = resolve(loaded.document, loaded.shelves, text)
            times = []
            for _ in range(3):
                start = time.perf_counter()
                found = reach(loaded.document, loaded.shelves, path, parts=parts)
                times.append(time.perf_counter() - start)
            ends = ", ".join(
                f"{found.cell.show(s.limit)} ({s.check.subject} {s.check.check})"
                if s.limit is not None and s.check
                else f"none to {found.cell.show(s.end)}"
                for s in (found.down, found.up)
            )
            print(f"{name:14} {text:22} {min(times) * 1e3:7.0f} ms {found.evaluations:4} trials   {ends}")
    loaded = store.load(DEMO)
    a, b = (resolve(loaded.document, loaded.shelves, t) for t in ("CV3.output.0.current", "bus.resistance"))
    cell = cell_at(loaded.document, loaded.shelves, a)
    start = time.perf_counter()
    sweep(
        loaded.document,
        loaded.shelves,
        a,
        steps(cell, 1.0, 6.0, 15),
        b,
        steps(cell_at(loaded.document, loaded.shelves, b), 0.0, 0.1, 15),
        parts=("dc", "emissions"),
    )
    print(f"demo, 225 points with emissions {time.perf_counter() - start:.1f} s")


if __name__ == "__main__":
    main()
