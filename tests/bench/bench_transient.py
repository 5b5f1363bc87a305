"""Times of switch-on: ``python tests/bench/bench_transient.py``. Not collected by pytest.

The same equations (``state_space``) are given to scipy's LSODA and Radau with a right-hand side in numpy, the
thresholds as events, restarted at every event, at several tolerances. Processor time of this process counts, so that a
busy machine does not change the ratios much. They stop after ``PATIENCE`` seconds; the rest of the window is then
counted at the rate so far, and said.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from budget.engine.events import make_logic
from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Output, Project, Rules
from budget.engine.operating import loads
from budget.engine.statespace import saturation, state_space
from budget.engine.transient import inrush
from budget.project import store
from budget.project.build import build

PATIENCE = 120.0
HERON = Path(__file__).parent.parent.parent / "projects" / "heron.toml"


def heron() -> Project:
    loaded = store.load(HERON)
    project = build(loaded.document, loaded.shelves).project
    assert project is not None
    return project


def by_scipy(project: Project, case: int, method: str, rtol: float) -> dict[str, Any]:
    """One switch-on at the high line; stops at PATIENCE seconds and tells how far it came."""
    space = state_space(project)
    asked = loads(project)
    logic = make_logic(project, asked, space.converters)
    n, count = space.A.shape[0], space.converters.size
    q = space.C[space.end_voltages], space.D[space.end_voltages]
    term = space.C[space.terminal_voltages], space.D[space.terminal_voltages]
    amps = space.C[: 1 + space.filters.size], space.D[: 1 + space.filters.size]
    assert not space.flux_D.any()
    level, climb = np.zeros(count), np.zeros(count)
    power, charging = logic.power[case], logic.charging[case]
    phase = np.where(logic.enabled[case], 0, 9)
    timer = np.full(count, np.inf)
    starts = np.full(count, np.nan)
    high, rise = project.bus.high, project.bus.rise
    evaluations = 0

    def inputs(t: float, x: np.ndarray) -> np.ndarray:
        u = np.empty(space.B.shape[1])
        u[0] = high if t >= rise else high * t / rise
        flux = space.flux_C @ x
        current, _ = saturation(flux, space.L0, space.saturation)
        u[1 + count :] = current - flux / space.L0
        u[1 : 1 + count] = 0.0
        volts = q[0] @ x + q[1] @ u
        u[1 : 1 + count] = (level + climb * t) / np.maximum(volts, logic.floor)
        if q[1][:, 1 : 1 + count].any():  # the ladders end in capacitors with resistance: a short fixed point
            for _ in range(3):
                u[1 : 1 + count] = (level + climb * t) / np.maximum(q[0] @ x + q[1] @ u, logic.floor)
        return u

    def rhs(t: float, x: np.ndarray) -> np.ndarray:
        nonlocal evaluations
        evaluations += 1
        u = inputs(t, x[:n])
        out = np.empty(n + 1)
        out[:n] = space.A @ x[:n] + space.B @ u
        out[n] = (amps[0][0] @ x[:n] + amps[1][0] @ u) ** 2
        return out

    x, t, peak = np.zeros(n + 1), 0.0, 0.0
    begin = time.process_time()
    window = project.rules.inrush_window
    while t < window and time.process_time() - begin < PATIENCE:
        end = min([window, *(rise for _ in (1,) if t < rise), *timer.tolist()])
        threshold = np.where(
            phase == 0, logic.turn_on, np.where(phase == 1, logic.turn_on, logic.turn_off) * (1 - 1e-9)
        )
        events = []
        for j in np.flatnonzero(phase < 9).tolist():

            def watch(t: float, x: np.ndarray, j: int = j, level: float = float(threshold[j])) -> float:
                return float(term[0][j] @ x[:n] + term[1][j] @ inputs(t, x[:n]) - level)

            watch.terminal = True  # type: ignore[attr-defined]
            watch.direction = 1.0 if phase[j] == 0 else -1.0  # type: ignore[attr-defined]
            events.append((j, watch))

        def stop(t: float, x: np.ndarray) -> float:
            return 1.0 if time.process_time() - begin < PATIENCE else -1.0

        stop.terminal = True  # type: ignore[attr-defined]
        found = solve_ivp(
            rhs,
            (t, end),
            x,
            method=method,
            rtol=rtol,
            atol=rtol,
            events=[*(e for _, e in events), stop],
            first_step=min(1e-8, 0.1 * (end - t)),
        )
        assert found.success, found.message
        bus = [amps[0][0] @ y[:n] + amps[1][0] @ inputs(s, y[:n]) for s, y in zip(found.t, found.y.T, strict=True)]
        peak = max(peak, max(bus))
        t, x = float(found.t[-1]), found.y[:, -1]
        for (j, _), hits in zip(events, found.t_events, strict=False):
            if hits.size:
                phase[j] = 1 if phase[j] == 0 else 0
                timer[j] = t + logic.delay[j] if phase[j] == 1 else np.inf
                level[j] = climb[j] = 0.0
        for j in np.flatnonzero(timer <= t).tolist():
            if phase[j] == 1:
                phase[j], starts[j], timer[j] = 2, t, t + logic.soft[j]
                climb[j] = (power[j] + charging[j]) / logic.soft[j]
                level[j] = -climb[j] * t
            else:
                timer[j], level[j], climb[j] = np.inf, power[j], 0.0
    spent = time.process_time() - begin
    return {"peak": peak, "i2t": float(x[n]), "starts": starts, "spent": spent, "t": t, "evaluations": evaluations}


def large(converters: int, filters: int, cases: int = 1) -> Project:
    """Converters of one kind with their own values, evenly behind the filters; two saturating chokes in each filter."""
    rng = np.random.default_rng(3)
    share = converters / filters

    def near(value: float) -> float:
        return float(value * rng.uniform(0.8, 1.25))

    parts = tuple(
        Filter(
            f"F{k}",
            dm=(
                Branch("series", R=0.04 / share, L=near(2e-5) / share, Rp=900.0, saturation=6.0 * share),
                Branch("shunt", R=5e-3, C=near(1e-6) * share),
                Branch("shunt", R=2.0 / share, C=near(6e-6) * share),
                Branch("series", R=0.03 / share, L=near(1e-5) / share, Rp=900.0, saturation=7.0 * share),
                Branch("shunt", R=5e-3, C=near(1e-6) * share),
                Branch("shunt", R=1.5 / share, C=near(6e-6) * share),
            ),
        )
        for k in range(filters)
    )
    members = tuple(
        Converter(
            f"C{k}",
            50.0,
            (Output("a", 12.0, near(2.5)),),
            ((1.0, 0.88),),
            filter=f"F{k % filters}",
            min_input=16.0,
            turn_on=17.5,
            turn_off=15.5,
            start_delay=near(5e-3),
            soft_start=near(3e-3),
            output_capacitance=near(2e-4),
            lead=Lead(R=0.007, L=near(3e-7)),
            input=(Branch("shunt", R=3e-3, C=near(1e-5)), Branch("shunt", R=0.25, C=near(2.5e-5))),
        )
        for k in range(converters)
    )
    bus = Bus(22.0, 28.0, 30.0, resistance=0.2 / converters, inductance=2e-5 / converters, rise=3e-4)
    return Project(bus, parts, members, tuple(Case(f"case{k}") for k in range(cases)), Rules(inrush_window=20e-3))


def cpu(project: Project, only: list[tuple[int, str]] | None = None, repeats: int = 3) -> tuple[float, Any]:
    """Least processor time of a few runs, and the result."""
    best, found = np.inf, None
    for _ in range(repeats):
        begin = time.process_time()
        found = inrush(project, only=only)
        best = min(best, time.process_time() - begin)
    return best, found


def main() -> None:
    project = heron()
    case = next(k for k, c in enumerate(project.cases) if c.id == "survey")
    inrush(project, only=[(case, "on-high")])
    one, found = cpu(project, [(case, "on-high")])
    run = found.runs[0]
    starts = np.array([np.nan if c.runs_at is None else c.runs_at for c in run.converters])
    print(
        f"heron, survey on-high: {one:.3f} s, {run.steps} steps; peak {run.bus_peak:.5f} A, i2t {run.bus_i2t:.6f} A^2 s"
    )
    every, found = cpu(project)
    print(f"heron, all {len(found.runs)} cases and events: {every:.3f} s")
    plans = [("LSODA", r) for r in (1e-5, 1e-6, 1e-7)] + [("Radau", 1e-4), ("Radau", 1e-6)]
    for method, rtol in plans if "quick" not in sys.argv else plans[:2]:
        other = by_scipy(project, case, method, rtol)
        whole = other["spent"] * project.rules.inrush_window / other["t"]
        scaled = "" if other["t"] >= project.rules.inrush_window else f" (scaled from {other['t'] * 1e3:.2f} ms)"
        print(
            f"  {method} rtol {rtol:g}: {whole:.2f} s{scaled}, {whole / one:.0f} x;"
            f" {whole / every * len(found.runs):.0f} x per run of all together; {other['evaluations']} evaluations;"
            f" peak differs by {abs(other['peak'] / run.bus_peak - 1):.1e},"
            f" i2t by {abs(other['i2t'] / run.bus_i2t - 1):.1e},"
            f" starts by {np.nanmax(np.abs(other['starts'] / starts - 1), initial=0.0):.1e}"
        )
    previous = None
    for converters, filters in ((5, 1), (10, 2), (20, 4), (40, 8)):
        p = large(converters, filters)
        states = state_space(p).A.shape[0]
        spent, found = cpu(p, repeats=2)
        growth = ""
        if previous is not None:
            power = np.log(spent / previous[1]) / np.log(states / previous[0])
            growth = f"; grows as states^{power:.2f}"
        steps = max(r.steps for r in found.runs)
        print(f"{converters} converters, {filters} filters, {states} states: {spent:.3f} s, {steps} steps{growth}")
        previous = states, spent
    p = replace(large(40, 8, cases=4), bus=replace(large(40, 8).bus, surge=50.0, surge_time=5e-3, surge_rise=1e-3))
    spent, found = cpu(p, repeats=1)
    print(f"40 converters behind 8 filters, 4 cases, {len(found.runs)} runs: {spent:.3f} s")


if __name__ == "__main__":
    main()
