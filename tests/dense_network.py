"""Switch-on by other means, for tests: nodal equations built element by element, and scipy's stiff integrators.

Nothing here is shared with the program but the project: the network is solved anew at every instant as resistors,
with capacitors as voltage sources and inductors as current sources (modified nodal analysis: Ho, Ruehli & Brennan, IEEE
Trans. Circuits and Systems 22, 1975). That needs a path for the current of every inductor, so no cut sets of
inductors, and no loops of capacitors. Saturating inductors carry their flux as the state.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from budget.engine.model import Branch, Project
from budget.engine.operating import loads, operating_points


def current_of(flux: np.ndarray, ind: np.ndarray, sat: np.ndarray) -> np.ndarray:
    """From the definition L(i) = max(L / (1 + (3/7)(i/sat)^2), L/20): its integral, inverted; ``sat`` inf is linear."""
    linear = np.isinf(sat)
    s = math.sqrt(3.0 / 7.0) / np.where(linear, 1.0, sat)
    size = np.abs(flux)
    knee = ind / s * math.atan(math.sqrt(19.0))
    bent = np.tan(np.minimum(size, knee) * s / ind) / s + np.maximum(size - knee, 0.0) / (0.05 * ind)
    return np.where(linear, flux / ind, np.copysign(bent, flux))


@dataclass
class Dense:
    """Elements between nodes; node 0 is ground, node 1 the source."""

    nodes: int = 2
    resistors: list[tuple[int, int, float]] = field(default_factory=list)
    capacitors: list[tuple[int, int, float]] = field(default_factory=list)
    inductors: list[tuple[int, int, float, float | None]] = field(default_factory=list)

    def node(self) -> int:
        self.nodes += 1
        return self.nodes - 1

    def series(self, at: int, r: float, ind: float, rp: float | None = None, sat: float | None = None) -> int:
        if r:
            behind = self.node()
            self.resistors.append((at, behind, r))
            at = behind
        if ind:
            behind = self.node()
            self.inductors.append((at, behind, ind, sat))
            if rp:
                self.resistors.append((at, behind, rp))
            at = behind
        return at

    def ladder(self, at: int, ladder: tuple[Branch, ...]) -> int:
        for b in ladder:
            if b.place == "series":
                at = self.series(at, b.R, b.L, b.Rp, b.saturation)
            else:
                plus = at
                if b.R:
                    plus = self.node()
                    self.resistors.append((at, plus, b.R))
                self.capacitors.append((plus, 0, b.C or 0.0))
        return at


class Reference:
    """One project's network with the converters' logic, integrated for one case and event."""

    def __init__(self, project: Project) -> None:
        self.project = project
        net = Dense()
        bus = project.bus
        tie = net.series(1, bus.resistance, bus.inductance)
        entries: list[tuple[int, int]] = []
        output = {}
        for f in project.filters:
            entry = net.node()
            entries.append((tie, entry))
            output[f.id] = net.ladder(entry, f.dm)
        self.terminals, self.ends = [], []
        for c in project.converters:
            terminal = net.series(output[c.filter], c.lead.R, c.lead.L)
            self.terminals.append(terminal)
            self.ends.append(net.ladder(terminal, c.input))
        self.outputs = [output[f.id] for f in project.filters]
        self.net = net
        nv, nc = net.nodes - 1, len(net.capacitors)
        size = nv + 1 + len(entries) + nc  # node voltages; currents of the source, the entries, the capacitors
        m = np.zeros((size + 1, size))
        for a, b, r in net.resistors:
            for p, q in ((a, b), (b, a)):
                if p:
                    m[p - 1, p - 1] += 1.0 / r
                    if q:
                        m[p - 1, q - 1] -= 1.0 / r
        branches = [(1, 0), *entries, *((a, b) for a, b, _ in net.capacitors)]
        for k, (a, b) in enumerate(branches):
            for node, sign in ((a, 1.0), (b, -1.0)):
                if node:
                    m[node - 1, nv + k] += sign
                    m[nv + k, node - 1] += sign
        if np.linalg.cond(m[:size]) > 1e13:
            raise np.linalg.LinAlgError("a cut set of inductors: give one of them an Rp")
        inverse = np.linalg.inv(m[:size])
        # inputs: source, capacitor voltages, inductor currents, load currents
        nl, nn = len(net.inductors), len(project.converters)
        rhs = np.zeros((size, 1 + nc + nl + nn))
        rhs[nv, 0] = 1.0
        for k in range(nc):
            rhs[nv + 1 + len(entries) + k, 1 + k] = 1.0
        for k, (a, b, _, _) in enumerate(net.inductors):
            if a:
                rhs[a - 1, 1 + nc + k] -= 1.0
            if b:
                rhs[b - 1, 1 + nc + k] += 1.0
        for k, end in enumerate(self.ends):
            rhs[end - 1, 1 + nc + nl + k] -= 1.0
        full = inverse @ rhs

        def volt(node: int) -> np.ndarray:
            return full[node - 1] if node else np.zeros(full.shape[1])

        self.caps = np.array([c for _, _, c in net.capacitors])
        self.c_rows = full[nv + 1 + len(entries) :]
        self.l_rows = np.array([volt(a) - volt(b) for a, b, _, _ in net.inductors]).reshape(nl, full.shape[1])
        self.amps = np.concatenate((-full[nv : nv + 1], full[nv + 1 : nv + 1 + len(entries)]))
        self.v_out = np.array([volt(n) for n in self.outputs]).reshape(-1, full.shape[1])
        self.v_term = np.array([volt(n) for n in self.terminals]).reshape(-1, full.shape[1])
        self.v_end = np.array([volt(n) for n in self.ends]).reshape(-1, full.shape[1])
        self.nc, self.nl, self.nn, self.nf = nc, nl, nn, len(entries)
        self.ind = np.array([value for _, _, value, _ in net.inductors])
        self.sat = np.array([math.inf if sat is None else sat for _, _, _, sat in net.inductors])
        self.moves = np.concatenate((self.c_rows / self.caps[:, None], self.l_rows))

    def inputs(self, x: np.ndarray, source: float, power: np.ndarray, floor: np.ndarray) -> np.ndarray:
        i_l = current_of(x[self.nc : self.nc + self.nl], self.ind, self.sat)
        u = np.concatenate(([source], x[: self.nc], i_l, np.zeros(self.nn)))
        at = self.v_end @ u
        z = self.v_end[:, u.size - self.nn :]
        if not z.any():
            u[u.size - self.nn :] = power / np.maximum(at, floor)
            return u
        v = at.copy()
        for _ in range(60):  # Newton from above
            i = power / np.maximum(v, floor)
            gap = v - at - z @ i
            if np.abs(gap).max() < 1e-12 * max(1.0, np.abs(at).max()):
                break
            slope = np.where(v > floor, -i / np.maximum(v, floor), 0.0)
            jacobian = np.eye(self.nn) - z * slope
            v = v - (gap / jacobian[0] if self.nn == 1 else np.linalg.solve(jacobian, gap))
        u[u.size - self.nn :] = power / np.maximum(v, floor)
        return u

    def run(self, case: int, event: str, method: str = "Radau", rtol: float = 1e-9) -> dict[str, Any]:
        p = self.project
        bus = p.bus
        asked = loads(p)
        full_power, out = asked.input_power[case], asked.output_power[case]
        on = np.array([c.turn_on for c in p.converters], dtype=float)
        off = np.array([0.9 * c.turn_on if c.turn_off is None else c.turn_off for c in p.converters], dtype=float)
        floor = 0.5 * off
        enabled = asked.running[case]
        if event == "surge":
            r, hold = bus.surge_rise, bus.surge_time
            knots = [(0.0, bus.nominal), (r, bus.surge), (r + hold, bus.surge), (2 * r + hold, bus.nominal)]
            knots.append((2 * r + hold + 2e-3, bus.nominal))
        else:
            to = bus.low if event == "on-low" else bus.high
            knots = [(0.0, 0.0 if bus.rise else to)]
            if bus.rise:
                knots.append((bus.rise, to))
            knots.append((p.rules.inrush_window, to))
        end = knots[-1][0]
        times, volts = [t for t, _ in knots], [v for _, v in knots]
        phase = ["wait"] * self.nn  # wait, count, soft, run, off
        since = [0.0] * self.nn
        starts: list[float | None] = [None] * self.nn
        n = self.nc + self.nl
        x = np.zeros(n + 1 + self.nf)
        for k in range(self.nn):
            if not enabled[k]:
                phase[k] = "off"
            elif event == "surge":
                phase[k] = "run"
        if event == "surge":
            drawn = np.where(enabled, operating_points(p).current[case, 1], 0.0)
            x[:n] = self.steady(bus.nominal, drawn)

        def power(t: float) -> np.ndarray:
            watts = np.zeros(self.nn)
            for k, c in enumerate(p.converters):
                if phase[k] == "run":
                    watts[k] = full_power[k]
                elif phase[k] == "soft":
                    part = (t - since[k]) / c.soft_start
                    watts[k] = full_power[k] * part
                    if c.output_capacitance and out[k] > 0:
                        charge = c.output_capacitance * c.output[0].voltage ** 2 * part / c.soft_start
                        watts[k] += charge / (out[k] / full_power[k])
            return watts

        def source(t: float) -> float:
            a, b = volts[corner], volts[corner + 1]
            return a + (b - a) * (t - times[corner]) / (times[corner + 1] - times[corner])

        def inputs_at(t: float, x: np.ndarray) -> np.ndarray:
            return self.inputs(x, source(t), power(t), floor)

        def rhs(t: float, x: np.ndarray) -> np.ndarray:
            u = inputs_at(t, x)
            return np.concatenate((self.moves @ u, (self.amps @ u) ** 2))

        def threshold(k: int) -> tuple[float, float]:
            return (on[k], 1.0) if phase[k] in ("wait", "count") else (off[k], -1.0)

        peak = np.zeros(1 + self.nf + self.nf + self.nn)
        t, guard, corner, evaluations = 0.0, 0, 0, 0
        rows = np.concatenate((self.amps, self.v_out, self.v_term))
        while t < end:
            guard += 1
            assert guard < 3000
            while times[corner + 1] <= t * (1 + 1e-14) + 1e-18:
                corner += 1
            for k in range(self.nn):  # what holds at this instant
                terminal = float(self.v_term[k] @ inputs_at(t, x))
                if phase[k] == "wait" and terminal >= on[k] * (1 - 1e-12):
                    phase[k], since[k] = "count", t
                if phase[k] == "count" and t >= since[k] + p.converters[k].start_delay - 1e-15:
                    phase[k] = "soft" if p.converters[k].soft_start else "run"
                    since[k] = starts[k] = t
                if phase[k] == "soft" and t >= since[k] + p.converters[k].soft_start * (1 - 1e-12):
                    phase[k] = "run"
            until = times[corner + 1]
            for k, c in enumerate(p.converters):
                if phase[k] == "count":
                    until = min(until, since[k] + c.start_delay)
                if phase[k] == "soft":
                    until = min(until, since[k] + c.soft_start)
            watchers = []
            for k in range(self.nn):
                if phase[k] == "off":
                    continue
                level = {"wait": on[k], "count": on[k] * (1 - 1e-9)}.get(phase[k], off[k] * (1 - 1e-9))

                def watch(t: float, x: np.ndarray, k: int = k, level: float = level) -> float:
                    return float(self.v_term[k] @ inputs_at(t, x)) - level

                watch.terminal = True  # type: ignore[attr-defined]
                watch.direction = 1.0 if phase[k] == "wait" else -1.0  # type: ignore[attr-defined]
                watchers.append((k, watch))
            solved = solve_ivp(
                rhs,
                (t, until),
                x,
                method=method,
                rtol=rtol,
                atol=self.tolerances(rtol),
                events=[w for _, w in watchers],
                dense_output=True,
                first_step=min(1e-9, 0.1 * (until - t)),
            )
            assert solved.success, solved.message
            evaluations += solved.nfev
            fine = np.unique(
                np.concatenate([np.linspace(a, b, 9) for a, b in zip(solved.t, solved.t[1:], strict=False)])
            )
            states = solved.sol(fine)
            seen = np.array([rows @ inputs_at(tt, xx) for tt, xx in zip(fine, states.T, strict=True)])
            peak = np.maximum(peak, seen.max(axis=0))
            t, x = float(solved.t[-1]), solved.y[:, -1]
            if solved.status == 1:
                for (k, _), hits in zip(watchers, solved.t_events, strict=True):
                    if hits.size:
                        phase[k] = "count" if phase[k] == "wait" else "wait"
                        since[k] = t
        return {
            "bus_peak": peak[0],
            "bus_i2t": x[n],
            "filter_peak": peak[1 : 1 + self.nf],
            "filter_i2t": x[n + 1 :],
            "output_peak": peak[1 + self.nf : 1 + 2 * self.nf],
            "terminal_peak": peak[1 + 2 * self.nf :],
            "runs_at": starts,
            "evaluations": evaluations,
        }

    def tolerances(self, rtol: float) -> np.ndarray:
        flux = [ind for _, _, ind, _ in self.net.inductors]
        return rtol * np.concatenate((np.ones(self.nc), flux, np.ones(1 + self.nf)))

    def steady(self, source: float, drawn: np.ndarray) -> np.ndarray:
        """Currents of inductors and voltages of capacitors that stand still, by solving for zero derivatives."""
        width = self.c_rows.shape[1]
        states = slice(1, 1 + self.nc + self.nl)
        rows = np.concatenate((self.c_rows, self.l_rows))
        u = np.zeros(width)
        u[0], u[width - self.nn :] = source, drawn
        found = np.linalg.lstsq(rows[:, states], -rows @ u, rcond=None)[0]
        flux = []
        for (_, _, ind, sat), i in zip(self.net.inductors, found[self.nc :], strict=True):
            if sat is None:
                flux.append(ind * i)
                continue
            s = math.sqrt(3.0 / 7.0) / sat
            bent = min(abs(i), math.sqrt(19.0) / s)
            flux.append(math.copysign(ind / s * math.atan(bent * s) + 0.05 * ind * (abs(i) - bent), i))
        return np.concatenate((found[: self.nc], flux))
