"""Operating points: loads, losses, agreement with independent solvers, existence, invariants."""

from __future__ import annotations

import random
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import brentq, root

from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Load, Output, Project, Rules
from budget.engine.operating import Operating, allowed_current, derating, loads, operating_points, series_resistance
from tests.dc_trees import converter, solvable, table_filter, tree, trees


def one(part: Converter, load: Load | None = None, rules: Rules | None = None) -> Project:
    """A stiff 28 V bus with one converter ``C`` behind one filter ``F``."""
    case = Case("only", load=() if load is None else ((part.id, load),))
    return Project(Bus(28.0, 28.0, 28.0), (table_filter("F"),), (part,), (case,), rules or Rules())


# --- output and input power -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("load", "own", "expected"),
    [
        (None, None, 60.0 * 1.1),
        (Load("share", 0.5), None, 30.0 * 1.1),
        (Load("power", 12.0), None, 12.0 * 1.1),
        (Load("share", 0.5), 0.2, 30.0 * 1.2),
        (Load("power", 12.0), 0.0, 12.0),
        (Load("off"), 0.2, 0.0),
    ],
)
def test_output_power_follows_load_and_growth(load: Load | None, own: float | None, expected: float) -> None:
    p = one(converter("C", 60.0, "F", growth=own), load, Rules(growth=0.1))
    assert loads(p).output_power[0, 0] == pytest.approx(expected, rel=1e-15)


def test_a_negative_output_counts_with_its_magnitude() -> None:
    part = replace(converter("C", 0.0, "F"), output=(Output("a", 5.0, 2.0), Output("b", -12.0, 0.5)))
    assert loads(one(part)).output_power[0, 0] == 16.0


def test_switched_off_takes_the_off_power_and_does_not_run() -> None:
    o = operating_points(one(converter("C", 60.0, "F", idle_power=2.0, off_power=0.7), Load("off")))
    assert (o.output_power[0, 0], o.input_power[0, 0], o.loss[0, 0]) == (0.0, 0.7, 0.7)
    assert not o.running[0, 0]
    assert o.current[0, 0, 0] == pytest.approx(0.7 / 28.0, rel=1e-15)


TABLE = ((0.2, 0.80), (0.5, 0.90), (0.8, 0.88))  # of 100 W: losses 5, 5.555..., 10.909... W


@pytest.mark.parametrize(
    ("idle", "power", "expected", "beyond"),
    [
        (None, 0.0, 0.0, False),
        (None, 10.0, 2.5, False),  # the first point's efficiency holds below it
        (2.0, 0.0, 2.0, False),
        (2.0, 10.0, 3.5, False),  # halfway between (0, 2) and (20, 5)
        (2.0, 20.0, 5.0, False),
        (None, 35.0, 0.5 * (5.0 + 50.0 / 9.0), False),
        (None, 50.0, 50.0 / 9.0, False),
        (None, 80.0, 80.0 * 0.12 / 0.88, False),
        (None, 90.0, 90.0 * 0.12 / 0.88, True),  # the last point's efficiency holds above it
    ],
)
def test_loss_between_and_outside_the_points(idle: float | None, power: float, expected: float, beyond: bool) -> None:
    p = one(converter("C", 100.0, "F", efficiency=TABLE, idle_power=idle), Load("power", power))
    o = operating_points(p)
    assert o.loss[0, 0] == pytest.approx(expected, rel=1e-13, abs=1e-15)
    assert o.input_power[0, 0] == o.output_power[0, 0] + o.loss[0, 0]
    assert o.beyond_data[0, 0] == beyond


def test_shares_count_from_the_rated_power_not_the_derated() -> None:
    part = converter("C", 100.0, "F", efficiency=TABLE, derate_from=50.0, derate_to=100.0)
    p = one(part, Load("power", 20.0))
    hot = replace(p, bus=replace(p.bus, temperature=75.0))
    assert loads(hot).input_power[0, 0] == pytest.approx(25.0, rel=1e-15)


@settings(max_examples=50)
@given(st.lists(st.tuples(st.floats(0.01, 1.5), st.floats(0.3, 1.0)), min_size=1, max_size=30), st.floats(0.0, 200.0))
def test_loss_agrees_with_plain_interpolation(points: list[tuple[float, float]], power: float) -> None:
    points = sorted({round(share, 6): e for share, e in points}.items())
    p = one(converter("C", 100.0, "F", efficiency=tuple(points), idle_power=3.0), Load("power", power))
    x = [0.0] + [100.0 * s for s, _ in points]
    y = [3.0] + [100.0 * s * (1 / e - 1) for s, e in points]
    expected = power * (1 / points[-1][1] - 1) if power > x[-1] else float(np.interp(power, x, y))
    assert loads(p).input_power[0, 0] - power == pytest.approx(expected, rel=1e-9, abs=1e-9)


def test_idle_power_replaces_a_point_at_zero() -> None:
    part = converter("C", 100.0, "F", efficiency=((0.0, 0.5), (1.0, 0.9)), idle_power=2.0)
    assert loads(one(part, Load("power", 0.0))).input_power[0, 0] == 2.0


Table = dict[float, float]
tables = st.dictionaries(st.integers(1, 150).map(lambda k: k / 100), st.floats(0.3, 1.0), min_size=1, max_size=12)


@settings(max_examples=50)
@given(st.lists(st.tuples(tables, st.floats(0.0, 160.0), st.floats(0.0, 5.0)), min_size=2, max_size=6))
def test_tables_of_different_length_do_not_mix(rows: list[tuple[Table, float, float]]) -> None:
    parts = tuple(
        converter(f"C{k}", 100.0, "F", efficiency=tuple(sorted(table.items())), idle_power=idle)
        for k, (table, _, idle) in enumerate(rows)
    )
    case = Case("only", load=tuple((f"C{k}", Load("power", power)) for k, (_, power, _) in enumerate(rows)))
    together = loads(Project(Bus(28.0, 28.0, 28.0), (table_filter("F"),), parts, (case,)))
    for k, part in enumerate(parts):
        alone = loads(one(part, Load("power", rows[k][1])))
        assert together.input_power[0, k] == alone.input_power[0, 0]
        assert together.beyond_data[0, k] == alone.beyond_data[0, 0]


# --- derating and resistance ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("degrees", "expected"), [(-55.0, 1.0), (70.0, 1.0), (95.0, 0.5), (120.0, 0.0), (150.0, 0.0), (82.5, 0.75)]
)
def test_derating_is_a_ramp_to_zero(degrees: float, expected: float) -> None:
    assert derating(degrees, 70.0, 120.0) == pytest.approx(expected, abs=1e-15)
    assert derating(degrees, None, 120.0) == derating(degrees, 70.0, None) == 1.0


def test_derating_with_equal_ends_is_a_step() -> None:
    assert derating(84.9, 85.0, 85.0) == 1.0
    assert derating(85.0, 85.0, 85.0) == 0.0


def test_allowed_current() -> None:
    filters = (Filter("A", rated_current=8.0, derate_from=50.0, derate_to=150.0), Filter("B"))
    allowed = allowed_current(Project(Bus(28.0, 28.0, 28.0, temperature=75.0), filters))
    assert allowed[0] == 6.0
    assert np.isnan(allowed[1])


def test_series_resistance_sums_the_series_elements_only() -> None:
    ladder = (
        Branch("series", R=0.01, L=1e-6),
        Branch("shunt", R=3.0, C=1e-6),
        Branch("series", R=0.02, Rp=50.0, L=1e-6),
    )
    assert series_resistance(Filter("A", dm=ladder)) == pytest.approx(0.03, rel=1e-15)
    assert series_resistance(table_filter("B", 0.05)) == 0.05
    assert series_resistance(Filter("C")) == 0.0


# --- shapes and degenerate trees ------------------------------------------------------------------------------------


def test_shapes_without_filters_and_converters() -> None:
    o = operating_points(Project(Bus(22.0, 28.0, 32.0, resistance=0.1), cases=(Case("a"), Case("b"))))
    assert o.solved.all()
    assert o.bus_voltage.tolist() == [[22.0, 28.0, 32.0]] * 2
    assert o.bus_current.tolist() == [[0.0] * 3] * 2
    assert o.filter_current.shape == o.current.shape == (2, 3, 0)
    assert o.output_power.shape == (2, 0)


def test_converters_without_a_filter_draw_nothing() -> None:
    parts = (converter("A", 50.0), converter("B", 50.0, "gone"), converter("C", 28.0, "F"))
    p = Project(Bus(28.0, 28.0, 28.0), (table_filter("F"), table_filter("idle")), parts, (Case("only"),))
    o = operating_points(p)
    assert o.home.tolist() == [-1, -1, 0]
    assert o.current[0, 0].tolist() == [0.0, 0.0, 1.0]
    assert np.isnan(o.voltage[0, 0, :2]).all()
    assert o.output_power[0].tolist() == o.input_power[0].tolist() == [0.0, 0.0, 28.0]
    assert o.running[0].tolist() == [False, False, True]
    assert o.filter_current[0, 0].tolist() == [1.0, 0.0]
    assert o.filter_voltage[0, 0].tolist() == [28.0, 28.0]
    alone = operating_points(replace(p, converters=parts[:2]))
    assert alone.solved.all()
    assert not alone.bus_current.any()


def test_no_load_at_all() -> None:
    o = operating_points(tree(28.0, 0.1, [(0.2, [(0.0, 0.3), (0.0, 0.0)])]))
    assert o.solved.all()
    assert (o.voltage == 28.0).all()
    assert not o.current.any()


def test_a_missing_efficiency_is_named() -> None:
    with pytest.raises(ValueError, match='converter "C" has no efficiency'):
        operating_points(one(converter("C", 10.0, "F", efficiency=())))


# --- against independent solvers ------------------------------------------------------------------------------------


@settings(max_examples=60, deadline=None)
@given(st.floats(10.0, 300.0), st.floats(1e-3, 3.0), st.floats(0.01, 0.999), st.sampled_from(["bus", "filter", "lead"]))
def test_one_resistance_against_brentq(volts: float, ohms: float, share: float, place: str) -> None:
    power = share * volts**2 / (4.0 * ohms)
    r = {"bus": 0.0, "filter": 0.0, "lead": 0.0, place: ohms}
    o = operating_points(tree(volts, r["bus"], [(r["filter"], [(power, r["lead"])])]))
    expected = brentq(lambda v: v + ohms * power / v - volts, volts / 2.0, volts, xtol=1e-13, rtol=1e-13)
    assert o.voltage[0, 0, 0] == pytest.approx(expected, rel=1e-9)


def network_equations(x: NDArray[np.float64], p: Project, volts: float, powers: NDArray[np.float64]) -> list[float]:
    """Every node voltage is an unknown here: bus, filters, terminals."""
    f = len(p.filters)
    node, behind, terminal = x[0], x[1 : 1 + f], x[1 + f :]
    amps = powers / terminal
    home = [int(c.filter[1:]) for c in p.converters]
    rows = [node + p.bus.resistance * amps.sum() - volts]
    for k, part in enumerate(p.filters):
        mine = sum(a for a, h in zip(amps, home, strict=True) if h == k)
        rows.append(behind[k] + part.resistance * mine - node)
    return rows + [terminal[j] + c.lead.R * amps[j] - behind[home[j]] for j, c in enumerate(p.converters)]


@settings(max_examples=40, deadline=None)
@given(trees(stress=0.9))
def test_trees_against_a_general_root_finder(p: Project) -> None:
    o = operating_points(p)
    assert o.solved.all()
    f, n = len(p.filters), len(p.converters)
    for case in range(3):
        powers = o.input_power[case]
        for line, volts in enumerate(o.source_voltage):
            found = root(network_equations, np.full(1 + f + n, volts), args=(p, volts, powers), tol=1e-13)
            assert o.bus_voltage[case, line] == pytest.approx(found.x[0], rel=1e-9)
            assert o.filter_voltage[case, line] == pytest.approx(found.x[1 : 1 + f], rel=1e-9)
            assert o.voltage[case, line] == pytest.approx(found.x[1 + f :], rel=1e-9)


@pytest.mark.parametrize("seed", range(6))
def test_existence_just_below_and_above_the_limit(seed: int) -> None:
    rng = random.Random(seed)
    feed = rng.choice([0.0, 0.02, 0.3])
    branches = [
        (
            rng.choice([0.0, 0.05, 0.4]),
            [(rng.uniform(5, 50), rng.choice([0.0, 0.1, 0.5])) for _ in range(rng.randint(1, 3))],
        )
        for _ in range(rng.randint(1, 3))
    ]
    branches[0][1].append((20.0, 0.2))  # so that some limit exists

    def scaled(factor: float) -> list[tuple[float, list[tuple[float, float]]]]:
        return [(r, [(p * factor, lead) for p, lead in members]) for r, members in branches]

    low, high = 0.0, 1e4
    while high - low > 1e-9 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if solvable(28.0, feed, scaled(middle)) else (low, middle)
    assert operating_points(tree(28.0, feed, scaled(low * (1 - 1e-7)))).solved.all()
    assert not operating_points(tree(28.0, feed, scaled(low * (1 + 1e-7)))).solved.any()


@pytest.mark.parametrize(("feed", "filters", "lead"), [(1, 0, 0), (0, 1, 0), (0, 0, 1), (0.25, 0.5, 0.25)])
def test_the_exact_limit(feed: float, filters: float, lead: float) -> None:
    """12 V behind 1 ohm carries 36 W at most, wherever the ohm sits: 6 V, 6 A, a double root."""

    def at(power: float) -> Operating:
        return operating_points(tree(12.0, feed, [(filters, [(power, lead)])]))

    o = at(36.0)
    assert o.solved.all()
    assert o.voltage[0, 0, 0] == pytest.approx(6.0, rel=2e-7)
    assert o.bus_current[0, 0] == pytest.approx(6.0, rel=2e-7)
    assert at(36.0 * (1 - 1e-9)).solved.all()
    above = at(36.0 * (1 + 1e-9))
    assert not above.solved.any()
    assert np.isnan(above.bus_current).all()
    assert not at(36.0 * (1 + 1e-12)).solved.any()
    assert not at(1e6).solved.any()


@pytest.mark.parametrize("ohms", [0.1, 0.3, 0.7, 1.3])
def test_the_limit_of_a_lead_survives_rounding(ohms: float) -> None:
    assert operating_points(tree(28.0, 0.0, [(0.0, [(28.0**2 / (4 * ohms), ohms)])])).solved.all()


def test_filters_at_their_limit_do_not_disturb_each_other_on_a_stiff_bus() -> None:
    o = operating_points(tree(12.0, 0.0, [(1.0, [(36.0, 0.0)]), (1.0, [(35.9999999, 0.0)]), (0.5, [(20.0, 0.1)])]))
    alone = operating_points(tree(12.0, 0.0, [(0.5, [(20.0, 0.1)])]))
    assert o.solved.all()
    assert o.voltage[0, 0, 0] == pytest.approx(6.0, rel=2e-7)
    assert o.voltage[0, 0, 2] == pytest.approx(alone.voltage[0, 0, 0], rel=1e-14)


def test_low_line_may_fail_alone() -> None:
    o = operating_points(tree((11.0, 12.0, 13.0), 1.0, [(0.0, [(33.0, 0.0)])]))
    assert o.solved.tolist() == [[False, True, True]]
    assert np.isnan(o.current[0, 0, 0])
    assert np.isfinite(o.current[0, 1:, 0]).all()
    assert o.input_power[0, 0] == 33.0


# --- invariants -----------------------------------------------------------------------------------------------------


def taken(o: Operating) -> NDArray[np.float64]:
    """Everything the source power ends in, (C, 3) [W]."""
    fixed = (o.output_power + o.loss).sum(axis=1)[:, None]
    total: NDArray[np.float64] = fixed + o.lead_loss.sum(axis=2) + o.filter_loss.sum(axis=2) + o.bus_loss
    return total


@settings(max_examples=80, deadline=None)
@given(trees(stress=6.0))
def test_energy_balances_wherever_there_is_a_point(p: Project) -> None:
    o = operating_points(p)
    source = o.bus_current * o.source_voltage
    assert source[o.solved] == pytest.approx(taken(o)[o.solved], rel=1e-9, abs=1e-12)
    assert (np.isnan(o.bus_current) == ~o.solved).all()
    assert (o.bus_voltage[o.solved] > 0).all()


@settings(max_examples=60, deadline=None)
@given(trees(stress=0.8), st.data())
def test_more_load_draws_more_and_lowers_every_voltage(p: Project, data: st.DataObject) -> None:
    if not p.converters:
        return
    k = data.draw(st.integers(0, len(p.converters) - 1))
    heavier = replace(p.converters[k], output=(Output("out", 1.0, p.converters[k].output[0].current * 1.02 + 1e-3),))
    before = operating_points(p)
    after = operating_points(replace(p, converters=(*p.converters[:k], heavier, *p.converters[k + 1 :])))
    both = before.solved & after.solved
    assert (before.solved | ~after.solved).all()
    slack = 1 - 1e-9
    assert (after.bus_current[both] >= before.bus_current[both] * slack).all()
    assert (after.voltage[both] * slack <= before.voltage[both]).all()
    assert (after.filter_voltage[both] * slack <= before.filter_voltage[both]).all()
    assert (after.current[0, both[0], k] > before.current[0, both[0], k]).all()


@settings(max_examples=60, deadline=None)
@given(trees(stress=0.9), st.randoms(use_true_random=False))
def test_order_of_filters_and_converters_does_not_matter(p: Project, rng: random.Random) -> None:
    fs, cs = list(range(len(p.filters))), list(range(len(p.converters)))
    rng.shuffle(fs)
    rng.shuffle(cs)
    shuffled = replace(p, filters=tuple(p.filters[k] for k in fs), converters=tuple(p.converters[k] for k in cs))
    a, b = operating_points(p), operating_points(shuffled)
    assert b.bus_voltage == pytest.approx(a.bus_voltage, rel=1e-11)
    assert b.filter_current == pytest.approx(a.filter_current[:, :, fs], rel=1e-11, abs=1e-12)
    assert b.voltage == pytest.approx(a.voltage[:, :, cs], rel=1e-11)
    assert b.current == pytest.approx(a.current[:, :, cs], rel=1e-11, abs=1e-12)


@settings(max_examples=60, deadline=None)
@given(trees(stress=3.0))
def test_a_case_alone_gives_the_same_bits(p: Project) -> None:
    together = operating_points(p)
    for k, case in enumerate(p.cases):
        alone = operating_points(replace(p, cases=(case,)))
        for name in ("solved", "bus_voltage", "bus_current", "filter_voltage", "filter_current", "voltage", "current"):
            a, b = getattr(together, name)[k], getattr(alone, name)[0]
            assert np.array_equal(a, b, equal_nan=a.dtype != np.bool_), name


def test_a_large_bus_is_solved_to_rounding() -> None:
    members = [(20.0 + 0.1 * k, 0.01 + 1e-4 * k) for k in range(25)]
    p = tree((20.0, 28.0, 33.0), 1e-4, [(2e-3 + 1e-5 * k, members) for k in range(40)])
    o = operating_points(p)
    assert o.solved.all()
    source = o.bus_current * o.source_voltage
    assert source == pytest.approx(taken(o), rel=1e-12)
    lead = np.array([c.lead.R for c in p.converters])
    home = o.filter_voltage[:, :, o.home]
    assert home - lead * o.current == pytest.approx(o.voltage, rel=1e-13)


def test_leads_are_read_from_the_converter() -> None:
    part = replace(converter("C", 20.0, "F"), lead=Lead(R=1.0, L=1e-6))
    o = operating_points(replace(one(part), bus=Bus(12.0, 12.0, 12.0)))
    assert o.voltage[0, 0, 0] == pytest.approx(10.0, rel=1e-14)
    assert o.lead_loss[0, 0, 0] == pytest.approx(4.0, rel=1e-13)
