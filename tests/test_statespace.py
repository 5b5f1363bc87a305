"""State equations: against a tableau of every branch solved densely, also where networks degenerate; saturation."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.linalg import eigvals

from budget.engine.model import Branch, Bus, Case, Converter, Filter, Ladder, Lead, Output, Project
from budget.engine.statespace import StateSpace, saturation, state_space

Complex = NDArray[np.complex128]

# --- builders -------------------------------------------------------------------------------------------------------


def ser(L: float = 0.0, R: float = 0.0, Rp: float | None = None, sat: float | None = None) -> Branch:  # noqa: N803
    return Branch("series", R=R, L=L, Rp=Rp, Cp=3e-12, saturation=sat)


def sh(C: float, R: float = 0.0) -> Branch:  # noqa: N803
    return Branch("shunt", R=R, C=C, L=7e-9, Rp=50.0, Cp=1e-12)  # nothing but R and C counts


def unit(
    name: str, home: str = "F", watts: float = 50.0, lead: Lead | None = None, ladder: Ladder = (), **fields: Any
) -> Converter:
    out = (Output("o", 1.0, watts),)
    return Converter(name, watts or 1.0, out, ((1.0, 1.0),), filter=home, lead=lead or Lead(), input=ladder, **fields)


def net(filters: list[Filter], converters: list[Converter], r: float = 0.0, ind: float = 0.0) -> Project:
    bus = Bus(28.0, 28.0, 28.0, resistance=r, inductance=ind)
    return Project(bus, tuple(filters), tuple(converters), (Case("full"),))


# --- the other method: a sparse tableau with a voltage and a current of every branch, nothing merged or reduced ------


class Tableau:
    """E z' = A z + b u with z = (node voltages, branch currents); branches are (kind, from, to, value)."""

    def __init__(self, project: Project) -> None:
        self.branches: list[tuple[str, int, int, float]] = []
        self.nodes = 1
        feed = self.new()
        self.add("V", feed, 0, 0.0)
        tie = self.chain(feed, project.bus.resistance, project.bus.inductance, None)
        self.entry: list[int] = []  # branch that carries the current into each filter
        self.output: list[int] = []
        ends: dict[str, int] = {}
        for part in project.filters:
            if part.attenuation:
                continue
            at = self.new()
            self.entry.append(len(self.branches))
            self.add("R", tie, at, 0.0)
            ends[part.id] = self.ladder(at, part.dm)
            self.output.append(ends[part.id])
        self.terminal: list[int] = []
        self.end: list[int] = []
        for c in project.converters:
            if c.filter in ends:
                self.terminal.append(self.chain(ends[c.filter], c.lead.R, c.lead.L, None))
                self.end.append(self.ladder(self.terminal[-1], c.input))

    def new(self) -> int:
        self.nodes += 1
        return self.nodes - 1

    def add(self, kind: str, start: int, end: int, value: float) -> None:
        self.branches.append((kind, start, end, value))

    def chain(self, at: int, r: float, ind: float, rp: float | None) -> int:
        middle, end = self.new(), self.new()
        self.add("R", at, middle, r)
        self.add("L", middle, end, ind)
        if rp:
            self.add("R", middle, end, rp)
        return end

    def ladder(self, at: int, ladder: Ladder) -> int:
        for b in ladder:
            if b.place == "series":
                at = self.chain(at, b.R, b.L, b.Rp)
            else:
                middle = self.new()
                self.add("R", at, middle, b.R)
                self.add("C", middle, 0, b.C or 0.0)
        return at

    def pencil(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """E, A and b; columns of b: source, then the load of each converter."""
        nodes, count = self.nodes - 1, len(self.branches)
        size = nodes + count
        e, a = np.zeros((size, size)), np.zeros((size, size))
        b = np.zeros((size, 1 + len(self.end)))
        for k, (kind, start, end, value) in enumerate(self.branches):
            row = nodes + k
            for node, sign in ((start, 1.0), (end, -1.0)):
                if node:
                    a[node - 1, row] = sign  # Kirchhoff's current law
                    (e if kind == "C" else a)[row, node - 1] = sign * (value if kind == "C" else -1.0)
            if kind == "C":
                a[row, row] = 1.0  # C v' = i
            elif kind == "L":
                e[row, row] = value  # L i' = v, with -v moved over
                a[row] *= -1.0
                a[row, row] = 0.0
            elif kind == "R":
                a[row, row] = value  # 0 = R i - v
            else:
                b[row, 0] = 1.0  # 0 = u - v
        for k, node in enumerate(self.end):
            b[node - 1, 1 + k] = 1.0
        return e, a, b

    def response(self, s: complex) -> Complex:
        """Rows as the outputs of StateSpace, columns source and loads."""
        e, a, b = self.pencil()
        matrix = s * e - a
        row = np.abs(matrix).max(axis=1)
        z = np.linalg.solve(matrix / row[:, None], b / row[:, None])
        ground = np.zeros((1, b.shape[1]))
        nodes = self.nodes - 1
        volts = np.concatenate((ground, z[:nodes]))
        amps = z[nodes:]
        return np.concatenate((-amps[:1], amps[self.entry], volts[self.output], volts[self.terminal], volts[self.end]))


def response(ss: StateSpace, s: complex) -> Complex:
    """C (s - A)^-1 B + D + s D1 for the source and the loads."""
    k = 1 + ss.converters.size
    inside = np.linalg.solve(s * np.eye(ss.A.shape[0]) - ss.A, ss.B[:, :k])
    return ss.C @ inside + ss.D[:, :k] + s * ss.D1[:, :k]


POINTS = (1.013e2, 2.017e4j + 31.0, 1.193e5j + 97.0, 3.1e5 + 2.3e5j, 4.19e6j + 7e3, 1.037e8j + 1e5)  # off any axis


def agrees(project: Project, rel: float = 1e-9) -> StateSpace:
    ss, other = state_space(project), Tableau(project)
    for s in POINTS:
        mine, theirs = response(ss, s), other.response(s)
        scale = np.abs(theirs).max(axis=1, keepdims=True) + 1e-5 * np.abs(theirs).max() + 1e-30
        assert mine.shape == theirs.shape
        np.testing.assert_allclose(mine / scale, theirs / scale, atol=rel, rtol=0.0)
    return ss


def degree(project: Project) -> int:
    """Number of finite eigenvalues of the tableau: how fast its determinant grows with s."""
    e, a, _ = Tableau(project).pencil()
    one, two = (np.linalg.slogdet(s * e - a)[1] for s in (1e15, 1e16))
    return round(float(two - one) / np.log(10.0))


# --- known degenerate networks --------------------------------------------------------------------------------------


def flt(*ladder: Branch, name: str = "F") -> Filter:
    return Filter(name, dm=ladder)


DEGENERATE = {
    "one LC, no converter": (net([flt(ser(4e-6, 0.01), sh(1e-6, 0.02))], [], 0.02, 1e-6), 2),  # feed and choke sum
    "feed and first chokes meet": (
        net([flt(ser(4e-6), sh(1e-6)), flt(ser(3e-6), sh(2e-6), name="G")], [unit("A"), unit("B", "G")], 0.0, 1e-6),
        4,
    ),
    "Rp breaks the cut set": (
        net([flt(ser(4e-6, Rp=90.0), sh(1e-6)), flt(ser(3e-6, Rp=70.0), sh(2e-6), name="G")], [unit("A")], 0.0, 1e-6),
        5,
    ),
    "nothing at all": (net([], []), 0),
    "filter without elements": (net([flt()], [unit("A")]), 0),
    "capacitor across the source": (net([flt(sh(1e-6))], [unit("A")]), 0),
    "capacitors straight in parallel": (
        net([flt(sh(1e-6), sh(2e-6, 0.1), sh(3e-6))], [unit("A", ladder=(sh(1e-6),))], 0.1),
        2,
    ),
    "parallel across the tie": (
        net([flt(sh(1e-6)), flt(sh(2e-6), name="G")], [unit("A"), unit("B", "G")], 0.1, 1e-6),
        2,
    ),
    "inductors only": (
        net([flt(ser(1e-6))], [unit("A", lead=Lead(0.01, 1e-6), ladder=(ser(1e-6),)), unit("B")], 0.01, 1e-6),
        0,
    ),
    "resistances only": (net([flt(ser(R=0.1), ser(R=0.2))], [unit("A", lead=Lead(0.01))], 0.1), 0),
    "lead and choke in series": (
        net(
            [flt(ser(1e-6, Rp=100.0), sh(1e-6), ser(2e-6))],
            [unit("A", lead=Lead(0.01, 1e-6), ladder=(ser(1e-6), sh(1e-6))), unit("B")],
            0.1,
            1e-6,
        ),
        5,
    ),
    "elements that are nothing": (net([flt(ser(), ser(1e-6), ser(), sh(1e-6))], [unit("A", ladder=(ser(),))]), 2),
    "an empty end": (net([flt(ser(1e-6, 0.1))], []), 0),
}


@pytest.mark.parametrize("name", DEGENERATE)
def test_degenerate_networks(name: str) -> None:
    project, states = DEGENERATE[name]
    ss = agrees(project)
    assert ss.A.shape == (states, states)
    assert degree(project) == states
    assert len(set(ss.states)) == states


def test_tables_and_unallocated_converters_are_left_out() -> None:
    table = Filter("T", attenuation=((1e4, 20.0, 20.0),), resistance=0.1)
    one = net([table, flt(ser(1e-6, 0.1), sh(1e-6))], [unit("A", "T"), unit("B", ""), unit("C"), unit("D", "?")], 0.1)
    ss = agrees(one)
    assert ss.filters.tolist() == [1]
    assert ss.converters.tolist() == [2]
    assert ss.states == (("filter", "F", 1, "C"), ("filter", "F", 0, "L"))


def test_dc_gain_is_the_operating_network() -> None:
    """At rest the source less the drops of the series resistances stands at the load."""
    project = net([flt(ser(4e-6, 0.01), sh(1e-6, 0.02))], [unit("A", lead=Lead(0.03, 1e-6), ladder=(sh(1e-6),))], 0.02)
    ss = state_space(project)
    gain = ss.D - ss.C @ np.linalg.solve(ss.A, ss.B)
    np.testing.assert_allclose(gain[ss.end_voltages][0], [1.0, -0.06], rtol=1e-12)
    np.testing.assert_allclose(gain[ss.filter_voltages][0], [1.0, -0.03], rtol=1e-12)
    np.testing.assert_allclose(gain[0], [0.0, 1.0], atol=1e-12)


# --- random networks ------------------------------------------------------------------------------------------------


def values(low: float, high: float, zero: bool = True) -> st.SearchStrategy[float]:
    some = st.floats(np.log10(low), np.log10(high)).map(lambda x: float(10.0**x))
    return st.one_of(st.just(0.0), some) if zero else some


@st.composite
def ladders(draw: st.DrawFn, most: int = 4, resist: bool = False) -> Ladder:
    found = []
    for _ in range(draw(st.integers(0, most))):
        if draw(st.booleans()):
            ind = draw(values(1e-7, 1e-4))
            rp = draw(st.one_of(st.none(), values(1.0, 1e3, zero=False))) if ind else None
            found.append(ser(ind, draw(values(1e-3, 1.0, zero=not resist)), rp))
        else:
            found.append(sh(draw(values(1e-8, 1e-4, zero=False)), draw(values(1e-3, 1.0, zero=not resist))))
    return tuple(found)


@st.composite
def networks(draw: st.DrawFn, resist: bool = False, filters: int = 3, converters: int = 4) -> Project:
    parts = [Filter(f"F{k}", dm=draw(ladders(resist=resist))) for k in range(draw(st.integers(1, filters)))]
    ohms = values(1e-3, 1.0, zero=not resist)
    units = [
        unit(
            f"C{k}",
            f"F{draw(st.integers(0, len(parts) - 1))}",
            lead=Lead(draw(ohms), draw(values(1e-8, 1e-5))),
            ladder=draw(ladders(3, resist)),
        )
        for k in range(draw(st.integers(0, converters)))
    ]
    return net(parts, units, draw(ohms), draw(values(1e-7, 1e-5)))


@settings(deadline=None, max_examples=150)
@given(networks())
def test_random_networks_respond_as_the_tableau(project: Project) -> None:
    agrees(project, 1e-7)


@settings(deadline=None, max_examples=100)
@given(networks())
def test_a_network_without_loads_is_stable(project: Project) -> None:
    """Passive: in energy coordinates no eigenvalue has a positive real part, and none is zero."""
    ss = state_space(project)
    a = ss.weight[:, None] * ss.A / ss.weight
    if a.size:
        found = np.linalg.eigvals(a)
        assert found.real.max() <= 1e-12 * np.abs(a).max()
        assert np.abs(found).min() > 0.0


def test_eigenvalues_are_those_of_the_pencil() -> None:
    """scipy.linalg.eigvals of the tableau; its infinite eigenvalues come out as huge ones or infinities."""
    rng = np.random.default_rng(3)
    for _ in range(25):
        parts, units = [], []
        for k in range(2):
            ladder = [
                x
                for _ in range(2)
                for x in (ser(*rng.uniform(1e-6, 9e-6, 1), 0.02, 90.0), sh(*rng.uniform(1e-6, 9e-6, 1), 0.1))
            ]
            parts.append(Filter(f"F{k}", dm=tuple(ladder)))
            units.append(
                unit(f"C{k}", f"F{k}", lead=Lead(0.01, float(rng.uniform(1e-7, 9e-7))), ladder=(sh(1e-6, 0.01),))
            )
        project = net(parts, units, 0.02, 1e-6)
        ss = state_space(project)
        mine = np.sort_complex(np.linalg.eigvals(ss.weight[:, None] * ss.A / ss.weight))
        e, a, _ = Tableau(project).pencil()
        theirs = eigvals(a * 1e-6, e)  # in 1/us
        theirs = theirs[np.isfinite(theirs)]
        size = np.abs(mine).max() * 1e-6
        assert degree(project) == mine.size
        near = theirs[np.abs(theirs) < 3.0 * size]
        for value in mine * 1e-6:
            assert np.abs(near - value).min() < 1e-6 * size


def test_huge_and_tiny_elements() -> None:
    parts = [
        flt(ser(1e-12, 1e-6, 1e6), sh(1e-15, 1e-3), ser(1.0, 1e3), sh(1.0, 1e-6), sh(1e-15)),
        flt(ser(1e-12), sh(1.0), ser(R=1e6), sh(1e-15, 1e6), name="G"),
    ]
    project = net(parts, [unit("A", lead=Lead(1e-6, 1e-12)), unit("B", "G", ladder=(sh(1e-15),))], 1e-6, 1e-12)
    ss, other = state_space(project), Tableau(project)
    assert all(np.isfinite(part).all() for part in (ss.A, ss.B, ss.C, ss.D, ss.D1))
    for s in (1e2j, 1e5j, 1e9j):
        w = ss.weight
        a, b, c = w[:, None] * ss.A / w, w[:, None] * ss.B[:, :3], ss.C / w
        mine = c @ np.linalg.solve(s * np.eye(w.size) - a, b) + ss.D[:, :3] + s * ss.D1[:, :3]
        theirs = other.response(s)
        scale = np.abs(theirs).max(axis=1, keepdims=True)
        np.testing.assert_allclose(mine / scale, theirs / scale, atol=1e-4)


# --- saturation -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("current", [-40.0, -3.0, 0.0, 0.5, 4.0, 26.0, 27.0, 90.0])
def test_saturation_inverts_the_integral_of_the_inductance(current: float) -> None:
    ind, sat = 5e-6, 4.0

    def incremental(i: float) -> float:
        return max(ind / (1.0 + 3.0 / 7.0 * (i / sat) ** 2), 0.05 * ind)

    knee = sat * (19.0 * 7.0 / 3.0) ** 0.5
    flux = quad(
        incremental, 0.0, current, points=[np.clip(knee, 0, current), np.clip(-knee, current, 0)] if current else None
    )[0]
    i, slope = saturation(np.array([flux]), np.array([ind]), np.array([sat]))
    assert i[0] == pytest.approx(current, rel=1e-9, abs=1e-12)
    assert slope[0] == pytest.approx(1.0 / incremental(current), rel=1e-9)


def test_a_correction_is_a_current_beside_the_inductor() -> None:
    """With w added, the inductor's own current is what its flux says; Kirchhoff's law holds with both."""
    project = net(
        [flt(ser(4e-6, 0.1, sat=3.0), sh(1e-6, 0.02)), flt(ser(2e-6, sat=2.0), sh(2e-6), name="G")], [], 0.05, 1e-6
    )
    ss = state_space(project)
    assert ss.saturating == (("filter", "F", 0, "L"), ("filter", "G", 0, "L"))
    rng = np.random.default_rng(0)
    x, u = rng.normal(size=ss.A.shape[0]), rng.normal(size=ss.B.shape[1])
    flux = ss.flux_C @ x + ss.flux_D @ u
    y = ss.C @ x + ss.D @ u
    np.testing.assert_allclose(y[ss.filter_currents], flux / ss.L0 + u[ss.corrections], rtol=1e-12)
    assert y[0] == pytest.approx(y[ss.filter_currents].sum(), rel=1e-12)


def test_the_linear_network_does_not_know_of_saturation() -> None:
    ladder = (ser(4e-6, 0.1), ser(1e-6), sh(1e-6, 0.02))
    bent = tuple(replace(b, saturation=3.0) if b.L > 1e-7 and b.place == "series" else b for b in ladder)
    for s in POINTS:
        one, two = (response(state_space(net([flt(*x)], [unit("A")], 0.1, 1e-6)), s) for x in (ladder, bent))
        np.testing.assert_allclose(one, two, rtol=1e-9)
