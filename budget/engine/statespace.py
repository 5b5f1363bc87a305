"""The network of switch-on, surge and stability as state equations.

Its elements are the feed, all ``dm`` ladders, the leads and the input ladders, without Cp and without the L of shunt
elements (and what lies across it); an Rp across a series L stays. Filters known by a table only, with all behind them,
and converters without a filter are left out. A converter's load is a current drawn at the end of its input ladder.

**Method.** The state equations follow from a normal tree (Bashkow 1957; Bryant, "The explicit form of Bashkow's
A-matrix", IRE Trans. Circuit Theory 9, 1962; Chua & Lin, Computer-Aided Analysis of Electronic Circuits, 1975, ch. 8):
a spanning tree that takes voltage sources first, then capacitors, resistors and inductors. What then is a state is a
matter of topology, never of a tolerance: a capacitor that closes a loop of capacitors and sources is no state, nor is
an inductor whose current a cut set of inductors and current sources gives away, and the capacitances of such a loop or
the inductances of such a cut set appear summed, as they do by hand. With F the fundamental loops (voltages of links
= F^T voltages of the tree; currents of the tree = -F currents of links), C and L values of states, c and l the others:

    (C + F_CC c F_CC^T) v' = currents into the tree's capacitors,    (L + F_LL^T l F_LL) i' = voltages across the links

Zero resistances and inductances are shorts, found before the tree is: their nodes become one. Currents into filters are
read by voltage sources of 0 V. So every ladder that can be written down has exact equations, with its finite
eigenvalues only; nothing is regularised.

**Derivatives.** A capacitor loop through the source makes x' depend on the source's derivative, an inductor cut set
with a load on the load current's. They are removed from the dynamics by the state x - B1 u: then x' = A x + B u holds
for inputs that jump, too. The outputs keep their part of it, D1 u' (the current of a capacitor across the source, the
voltage across a load that is fed by inductors alone).

**Saturation.** An inductor with ``saturation`` is L0 with a current source w beside it: its current is flux/L0 + w, and
the exact curve is restored by supplying w = saturation(flux)[0] - flux/L0. With w = 0 the network is the unsaturated.
Where such inductors form a cut set, their fluxes depend on w directly: flux = flux_C x + flux_D u, to be solved for w.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Branch, Project

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Element = tuple[str | int, ...]

FLOOR = 0.05  # of L0: the incremental inductance never falls below it
_BEND = (3.0 / 7.0) ** 0.5  # L(i) = L0 / (1 + (_BEND i/saturation)^2)
_KNEE = (1.0 / FLOOR - 1.0) ** 0.5  # where the floor is reached, as _BEND i/saturation


@dataclass(frozen=True, slots=True)
class StateSpace:
    """x' = A x + B u, y = C x + D u + D1 u', flux = flux_C x + flux_D u.

    Filters (F) and converters (N) are those of the network; ``filters`` and ``converters`` are their indices in the
    project. Inputs u (M = 1 + N + S): the source voltage [V]; the current [A] drawn at the end of each converter's
    input ladder; the correction w [A] of each saturating inductor (S). Outputs y (P = 1 + 2 F + 2 N), see the
    properties: current from the source; current into each filter [A]; voltage [V] at each filter's output, at each
    converter's terminals, and at the end of each input ladder.

    States x (K): voltages [V] of capacitors and currents [A] of inductors (flux/L0 where they saturate), less B1 u in
    degenerate networks (see the module). ``states`` names their elements: ("filter", id, k, "L"), k counting from 0 in
    ``dm``; ("converter", id, k, "C"), k in ``input``; ("converter", id, "lead", "L"); ("bus", "L"). ``weight`` is the
    root of each state's own capacitance or inductance: in the coordinates ``weight * x`` the energy is about
    |x|^2/2, and A, as weight[:, None] * A / weight, is well scaled whatever the sizes of the elements.
    """

    A: Floats  # (K, K)
    B: Floats  # (K, M)
    C: Floats  # (P, K)
    D: Floats  # (P, M)
    D1: Floats  # (P, M)
    flux_C: Floats  # (S, K) V s  # noqa: N815
    flux_D: Floats  # (S, M)  # noqa: N815
    weight: Floats  # (K,)
    states: tuple[Element, ...]  # (K,)
    filters: Indices  # (F,)
    converters: Indices  # (N,)
    saturating: tuple[Element, ...]  # (S,)
    L0: Floats  # (S,) H
    saturation: Floats  # (S,) A
    load_cut: Floats  # (T, N) -1, 0, 1: which loads each inductor without a state of its own carries

    @property
    def loads(self) -> slice:
        """Columns of u: the load currents."""
        return slice(1, 1 + self.converters.size)

    @property
    def corrections(self) -> slice:
        """Columns of u: the corrections w of the saturating inductors."""
        return slice(1 + self.converters.size, 1 + self.converters.size + self.L0.size)

    @property
    def filter_currents(self) -> slice:
        """Rows of y: current into each filter; row 0 is the current from the source."""
        return slice(1, 1 + self.filters.size)

    @property
    def filter_voltages(self) -> slice:
        """Rows of y: voltage at each filter's output."""
        return slice(1 + self.filters.size, 1 + 2 * self.filters.size)

    @property
    def terminal_voltages(self) -> slice:
        """Rows of y: voltage at each converter's terminals."""
        first = 1 + 2 * self.filters.size
        return slice(first, first + self.converters.size)

    @property
    def end_voltages(self) -> slice:
        """Rows of y: voltage at the end of each converter's input ladder, where its load is."""
        first = 1 + 2 * self.filters.size + self.converters.size
        return slice(first, first + self.converters.size)


def saturation(flux: Floats, L0: Floats, sat: Floats) -> tuple[Floats, Floats]:  # noqa: N803
    """Current [A] of a saturating inductor at its flux linkage [V s], and the slope di/dflux [1/H], shapes (S,).

    The inverse of flux = integral of L(i) di with L(i) = L0/(1 + (3/7)(i/sat)^2), never below 5 % of L0:
    flux = L0 sat sqrt(7/3) atan(sqrt(3/7) i/sat), and straight on beyond the floor. Any shapes that broadcast will do.
    """
    unit = L0 * sat / _BEND
    angle = flux / unit
    limit = np.arctan(_KNEE)
    within = np.clip(angle, -limit, limit)
    bent = np.tan(within)
    beyond = angle - within
    current = sat / _BEND * (bent + beyond / FLOOR)
    slope = np.where(beyond == 0.0, 1.0 + bent * bent, 1.0 / FLOOR) / L0
    return current, slope


# --- the graph ------------------------------------------------------------------------------------------------------

_V, _C, _R, _L, _I = range(5)  # kinds, in the order in which a normal tree takes them


@dataclass(slots=True)
class _Graph:
    """Edges run from ``start`` to ``end``; ground is node 0. Voltage and current count in that direction."""

    nodes: int = 1
    kind: list[int] = field(default_factory=list)
    start: list[int] = field(default_factory=list)
    end: list[int] = field(default_factory=list)
    value: list[float] = field(default_factory=list)
    name: list[Element] = field(default_factory=list)
    bend: list[float] = field(default_factory=list)  # saturation [A]; 0 = linear

    def node(self) -> int:
        self.nodes += 1
        return self.nodes - 1

    def edge(self, kind: int, start: int, end: int, value: float, name: Element = (), bend: float = 0.0) -> None:
        self.kind.append(kind)
        self.start.append(start)
        self.end.append(end)
        self.value.append(value)
        self.name.append(name)
        self.bend.append(bend)

    def resistor(self, start: int, ohms: float) -> int:
        """The node behind a resistor; no resistance is no new node."""
        if not ohms:
            return start
        end = self.node()
        self.edge(_R, start, end, ohms)
        return end

    def series(self, start: int, r: float, ind: float, rp: float | None, name: Element, bend: float = 0.0) -> int:
        """The node behind R + (L || Rp)."""
        middle = self.resistor(start, r)
        if not ind:
            return self.resistor(middle, rp or 0.0)
        end = self.node()
        self.edge(_L, middle, end, ind, name, bend)
        if rp:
            self.edge(_R, middle, end, rp)
        return end

    def ladder(self, start: int, ladder: Iterable[Branch], owner: Element) -> int:
        """The node at the end of a ladder."""
        at = start
        for k, b in enumerate(ladder):
            if b.place == "series":
                at = self.series(at, b.R, b.L, b.Rp, (*owner, k, "L"), b.saturation or 0.0)
            elif b.C:
                self.edge(_C, self.resistor(at, b.R), 0, b.C, (*owner, k, "C"))
        return at


def state_space(project: Project) -> StateSpace:
    """The state equations of a project; its load cases play no part in them. See the module and StateSpace."""
    graph = _Graph()
    bus = project.bus
    feed = graph.node()
    graph.edge(_V, feed, 0, 0.0)
    tie = graph.series(feed, bus.resistance, bus.inductance, None, ("bus", "L"))
    filters = [k for k, part in enumerate(project.filters) if not part.attenuation]
    output: dict[str, int] = {}
    for k in filters:
        part = project.filters[k]
        entry = graph.node()
        graph.edge(_V, tie, entry, 0.0)
        output[part.id] = graph.ladder(entry, part.dm, ("filter", part.id))
    probes = list(output.values())
    converters = [k for k, c in enumerate(project.converters) if c.filter and c.filter in output]
    terminal, end = [], []
    for k in converters:
        c = project.converters[k]
        at = graph.series(output[c.filter], c.lead.R, c.lead.L, None, ("converter", c.id, "lead", "L"))
        terminal.append(at)
        end.append(graph.ladder(at, c.input, ("converter", c.id)))

    for at in end:
        graph.edge(_I, at, 0, 0.0)
    bent = [k for k, bend in enumerate(graph.bend) if bend]
    for k in bent:
        graph.edge(_I, graph.start[k], graph.end[k], 0.0)
    for at in probes + terminal:  # voltmeters: current sources of 0 A
        graph.edge(_I, at, 0, 0.0)
    return _equations(graph, len(filters), filters, converters, bent)


@dataclass(frozen=True, slots=True)
class _Tree:
    """A normal tree: edges of the tree and links by kind, and F between them."""

    tree: list[NDArray[np.intp]]  # by kind V, C, R, L
    link: list[NDArray[np.intp]]  # by kind V (none), C, R, L, I
    F: dict[tuple[int, int], Floats]  # (kind in the tree, kind of the link): (tree edges, links)


def _normal_tree(graph: _Graph) -> _Tree:
    """Kruskal's algorithm over the order V, C, R, L.

    Within a kind the order keeps the sums well conditioned: great capacitances, small resistances and small inductances
    go into the tree; linear inductors before saturating ones.
    """
    kind, value = np.array(graph.kind), np.array(graph.value)
    size = np.where(kind == _C, -value, value)
    order = np.lexsort((size, np.array(graph.bend) > 0.0, kind))
    start, end = np.array(graph.start), np.array(graph.end)
    root = list(range(graph.nodes))

    def find(at: int) -> int:
        while root[at] != at:
            root[at] = root[root[at]]
            at = root[at]
        return at

    in_tree = np.zeros(kind.size, dtype=np.bool_)
    for edge in order.tolist():
        one, other = find(graph.start[edge]), find(graph.end[edge])
        if one != other and kind[edge] != _I:
            root[one] = other
            in_tree[edge] = True
    tree = [np.flatnonzero(in_tree & (kind == k)) for k in range(_I)]
    link = [np.flatnonzero(~in_tree & (kind == k)) for k in range(_I + 1)]
    incidence = np.zeros((graph.nodes, kind.size))
    each = np.arange(kind.size)
    incidence[start, each] += 1.0
    incidence[end, each] -= 1.0
    columns, others = np.concatenate(tree), np.concatenate(link)
    # Incidence matrices are unimodular, so the quotient is of whole numbers: rounding makes it exact.
    loops = np.rint(np.linalg.solve(incidence[1:, columns], incidence[1:, others]))
    rows = np.cumsum([0, *(t.size for t in tree)])
    cols = np.cumsum([0, *(t.size for t in link)])
    blocks = {(a, b): loops[rows[a] : rows[a + 1], cols[b] : cols[b + 1]] for a in range(_I) for b in range(_I + 1)}
    return _Tree(tree, link, blocks)


def _solve(matrix: Floats, right: Floats) -> Floats:
    """matrix^-1 right for a symmetric positive definite matrix, scaled to a unit diagonal first."""
    if not matrix.size:
        return np.zeros_like(right)
    scale = 1.0 / np.sqrt(np.diagonal(matrix))
    inside = np.linalg.solve(scale[:, None] * matrix * scale, scale[:, None] * right)
    return np.asarray(scale[:, None] * inside, dtype=np.float64)


def _equations(graph: _Graph, meters: int, filters: list[int], converters: list[int], bent: list[int]) -> StateSpace:
    """Bryant's explicit form, each quantity as its rows over [x, u, u'] (see the module)."""
    made = _normal_tree(graph)
    f, value = made.F, np.array(graph.value)
    cap, cap_link = value[made.tree[_C]], value[made.link[_C]]
    ind_tree, ind = value[made.tree[_L]], value[made.link[_L]]
    r_tree, r_link = value[made.tree[_R]], value[made.link[_R]]
    nc, nl = cap.size, ind.size
    n, m = nc + nl, 1 + len(converters) + len(bent)
    width = n + 2 * m
    x, u, du = slice(0, n), slice(n, n + m), slice(n + m, width)

    def rows(count: int, part: slice, first: int = 0) -> Floats:
        found = np.zeros((count, width))
        found[np.arange(count), part.start + first + np.arange(count)] = 1.0
        return found

    volt, amp = rows(nc, x), rows(nl, x, nc)  # tree capacitors, link inductors
    source = np.zeros((1 + meters, width))
    source[0, u.start] = 1.0
    d_source = np.zeros_like(source)
    d_source[0, du.start] = 1.0
    forced = np.zeros((made.link[_I].size, width))  # loads, corrections, then voltmeters, which draw nothing
    forced[: m - 1] = rows(m - 1, u, 1)
    d_forced = np.zeros_like(forced)
    d_forced[: m - 1] = rows(m - 1, du, 1)

    # Resistors: R_l i = v with v_tree = -R_t (F_RR i + F_RL i_L + F_RI i_I).
    driven = f[_R, _L] @ amp + f[_R, _I] @ forced
    loop = np.diag(r_link) + f[_R, _R].T @ (r_tree[:, None] * f[_R, _R])
    push = f[_V, _R].T @ source + f[_C, _R].T @ volt - f[_R, _R].T @ (r_tree[:, None] * driven)
    i_r = _solve(loop, push)
    v_r = -r_tree[:, None] * (f[_R, _R] @ i_r + driven)

    # Capacitors and inductors.
    charge = -(f[_C, _R] @ i_r + f[_C, _L] @ amp + f[_C, _I] @ forced)
    charge -= f[_C, _C] @ (cap_link[:, None] * (f[_V, _C].T @ d_source))
    d_volt = _solve(np.diag(cap) + f[_C, _C] @ (cap_link[:, None] * f[_C, _C].T), charge)
    across = f[_V, _L].T @ source + f[_C, _L].T @ volt + f[_R, _L].T @ v_r
    across -= f[_L, _L].T @ (ind_tree[:, None] * (f[_L, _I] @ d_forced))
    d_amp = _solve(np.diag(ind) + f[_L, _L].T @ (ind_tree[:, None] * f[_L, _L]), across)

    # Outputs, and the fluxes of saturating inductors.
    i_c = cap_link[:, None] * (f[_C, _C].T @ d_volt + f[_V, _C].T @ d_source)
    i_v = -(f[_V, _C] @ i_c + f[_V, _R] @ i_r + f[_V, _L] @ amp + f[_V, _I] @ forced)
    i_l = -(f[_L, _L] @ amp + f[_L, _I] @ forced)
    v_l = -ind_tree[:, None] * (f[_L, _L] @ d_amp + f[_L, _I] @ d_forced)
    seen = f[_V, _I].T @ source + f[_C, _I].T @ volt + f[_R, _I].T @ v_r + f[_L, _I].T @ v_l
    y = np.concatenate((-i_v[:1], i_v[1:], seen[m - 1 :], seen[: len(converters)]))
    current = dict(zip(made.link[_L].tolist(), amp, strict=True))
    current |= dict(zip(made.tree[_L].tolist(), i_l, strict=True))
    flux = np.array([value[k] * current[k] for k in bent]).reshape(len(bent), width)

    # From x' = A x + B0 u + B1 u' to the state x - B1 u.
    dx = np.concatenate((d_volt, d_amp))
    a, b1 = dx[:, x], dx[:, du]
    return StateSpace(
        A=a,
        B=dx[:, u] + a @ b1,
        C=y[:, x],
        D=y[:, u] + y[:, x] @ b1,
        D1=y[:, du],
        flux_C=flux[:, x],
        flux_D=flux[:, u] + flux[:, x] @ b1,
        weight=np.sqrt(np.concatenate((cap, ind))),
        states=tuple(graph.name[k] for k in (*made.tree[_C].tolist(), *made.link[_L].tolist())),
        filters=np.array(filters, dtype=np.intp),
        converters=np.array(converters, dtype=np.intp),
        saturating=tuple(graph.name[k] for k in bent),
        L0=value[bent] if bent else np.zeros(0),
        saturation=np.array([graph.bend[k] for k in bent], dtype=np.float64),
        load_cut=f[_L, _I][:, : len(converters)],
    )
