"""The emissions by other ways, for tests: a dense nodal matrix of the whole network, waveforms by Fourier transform of
samples, and a receiver that is tuned step by step. Slow, plain, and sharing no code with the engine."""

from __future__ import annotations

import cmath
import itertools
import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from budget.engine.model import (
    Branch,
    Bus,
    Case,
    Chop,
    CommonMode,
    Converter,
    Filter,
    Lead,
    LimitLine,
    Load,
    Output,
    Project,
    Ripple,
    Rules,
)

Node = int


def branch_impedance(b: Branch, w: float) -> complex:
    z = complex(b.R)
    y = 0j
    if b.L:
        y += 1 / (1j * w * b.L)
    if b.Rp:
        y += 1 / b.Rp
    if b.Cp:
        y += 1j * w * b.Cp
    if b.L or b.Rp or b.Cp:
        z += 1 / y
    if b.C:
        z += 1 / (1j * w * b.C)
    return z


def line_impedance(setup: str, w: float) -> complex:
    def both(a: complex, b: complex) -> complex:
        return 1 / (1 / a + 1 / b)

    s = 1j * w
    if setup == "cap-10uF":
        return 1 / (s * 10e-6)
    if setup == "lisn-50uH":
        return both(1 / (s * 0.25e-6) + both(50, 1000), s * 50e-6 + 5 + 1 / (s * 8e-6))
    return both(1 / (s * 0.1e-6) + both(50, 5000), s * 5e-6 + 1 / (s * 10e-6))


class Nodal:
    """Admittance matrix with node 0 as the reference; node 1 is the bus."""

    def __init__(self) -> None:
        self.parts: list[tuple[int, int, complex]] = []
        self.count = 1

    def node(self) -> int:
        self.count += 1
        return self.count

    def add(self, a: int, b: int, z: complex) -> None:
        self.parts.append((a, b, 1 / z))

    def ladder(self, start: int, ladder: Sequence[Branch], w: float) -> int:
        here = start
        for b in ladder:
            z = branch_impedance(b, w)
            if b.place == "series":
                if z == 0:
                    continue
                there = self.node()
                self.add(here, there, z)
                here = there
            else:
                self.add(here, 0, z)
        return here

    def matrix(self) -> np.ndarray[Any, Any]:
        y = np.zeros((self.count + 1, self.count + 1), dtype=complex)
        for a, b, g in self.parts:
            y[a, a] += g
            y[b, b] += g
            y[a, b] -= g
            y[b, a] -= g
        return y[1:, 1:]


def network(
    project: Project, limit: LimitLine, f: float, common: bool, only: int | None = None
) -> tuple[np.ndarray[Any, Any], dict[tuple[int, str], int]]:
    """The nodal matrix at ``f``, and the node of each converter's places; ``only``: that one straight on the set-up."""
    w = 2 * math.pi * f
    net = Nodal()
    line = line_impedance(limit.setup, w)
    net.add(1, 0, line / 2 if common else 2 * line)
    spots: dict[tuple[int, str], int] = {}

    def put(k: int, c: Converter, node: int) -> None:
        if common:
            if c.cm:
                net.add(node, 0, 1 / (1j * w * (c.cm.capacitance + c.cm.shunt)))
                spots[k, "common"] = node
            return
        if c.lead.R or c.lead.L:
            there = net.node()
            net.add(node, there, c.lead.R + 1j * w * c.lead.L)
            node = there
        spots[k, "terminals"] = node
        spots[k, "switch"] = net.ladder(node, c.input, w)

    if only is not None:
        put(only, project.converters[only], 1)
    else:
        for f_ in project.filters:
            if f_.attenuation:
                continue
            end = net.ladder(1, f_.cm if common else f_.dm, w)
            for k, c in enumerate(project.converters):
                if c.filter == f_.id:
                    put(k, c, end)
    return net.matrix(), spots


def transfer(project: Project, limit: LimitLine, f: float, k: int, place: str, *, alone: bool = False) -> complex:
    """Level on one line for 1 A drawn (or 1 V behind the common-mode capacitance), filters and all."""
    c = project.converters[k]
    home = next(x for x in project.filters if x.id == c.filter)

    def solve(only: int | None) -> complex:
        common = place == "common"
        y, spots = network(project, limit, f, common, only)
        drawn = np.zeros(y.shape[0], dtype=complex)
        w = 2 * math.pi * f
        drawn[spots[k, place] - 1] = 1j * w * c.cm.capacitance if common and c.cm else -1.0
        v = complex(np.linalg.solve(y, drawn)[0])
        line = line_impedance(limit.setup, w)
        if limit.unit == "dBuV":
            return v if common else v / 2
        return v / (line / 2) / 2 if common else v / (2 * line)

    if alone:
        return solve(k)
    less = 10 ** (-table(home, f, place == "common") / 20) if home.attenuation else 1.0
    got = solve(k if home.attenuation else None) * less
    if home.isolation is not None:
        least = abs(solve(k)) * 10 ** (-home.isolation / 20)
        if abs(got) < least:
            got = cmath.rect(least, cmath.phase(got))
    return got


def table(home: Filter, f: float, common: bool) -> float:
    rows = [(r[0], r[2 if common else 1]) for r in home.attenuation]
    if f <= rows[0][0]:
        return rows[0][1]
    for (f0, a0), (f1, a1) in itertools.pairwise(rows):
        if f <= f1:
            return a0 + (a1 - a0) * math.log(f / f0) / math.log(f1 / f0)
    return rows[-1][1]


# -- waveforms


def samples_chop(duty: float, rise: float, fall: float, ripple: float, n: int) -> np.ndarray[Any, Any]:
    """Means over each of ``n`` equal cells of a period of the chopped pulse (shares of the period)."""
    x = [0.0, rise, rise / 2 + duty - fall / 2, rise / 2 + duty + fall / 2, 1.0]
    y = [0.0, 1 - ripple / 2, 1 + ripple / 2, 0.0, 0.0]
    return cell_means(x, y, n)


def cell_means(x: Sequence[float], y: Sequence[float], n: int) -> np.ndarray[Any, Any]:
    """Exact integrals over cells of a chain of straight pieces; pieces of no width are steps."""
    edges = np.linspace(0.0, 1.0, n + 1)
    total = np.zeros(n + 1)
    for x0, x1, y0, y1 in zip(x, x[1:], y, y[1:], strict=False):
        if x1 <= x0:
            continue
        t = np.clip(edges, x0, x1) - x0
        total += y0 * t + (y1 - y0) * t * t / (2 * (x1 - x0))
    return np.diff(total) * n


def fourier(cells: np.ndarray[Any, Any], order: int) -> complex:
    """c_n of the waveform whose cell means are given, with the droop of the averaging taken off."""
    n = cells.size
    c = np.fft.fft(cells)[order] / n
    return complex(c * np.exp(-1j * np.pi * order / n) / np.sinc(order / n))


# -- the receiver


def limit_value(limit: LimitLine, f: float) -> float:
    here = [y for x, y in limit.points if x == f]
    if here:
        return min(here)
    for (x0, y0), (x1, y1) in zip(limit.points, limit.points[1:], strict=False):
        if x0 < f < x1:
            return y0 + (y1 - y0) * math.log(f / x0) / math.log(x1 / x0)
    raise ValueError("outside the band")


def bandwidth_value(limit: LimitLine, f: float) -> float:
    if not limit.bandwidth:
        return 0.0
    for a, b, width in limit.bandwidth:
        if a <= f < b:
            return width
    return limit.bandwidth[0][2] if f < limit.bandwidth[0][0] else limit.bandwidth[-1][2]


def brute_margin(
    limit: LimitLine, lines: Sequence[tuple[int, float, float, float]], rss: bool, extra: Sequence[float] = ()
) -> tuple[float, float] | None:
    """Margin and tuning frequency; ``lines`` are (clock, from, to, level) with the bandwidth already in from and to."""
    first, last = limit.points[0][0], limit.points[-1][0]
    tried = {x for x, _ in limit.points} | {min(max(x, first), last) for _, a, b, _ in lines for x in (a, b)}
    tried |= {x for x in extra if first <= x <= last}
    best: tuple[float, float] | None = None
    for f in sorted(tried):
        seen: dict[int, float] = {}
        for clock, a, b, level in lines:
            if a * (1 - 1e-12) <= f <= b * (1 + 1e-12):
                seen[clock] = max(seen.get(clock, 0.0), level)
        total = math.sqrt(sum(x * x for x in seen.values())) if rss else sum(seen.values())
        if total > 0:
            margin = limit_value(limit, f) - 20 * math.log10(total / 1e-6)
            if best is None or margin < best[0] - 1e-9:
                best = margin, f
    return best


# -- random projects


def random_branch(rng: np.random.Generator, place: str, scale: float = 1.0) -> Branch:
    def some(low: float, high: float, share: float = 1.0) -> float | None:
        return float(np.exp(rng.uniform(np.log(low), np.log(high)))) if rng.random() < share else None

    if place == "series":
        henry = some(0.1e-6, 30e-6, 0.9) or 0.0
        return Branch(
            "series",
            R=some(1e-3, 0.1, 0.8) or 0.0,
            L=henry * scale,
            Rp=some(50.0, 5e3, 0.5) if henry else None,
            Cp=some(1e-12, 100e-12, 0.5) if henry else None,
        )
    return Branch("shunt", R=some(1e-3, 2.0, 0.8) or 0.0, L=some(0.5e-9, 30e-9, 0.6) or 0.0, C=some(1e-9, 20e-6))


def random_ladder(rng: np.random.Generator, most: int, scale: float = 1.0) -> tuple[Branch, ...]:
    return tuple(
        random_branch(rng, "series" if rng.random() < 0.5 else "shunt", scale) for _ in range(rng.integers(0, most + 1))
    )


def random_project(rng: np.random.Generator, limits: tuple[LimitLine, ...] = (), cases: int = 2) -> Project:
    """Two or three filters (one may be a table), two to six converters of every kind of noise, some in step."""
    filters = []
    for k in range(int(rng.integers(2, 4))):
        isolation = float(rng.uniform(20, 90)) if rng.random() < 0.4 else None
        if k == 2:
            rows = tuple((f, float(rng.uniform(0, 60)), float(rng.uniform(0, 60))) for f in (2e4, 3e5, 5e6))
            filters.append(Filter(f"F{k}", attenuation=rows, resistance=0.01, isolation=isolation))
        else:
            filters.append(
                Filter(f"F{k}", dm=random_ladder(rng, 5), cm=random_ladder(rng, 4, 50.0), isolation=isolation)
            )
    converters = []
    for k in range(int(rng.integers(2, 7))):
        law = str(rng.choice(["constant", "inverse-line", "flyback"]))
        kind = rng.integers(0, 5)
        in_step = rng.random() < 0.4
        frequency = 250e3 if in_step else float(rng.uniform(120e3, 600e3))
        more: dict[str, Any] = {}
        if kind in (0, 1):
            more["chop"] = Chop(float(rng.uniform(0.2, 0.6)), 30e-9, 50e-9, float(rng.uniform(0, 2)))
        elif kind == 2:
            shape = str(rng.choice(["triangle", "sine"]))
            more["ripple"] = Ripple(float(rng.uniform(0.01, 1)), shape, float(rng.uniform(0.2, 0.6)))
        elif kind == 3:
            more["spectrum"] = tuple(
                (frequency * x, float(rng.uniform(20, 90))) for x in sorted(rng.uniform(0.3, 9, 4).tolist())
            )
        if rng.random() < 0.7:
            more["cm"] = CommonMode(
                float(rng.uniform(5e-12, 100e-12)), 60.0, 20e-9, 60e-9, float(rng.uniform(0.2, 0.6)), 2e-9
            )
        if not more and k == 0:
            more["chop"] = Chop(0.4, 20e-9, 20e-9, 0.3)
        converters.append(
            Converter(
                f"C{k}",
                rated_power=60.0,
                output=(Output("out", 5.0, float(rng.uniform(0.5, 6))),),
                efficiency=((1.0, 0.88),),
                filter=str(rng.choice([f.id for f in filters])),
                lead=Lead(float(rng.uniform(0, 0.02)), float(rng.choice([0.0, 200e-9, 600e-9]))),
                input=random_ladder(rng, 3),
                frequency=frequency,
                frequency_tolerance=0.02 if in_step else float(rng.choice([0.0, 0.03, 0.1])),
                clock="sync" if in_step else "",
                phase=float(rng.uniform(-360, 720)),
                duty_law=law,
                **more,
            )
        )
    converters.append(replace(converters[0], id="loose", filter=""))
    load = tuple(
        (c.id, Load("off") if rng.random() < 0.3 else Load("share", float(rng.uniform(0, 1)))) for c in converters
    )
    which = (Case("full"), Case("other", load=load))[:cases]
    bus = Bus(20.0, 28.0, 33.0, resistance=0.01)
    rules = Rules(combine=str(rng.choice(["arithmetic", "rss"])))
    return Project(bus, tuple(filters), tuple(converters), which, rules, limits, limits)


# -- the whole chain again


def project_lines(
    project: Project, limit: LimitLine, voltage: Any, current: Any, running: Any, *, alone: bool = False
) -> list[tuple[int, int, float, float, float]]:
    """Every visible line of one corner as (clock, order, from, to, level); arrays are by converter."""
    groups: dict[str, list[int]] = {}
    for k, c in enumerate(project.converters):
        if any(f.id == c.filter for f in project.filters):
            groups.setdefault(f"clock {c.clock}" if c.clock else c.id, []).append(k)
    first, last = limit.points[0][0], limit.points[-1][0]
    found: list[tuple[int, int, float, float, float]] = []
    for g, members in enumerate(groups.values()):
        tolerance = project.converters[members[0]].frequency_tolerance
        f0 = next((project.converters[k].frequency for k in members if project.converters[k].frequency), None)
        rows: dict[int, float] = {}
        waves = {k: sampled(project, project.converters[k], float(voltage[k]), float(current[k])) for k in members}
        paced = any(waves[k] or project.converters[k].cm for k in members) and any(
            c.chop or c.ripple or c.cm for c in (project.converters[k] for k in members)
        )
        if f0 and paced:
            for n in range(1, int((last + 1e6) / f0 / (1 - tolerance)) + 2):
                half = bandwidth_value(limit, n * f0) / 2
                if n * f0 * (1 + tolerance) + half < first or n * f0 * (1 - tolerance) - half > last:
                    continue
                best = 0.0
                for f in {n * f0 * (1 - tolerance), n * f0, n * f0 * (1 + tolerance)}:
                    sums = {"dm": 0j, "cm": 0j}
                    for k in members:
                        if not running[k]:
                            continue
                        c = project.converters[k]
                        turn = cmath.exp(-2j * math.pi * n * c.phase / 360)
                        for place, cells in waves[k].items():
                            c_n = cells[n] if cells is not None else 0j
                            way = transfer(project, limit, f, k, place, alone=alone)
                            sums["cm" if place == "common" else "dm"] += math.sqrt(2) * c_n * turn * way
                    best = max(best, abs(sums["dm"]) + abs(sums["cm"]))
                rows[n] = best
        own = []
        for k in members:
            c = project.converters[k]
            for f, db in c.spectrum:
                amps = 1e-6 * 10 ** (db / 20)
                level = max(
                    abs(transfer(project, limit, x, k, "terminals", alone=alone)) * amps
                    for x in {f * (1 - tolerance), f, f * (1 + tolerance)}
                ) * bool(running[k])
                n = max(1, math.ceil(f / f0 - 0.5)) if f0 else 0
                if n in rows:
                    rows[n] += level
                    continue
                half = bandwidth_value(limit, f) / 2
                if f * (1 + tolerance) + half >= first and f * (1 - tolerance) - half <= last:
                    own.append((g, n, f * (1 - tolerance) - half, f * (1 + tolerance) + half, level))
        for n, level in rows.items():
            assert f0
            half = bandwidth_value(limit, n * f0) / 2
            found.append((g, n, n * f0 * (1 - tolerance) - half, n * f0 * (1 + tolerance) + half, level))
        found += own
    return found


class _Orders(dict[int, complex]):
    """Coefficients by order, from samples of one period."""

    def __init__(self, cells: np.ndarray[Any, Any]) -> None:
        super().__init__()
        n = cells.size
        c = np.fft.fft(cells) / n
        k = np.arange(n // 8)
        self.values_ = c[: n // 8] * np.exp(-1j * np.pi * k / n) / np.sinc(k / n)

    def __missing__(self, order: int) -> complex:
        return complex(self.values_[order])


def duty_there(law: str, duty: float, nominal: float, voltage: float) -> float:
    if law == "constant":
        return duty
    if law == "inverse-line":
        return duty * nominal / voltage
    x = duty / (1 - duty) * nominal / voltage
    return x / (1 + x)


def sampled(project: Project, c: Converter, voltage: float, current: float, n: int = 1 << 13) -> dict[str, _Orders]:
    found: dict[str, _Orders] = {}
    nominal = project.bus.nominal
    if not c.frequency:
        return found
    if c.chop:
        d = duty_there(c.duty_law, c.chop.duty, nominal, voltage)
        cells = samples_chop(d, c.chop.rise * c.frequency, c.chop.fall * c.frequency, c.chop.ripple, n)
        found["switch"] = _Orders(cells * (current / cells.mean()))
    elif c.ripple:
        d = duty_there(c.duty_law, c.ripple.duty, nominal, voltage)
        if c.ripple.shape == "sine":
            t = (np.arange(n + 1)) / n
            cells = np.diff(-np.cos(2 * np.pi * t) / (2 * np.pi)) * n * c.ripple.pp / 2
        else:
            cells = cell_means([0, d, 1], [-0.5, 0.5, -0.5], n) * c.ripple.pp
        found["terminals"] = _Orders(cells)
    if c.cm:
        d = duty_there(c.duty_law, c.cm.duty, nominal, voltage)
        found["common"] = _Orders(
            samples_chop(d, c.cm.rise * c.frequency, c.cm.fall * c.frequency, 0.0, n) * c.cm.swing
        )
    return found
