"""Times of the emissions: ``python tests/bench/bench_emission.py``. Not collected by pytest.

Printed beside each figure is what is wanted of it. The dense figure is the same transfers by one nodal matrix of the
whole network per frequency and ``numpy.linalg.solve``, in the same run.
"""

from __future__ import annotations

import resource
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from statistics import median

import numpy as np
from numpy.typing import NDArray

from budget.engine.emission import emissions
from budget.engine.evaluate import evaluate_dc, with_emissions
from budget.engine.ladder import admittance
from budget.engine.lines import Lines, Source, lines_of
from budget.engine.model import Case, Chop, CommonMode, Converter, Filter, Lead, LimitLine, Load, Project
from budget.engine.network import COMMON, Job, transfers
from budget.engine.operating import operating_points
from budget.engine.receiver import line_impedance
from budget.project import limits, store
from budget.project.build import build

ROOT = Path(__file__).parent.parent.parent


def demo() -> Project:
    loaded = store.load(ROOT / "projects" / "heron.toml")
    project = build(loaded.document, loaded.shelves).project
    assert project is not None
    return project


def best_of(work: Callable[[], object], repeats: int = 25) -> float:
    """Median of ``repeats`` runs in milliseconds."""
    return together((work,), repeats)[0]


def together(works: Sequence[Callable[[], object]], repeats: int) -> list[float]:
    """Medians of several works, run in turn, so that what else the machine does hits all of them."""
    times: list[list[float]] = [[] for _ in works]
    for _ in range(repeats + 1):
        for work, spent in zip(works, times, strict=True):
            start = time.perf_counter()
            work()
            spent.append(time.perf_counter() - start)
    return [median(spent[1:]) * 1e3 for spent in times]


def grown(project: Project, count: int, *, same: bool = False) -> Project:
    """``count`` converters like those of the demo, spread over more filters; frequencies and leads all differ."""
    rng = np.random.default_rng(4)
    filters: list[Filter] = []
    converters: list[Converter] = []
    for k in range(count):
        old = project.converters[k % len(project.converters)]
        group = k // len(project.converters)
        home = f"{old.filter}.{group}"
        if home not in [f.id for f in filters]:
            part = next(f for f in project.filters if f.id == old.filter)
            filters.append(replace(part, id=home, rated_current=1e3))
        lead = old.lead if same else Lead(R=old.lead.R, L=old.lead.L * rng.uniform(0.8, 1.2))
        frequency = old.frequency * rng.uniform(0.8, 1.2) if old.frequency else None
        clock = f"{old.clock}.{group}" if old.clock else ""
        if clock:
            frequency = next((c.frequency for c in converters if c.clock == clock), frequency)
        converters.append(
            replace(old, id=f"{old.id}.{group}", filter=home, clock=clock, lead=lead, frequency=frequency)
        )
    cases = tuple(
        Case(
            case.id,
            load=tuple(
                (f"{i}.{g}", load) for i, load in case.load for g in range(count // len(project.converters) + 1)
            ),
        )
        for case in project.cases
    )
    bus = replace(project.bus, resistance=project.bus.resistance * 12 / count)
    return replace(project, bus=bus, filters=tuple(filters), converters=tuple(converters), cases=cases)


def dense_transfers(project: Project, limit: LimitLine, spectrum: Lines) -> None:
    """All transfers of a spectrum by nodal matrices (K, nodes, nodes), filled for all frequencies at once, both modes.

    As in the engine, every frequency goes with the source that asks for it, and each source is also solved alone on the
    set-up, for the isolation of its filter.
    """
    homes = [f for f in project.filters if not f.attenuation]
    for common in (False, True):
        sources = [s for s in spectrum.sources if (s.place == COMMON) == common]
        points = [spectrum.points[s.start : s.stop].reshape(-1) for s in sources]
        dense_solve(project, limit, homes, sources, points, common)
        for s, f in zip(sources, points, strict=True):
            dense_solve(project, limit, [Filter(project.converters[s.converter].filter)], [s], [f], common)


def dense_solve(
    project: Project,
    limit: LimitLine,
    homes: list[Filter],
    sources: list[Source],
    points: list[NDArray[np.float64]],
    common: bool,
) -> None:
    """One batch: the network of some filters, and of all converters behind them or of the only source."""
    only = {s.converter for s in sources} if len(sources) == 1 else set(range(len(project.converters)))
    w = 2 * np.pi * np.concatenate(points)
    line = line_impedance(limit.setup, w)
    parts: list[tuple[int, int, NDArray[np.complex128]]] = [(1, 0, (2 / line) if common else 0.5 / line)]
    nodes, spots = 1, {}
    for home in homes:
        here = 1
        for b in home.cm if common else home.dm:
            y = admittance(b, w)
            nodes += b.place == "series"
            parts.append((here, nodes, y) if b.place == "series" else (here, 0, y))
            here = nodes if b.place == "series" else here
        for k, c in enumerate(project.converters):
            if c.filter != home.id or k not in only:
                continue
            if common:
                spots[k] = here
                if c.cm:
                    parts.append((here, 0, 1j * w * (c.cm.capacitance + c.cm.shunt)))
                continue
            nodes += 1
            parts.append((here, nodes, 1 / (c.lead.R + 1j * w * c.lead.L)))
            at = nodes
            for b in c.input:
                y = admittance(b, w)
                nodes += b.place == "series"
                parts.append((at, nodes, y) if b.place == "series" else (at, 0, y))
                at = nodes if b.place == "series" else at
            spots[k] = at
    matrix = np.zeros((w.size, nodes + 1, nodes + 1), dtype=np.complex128)
    for a, b_, y in parts:
        matrix[:, a, a] += y
        matrix[:, b_, b_] += y
        matrix[:, a, b_] -= y
        matrix[:, b_, a] -= y
    drawn = np.zeros((w.size, nodes, 1), dtype=np.complex128)
    begin = 0
    for s, f in zip(sources, points, strict=True):
        drawn[begin : begin + f.size, spots[s.converter] - 1] = 1.0
        begin += f.size
    np.linalg.solve(matrix[:, 1:, 1:], drawn)


def many_lines(frequency: float, tolerance: float) -> Project:
    limit = replace(limits.resolve("CE03", (), 28.0) or LimitLine("", "", "", ()))
    base = demo()
    units = tuple(
        replace(
            c,
            frequency=frequency * (1 + k / 7),
            frequency_tolerance=tolerance,
            clock="",
            chop=Chop(0.4, 40e-9, 30e-9, 0.2),
            ripple=None,
            spectrum=(),
            cm=CommonMode(20e-12, 50.0, 40e-9, 30e-9),
        )
        for k, c in enumerate(base.converters[:1])
    )
    return replace(base, converters=units, cases=(Case("full"),), checked=(limit,))


def main() -> None:
    # first of all: the peak is that of the process
    for frequency, tolerance in ((1e3, 0.0), (50.0, 0.0), (50.0, 0.02)):
        project = many_lines(frequency, tolerance)
        operating = operating_points(project)
        start = time.perf_counter()
        found = emissions(project, operating)
        whole = time.perf_counter() - start
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        lines = found.spectra[0].frequency.size
        print(
            f"{lines} lines, tolerance {tolerance:.0%}: {whole:.2f} s, peak of the process {peak:.0f} MB   wanted 500"
        )
        del found, operating, project

    base = demo()
    result = with_emissions(evaluate_dc(base))
    assert result.emissions is not None
    loads = [
        replace(base, cases=(*base.cases[:-1], replace(base.cases[-1], load=(("CV1", Load("share", 0.3 + i / 100)),))))
        for i in range(40)
    ]
    turn = iter(range(10**9))

    def load_edit() -> None:
        with_emissions(evaluate_dc(loads[next(turn) % 40]), result)

    nets = [
        replace(base, filters=(replace(base.filters[0], isolation=50.0 + i / 10), *base.filters[1:])) for i in range(40)
    ]

    def network_edit() -> None:
        with_emissions(evaluate_dc(nets[next(turn) % 40]), result)

    count = sum(s.frequency.size for s in result.emissions.spectra)
    print(f"demo, 12 converters, 12 corners, {count} lines")
    print(f"  after a load edit      {best_of(load_edit):8.2f} ms   wanted at most 25")
    print(f"  after a network edit   {best_of(network_edit):8.2f} ms   wanted at most 60")
    print(f"  operating points only  {best_of(lambda: evaluate_dc(loads[0])):8.2f} ms")

    limit = base.checked[0]
    for project in (base, grown(base, 48)):
        spectrum = lines_of(project, limit)
        jobs = [
            Job(s.converter, s.place, s.start * spectrum.points.shape[1], s.stop * spectrum.points.shape[1])
            for s in spectrum.sources
        ]
        flat = spectrum.points.reshape(-1)
        ours, dense = together(
            (
                lambda p=project, x=flat, j=jobs: transfers(p, limit, x, j),
                lambda p=project, x=spectrum: dense_transfers(p, limit, x),
            ),
            25 if project is base else 3,
        )
        print(f"  {len(project.converters)} converters: transfers {ours:.2f} ms, dense nodal {dense:.0f} ms: ", end="")
        print(f"ratio {dense / ours:.0f}   wanted at least 20")

    previous = None
    for size in (50, 100, 200):
        project = grown(base, size)
        operating = operating_points(project)
        start = time.perf_counter()
        found = emissions(project, operating)
        whole = (time.perf_counter() - start) * 1e3
        again = best_of(lambda p=project, o=operating, f=found: emissions(p, o, previous=f), 3)
        lines = found.spectra[0].frequency.size
        per_line = whole / lines
        growth = "" if previous is None else f", {per_line / previous:.2f} times the last"
        wanted = "   wanted at most 2000" if size == 200 else ""
        print(f"{size:4d} converters, {lines} lines: {whole:.0f} ms, again {again:.0f} ms{wanted}")
        print(f"     {per_line * 1e3:.1f} us a line{growth}   wanted at most 2.2 for twice the network")
        assert operating.solved.any()
        previous = per_line


if __name__ == "__main__":
    main()
