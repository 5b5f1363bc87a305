"""Time and memory of a large project, stage by stage: ``python -m tests.bench.bench_scale``. Not collected by pytest.

Each stage runs in a process of its own, so that the memory it takes is its own: the greatest resident size, less what
the process had before. Two projects of 200 converters behind 40 filters with 12 cases: the demo's parts over and over
(some of its cases are then alike, and so are many of its parts), and one in which no two parts and cases are alike.
Switch-on stops after ``PATIENCE`` seconds of processor time; the whole is then reckoned from the share done, and said.
"""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time
import tomllib
from copy import deepcopy
from dataclasses import replace
from pathlib import Path

from budget.engine import evaluate
from budget.engine.cancel import CancelledError
from budget.engine.model import Project, Rules
from budget.project import store
from budget.project.build import build
from budget.project.document import Tree, from_data
from tests.bench.bench_stability import large

HERON = Path(__file__).parent.parent.parent / "projects" / "heron.toml"
FILTERS, CONVERTERS, CASES = 40, 200, 12
PATIENCE = 240.0
WANTED = 340.0  # MB of all stages together: 400 for the program less some 60 for itself with its screen
STAGES = ("dc", "emissions", "stability", "switch-on", "all")


def tree() -> Tree:
    """The demo's filters, converters and cases over and over, on a bus that carries them, as a file would hold them."""
    data: Tree = tomllib.loads(HERON.read_text())
    filters, converters, cases = data["filter"], data["converter"], data["case"]
    data["filter"] = [{**deepcopy(filters[k % len(filters)]), "id": f"FL{k + 1}"} for k in range(FILTERS)]
    data["converter"] = [
        {**deepcopy(converters[k % len(converters)]), "id": f"CV{k + 1}", "filter": f"FL{k % FILTERS + 1}"}
        for k in range(CONVERTERS)
    ]
    data["case"] = []
    for k in range(CASES):
        case = deepcopy(cases[k % len(cases)])
        load = case.get("load", {})
        names = ((f"CV{n + 1}", converters[n % len(converters)]["id"]) for n in range(CONVERTERS))
        data["case"].append(
            {**case, "id": f"case{k + 1}", "load": {new: load[old] for new, old in names if old in load}}
        )
    data["bus"] |= {"resistance": "0.4 mohm", "rating": "900 A"}
    return data


def copies() -> Project:
    """The project of ``tree``."""
    project = build(from_data(tree()), store.load(HERON).shelves).project
    assert project is not None
    return project


def different() -> Project:
    """No two parts and no two cases alike, saturation and thresholds included."""
    project = large(CONVERTERS, FILTERS, CASES)
    bus = replace(project.bus, resistance=0.5e-3, rise=3e-4, surge=50.0, surge_time=12e-3, surge_rise=1e-3)
    units = tuple(
        replace(c, turn_on=18.0 + 0.01 * k, turn_off=15.0, start_delay=2e-3 + 1e-5 * k, soft_start=3e-3)
        for k, c in enumerate(project.converters)
    )
    parts = tuple(
        replace(f, dm=tuple(replace(b, saturation=30.0 + k) if b.place == "series" else b for b in f.dm))
        for k, f in enumerate(project.filters)
    )
    return replace(project, bus=bus, filters=parts, converters=units, rules=Rules(inrush_window=0.03))


def size() -> float:
    """Greatest resident size of this process so far [MB]."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0


def stage(name: str, chosen: str) -> None:
    """Run a stage of a project, and tell its times, its memory, and the longest time between two asks to stop."""
    project = copies() if name == "copies" else different()
    before = size()
    start, asked, share = time.process_time(), [time.process_time()], [0.0]
    gaps = [0.0]

    def cancelled() -> bool:
        now = time.process_time()
        gaps.append(now - asked[0])
        asked[0] = now
        return chosen != "all" and now - start > PATIENCE

    result = evaluate.evaluate_dc(project)
    base = time.process_time()
    try:
        if chosen in ("emissions", "all"):
            result = evaluate.with_emissions(result)
        if chosen in ("stability", "all"):
            asked[0] = time.process_time()
            result = evaluate.with_stability(result, cancelled)
        if chosen in ("switch-on", "all"):
            asked[0] = time.process_time()
            evaluate.with_inrush(result, cancelled, share.append)
    except CancelledError:
        pass
    end = time.process_time()
    took = base - start if chosen == "dc" else end - base
    whole = took if share[-1] in (0.0, 1.0) else took / share[-1]
    told = "" if whole == took else f" (reckoned: {100.0 * share[-1]:.0f} % done in {took:.0f} s)"
    gap = f", asks at most {max(gaps):5.2f} s apart" if len(gaps) > 1 else ""
    wanted = f" (wanted: {WANTED:.0f})" if chosen == "all" else ""
    print(f"  {chosen:10s} {whole:8.2f} s, {size() - before:6.0f} MB{wanted}{gap}{told}", flush=True)


def main() -> None:
    if len(sys.argv) > 2:
        stage(sys.argv[1], sys.argv[2])
        return
    for name in ("copies", "different"):
        print(
            f"{CONVERTERS} converters, {FILTERS} filters, {CASES} cases, {name}: processor time and memory", flush=True
        )
        for chosen in STAGES:
            command = [sys.executable, "-m", "tests.bench.bench_scale", name, chosen]
            subprocess.run(command, check=True, env={**os.environ, "OPENBLAS_NUM_THREADS": "1"})


if __name__ == "__main__":
    main()
