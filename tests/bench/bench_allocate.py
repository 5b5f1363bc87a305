"""Times of the allocation: ``python -m tests.bench.bench_allocate``. Not collected by pytest.

Wanted: 12 converters on 3 filters, ``even``, proved within 1 s; 24 on 4 within 10 s, or the gap shown. Last, what the
checks of one candidate take on top, stage by stage.
"""

from __future__ import annotations

import time
from dataclasses import replace
from pathlib import Path

import numpy as np

from budget.engine.allocate import allocate
from budget.engine.candidates import moved
from budget.engine.evaluate import evaluate_dc, with_emissions, with_inrush, with_stability
from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Load, Output, Project, Rules
from budget.project import store
from budget.project.build import build

ROOT = Path(__file__).parent.parent.parent


def demo() -> Project:
    loaded = store.load(ROOT / "projects" / "heron.toml")
    project = build(loaded.document, loaded.shelves).project
    assert project is not None
    return project


def several(count: int, filters: int) -> Project:
    """The demo with its converters again and again, and filters that can carry them."""
    one = demo()
    times = count / len(one.converters)
    homes = [f"FL{k % filters + 1}" for k in range(count)]
    names = [one.converters[k % len(one.converters)].id for k in range(count)]
    units = tuple(
        replace(one.converters[k % len(one.converters)], id=f"CV{k + 1}", filter=homes[k]) for k in range(count)
    )
    parts = tuple(
        replace(one.filters[k % len(one.filters)], id=f"FL{k + 1}", rated_current=(14.0 + k) * 3.0 * times / filters)
        for k in range(filters)
    )
    cases = []
    for case in one.cases:
        asked = dict(case.load)
        cases.append(replace(case, load=tuple((f"CV{k + 1}", asked[n]) for k, n in enumerate(names) if n in asked)))
    bus_ = replace(one.bus, resistance=one.bus.resistance / times, rating=None)
    return replace(one, bus=bus_, filters=parts, converters=units, cases=tuple(cases))


def bus(converters: int, filters: int, cases: int = 4, seed: int = 1, filling: float = 0.85) -> Project:
    """A bus of the demo's kind: powers, leads and cases all differ; the filters come in two sizes."""
    rng = np.random.default_rng(seed)
    powers = rng.uniform(5.0, 80.0, converters)
    parts = tuple(
        Converter(
            f"CV{k + 1}",
            rated_power=100.0,
            output=(Output("out", 10.0, float(p) / 10.0),),
            efficiency=((0.2, 0.8), (0.5, 0.88), (1.0, 0.9)),
            filter=f"FL{k % filters + 1}",
            min_input=16.0,
            lead=Lead(R=float(rng.uniform(0.005, 0.02))),
        )
        for k, p in enumerate(powers)
    )
    which = [Case("full")]
    for k in range(cases - 1):
        load = [(p.id, Load("share", float(rng.uniform(0.2, 1.2)))) for p in parts]
        which.append(Case(f"case{k}", load=tuple(load)))
    need = powers.sum() / 0.86 / 21.0 / filters / filling
    sizes = [1.25 if k % 2 else 0.75 for k in range(filters)] if filters > 1 else [1.0]
    ladders = [(Branch("series", R=0.06 / size / need, L=1e-6),) for size in sizes]
    made = tuple(
        Filter(f"FL{k + 1}", rated_current=need * size, dm=ladder)
        for k, (size, ladder) in enumerate(zip(sizes, ladders, strict=True))
    )
    return Project(
        Bus(22.0, 28.0, 29.0, resistance=0.4 / (need * filters)), made, parts, tuple(which), Rules(growth=0.05)
    )


def run(name: str, project: Project, goal: str, limit: float = 10.0) -> None:
    first: list[float] = []
    start = time.perf_counter()
    found = allocate(
        project,
        goal,
        time_limit=limit,
        finish=evaluate_dc,
        progress=lambda best, bound: first.append(time.perf_counter() - start),
    )
    took = time.perf_counter() - start
    begun = f"first after {first[0]:.3f} s" if first else "none admissible"
    gap = "none" if found.gap is None else f"{found.gap:.2e} {found.gap_unit}"
    best = found.best
    shown = "" if best is None else f"headroom {best.headroom:.6f}, {best.filters_used} filters, "
    print(f"{name:28s} {goal:6s} {took:6.2f} s, {begun}, {shown}proved {found.proved}, gap {gap}, {found.note}")


def checks(name: str, project: Project) -> None:
    """What the checks of the best candidate take, against those of the same result used again."""
    found = allocate(project, finish=evaluate_dc, time_limit=5.0)
    assert found.best is not None
    placed = moved(project, found.best.allocation)
    times, result = [], None
    stages = (
        lambda _: evaluate_dc(placed),
        with_emissions,
        with_stability,
        with_inrush,
        lambda known: with_emissions(evaluate_dc(placed), known),
    )
    for stage in stages:
        start = time.perf_counter()
        result = stage(result)
        times.append((time.perf_counter() - start) * 1e3)
    dc, emissions, stability, inrush, again = times
    print(
        f"{name:28s} checks of one candidate: DC {dc:.1f}, emissions {emissions:.1f} "
        f"({again:.1f} with all spectra known), stability {stability:.0f}, switch-on {inrush:.0f} ms"
    )


def main() -> None:
    for goal in ("even", "fewest", "quiet"):
        run("demo, 12 on 3", demo(), goal)
    for goal in ("even", "fewest"):
        run("demo twice, 24 on 4", several(24, 4), goal)
        run("demo five times, 60 on 8", several(60, 8), goal)
    for seed in range(4):
        for goal in ("even", "fewest"):
            run(f"24 on 4, seed {seed}", bus(24, 4, seed=seed), goal)
    alike = bus(24, 4)
    alike = replace(alike, filters=tuple(replace(alike.filters[0], id=f.id, rated_current=30.0) for f in alike.filters))
    run("24 on 4 equal filters", alike, "even")
    run("24 on 4, one case", bus(24, 4, 1), "even")
    run("24 on 4, tight", bus(24, 4, filling=0.99), "even")
    run("24 on 4, overloaded", bus(24, 4, filling=1.1), "even", 5.0)
    run("24 on 6", bus(24, 6), "even")
    run("32 on 4", bus(32, 4), "even")
    for goal in ("even", "fewest"):
        run("60 on 8", bus(60, 8), goal)
    checks("demo, 12 on 3", demo())
    checks("demo twice, 24 on 4", several(24, 4))
    checks("demo five times, 60 on 8", several(60, 8))


if __name__ == "__main__":
    main()
