"""DC trees for tests: short builders, random projects, and an independent solver by nested bracketing."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from hypothesis import strategies as st
from scipy.optimize import brentq, minimize_scalar

from budget.engine.model import Bus, Case, Converter, Filter, Lead, Load, Output, Project, Rules

LOSSLESS = ((1.0, 1.0),)


def table_filter(name: str, resistance: float = 0.0, **fields: Any) -> Filter:
    return Filter(name, attenuation=((1e4, 0.0, 0.0),), resistance=resistance, **fields)


def converter(name: str, power: float, home: str = "", lead: float = 0.0, **fields: Any) -> Converter:
    """One output of 1 V, so that its power is the number given; rated for it and without loss unless told otherwise."""
    given: dict[str, Any] = {"rated_power": power or 1.0, "efficiency": LOSSLESS, **fields}
    return Converter(name, output=(Output("out", 1.0, power),), filter=home, lead=Lead(R=lead), **given)


def tree(
    volts: float | tuple[float, float, float],
    resistance: float,
    branches: Sequence[tuple[float, Sequence[tuple[float, float]]]],
    cases: tuple[Case, ...] = (Case("full"),),
) -> Project:
    """``branches``: for each filter its resistance and the (power, lead) of its converters."""
    low, nominal, high = (volts, volts, volts) if isinstance(volts, (int, float)) else volts
    filters, converters = [], []
    for k, (r, members) in enumerate(branches):
        filters.append(table_filter(f"F{k}", r))
        converters += [converter(f"C{k}.{j}", p, f"F{k}", lead) for j, (p, lead) in enumerate(members)]
    return Project(Bus(low, nominal, high, resistance=resistance), tuple(filters), tuple(converters), cases, Rules())


Branches = list[tuple[float, list[tuple[float, float]]]]


@st.composite
def trees(draw: st.DrawFn, stress: float = 0.9) -> Project:
    """Random trees with three cases.

    With ``stress`` below 1 there always is an operating point: all power through the sum of the bus resistance and the
    largest filter and lead would still be that share of what can be transferred.
    """
    ohms = st.one_of(st.just(0.0), st.floats(1e-3, 2.0))
    low = draw(st.floats(10.0, 300.0))
    nominal = low * draw(st.floats(1.0, 1.5))
    high = nominal * draw(st.floats(1.0, 1.5))
    member = st.tuples(st.one_of(st.just(0.0), st.floats(0.1, 1.0)), ohms)
    branches: Branches = draw(st.lists(st.tuples(ohms, st.lists(member, max_size=5)), min_size=1, max_size=4))
    feed = draw(ohms)
    path = feed + max((r for r, _ in branches), default=0.0) + max((x for _, m in branches for _, x in m), default=0.0)
    total = sum(p for _, m in branches for p, _ in m)
    scale = 10.0 if path * total == 0.0 else draw(st.floats(0.01, stress)) * low**2 / (4.0 * path * total)
    loaded = [(r, [(p * scale, lead) for p, lead in members]) for r, members in branches]
    names = [f"C{k}.{j}" for k, (_, m) in enumerate(branches) for j in range(len(m))]
    light = tuple((name, Load("share", draw(st.floats(0.0, 1.0)))) for name in names)
    some_off = tuple((name, Load("off")) for name in names[::2])
    return tree(
        (low, nominal, high), feed, loaded, (Case("full"), Case("light", load=light), Case("off", load=some_off))
    )


def filter_point(node: float, resistance: float, members: Sequence[tuple[float, float]]) -> tuple[float, float] | None:
    """Independent, by bracketing: greatest output voltage [V] and current [A] of a filter on a stiff ``node`` [V]."""
    least = max((2.0 * math.sqrt(p * lead) for p, lead in members), default=0.0)
    floor = max(least * (1 + 1e-15), 1e-9 * node)

    def amps(v: float) -> float:
        return sum(2.0 * p / (v + math.sqrt(max(v * v - 4.0 * lead * p, 0.0))) for p, lead in members)

    def rise(v: float) -> float:
        total = 0.0
        for p, lead in members:
            root = math.sqrt(max(v * v - 4.0 * lead * p, 1e-300))
            total += 2.0 * p / (v + root) / root
        return 1.0 - resistance * total

    def excess(v: float) -> float:
        return v + resistance * amps(v) - node

    if node < floor or rise(node) <= 0.0:
        return None
    bottom = floor if rise(floor) >= 0.0 else brentq(rise, floor, node, xtol=1e-14, rtol=1e-14)
    if excess(bottom) > 0.0:
        return None
    v = brentq(excess, bottom, node, xtol=1e-14, rtol=1e-14) if excess(node) > 0.0 else node
    return v, amps(v)


def solvable(volts: float, feed: float, branches: Sequence[tuple[float, Sequence[tuple[float, float]]]]) -> bool:
    """Independent: whether a node voltage exists at which the feed can carry what the filters then take."""

    def need(node: float) -> float:
        points = [filter_point(node, r, members) for r, members in branches]
        if any(p is None for p in points):
            return math.inf
        return node + feed * sum(p[1] for p in points if p is not None)

    if not math.isfinite(need(volts)):
        return False
    low, high = 0.0, volts  # least node voltage at which every filter alone has a point
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if math.isfinite(need(middle)) else (middle, high)
    found = minimize_scalar(need, bounds=(high, volts), method="bounded", options={"xatol": 1e-9 * volts})
    return bool(min(found.fun, need(high)) <= volts)
