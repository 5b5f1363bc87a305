"""Allocation against enumeration of everything, against a mixed-integer solver, and under constraints."""

from __future__ import annotations

import itertools
import json
import math
import signal
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import LinearConstraint, milp

from budget.cli import run
from budget.engine.allocate import allocate
from budget.engine.candidates import Candidate, all_checks, as_json, judged, moved, ranked, so_far, with_checks
from budget.engine.evaluate import Result, evaluate_dc, with_emissions, with_stability
from budget.engine.feed import filter_currents, least_currents
from budget.engine.model import Branch, Bus, Case, Chop, LimitLine, Load, Project, Rules
from budget.engine.operating import operating_points
from budget.engine.partition import Split, splits
from budget.engine.placing import Constraints, Task, constraints_of, task_of, wanted_current
from budget.engine.quiet import smallest_margin
from budget.report import allocation as report
from tests.dc_trees import converter, table_filter

DEMO = str(Path(__file__).parent.parent / "projects" / "ferry.toml")


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
        most=draw(
            st.one_of(st.none(), st.integers(1, 4), st.just(((filters[0], 2),)), st.just((("", 3), (filters[0], 1))))
        ),
    )


def obeys(project: Project, given: Constraints, homes: tuple[str, ...]) -> bool:
    at = dict(zip([c.id for c in project.converters], homes, strict=True))
    was = {c.id: c.filter for c in project.converters}
    most = given.most if isinstance(given.most, tuple) else ()
    filters = [f.id for f in project.filters]
    if isinstance(given.most, int):
        most = (("", given.most),)
    return (
        all(at[k] == was[k] for k in given.keep)
        and all(at[a] != at[b] for a, b in given.apart)
        and all(at[a] == at[b] for a, b in given.together)
        and all(at[c] != f for c, f in given.banned)
        and all(list(at.values()).count(f) <= n for where, n in most for f in ([where] if where else filters))
    )


@settings(max_examples=40, deadline=None)
@given(projects())
def test_even_is_what_enumeration_finds(project: Project) -> None:
    every = everything(project)
    best = max(every.values())
    found = allocate(project, "even", finish=evaluate_dc, explain=False)
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


@settings(max_examples=30, deadline=None)
@given(projects())
def test_fewest_is_what_enumeration_finds(project: Project) -> None:
    every = {h: r for h, r in everything(project).items() if r >= -1e-12}
    found = allocate(project, "fewest", finish=evaluate_dc, explain=False)
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


@settings(max_examples=40, deadline=None)
@given(constrained(), st.sampled_from(["even", "fewest"]))
def test_constraints_are_kept_and_cost_no_more_than_they_must(case: tuple[Project, Constraints], goal: str) -> None:
    project, constraints = case
    fine = {h: r for h, r in everything(project).items() if obeys(project, constraints, h)}
    every = {h: r for h, r in fine.items() if r >= -1e-12}
    found = allocate(project, goal, constraints, finish=evaluate_dc, explain=False)
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


# --- its parts ----------------------------------------------------------------------------------------------------


def task(project: Project, constraints: Constraints | None = None) -> Task:
    found = task_of(project, constraints or Constraints())
    assert isinstance(found, Task)
    return found


@settings(max_examples=50, deadline=None)
@given(projects(), st.data())
def test_currents_of_many_are_those_of_the_operating_point(project: Project, data: st.DataObject) -> None:
    count, filters = len(project.converters), len(project.filters)
    feed = task(project).feed
    row = st.lists(st.integers(0, filters - 1), min_size=count, max_size=count)
    rows = np.array(data.draw(st.lists(row, min_size=1, max_size=4)), dtype=np.intp)
    found = filter_currents(feed, rows)
    for homes, currents in zip(rows, found, strict=True):
        placed = moved(project, tuple((c.id, f"F{h}") for c, h in zip(project.converters, homes, strict=True)))
        o = operating_points(placed)
        solved = bool(o.solved[:, 0].all())
        assert np.isfinite(currents).all() == solved
        if solved:  # the cases that count are among all cases, and the low line is the worst
            assert currents.max(axis=0) == pytest.approx(o.filter_current[:, 0].max(axis=0), rel=1e-9, abs=1e-12)
            assert (o.filter_current.max(axis=1) <= o.filter_current[:, 0] * (1 + 1e-12)).all()


@settings(max_examples=50, deadline=None)
@given(projects(), st.data(), st.floats(0.5, 3.0))
def test_no_allocation_within_the_caps_draws_less_than_the_bound(
    project: Project, data: st.DataObject, target: float
) -> None:
    job = task(project)
    count, filters = len(project.converters), len(project.filters)
    homes = np.array(data.draw(st.lists(st.integers(0, filters - 1), min_size=count, max_size=count)), dtype=np.intp)
    current = filter_currents(job.feed, homes[None])[0]
    caps = job.wanted * target
    if not (current <= caps).all():
        return
    low = least_currents(job.feed, np.ones((count, filters), dtype=np.bool_), caps)
    assert low is not None
    for f in range(filters):
        assert (low[f, homes == f].sum(axis=0) <= current[:, f] * (1 + 1e-9)).all()


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 4), st.integers(1, 7), st.booleans(), st.booleans(), st.data())
def test_splits_are_all_that_fit_once(filters: int, count: int, alike: bool, equal: bool, data: st.DataObject) -> None:
    """Against trying everything; equal filters or items are counted once."""
    weights = data.draw(st.lists(st.integers(1, 5), min_size=count, max_size=count))
    weights = sorted([weights[0]] * count if equal else weights, reverse=True)
    caps = data.draw(st.lists(st.integers(3, 12), min_size=filters, max_size=filters))
    caps = [caps[0]] * filters if alike else list(range(12, 12 - filters, -1))
    low = np.tile(np.array(weights, dtype=np.float64)[None, :, None], (filters, 1, 1))
    split = Split(
        low=low,
        base=np.zeros((filters, 1)),
        caps=np.array(caps, dtype=np.float64),
        sizes=np.ones(count, dtype=np.intp),
        most=np.full(filters, count, dtype=np.intp),
        apart=(),
        item_class=np.array([0] * count if equal else range(count), dtype=np.intp),
        filter_class=np.array([0] * filters if alike else range(filters), dtype=np.intp),
    )

    def name(homes: tuple[int, ...]) -> object:
        parts = [tuple(weights[k] if equal else k for k in range(count) if homes[k] == f) for f in range(filters)]
        return tuple(sorted(parts)) if alike else tuple(parts)

    wanted = {
        name(homes)
        for homes in itertools.product(range(filters), repeat=count)
        if all(sum(weights[k] for k in range(count) if homes[k] == f) <= caps[f] for f in range(filters))
    }
    found = [name(tuple(row)) for block in splits(split, lambda: None, lambda: math.inf) for row in block.tolist()]
    assert (alike and equal) or len(found) == len(set(found))
    assert set(found) == wanted


# --- against a mixed-integer solver -------------------------------------------------------------------------------


def smallest_largest_share(weights: np.ndarray, ratings: np.ndarray) -> float:
    """min z with sum_i w_ic x_if <= z W_f and sum_f x_if = 1: the textbook model, solved by HiGHS through scipy."""
    count, cases = weights.shape
    filters = ratings.size
    size = count * filters + 1
    rows, upper, lower = [], [], []
    for f in range(filters):
        for c in range(cases):
            row = np.zeros(size)
            row[f * count : (f + 1) * count] = weights[:, c]
            row[-1] = -ratings[f]
            rows.append(row)
            lower.append(-np.inf)
            upper.append(0.0)
    for k in range(count):
        row = np.zeros(size)
        row[k : count * filters : count] = 1.0
        rows.append(row)
        lower.append(1.0)
        upper.append(1.0)
    cost = np.zeros(size)
    cost[-1] = 1.0
    whole = np.ones(size)
    whole[-1] = 0.0
    solved = milp(
        cost,
        integrality=whole,
        bounds=(np.zeros(size), np.append(np.ones(size - 1), np.inf)),
        constraints=LinearConstraint(np.array(rows), np.array(lower), np.array(upper)),
        options={"mip_rel_gap": 0.0},
    )
    return float(solved.fun)


@pytest.mark.parametrize("seed", range(6))
def test_even_is_what_a_mixed_integer_solver_finds(seed: int) -> None:
    """Without resistances the task is linear. Solver: HiGHS, by scipy.optimize.milp."""
    rng = np.random.default_rng(seed)
    count, filters = 9 + seed % 3, 2 + seed % 3
    powers = rng.integers(1, 40, count).astype(float)
    shares = rng.uniform(0.2, 1.3, count)
    ratings = rng.integers(8, 14, filters) * powers.sum() / 80.0
    load = tuple((f"C{k}", Load("share", float(x))) for k, x in enumerate(shares))
    project = small(powers.tolist(), ratings.tolist(), cases=(Case("a"), Case("b", load=load)))
    found = allocate(project, finish=evaluate_dc, explain=False)
    wanted = smallest_largest_share(np.stack([powers, powers * shares], axis=1) / 10.0, ratings)
    assert found.proved
    if wanted > 1.0:
        assert not found.candidates
    else:
        assert found.best is not None
        assert found.best.headroom == pytest.approx(1.0 - wanted, abs=1e-6)


# --- what cannot be ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("constraints", "named"),
    [
        (Constraints(keep=("C0",), banned=(("C0", "F0"),)), {("keep", "C0"), ("banned", "C0", "F0")}),
        (
            Constraints(keep=("C0", "C1"), apart=(("C0", "C1"),)),
            {("apart", "C0", "C1"), ("keep", "C0"), ("keep", "C1")},
        ),
        (
            Constraints(keep=("C0", "C2"), together=(("C0", "C2"),)),
            {("together", "C0", "C2"), ("keep", "C0"), ("keep", "C2")},
        ),
        (
            Constraints(apart=(("C0", "C1"),), together=(("C0", "C1"),)),
            {("apart", "C0", "C1"), ("together", "C0", "C1")},
        ),
        (Constraints(banned=(("C1", "F0"), ("C1", "F1"))), {("banned", "C1", "F0"), ("banned", "C1", "F1")}),
        (Constraints(keep=("C3",)), {("keep", "C3"), ("not allocated", "C3")}),
        (Constraints(most=1), {("most", "", "1"), ("converters", "4")}),
        (Constraints(most=(("", 2), ("F1", 1))), {("most", "", "2"), ("most", "F1", "1"), ("converters", "4")}),
        (Constraints(most=0), {("most", "", "0")}),
        (
            Constraints(together=(("C0", "C1"), ("C1", "C2")), most=2),
            {("most", "", "2"), ("together", "C0", "C1", "C2")},
        ),
        (Constraints(keep=("C0", "C1"), most=(("F0", 1),)), {("most", "F0", "1"), ("keep", "C0"), ("keep", "C1")}),
    ],
)
def test_contradictions_are_named(constraints: Constraints, named: set[tuple[str, ...]]) -> None:
    project = small([1.0, 1.0, 1.0, 1.0], [5.0, 5.0], homes=[0, 0, 1, -1])
    found = allocate(project, constraints=constraints, finish=evaluate_dc)
    assert found.proved
    assert not found.candidates
    assert found.shortfall is not None
    assert found.shortfall.code == "contradiction"
    assert set(found.shortfall.constraints) == named


def test_a_constraint_that_alone_is_in_the_way_is_named() -> None:
    project = small([6.0, 6.0, 1.0], [0.7, 0.7])
    found = allocate(project, constraints=Constraints(apart=(("C0", "C1"),), keep=("C2",)), finish=evaluate_dc)
    assert found.candidates
    stuck = allocate(project, constraints=Constraints(together=(("C0", "C2"), ("C1", "C2"))), finish=evaluate_dc)
    assert stuck.proved
    assert {r.constraint for r in stuck.relaxations if r.code == "constraint"} == {
        ("together", "C0", "C2"),
        ("together", "C1", "C2"),
    }


def test_three_apart_do_not_fit_behind_two() -> None:
    pairs = (("C0", "C1"), ("C1", "C2"), ("C0", "C2"))
    found = allocate(small([1.0] * 3, [5.0, 5.0]), constraints=Constraints(apart=pairs), finish=evaluate_dc)
    assert found.proved
    assert found.shortfall is not None
    assert found.shortfall.code == "constraints"
    assert {r.constraint for r in found.relaxations} == {("apart", *pair) for pair in pairs}


def test_an_unknown_id_is_an_error() -> None:
    project = small([1.0], [1.0])
    with pytest.raises(ValueError, match='no converter "X"'):
        allocate(project, constraints=Constraints(keep=("X",)))
    with pytest.raises(ValueError, match='no filter "X"'):
        allocate(project, constraints=Constraints(banned=(("C0", "X"),)))
    with pytest.raises(ValueError, match="no goal"):
        allocate(project, "best")


def test_what_is_missing_is_told_and_what_would_help() -> None:
    """10 V, no resistance: 8 A and 3 x 3 A for 9 A and 6 A. The best overload is 9 A on 6 A or 11 A on 9 A."""
    project = small([80.0, 30.0, 30.0, 30.0], [9.0, 6.0])
    found = allocate(project, finish=evaluate_dc)
    assert found.proved
    assert not found.candidates
    short = found.shortfall
    assert short is not None
    assert (short.code, short.subject, short.case) == ("filter current", "F0", "full")
    assert short.value == pytest.approx(11.0)
    assert short.limit == pytest.approx(9.0)
    rating = next(r for r in found.relaxations if r.code == "rating")
    assert (rating.subject, rating.present, rating.smallest) == ("F0", 9.0, True)
    assert rating.needed == pytest.approx(11.0, rel=1e-6)
    load = next(r for r in found.relaxations if r.code == "load")
    assert load.subject == "C0"  # to 6 A, beside 3 A; a 3 A load would have to go to 1 A or to nothing
    assert load.needed == pytest.approx(0.75, abs=2e-4)
    assert load.smallest


def test_a_rating_that_would_do_does() -> None:
    project = small(
        [30.0, 20.0, 40.0, 10.0], [5.0, 4.0], resistance=0.05, ohms=[0.1, 0.02], rules=Rules(filter_load=0.8)
    )
    found = allocate(project, finish=evaluate_dc)
    assert not found.candidates
    rating = next(r for r in found.relaxations if r.code == "rating")
    assert rating.needed is not None

    def with_rating(amps: float) -> Project:
        return replace(
            project,
            filters=tuple(replace(f, rated_current=amps) if f.id == rating.subject else f for f in project.filters),
        )

    assert allocate(with_rating(rating.needed * (1 + 1e-9)), finish=evaluate_dc).candidates
    assert not allocate(with_rating(rating.needed * 0.999), finish=evaluate_dc, explain=False).candidates


def test_a_bus_that_cannot_carry_the_case_is_named() -> None:
    """10 V behind 1 ohm gives 25 W at most (maximum power transfer theorem)."""
    found = allocate(small([40.0, 10.0], [99.0, 99.0], resistance=1.0), finish=evaluate_dc)
    short = found.shortfall
    assert found.proved
    assert short is not None
    assert (short.code, short.case) == ("operating point", "full")
    assert short.value is not None
    assert 0.5 <= short.value < 0.75  # a bound: no more than this share of the powers


def test_filters_without_a_rating_take_nothing_new() -> None:
    project = small([10.0, 10.0, 10.0], [None, 5.0], homes=[0, 1, -1])
    found = allocate(project, finish=evaluate_dc)
    assert found.unrated == ("F0",)
    assert found.best is not None
    assert dict(found.best.allocation) == {"C0": "F0", "C1": "F1", "C2": "F1"}
    assert found.best.headroom == pytest.approx(0.6)
    nowhere = allocate(small([10.0], [None], homes=[-1]), finish=evaluate_dc)
    assert nowhere.shortfall is not None
    assert nowhere.shortfall.constraints == (("no rating", "F0"),)
    alone = allocate(small([10.0], [None]), finish=evaluate_dc)
    assert alone.best is not None
    assert alone.best.headroom is None


def test_a_filter_derated_to_nothing_takes_nothing() -> None:
    project = small([10.0, 10.0], [9.0, 5.0])
    hot = replace(
        project,
        bus=replace(project.bus, temperature=90.0),
        filters=(replace(project.filters[0], derate_from=50.0, derate_to=85.0), project.filters[1]),
    )
    found = allocate(hot, finish=evaluate_dc)
    assert found.best is not None
    assert {home for _, home in found.best.allocation} == {"F1"}
    kept = allocate(hot, constraints=Constraints(keep=("C0",)), finish=evaluate_dc)
    assert kept.shortfall is not None
    assert set(kept.shortfall.constraints) == {("keep", "C0"), ("rating zero", "F0")}


def test_nothing_to_allocate() -> None:
    assert allocate(small([], [5.0]), finish=evaluate_dc).candidates[0].allocation == ()
    none = allocate(small([1.0], [], homes=[-1]), finish=evaluate_dc)
    assert none.shortfall is not None
    assert none.shortfall.code == "no filters"


# --- at any time ---------------------------------------------------------------------------------------------------


def many(count: int, filters: int, seed: int = 1) -> Project:
    rng = np.random.default_rng(seed)
    powers = rng.uniform(5.0, 60.0, count)
    share = powers.sum() / 0.8 / 24.0 / filters
    ratings = [share * (1.3 if k % 2 else 0.7) for k in range(filters)]
    load = tuple((f"C{k}", Load("share", float(rng.uniform(0.2, 1.4)))) for k in range(count))
    return small(
        powers.tolist(),
        [float(r) for r in ratings],
        resistance=0.1 / share / filters,
        ohms=[float(0.2 / r) for r in ratings],
        homes=[k % filters for k in range(count)],
        cases=(Case("a"), Case("b", load=load)),
        volts=24.0,
    )


def test_a_large_bus_is_answered_in_bounded_time_with_an_honest_gap() -> None:
    told: list[tuple[float, float | None]] = []
    found = allocate(
        many(60, 8),
        time_limit=1.0,
        finish=evaluate_dc,
        progress=lambda best, bound: told.append((best.headroom or 0.0, bound)),
    )
    assert not found.proved
    assert found.best is not None
    assert found.gap is not None
    assert 0.0 < found.gap < 0.1
    assert found.note
    assert [room for room, _ in told] == sorted(room for room, _ in told)
    assert all(bound is None or bound >= (found.best.headroom or 0.0) for _, bound in told)
    assert told[-1][0] == pytest.approx(found.best.headroom)


@pytest.mark.parametrize("goal", ["even", "fewest", "quiet"])
@pytest.mark.parametrize("calls", [0, 1, 5, 40])
def test_it_can_be_stopped_and_then_claims_nothing(goal: str, calls: int) -> None:
    count = itertools.count()
    found = allocate(many(40, 5), goal, cancelled=lambda: next(count) >= calls, finish=evaluate_dc)
    assert not found.proved
    assert found.candidates or found.shortfall is not None
    if found.candidates:
        assert "stopped" in found.note


@settings(max_examples=40, deadline=None)
@given(projects(), st.sampled_from(["even", "fewest"]), st.integers(0, 30))
def test_no_allocation_is_better_than_a_stopped_search_says(project: Project, goal: str, calls: int) -> None:
    """Wherever it is stopped: the gap covers the best that enumeration finds, and what is proved is so."""
    count = itertools.count()
    found = allocate(project, goal, cancelled=lambda: next(count) >= calls, finish=evaluate_dc, explain=False)
    fine = {homes: room for homes, room in everything(project).items() if room >= 0.0}
    best = found.best
    if best is None:
        assert not (found.proved and fine)
        return
    assert found.gap is not None
    if goal == "fewest":
        least = min(len(set(homes)) for homes in fine)
        if found.gap_unit == "filters":
            assert best.filters_used - found.gap <= least
            return
        assert best.filters_used == least
        fine = {homes: room for homes, room in fine.items() if len(set(homes)) == least}
    assert (best.headroom or 0.0) + found.gap >= max(fine.values()) - 1e-9


@pytest.mark.parametrize("goal", ["even", "fewest", "quiet"])
@pytest.mark.parametrize("size", [(12, 3), (40, 5)])
def test_what_is_told_while_searching_only_gets_better(goal: str, size: tuple[int, int]) -> None:
    told: list[tuple[Candidate, float | None]] = []
    found = allocate(
        many(*size),
        goal,
        time_limit=0.5,
        finish=evaluate_dc,
        progress=lambda best, bound: told.append((best, bound)),
    )
    assert found.best is not None
    assert told
    ranks = [((c.filters_used if goal == "fewest" else 0), -(c.headroom or 0.0)) for c, _ in told]
    assert ranks == sorted(ranks, reverse=True)
    assert (found.best.filters_used, found.best.headroom) <= (told[-1][0].filters_used, 1.0)
    for best, bound in told:
        shown = so_far(goal, best, bound)
        assert not shown.proved
        assert shown.best is best
        if bound is not None:
            end = -found.best.filters_used if goal == "fewest" else found.best.headroom or 0.0
            assert (-bound if goal == "fewest" else bound) >= end - 1e-9
            assert shown.gap is not None
            assert "searching" in report.headline(shown)


def test_a_first_allocation_is_told_before_the_proof() -> None:
    told: list[Candidate] = []
    found = allocate(many(12, 3), finish=evaluate_dc, progress=lambda best, bound: told.append(best))
    assert found.proved
    assert told
    assert found.best is not None
    assert told[-1].headroom == found.best.headroom


def test_equal_parts_do_not_cost_time() -> None:
    """40 equal converters behind 8 equal filters: five each, proved by what one filter must carry at least."""
    found = allocate(small([10.0] * 40, [6.0] * 8, resistance=0.01, ohms=[0.05] * 8), finish=evaluate_dc)
    assert found.proved
    assert found.best is not None
    assert all(list(dict(found.best.allocation).values()).count(f"F{k}") == 5 for k in range(8))
    assert found.best.moves == 35


# --- quiet, ranking, JSON -------------------------------------------------------------------------------------------


LIMIT = LimitLine("own", "dBuV", "lisn-50uH", ((1e5, 60.0), (1e7, 60.0)), ((1e5, 1e7, 1e4),))


def noisy() -> Project:
    project = small([20.0, 10.0, 5.0, 15.0], [4.0, 4.0], volts=24.0, homes=[0, 0, 1, 1])

    def ladder(henry: float) -> tuple[Branch, ...]:
        return (Branch("series", L=henry, R=0.01), Branch("shunt", C=10e-6, R=0.01))

    units = tuple(
        replace(
            c,
            chop=Chop(0.4, 30e-9, 30e-9),
            frequency=2e5 + 3e4 * k,
            input=(Branch("shunt", C=4.7e-6, R=5e-3),),
            min_input=10.0,
        )
        for k, c in enumerate(project.converters)
    )
    filters = tuple(
        replace(f, attenuation=(), dm=ladder(henry)) for f, henry in zip(project.filters, (1e-6, 10e-6), strict=True)
    )
    return replace(project, converters=units, filters=filters, limits=(LIMIT,), checked=(LIMIT,))


def test_quiet_is_what_enumeration_finds() -> None:
    project = noisy()
    found = allocate(project, "quiet", finish=lambda placed: with_emissions(evaluate_dc(placed)))
    assert found.proved
    margins = {
        homes: smallest_margin(moved(project, tuple(zip([c.id for c in project.converters], homes, strict=True))))
        for homes, room in everything(project).items()
        if room >= 0.0
    }
    best = found.best
    assert best is not None
    assert best.emission_margin == pytest.approx(max(margins.values()), abs=1e-9)
    assert len(set(margins.values())) > 1
    for candidate in found.candidates:
        assert candidate.emission_margin == pytest.approx(margins[homes_of(candidate)])


def test_quiet_without_a_limit_set_goes_by_the_headroom_and_says_so() -> None:
    project = small([1.0, 2.0, 3.0], [1.0, 1.0])
    found = allocate(project, "quiet", finish=evaluate_dc)
    assert found.note == ("no limit set",)
    assert found.best is not None
    assert found.best.headroom == pytest.approx(0.7)
    assert found.best.emission_margin is None


def test_allocations_that_fail_a_check_come_after_those_that_do_not() -> None:
    """Behind F1 the voltage is too low for C0: the evenest allocation puts it there."""
    project = small([10.0, 11.0], [2.0, 2.2], homes=[0, 0], ohms=[0.0, 1.0])
    project = replace(project, converters=tuple(replace(c, min_input=5.0, max_input=20.0) for c in project.converters))
    project = replace(project, converters=(replace(project.converters[0], min_input=9.5), project.converters[1]))
    found = allocate(project, finish=evaluate_dc)
    assert found.best is not None
    assert found.best.status == "fail"
    assert found.best.worst is not None
    assert found.best.worst[0] == "input low"
    assert found.candidates[0].status == "ok"
    assert dict(found.candidates[0].allocation) == {"C0": "F0", "C1": "F1"}
    states = [c.status == "fail" for c in found.candidates]
    assert states == sorted(states)


def stage_by_stage(count: int) -> list[Result]:
    """The results of the noisy bus, one more stage each."""
    result = evaluate_dc(noisy())
    return [result, with_emissions(result), with_stability(with_emissions(result))][:count]


def test_checks_that_were_not_made_are_named() -> None:
    one = allocate(noisy(), finish=evaluate_dc).candidates[0]
    assert one.unchecked == ("emissions", "stability", "switch-on")
    assert Candidate((), 0, None, None, 0).unchecked[0] == "operating points"
    left = [judged(one, result).unchecked for result in stage_by_stage(3)]
    assert left == [("emissions", "stability", "switch-on"), ("stability", "switch-on"), ("switch-on",)]
    assert report.verdict(judged(one, stage_by_stage(3)[2])).endswith("; switch-on not checked")
    assert report.verdict(one).endswith("; emissions, stability and switch-on not checked")
    assert report.verdict(Candidate((), 0, None, None, 0)) == "not checked"


def test_all_checks_leave_out_what_time_does_not_allow() -> None:
    quick = replace(noisy(), rules=Rules(inrush_window=1e-4))
    finished = allocate(quick, candidates=2)
    assert [c.unchecked for c in finished.candidates] == [(), ()]
    hurried = allocate(noisy(), candidates=2, finish=all_checks(0.0))
    assert [c.unchecked for c in hurried.candidates] == [("emissions", "stability", "switch-on")] * 2
    asked = itertools.count()
    stopped = allocate(quick, candidates=1, finish=all_checks(cancelled=lambda: next(asked) > 3))
    assert stopped.candidates[0].unchecked == ("switch-on",)


def test_the_order_waits_until_the_same_checks_are_made_of_all() -> None:
    found = allocate(noisy(), candidates=3, finish=evaluate_dc)
    first, second, third = found.candidates
    assert [c.place for c in found.candidates] == [0, 1, 2]
    result = with_emissions(evaluate_dc(moved(noisy(), first.allocation)))
    found = with_checks(found, first.allocation, replace(result, status="fail"))
    assert [c.allocation for c in found.candidates] == [c.allocation for c in (first, second, third)]
    for one in (second, third):
        result = with_emissions(evaluate_dc(moved(noisy(), one.allocation)))
        found = with_checks(found, one.allocation, replace(result, status="ok"))
    assert [c.allocation for c in found.candidates] == [c.allocation for c in (second, third, first)]
    assert found.best is not None
    assert found.best.allocation == first.allocation
    assert ranked(found.candidates) == found.candidates


def test_json_has_what_is_promised() -> None:
    found = allocate(small([1.0, 2.0], [1.0, 1.0], homes=[0, -1]), finish=evaluate_dc)
    data = as_json(found)
    assert {"format", "goal", "proved", "candidates"} <= set(data)
    first = data["candidates"][0]  # type: ignore[index]
    assert first["allocation"] == {"C0": "F0", "C1": "F1"}
    assert first["filters_used"] == 2
    assert first["headroom"] == pytest.approx(0.8)
    assert first["moves"] == 1
    assert first["emission_margin"] is None
    assert set(first["worst"]) == {"check", "subject"}
    assert as_json(allocate(small([9.0], [0.1]), finish=evaluate_dc, explain=False))["candidates"] == []


KEYS = {"allocation", "filters_used", "headroom", "emission_margin", "moves", "status", "worst"}  # contract 2.8


def refuse(name: str) -> float:
    raise AssertionError(f"{name} is no JSON")


@pytest.mark.parametrize("goal", ["even", "fewest", "quiet"])
def test_the_command_prints_the_json_of_the_contract(goal: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["allocate", DEMO, "--goal", goal, "--format", "json", "--time", "0.5"]) == 0
    told = capsys.readouterr()
    assert told.err == ""
    data = json.loads(told.out, parse_constant=refuse)
    assert (data["format"], data["goal"]) == (1, goal)
    assert isinstance(data["proved"], bool)
    assert data["gap_unit"] in ("headroom", "filters", "dB")
    assert data["gap"] == 0.0 if data["proved"] else data["gap"] is None or data["gap"] > 0.0
    for one in data["candidates"]:
        assert set(one) >= KEYS
        assert set(one["allocation"]) == {f"CV{k}" for k in range(1, 7)}
        assert set(one["allocation"].values()) <= {"FL1", "FL2"}
        assert one["filters_used"] == len(set(one["allocation"].values()))
        assert one["status"] in ("ok", "thin", "fail")
        assert set(one["worst"]) == {"check", "subject"}
        assert one["unchecked"] == []
    states = [one["status"] == "fail" for one in data["candidates"]]
    assert states == sorted(states)


def test_the_command_prints_the_gap_of_what_is_not_proved(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["allocate", DEMO, "--goal", "quiet", "--time", "0.01"]) == 0
    first = capsys.readouterr().out.splitlines()[0]
    assert first.startswith("goal quiet: the best found, not proved (the time was over); ")
    assert "how much better another could be is not known" in first


def test_nothing_admissible_is_status_1_and_standard_error_says_by_how_much(
    capsys: pytest.CaptureFixture[str],
) -> None:
    assert run(["allocate", DEMO, "--most", "2", "--format", "json"]) == 1
    told = capsys.readouterr()
    assert json.loads(told.out)["candidates"] == []
    assert told.err == (
        "budget: these cannot be together: at most 2 converters behind each filter, there are 6 converters.\n"
    )


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--keep", "CVX"], 'there is no converter "CVX": name one of CV1, CV2'),
        (["--ban", "CV1,FLX"], 'there is no filter "FLX": name one of FL1, FL2'),
        (["--apart", "CV1"], "'CV1' is not a pair"),
        (["--together", "CV1,CV2,CV3"], "'CV1,CV2,CV3' is not a pair"),
        (["--most", "0"], "a number of converters from 1 on was expected"),
        (["--most", "FL1"], "a number of converters from 1 on was expected"),
        (["--most", "FL9,2"], 'there is no filter "FL9"'),
        (["--apart", "CV1,\x1b[31m"], 'there is no converter "?[31m"'),
    ],
)
def test_what_is_asked_wrongly_is_status_2(options: list[str], said: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["allocate", DEMO, *options]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert said in told.err
    assert "Traceback" not in told.err


@pytest.mark.parametrize("seconds", ["nan", "0", "-1", "inf", "soon"])
def test_a_time_that_is_none_is_refused(seconds: str, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as leaving:
        run(["allocate", DEMO, "--time", seconds])
    assert leaving.value.code == 2
    assert "invalid number of seconds value" in capsys.readouterr().err


def test_all_wishes_of_the_command_line_are_obeyed(capsys: pytest.CaptureFixture[str]) -> None:
    wishes = ["--keep", "CV1", "--apart", "CV2, CV3", "--together", "CV4,CV5", "--ban", "CV6,FL2", "--most", "4"]
    assert run(["allocate", DEMO, *wishes, "--most", "FL1,3", "--format", "json"]) == 0
    for one in json.loads(capsys.readouterr().out)["candidates"]:
        at = one["allocation"]
        assert at["CV1"] == "FL1"
        assert at["CV2"] != at["CV3"]
        assert at["CV4"] == at["CV5"]
        assert at["CV6"] == "FL1"
        assert list(at.values()).count("FL1") <= 3


def test_interrupted_it_stops_with_the_best_so_far(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """Ctrl+C while it searches: the handler that the command sets hears of it, and the old one is back afterwards."""
    before = signal.getsignal(signal.SIGINT)

    def interrupted(*given: Any, **more: Any) -> Any:
        signal.raise_signal(signal.SIGINT)
        return allocate(*given, **more)

    monkeypatch.setattr("budget.engine.allocate.allocate", interrupted)
    assert run(["allocate", DEMO]) in (0, 1)
    assert signal.getsignal(signal.SIGINT) is before
    told = capsys.readouterr()
    assert "stopped" in told.out or "none was found before the search ended" in told.err

    def twice(*_: Any, **__: Any) -> Any:
        signal.raise_signal(signal.SIGINT)
        signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr("budget.engine.allocate.allocate", twice)
    assert run(["allocate", DEMO]) == 130
    assert signal.getsignal(signal.SIGINT) is before


# --- words ----------------------------------------------------------------------------------------------------------


@given(st.floats(1e-12, 100.0))
def test_a_gap_is_never_told_smaller_than_it_is(gap: float) -> None:
    one = Candidate((("C0", "F0"),), 3, 0.1, None, 0)
    text = report.gap(replace(so_far("even", one, 0.2), gap=gap))
    told = float(text.removeprefix("none can be better by more than ").removesuffix(" % headroom"))
    assert gap * 100 * (1.0 - 1e-9) <= told <= gap * 100 * 1.11


def test_the_gap_in_filters_is_told_as_what_is_needed() -> None:
    one = Candidate((("C0", "F0"),), 3, 0.1, None, 0)
    assert report.gap(so_far("fewest", one, 1.0)) == "at least 1 filter is needed"
    assert report.gap(so_far("fewest", one, 3.0)) == "at least 3 filters are needed"


NAMES = [
    (("keep", "A"), "A stays"),
    (("apart", "A", "B"), "A and B apart"),
    (("together", "A", "B", "C"), "A and B and C together"),
    (("banned", "A", "F"), "A not behind F"),
    (("most", "", "3"), "at most 3 converters behind each filter"),
    (("most", "F", "1"), "at most 1 converter behind F"),
    (("no rating", "F"), "F has no rating"),
    (("rating zero", "F"), "F has no rating left"),
    (("not allocated", "A"), "A is behind no filter"),
    (("converters", "4"), "there are 4 converters"),
]


@pytest.mark.parametrize(("name", "words"), NAMES)
def test_every_constraint_has_its_words(name: tuple[str, ...], words: str) -> None:
    assert report.wish(name) == words


def test_constraints_come_from_their_names() -> None:
    names = [("keep", "A"), ("banned", "A", "F"), ("apart", "A", "B"), ("together", "B", "C"), ("most", "", "3")]
    found = constraints_of([*names, ("most", "F", "1")])
    assert found == Constraints(("A",), (("A", "B"),), (("B", "C"),), (("A", "F"),), (("", 3), ("F", 1)))
    assert constraints_of([]) == Constraints()
    for wrong in (("no rating", "F"), ("keep",), ("apart", "A"), ("most", "F")):
        with pytest.raises(ValueError, match="names no constraint"):
            constraints_of([wrong])
