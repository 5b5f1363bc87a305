"""Damping of one ladder: which elements damp it, and with what resistance they would do it best.

Best means the lowest peak of the output impedance, the optimum of Middlebrook (1978) and Erickson (APEC 1999); its
closed forms are in Erickson & Maksimovic, Fundamentals of Power Electronics, 3rd ed., section 17.4. What of the
published networks a ladder of these branches can say:

- R-C beside the capacitor (there "Rf-Cb parallel"): a shunt with C and R beside a shunt with C. Directly.
- R across one of two chokes in series (there "Rf-Lb series"): a series L and a series L with Rp. Directly.
- L and R across the choke (there "Rf-Lb parallel"): no branch has an inductance in series with its Rp, but the same
  impedance, exactly, is two series elements: L1 = Lf Lb/(Lf + Lb), and L2 = Lf^2/(Lf + Lb) with
  Rp = Rf (Lf/(Lf + Lb))^2. It is recognised in that form, as the one above: it is the same circuit.
- Rp across the only choke damps too, but has no optimum: the lower it is, the lower the peak, and the worse the filter.
- Not expressible: R and L in parallel with each other, in series with the damping capacitor.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from budget.engine.ladder import Complex, Floats, admittance, impedance
from budget.engine.model import Branch, Ladder
from budget.engine.response import TINY, Feed, steps, zoom

UNDAMPED = "L-C"
RC_BESIDE = "R-C beside the capacitor"
R_ACROSS_PART = "R across one of two chokes"
R_ACROSS = "R across the choke"

CLOSED_RC = "published closed form: Erickson & Maksimovic 3e, eq. 17.33-17.37"
CLOSED_RL = "published closed form: Erickson & Maksimovic 3e, eq. 17.44-17.46"
NUMERICAL = "numerical"
NO_OPTIMUM = "none"  # no resistance within reach is better than both larger and smaller ones

_SMALL = 1e-4  # of the characteristic impedance: a loss that leaves the closed form right to four digits
_WITHOUT_LIMIT = 1e6  # of the characteristic impedance: what a lossless resonance gives is no number to show


@dataclass(frozen=True, slots=True)
class Damper:
    """An element that damps: ``kind`` is ``RC_BESIDE`` or ``R_ACROSS``, ``main`` the capacitor it acts on (indices)."""

    index: int
    kind: str
    main: int


@dataclass(frozen=True, slots=True)
class Shape:
    """A published network, recognised exactly. ``extra`` is Cb [F] or Lb [H], 0 where there is none."""

    kind: str
    inductance: float  # Lf [H], with that of the feed
    capacitance: float  # Cf [F]
    extra: float
    index: int | None  # of the element that holds the damping resistance

    @property
    def characteristic(self) -> float:
        """sqrt(Lf/Cf) in ohm, the R0f of the formulas."""
        return float(np.sqrt(self.inductance / self.capacitance))

    @property
    def resonance(self) -> float:
        """1/(2 pi sqrt(Lf Cf)) in Hz, the ff of the formulas."""
        return float(1.0 / (2.0 * np.pi * np.sqrt(self.inductance) * np.sqrt(self.capacitance)))


@dataclass(frozen=True, slots=True)
class Damping:
    """The best value of one damping resistance, beside the one entered."""

    resistance: float | None  # [ohm]; None where there is no optimum
    peak: float | None  # largest |Zo| with it [ohm]
    frequency: float | None  # of that peak [Hz]
    method: str  # CLOSED_RC, CLOSED_RL, NUMERICAL or NO_OPTIMUM
    entered: float | None  # [ohm]; None for a choke without Rp
    entered_peak: float | None  # [ohm]; None where nothing resonates or no loss limits the peak
    entered_frequency: float | None  # [Hz]


def rc_optimum(n: float) -> tuple[float, float, float]:
    """R/R0f, peak/R0f and frequency ratio f/ff for n = Cb/Cf > 0: Erickson & Maksimovic 3e, eq. 17.33-17.37."""
    resistance = np.sqrt((2.0 + n) * (4.0 + 3.0 * n) / (2.0 * (4.0 + n))) / n
    return float(resistance), float(np.sqrt(2.0 * (2.0 + n)) / n), float(np.sqrt(2.0 / (2.0 + n)))


def rl_optimum(n: float) -> tuple[float, float, float]:
    """R/R0f, peak/R0f and frequency ratio f/ff for n = Lb/Lf > 0: Erickson & Maksimovic 3e, eq. 17.44-17.46."""
    resistance = n / (1.0 + n) / np.sqrt(2.0 * (1.0 + n) * (4.0 + n) / ((2.0 + n) * (4.0 + 3.0 * n)))
    peak = np.sqrt(2.0 * (1.0 + n) * (2.0 + n)) / n
    return float(resistance), float(peak), float(np.sqrt((2.0 + n) / (2.0 * (1.0 + n))))


def damping_branches(ladder: Ladder) -> tuple[Damper, ...]:
    """The elements that are there to damp, in the order of the ladder.

    Common practice, no definition: of the shunts at one node the one of least R is the main capacitor. Beside it a
    damper has at least half of its C and at least a twentieth of the resistance that would be best for the choke
    next to it; smaller ones are bypasses and further capacitors of the bank. An Rp damps its choke if it is at most
    twenty times the best; larger ones are the loss of the core.
    """
    found = []
    groups = _groups(ladder)
    for g, (place, members) in enumerate(groups):
        around = [
            groups[k][1] for k in ((g - 1, g + 1) if place == "shunt" else (g + 1, g - 1)) if 0 <= k < len(groups)
        ]
        if place == "shunt":
            main = _main(ladder, members)
            chokes = [total for total in (sum(ladder[k].L for k in group) for group in around) if total]
            found += [
                Damper(k, RC_BESIDE, main)
                for k in members
                if main is not None and k != main and _damps(ladder[k], ladder[main], chokes[0] if chokes else 0.0)
            ]
        else:
            mains = [main for main in (_main(ladder, group) for group in around) if main is not None]
            plain = sum(ladder[k].L for k in members if not ladder[k].Rp)
            for k in members:
                part = ladder[k]
                if not (part.L and part.Rp and mains):
                    continue
                best = rl_optimum(part.L / plain)[0] if plain else 1.0
                if part.Rp <= 20.0 * best * np.sqrt((plain or part.L) / (ladder[mains[0]].C or 1.0)):
                    found.append(Damper(k, R_ACROSS, mains[0]))
    return tuple(sorted(found, key=lambda damper: damper.index))


def shape(ladder: Ladder, feed: Feed | None = None, index: int | None = None) -> Shape | None:
    """The published network that the ladder is behind the feed, or None if it is none of them exactly.

    Shunts that the feed shorts and chokes behind the last shunt are left aside. Losses up to 1e-4 of the
    characteristic impedance count as none; an ESL or a Cp does not. ``index`` says which element is meant as the
    damping one, whatever its resistance; otherwise it is the one whose resistance is not small.
    """
    feed = feed or Feed()
    kept = [(k, branch) for k, branch in enumerate(ladder) if _present(branch)]
    while kept and kept[0][1].place == "shunt" and not (feed.resistance or feed.inductance):
        kept.pop(0)
    while kept and kept[-1][1].place == "series":
        kept.pop()
    chokes = [(k, branch) for k, branch in kept if branch.place == "series"]
    shunts = [(k, branch) for k, branch in kept[len(chokes) :]]
    if any(branch.place == "series" or branch.L or branch.Rp or branch.Cp or not branch.C for _, branch in shunts):
        return None
    if any(branch.Cp or branch.C or (branch.Rp and not branch.L) for _, branch in chokes):
        return None
    across = [(k, branch) for k, branch in chokes if branch.Rp or k == index]
    lf = feed.inductance + sum(branch.L for k, branch in chokes if not branch.Rp and k != index)
    lb = sum(branch.L for _, branch in across)
    least = min((branch.R for _, branch in shunts), default=0.0)
    small = _SMALL * np.sqrt((lf + lb) / max(sum(branch.C or 0.0 for _, branch in shunts), TINY))
    damping = [(k, branch) for k, branch in shunts if k == index or max(small, least) < branch.R]
    cb = sum(branch.C or 0.0 for _, branch in damping)
    cf = sum(branch.C or 0.0 for _, branch in shunts) - cb if len(shunts) > len(damping) else 0.0
    loss = feed.resistance + sum(branch.R for _, branch in chokes)
    loss += sum(branch.R for k, branch in shunts if (k, branch) not in damping)
    if not cf or not (lf or lb) or len(across) + len(damping) > 1 or loss > small:
        return None
    if damping:
        return Shape(RC_BESIDE, lf, cf, cb, damping[0][0])
    if across and lf:
        return Shape(R_ACROSS_PART, lf, cf, lb, across[0][0])
    return Shape(R_ACROSS, lb, cf, 0.0, across[0][0]) if across else Shape(UNDAMPED, lf, cf, 0.0, None)


def best_damping(
    ladder: Ladder, index: int, feed: Feed | None = None, others: Callable[[Floats], Complex] | None = None
) -> Damping:
    """The resistance of element ``index`` with which the largest |Zo| is least: R of a shunt, Rp of a series choke.

    Zo is the impedance seen from the converter side with the source shorted behind ``feed``, at the last shunt: a
    choke behind it adds jwL whatever the damping. ``others`` gives the admittance [S] of all else at the bus node
    for angular frequencies [rad/s], both of shape (P,). By the closed form where ``shape`` finds one of the
    published networks and ``others`` is not given; else by a search over R on the ladder as it is, from a tenth of
    its lowest resonance to ten times its highest. Raises ValueError for an element that has no such resistance.
    """
    part = ladder[index]
    if not (part.C if part.place == "shunt" else part.L):
        raise ValueError("Damping takes a shunt with C or a series element with L.")
    feed = feed or Feed()
    entered = part.R if part.place == "shunt" else (part.Rp or None)
    last = max((k for k, branch in enumerate(ladder) if branch.place == "shunt"), default=-1)
    net = _Net(ladder[:index], part, ladder[index + 1 : last + 1], feed, others)
    span = _span(ladder[: last + 1], feed) if index <= last else None
    if span is None:
        return Damping(None, None, None, NO_OPTIMUM, entered, None, None)
    at, value = _highest(net, np.array([np.inf if entered is None else entered]), span, 20)
    limited = float(value[0]) < _WITHOUT_LIMIT * span.most
    as_entered = (float(value[0]), float(at[0])) if limited else (None, None)
    known = shape(ladder, feed, index) if others is None else None
    if known is not None and known.index == index and known.extra:
        ratio = known.extra / (known.capacitance if known.kind == RC_BESIDE else known.inductance)
        r, peak, f = rc_optimum(ratio) if known.kind == RC_BESIDE else rl_optimum(ratio)
        r0, ff = known.characteristic, known.resonance
        method = CLOSED_RC if known.kind == RC_BESIDE else CLOSED_RL
        return Damping(r * r0, peak * r0, f * ff, method, entered, *as_entered)
    best = _search(net, span)
    if best is None:
        return Damping(None, None, None, NO_OPTIMUM, entered, *as_entered)
    return Damping(*best, NUMERICAL, entered, *as_entered)


@dataclass(frozen=True, slots=True)
class _Net:
    """A ladder opened at the element whose resistance is sought, up to its last shunt."""

    before: Ladder
    branch: Branch
    after: Ladder
    feed: Feed
    others: Callable[[Floats], Complex] | None

    def magnitude(self, r: Floats, w: Floats) -> Floats:
        """|Zo| for resistances (M, 1) at angular frequencies (1, P) or (M, P)."""
        v = self.feed.impedance(w)
        others = 0.0 if self.others is None else np.asarray(self.others(w.ravel())).reshape(w.shape)
        v, i, _ = steps(self.before[::-1], w, v, 1.0 + v * others)
        if self.branch.place == "shunt":
            z = impedance(replace(self.branch, R=0.0), w) + r
            i = i + v / np.where(np.abs(z) < TINY, TINY, z)
        else:
            y = admittance(replace(self.branch, R=0.0, Rp=None), w) + 1.0 / r
            v = v + i * (self.branch.R + 1.0 / np.where(np.abs(y) < TINY, TINY, y))
        v, i, _ = steps(self.after[::-1], w, v, i)
        return np.asarray(np.abs(v) / np.maximum(np.abs(i), TINY), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class _Span:
    """Where the resonances of a ladder can be (log of rad/s), and their characteristic impedances [ohm]."""

    low: float
    high: float
    least: float
    most: float


def _span(ladder: Ladder, feed: Feed) -> _Span | None:
    chokes = [branch.L for branch in ladder if branch.place == "series" and branch.L]
    chokes += [feed.inductance] if feed.inductance else []
    nodes = [[ladder[k].C or 0.0 for k in members] for place, members in _groups(ladder) if place == "shunt"]
    totals = [sum(node) for node in nodes if sum(node)]
    if not chokes or not totals:
        return None
    # A bypass of less than a twentieth of its node resonates with the ESL beside it, above what damping reaches.
    small = min(c for node in nodes for c in node if c >= 0.05 * sum(node) and c)
    low = -0.5 * np.log(sum(chokes)) - 0.5 * np.log(sum(totals)) - np.log(10.0)
    high = -0.5 * np.log(min(chokes)) - 0.5 * np.log(small) + np.log(10.0)
    return _Span(float(low), float(high), np.sqrt(min(chokes) / max(totals)), np.sqrt(max(chokes) / small))


def _search(net: _Net, span: _Span) -> tuple[float, float, float] | None:
    """Resistance, peak and its frequency: a scan, then the best place between its neighbours, seven points a round."""
    low, high = np.log10(span.least) - 3.0, np.log10(span.most) + 3.0
    x = np.linspace(low, high, int(min(8 * (high - low), 120)) + 1)
    _, value = _highest(net, 10.0**x, span, 6)
    best = int(np.argmin(value))
    if best in (0, x.size - 1) or float(value[best]) > _WITHOUT_LIMIT * span.most:
        return None
    if min(value[0], value[-1]) < (1.0 + 1e-6) * value[best]:
        return None  # the lowest peak is not this resistance's doing
    middle, step = x[best], x[1] - x[0]
    for _ in range(6):
        near = middle + step * np.linspace(-1.0, 1.0, 9)
        _, value = _highest(net, 10.0**near, span, 8)
        middle, step = near[int(np.argmin(value))], step / 4.0
    at, value = _highest(net, np.array([10.0**middle]), span, 20)
    return float(10.0**middle), float(value[0]), float(at[0])


def _highest(net: _Net, r: Floats, span: _Span, rounds: int) -> tuple[Floats, Floats]:
    """Frequency [Hz] and value [ohm] of the largest |Zo| for each resistance, shapes (M,)."""
    decades = (span.high - span.low) / np.log(10.0)
    x = np.linspace(span.low, span.high, int(min(50 * decades, 1200)) + 1)
    grid = net.magnitude(r[:, None], np.exp(x)[None, :])
    rows = np.arange(r.size)
    end = np.where(grid[:, 0] > grid[:, -1], 0, x.size - 1)
    at, value = x[end], grid[rows, end]
    # Every top that might turn out the highest is narrowed down: on the grid a sharp one looks lower than it is.
    inner = grid[:, 1:-1]
    tops = (inner >= grid[:, :-2]) & (inner > grid[:, 2:]) & (inner > 0.3 * grid.max(axis=1, keepdims=True))
    row, column = np.nonzero(tops)
    if row.size:
        low, high = x[column], x[column + 2]
        place, height = zoom(lambda x: net.magnitude(r[row][:, None], np.exp(x)), low, high, rounds)
        order = np.argsort(height)  # the last one written to a row is its highest
        most = np.full(r.size, -1.0)
        where = np.zeros(r.size)
        most[row[order]], where[row[order]] = height[order], place[order]
        at, value = np.where(most > value, where, at), np.maximum(most, value)
    return np.exp(at) / (2.0 * np.pi), value


def _present(branch: Branch) -> bool:
    return branch.place == "shunt" or bool(branch.R or branch.L or branch.Rp or branch.Cp or branch.C)


def _groups(ladder: Ladder) -> list[tuple[str, list[int]]]:
    """Neighbours of one place together, as indices; elements that are nothing are left out."""
    groups: list[tuple[str, list[int]]] = []
    for k, branch in enumerate(ladder):
        if not _present(branch):
            continue
        if not groups or groups[-1][0] != branch.place:
            groups.append((branch.place, []))
        groups[-1][1].append(k)
    return groups


def _main(ladder: Ladder, members: list[int]) -> int | None:
    """The capacitor of least R of a node; of equals the largest."""
    capacitors = [k for k in members if ladder[k].place == "shunt" and ladder[k].C]
    return min(capacitors, key=lambda k: (ladder[k].R, -(ladder[k].C or 0.0)), default=None)


def _damps(part: Branch, main: Branch, choke: float) -> bool:
    if not part.C or not main.C or part.R <= main.R or part.C < 0.5 * main.C:
        return False
    best = rc_optimum(part.C / main.C)[0] * np.sqrt(choke / main.C)
    return bool(0.05 * best <= part.R)
