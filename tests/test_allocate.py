"""Allocation against enumeration of everything, against a mixed-integer solver, and under constraints."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine.allocate import Candidate, allocate
from budget.engine.evaluate import evaluate_dc
from budget.engine.model import Bus, Case, Load, Project, Rules
from budget.engine.operating import operating_points
from budget.engine.placing import Constraints, wanted_current
from tests.dc_trees import converter, table_filter


def headroom(project: Project) -> float | None:
    """By the definition, from the operating points of the program; -inf if one is missing."""
    o = operating_points(project)
    if not o.solved.all():
        return -math.inf
    wanted = wanted_current(project)
    found = [
        float(((wanted[f] - o.filter_current[:, :, f]) / wanted[f]).min())
        for f in sorted({int(h) for h in o.home})
        if np.isfinite(wanted[f])
    ]
    return min(found, default=None)


def everything(project: Project) -> dict[tuple[str, ...], float]:
    """Headroom of every allocation; no constraint is looked at."""
    found = {}
    for homes in itertools.product([f.id for f in project.filters], repeat=len(project.converters)):
        placed = replace(
            project, converters=tuple(replace(c, filter=h) for c, h in zip(project.converters, homes, strict=True))
        )
        room = headroom(placed)
        found[homes] = math.inf if room is None else room
    return found


def homes_of(candidate: Candidate) -> tuple[str, ...]:
    return tuple(home for _, home in candidate.allocation)


def moves_of(project: Project, homes: tuple[str, ...]) -> int:
    return sum(c.filter != h for c, h in zip(project.converters, homes, strict=True))


def small(
    powers: list[float],
    ratings: list[float | None],
    *,
    resistance: float = 0.0,
    ohms: list[float] | None = None,
    homes: list[int] | None = None,
    cases: tuple[Case, ...] = (Case("full"),),
    volts: float = 10.0,
    rules: Rules | None = None,
    leads: list[float] | None = None,
) -> Project:
    filters = tuple(
        table_filter(f"F{k}", (ohms or [0.0] * len(ratings))[k], rated_current=r) for k, r in enumerate(ratings)
    )
    places = homes or [0] * len(powers)
    units = tuple(
        converter(f"C{k}", p, f"F{places[k]}" if places[k] >= 0 else "", (leads or [0.0] * len(powers))[k])
        for k, p in enumerate(powers)
    )
    return Project(Bus(volts, volts * 1.2, volts * 1.4, resistance=resistance), filters, units, cases, rules or Rules())


@st.composite
def projects(draw: st.DrawFn) -> Project:
    """Up to five converters on up to three filters, some alike, with resistances that matter and two cases."""
    count, filters = draw(st.integers(1, 6)), draw(st.integers(1, 3))
    ohms = st.sampled_from([0.0, 0.01, 0.1])
    watts = st.one_of(st.sampled_from([1.0, 2.0, 3.0]), st.floats(0.0, 5.0))
    powers = draw(st.lists(watts, min_size=count, max_size=count))
    load = tuple((f"C{k}", Load("share", draw(st.sampled_from([0.0, 0.5, 1.0, 1.2])))) for k in range(count))
    total = sum(powers) / 10.0
    rating = st.sampled_from([0.4, 0.6, 1.0, 2.0]).map(lambda share: max(share * total, 0.1))
    return small(
        powers,
        draw(st.lists(rating, min_size=filters, max_size=filters)),
        resistance=draw(ohms),
        ohms=draw(st.lists(ohms, min_size=filters, max_size=filters)),
        homes=draw(st.lists(st.integers(-1, filters - 1), min_size=count, max_size=count)),
        cases=(Case("full"), Case("other", load=load)),
        rules=Rules(filter_load=draw(st.sampled_from([0.8, 1.0]))),
        leads=draw(st.lists(ohms, min_size=count, max_size=count)),
    )


@st.composite
def constrained(draw: st.DrawFn) -> tuple[Project, Constraints]:
    project = draw(projects())
    ids = [c.id for c in project.converters]
    filters = [f.id for f in project.filters]
    pair = st.tuples(st.sampled_from(ids), st.sampled_from(ids)).filter(lambda p: p[0] != p[1])
    pairs = st.lists(pair, max_size=2).map(tuple) if len(ids) > 1 else st.just(())
    placed = [c.id for c in project.converters if c.filter]
    return project, Constraints(
        keep=tuple(draw(st.lists(st.sampled_from(placed), max_size=1))) if placed else (),
        apart=draw(pairs),
        together=draw(pairs),
        banned=tuple(draw(st.lists(st.tuples(st.sampled_from(ids), st.sampled_from(filters)), max_size=2))),
        most=draw(st.one_of(st.none(), st.integers(1, 4), st.just(((filters[0], 2),)))),
    )


def obeys(project: Project, given: Constraints, homes: tuple[str, ...]) -> bool:
    at = dict(zip([c.id for c in project.converters], homes, strict=True))
    was = {c.id: c.filter for c in project.converters}
    most = given.most if isinstance(given.most, tuple) else ()
    if isinstance(given.most, int):
        most = tuple((f.id, given.most) for f in project.filters)
    return (
        all(at[k] == was[k] for k in given.keep)
        and all(at[a] != at[b] for a, b in given.apart)
        and all(at[a] == at[b] for a, b in given.together)
        and all(at[c] != f for c, f in given.banned)
        and all(list(at.values()).count(f) <= n for f, n in most)
    )


@settings(max_examples=80, deadline=None)
@given(projects())
def test_even_is_what_enumeration_finds(project: Project) -> None:
    every = everything(project)
    best = max(every.values())
    found = allocate(project, "even", finish=evaluate_dc)
    if best < -1e-12:
        assert not found.candidates
        assert found.proved
        assert found.shortfall is not None
        return
    assert found.proved
    assert found.gap == 0.0
    assert found.best is not None
    assert found.best.headroom == pytest.approx(max(best, 0.0), abs=1e-9)
    ties = [homes for homes, room in every.items() if room >= best - 5e-10]
    assert found.best.moves <= min(moves_of(project, homes) for homes in ties)
    for candidate in found.candidates:
        homes = homes_of(candidate)
        assert candidate.headroom == pytest.approx(max(every[homes], 0.0), abs=1e-12)
        assert candidate.moves == moves_of(project, homes)
        assert candidate.filters_used == len(set(homes))


@settings(max_examples=60, deadline=None)
@given(projects())
def test_fewest_is_what_enumeration_finds(project: Project) -> None:
    every = {h: r for h, r in everything(project).items() if r >= -1e-12}
    found = allocate(project, "fewest", finish=evaluate_dc)
    assert found.proved
    if not every:
        assert not found.candidates
        return
    best = found.best
    assert best is not None
    least = min(len(set(h)) for h in every)
    assert best.filters_used == least
    room = max(r for h, r in every.items() if len(set(h)) == least)
    assert best.headroom == pytest.approx(max(room, 0.0), abs=1e-9)


@settings(max_examples=120, deadline=None)
@given(constrained(), st.sampled_from(["even", "fewest"]))
def test_constraints_are_kept_and_cost_no_more_than_they_must(case: tuple[Project, Constraints], goal: str) -> None:
    project, constraints = case
    fine = {h: r for h, r in everything(project).items() if obeys(project, constraints, h)}
    every = {h: r for h, r in fine.items() if r >= -1e-12}
    found = allocate(project, goal, constraints, finish=evaluate_dc)
    assert found.proved
    for candidate in found.candidates:
        assert obeys(project, constraints, homes_of(candidate))
    if not every:
        assert not found.candidates
        assert found.shortfall is not None
        if found.shortfall.code == "contradiction":
            assert not fine
        return
    assert found.best is not None
    used = min(len(set(h)) for h in every) if goal == "fewest" else None
    room = max(r for h, r in every.items() if used is None or len(set(h)) == used)
    assert found.best.headroom == pytest.approx(max(room, 0.0), abs=1e-9)
    assert used is None or found.best.filters_used == used
