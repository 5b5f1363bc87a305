"""Constant-power loads, conversion loss and derating against published values."""

from __future__ import annotations

import numpy as np
import pytest

from budget.engine.model import Bus, Case, Load, Project, Rules
from budget.engine.operating import derating, operating_points
from tests.dc_trees import converter, table_filter, tree

# Erickson & Maksimovic, Fundamentals of Power Electronics, 3rd ed., 17.2.2 (eq. 17.15): a regulated converter draws
# constant power, v i = P. With a source V behind R that is v^2 - V v + R P = 0; its upper root. The limit V^2/(4 R)
# at V/2 is the maximum power transfer theorem. Numbers of the table: derived from it, exact in the first two rows.
QUADRATIC = [
    (12.0, 1.0, 20.0, 10.0, 2.0),
    (270.0, 0.5, 10e3, 250.0, 40.0),
    (28.0, 0.05, 500.0, 27.0766968, 18.4660634),
    (28.0, 0.1, 1000.0, 23.7979590, 42.0204103),
]


@pytest.mark.parametrize(("volts", "ohms", "watts", "voltage", "current"), QUADRATIC)
@pytest.mark.parametrize("place", range(3))
def test_constant_power_behind_a_resistance(
    volts: float, ohms: float, watts: float, voltage: float, current: float, place: int
) -> None:
    feed, filters, lead = (ohms if place == k else 0.0 for k in range(3))
    o = operating_points(tree(volts, feed, [(filters, [(watts, lead)])]))
    assert o.voltage[0, 0, 0] == pytest.approx(voltage, abs=6e-8)
    assert o.current[0, 0, 0] == pytest.approx(current, abs=6e-8)


@pytest.mark.parametrize(("volts", "ohms", "most"), [(12.0, 1.0, 36.0), (270.0, 0.5, 36450.0)])
def test_maximum_power_transfer(volts: float, ohms: float, most: float) -> None:
    """Maximum power transfer theorem: V^2/(4 R), reached at half the source voltage."""
    at = operating_points(tree(volts, ohms, [(0.0, [(most, 0.0)])]))
    assert at.solved.all()
    assert at.voltage[0, 0, 0] == pytest.approx(volts / 2, rel=2e-7)
    assert not operating_points(tree(volts, ohms, [(0.0, [(most * (1 + 1e-9), 0.0)])])).solved.any()


def test_incremental_resistance_is_negative() -> None:
    """Erickson & Maksimovic 3rd ed., eq. 17.16: the input resistance of a constant-power load is -v/i."""
    a = operating_points(tree(28.0, 0.0, [(0.0, [(100.0, 0.0)])]))
    b = operating_points(tree(28.0001, 0.0, [(0.0, [(100.0, 0.0)])]))
    slope = (b.voltage - a.voltage) / (b.current - a.current)
    assert slope[0, 0, 0] == pytest.approx(-a.voltage[0, 0, 0] / a.current[0, 0, 0], rel=1e-5)


def test_powers_on_one_node_add() -> None:
    """Derived: several constant-power loads on one node are one load of their total power."""
    o = operating_points(tree(12.0, 1.0, [(0.0, [(11.0, 0.0), (9.0, 0.0)])]))
    assert o.voltage[0, 0] == pytest.approx([10.0, 10.0], rel=1e-14)


def test_two_filters_on_one_bus() -> None:
    """Derived: the node equations solved to 15 digits by an independent backward-forward sweep."""
    branches = [(0.05, [(60.0, 0.0), (45.0, 0.0), (30.0, 0.0)]), (0.03, [(120.0, 0.0), (25.0, 0.0)])]
    o = operating_points(tree(28.0, 0.02, branches))
    assert o.bus_voltage[0, 0] == pytest.approx(27.797082266610, rel=1e-13)
    assert o.bus_current[0, 0] == pytest.approx(10.145886669499, rel=1e-12)
    assert o.filter_voltage[0, 0] == pytest.approx([27.552091793634, 27.639699950311], rel=1e-13)
    source = 28.0 * o.bus_current[0, 0]
    heat = o.bus_loss[0, 0] + o.filter_loss[0, 0].sum()
    assert source == pytest.approx(284.084826746, abs=6e-10)
    assert heat == pytest.approx(4.084826746, abs=6e-10)
    assert source == pytest.approx(280.0 + heat, rel=1e-13)


# pvlib python (BSD-3), unit test of transformer.simple_efficiency: loss = no_load rating + load_loss output^2 / rating;
# with 0.002, 0.007 and 2.75 MW the output for these inputs. (Its first value, a reverse flow, has no counterpart here.)
RATING, NO_LOAD, LOAD = 2.75e6, 0.002, 0.007
PUBLISHED = [
    (436016.609823837, 430045.854892526),
    (1511820.16603752, 1500588.39919874),
    (1580687.44677249, 1568921.77089526),
    (1616441.79660171, 1604389.62839879),
]


def conversion(
    efficiency: tuple[tuple[float, float], ...], idle: float, rating: float, outputs: list[float]
) -> list[float]:
    """Input power [W] of one converter at each output power [W]."""
    part = converter("C", rating, "F", efficiency=efficiency, idle_power=idle)
    cases = tuple(Case(f"{k}", load=(("C", Load("power", x)),)) for k, x in enumerate(outputs))
    p = Project(Bus(1e4, 1e4, 1e4), (table_filter("F"),), (part,), cases, Rules())
    watts: list[float] = operating_points(p).input_power[:, 0].tolist()
    return watts


def quadratic_loss_table(
    shares: list[float], rating: float, no_load: float, load: float
) -> tuple[tuple[float, float], ...]:
    """Efficiency at each share of the rating from the published loss polynomial."""
    return tuple((s, s / (s + no_load + load * s * s)) for s in shares)


def test_loss_at_published_points() -> None:
    """With the loss polynomial at the published outputs the published inputs follow to all digits printed."""
    outputs = [out for _, out in PUBLISHED]
    table = quadratic_loss_table([x / RATING for x in outputs], RATING, NO_LOAD, LOAD)
    found = conversion(table, NO_LOAD * RATING, RATING, outputs)
    assert found == pytest.approx([taken for taken, _ in PUBLISHED], rel=1e-13)


def test_loss_between_the_points_of_a_dense_table() -> None:
    """In steps of 1 %: a chord lies above the parabola k P^2, by at most k h^2 / 4, in the middle of a step."""
    step = 0.01
    table = quadratic_loss_table([step * k for k in range(1, 101)], RATING, NO_LOAD, LOAD)
    found = np.array(conversion(table, NO_LOAD * RATING, RATING, [out for _, out in PUBLISHED]))
    excess = found - np.array([taken for taken, _ in PUBLISHED])
    bound = LOAD / RATING * (step * RATING) ** 2 / 4.0
    assert (excess >= -1e-6).all()
    assert (excess <= bound + 1e-6).all()


def test_loss_at_no_load_and_full_load() -> None:
    """pvlib python, same unit test: 0.005, 0.01 and 1000 W; input 5 W gives 0 W, 1015 W gives 1000 W."""
    table = quadratic_loss_table([0.25, 0.5, 0.75, 1.0], 1000.0, 0.005, 0.01)
    assert conversion(table, 5.0, 1000.0, [0.0, 1000.0]) == pytest.approx([5.0, 1015.0], rel=1e-14)


@pytest.mark.parametrize(
    ("flat", "start", "share", "hot"),
    [
        # EEE-INST-002 (NASA, May 2003), wet slug tantalum capacitor voltage: 0.60 at 70 degC, linear to 0.40 at 110.
        (0.60, 70.0, 0.40, 110.0),
        # ECSS-Q-ST-30-11C Rev.2 (June 2021), Table 6-17, fuses: 65 % up to 85 degC, linear to 50 % at 110.
        (0.65, 85.0, 0.50, 110.0),
    ],
)
def test_published_linear_derating(flat: float, start: float, share: float, hot: float) -> None:
    """The published line, extended to where it meets zero, is this program's ramp times the flat factor."""
    end = start + flat * (hot - start) / (flat - share)
    assert flat * derating(start - 20.0, start, end) == flat
    assert flat * derating(start, start, end) == flat
    assert flat * derating(hot, start, end) == pytest.approx(share, rel=1e-14)
    middle = 0.5 * (start + hot)
    assert flat * derating(middle, start, end) == pytest.approx(0.5 * (flat + share), rel=1e-14)
