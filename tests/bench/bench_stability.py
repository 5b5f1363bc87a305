"""Times of the stability calculation: ``python tests/bench/bench_stability.py``. Not collected by pytest."""

from __future__ import annotations

from functools import partial
from pathlib import Path

from budget.engine.cure import damping_for, mode_table
from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Load, Output, Project
from budget.engine.operating import operating_points
from budget.engine.stability import stability
from budget.engine.statespace import state_space
from budget.project import store
from budget.project.build import build
from tests.bench.bench_operating import milliseconds

PROJECTS = Path(__file__).parent.parent.parent / "projects"


def demo(name: str) -> Project:
    loaded = store.load(PROJECTS / f"{name}.toml")
    project = build(loaded.document, loaded.shelves).project
    assert project is not None
    return project


def large(converters: int, filters: int, cases: int = 4) -> Project:
    """Every part a little different, so that no resonances coincide."""
    parts = []
    for k in range(filters):
        x = 1.0 + 0.07 * k
        ladder = (
            Branch("series", R=0.008, L=4.7e-6 * x, Rp=900.0),
            Branch("shunt", R=0.004, C=3.3e-6 * x),
            Branch("shunt", R=0.55, C=22e-6),
            Branch("series", R=0.006, L=3.3e-6 * x, Rp=900.0),
            Branch("shunt", R=0.004, C=4.7e-6),
            Branch("shunt", R=0.45, C=22e-6 * x),
        )
        parts.append(Filter(f"F{k}", dm=ladder))
    units = []
    for k in range(converters):
        x = 1.0 + 0.02 * k
        ladder = (Branch("shunt", R=0.002, C=14e-6 * x), Branch("shunt", R=0.18, C=33e-6))
        units.append(
            Converter(
                f"C{k}",
                60.0,
                (Output("o", 12.0, 2.0 * x),),
                ((1.0, 0.9),),
                filter=f"F{k % filters}",
                lead=Lead(0.005, 2.8e-7 * x),
                input=ladder,
                control_bandwidth=9e3 * x,
            )
        )
    shares = tuple(
        Case(f"case{j}", load=tuple((u.id, Load("share", 0.4 + 0.05 * ((i + j) % 7))) for i, u in enumerate(units)))
        for j in range(cases)
    )
    return Project(Bus(22.0, 28.0, 32.0, resistance=0.003, inductance=5e-7), tuple(parts), tuple(units), shares)


def main() -> None:
    for name, project in (("heron", demo("heron")), ("40 converters, 8 filters", large(40, 8))):
        points = operating_points(project)
        assert points.solved.all()
        states = state_space(project).A.shape[0]
        print(f"{name}: {states} states, {points.solved.size} corners")
        print(f"  state space {milliseconds(partial(state_space, project), 10):7.1f} ms")
        print(f"  stability   {milliseconds(partial(stability, project, points), 5):7.1f} ms")
        print(f"  modes       {milliseconds(partial(mode_table, project, points, 0, 0, 5), 5):7.1f} ms")
    heron = demo("heron")
    points = operating_points(heron)
    print(f"damping_for   {milliseconds(partial(damping_for, heron, points, 'FL1', 11.0), 1):7.1f} ms")


if __name__ == "__main__":
    main()
