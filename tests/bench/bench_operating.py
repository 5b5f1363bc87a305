"""Times of the operating point and of evaluate: ``python tests/bench/bench_operating.py``. Not collected by pytest."""

from __future__ import annotations

import time
from collections.abc import Callable
from functools import partial
from statistics import median

import numpy as np

from budget.engine.evaluate import evaluate
from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Load, Output, Project, Rules
from budget.engine.operating import operating_points


def project(converters: int, filters: int, cases: int = 4) -> Project:
    """A loaded but solvable bus whatever its size: the feed gets thicker with the load."""
    rng = np.random.default_rng(1)
    parts = tuple(
        Converter(
            f"CV{k}",
            rated_power=50.0,
            output=(Output("a", 5.0, float(rng.uniform(2, 6))), Output("b", -12.0, 1.0)),
            efficiency=((0.1, 0.7), (0.3, 0.82), (0.6, 0.87), (1.0, 0.86)),
            filter=f"FL{k % filters}",
            idle_power=1.0,
            min_input=16.0,
            max_input=40.0,
            lead=Lead(R=0.02),
        )
        for k in range(converters)
    )
    ladder = (Branch("series", R=0.05 * filters / converters, L=1e-6),)
    ems = tuple(
        Filter(f"FL{k}", rated_current=8.0, derate_from=55.0, derate_to=125.0, max_voltage=50.0, dm=ladder)
        for k in range(filters)
    )
    shares = [Load("share", float(x)) for x in rng.uniform(0.2, 1.0, cases)]
    which = tuple(
        Case(f"case{k}", duration=60.0, load=tuple((p.id, shares[k]) for p in parts[k :: cases + 1]))
        for k in range(cases)
    )
    bus = Bus(18.0, 28.0, 32.0, rating=1000.0, resistance=0.5 / converters, temperature=71.0)
    return Project(bus, ems, parts, which, Rules(filter_load=0.8, growth=0.1))


def milliseconds(work: Callable[[], object], repeats: int) -> float:
    """Median of ``repeats`` runs."""
    work()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return median(times) * 1e3


def main() -> None:
    for converters, filters in ((24, 6), (500, 40)):
        p = project(converters, filters)
        assert operating_points(p).solved.all()
        points = milliseconds(partial(operating_points, p), 100)
        whole = milliseconds(partial(evaluate, p), 100)
        print(f"{converters:4d} converters, {filters} filters: points {points:.3f} ms, evaluate {whole:.3f} ms")
    previous = None
    for converters in (250, 500, 1000):
        p = project(converters, 40)
        points, whole = milliseconds(partial(operating_points, p), 50), milliseconds(partial(evaluate, p), 50)
        ratio = "" if previous is None else f"  ratios {points / previous[0]:.2f}, {whole / previous[1]:.2f}"
        print(f"{converters:4d} converters, 40 filters: points {points:.3f} ms, evaluate {whole:.3f} ms{ratio}")
        previous = points, whole


if __name__ == "__main__":
    main()
