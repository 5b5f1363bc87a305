"""Stability against published criteria and limits that can be derived by hand."""

from __future__ import annotations

import numpy as np
import pytest

from budget.engine.loop import open_loop, spectra
from budget.engine.model import Branch, Bus, Case, Converter, Filter, Ladder, Output, Project
from budget.engine.operating import operating_points
from budget.engine.stability import Stability, stability
from budget.engine.statespace import state_space


def series(L: float, R: float = 0.0) -> Branch:  # noqa: N803
    return Branch("series", R=R, L=L)


def shunt(C: float, R: float = 0.0) -> Branch:  # noqa: N803
    return Branch("shunt", R=R, C=C)


def behind(ladder: Ladder, volts: float, watts: float, bandwidth: float | None = None) -> Project:
    part = Converter("A", watts, (Output("o", 1.0, watts),), ((1.0, 1.0),), filter="F", control_bandwidth=bandwidth)
    return Project(Bus(volts, volts, volts), (Filter("F", dm=ladder),), (part,), (Case("full"),))


def found(ladder: Ladder, volts: float, watts: float, bandwidth: float | None = None) -> Stability:
    project = behind(ladder, volts, watts, bandwidth)
    return stability(project, operating_points(project))


RLC = (series(10e-6, 0.05), shunt(220e-6))


def poles(project: Project) -> np.ndarray:
    network = state_space(project)
    o = operating_points(project)
    g = (o.current / o.voltage)[0, :1]
    return spectra(open_loop(project, network), g)[0][1]


# Derived: series R-L, shunt C and an ideal constant-power load of conductance -P/V^2 at its own operating voltage are
# stable while P < R C V^2/L and P < V^2/R. With the drop of V itself the limit is a Vs^2/(1 + a R)^2, a = R C/L.
LIMIT = 774.825363


def test_limit_of_a_constant_power_load() -> None:
    a = 0.05 * 220e-6 / 10e-6
    assert a * 28.0**2 / (1.0 + a * 0.05) ** 2 == pytest.approx(LIMIT, rel=1e-8)
    assert found(RLC, 28.0, LIMIT * (1.0 - 1e-6)).stable.all()
    assert not found(RLC, 28.0, LIMIT * (1.0 + 1e-6)).stable.any()
    assert found(RLC, 28.0, LIMIT).margin_db[0, 0] == pytest.approx(0.0, abs=1e-7)


def test_poles_and_margins_of_a_constant_power_load() -> None:
    """Derived: roots of the second-order system at 150, 500 and 900 W."""
    stable, near, over = (found(RLC, 28.0, p) for p in (150.0, 500.0, 900.0))
    assert sorted(poles(behind(RLC, 28.0, 150.0)).imag) == pytest.approx([-21115.92, 21115.92], abs=0.01)
    assert poles(behind(RLC, 28.0, 150.0)).real == pytest.approx([-2056.643] * 2, abs=1e-3)
    assert poles(behind(RLC, 28.0, 900.0)).real == pytest.approx([459.838] * 2, abs=1e-3)
    assert stable.margin_db[0, 0] == pytest.approx(15.02, abs=0.005)
    assert near.margin_db[0, 0] == pytest.approx(4.15, abs=0.005)
    assert not over.stable.any()
    assert over.margin_db[0, 0] < 0.0
    assert stable.frequency[0, 0] == pytest.approx(abs(-2056.643 + 21115.92j) / 2 / np.pi, rel=1e-6)
    assert stable.peak[0] == pytest.approx(0.93377, abs=1e-5)


def test_margin_of_an_ideal_load_is_where_its_resistance_cancels_the_tank() -> None:
    """Derived: at the boundary k P/V^2 = R C/L."""
    one = found(RLC, 28.0, 150.0)
    o = operating_points(behind(RLC, 28.0, 150.0))
    k = 0.05 * 220e-6 / 10e-6 / float(o.current[0, 0, 0] / o.voltage[0, 0, 0])
    assert one.margin_db[0, 0] == pytest.approx(20.0 * np.log10(k), abs=1e-8)


# Derived: L, C and a damping branch Rf-Cb with an ideal constant-power load of resistance -r, by Routh's criterion:
# a3 = L C Rf Cb, a2 = L (C + Cb) - L G Rf Cb, a1 = Rf Cb - L G, a0 = 1; a1, a2 > 0 and a1 a2 > a3 a0. Some Rf will do
# if and only if r > R0/(sqrt(1 + n) - 1), n = Cb/C. For 31 uH, 47 uF, 29 uF and r = 3.4844 ohm that is 1.006 to 2.785.
@pytest.mark.parametrize(
    ("rf", "stable"), [(1.000, False), (1.012, True), (1.8956, True), (2.780, True), (2.790, False)]
)
def test_interval_of_damping_resistances(rf: float, stable: bool) -> None:
    ladder = (series(31e-6), shunt(47e-6), shunt(29e-6, rf))
    assert bool(found(ladder, 28.0, 28.0**2 / 3.4844).stable[0, 0]) is stable


@pytest.mark.parametrize("n", [0.5, 1.0, 2.5, 4.0])
def test_least_resistance_that_damping_can_bear(n: float) -> None:
    ind, cap = 31e-6, 47e-6
    least = np.sqrt(ind / cap) / (np.sqrt(1.0 + n) - 1.0)
    for factor, stable in ((1.001, True), (0.999, False)):
        g = 1.0 / (least * factor)
        rf = (n * cap + ind * g * g) / (2.0 * g * n * cap)  # the middle of the interval
        ladder = (series(ind), shunt(cap), shunt(n * cap, rf))
        assert bool(found(ladder, 28.0, 28.0**2 * g).stable[0, 0]) is stable


# M. H. Jusoh, "The instability effect of constant power loads", PECon 2004: 270 V, 150 uH, 300 uF, R-C damper of up to
# ten times the capacitance. 243 kW is unstable for every damping resistor, 122 kW can be stabilised. The paper's damper
# was not seen; derived: Cb/C must exceed 10.27 and 3.75, so 2 mF stands for it.
def test_jusoh_2004() -> None:
    resistances = np.geomspace(0.01, 100.0, 60)

    def any_stable(watts: float) -> bool:
        ladders = [(series(150e-6), shunt(300e-6), shunt(2e-3, float(r))) for r in resistances]
        return any(found(ladder, 270.0, watts).stable[0, 0] for ladder in ladders)

    assert not any_stable(243e3)
    assert any_stable(122e3)


def test_thirty_volt_filter_with_optimum_damping() -> None:
    """Erickson & Maksimovic, 3rd ed., 17.4: 330 uH, 470 uF damped by 1200 uF and 0.67 ohm, peak about 1 ohm.

    Beside 12 ohm of the example's converter (75 W, duty 0.5): 1/12. Derived: the peak is 0.99055 ohm, the slowest decay
    of the whole -589.05 1/s.
    """
    ladder = (series(330e-6), shunt(470e-6), shunt(1200e-6, 0.67))
    one = found(ladder, 30.0, 75.0)
    assert one.peak[0] == pytest.approx(0.99055, abs=2e-5)
    assert one.impedance_db[0, 0, 0] == pytest.approx(20.0 * np.log10(12.0 / 0.99055), abs=2e-4)
    assert poles(behind(ladder, 30.0, 75.0)).real.max() == pytest.approx(-589.05, abs=0.01)


def test_a_distance_from_minus_one_says_nothing_alone() -> None:
    """Derived: with |Zo/Zi| far above one at resonance 1 + Tm never comes near zero, and the loop is unstable."""
    ladder = (series(10e-6, 0.001), shunt(10e-6))
    one = found(ladder, 28.0, 500.0)
    f = np.geomspace(10.0, 1e6, 40_000)
    s = 2j * np.pi * f
    z = 1.0 / (s * 10e-6 + 1.0 / (0.001 + s * 10e-6))
    o = operating_points(behind(ladder, 28.0, 500.0))
    distance = np.abs(1.0 - z * float(o.current[0, 0, 0] / o.voltage[0, 0, 0])).min()
    assert distance > 0.7
    assert not one.stable[0, 0]
    assert one.margin_db[0, 0] < -20.0


@pytest.mark.parametrize("bandwidth", [1e3, 2e4])
def test_control_pole_by_routh(bandwidth: float) -> None:
    """Derived: R-L, C and a load -g/(1 + s tau): a third-order system, its limit of g by Routh's criterion."""
    r, ind, cap, tau = 0.05, 10e-6, 220e-6, 1.0 / (2.0 * np.pi * bandwidth)

    # (s L + R) (s C (1 + s tau) - g) + 1 + s tau = 0
    def routh(g: float) -> float:
        a3, a2 = ind * cap * tau, ind * cap + r * cap * tau
        a1, a0 = r * cap - ind * g + tau, 1.0 - r * g
        return min(a2 * a1 - a3 * a0, a0)

    project = behind(RLC, 28.0, 150.0, bandwidth)
    o = operating_points(project)
    g = float(o.current[0, 0, 0] / o.voltage[0, 0, 0])
    k = 10.0 ** (float(stability(project, o).margin_db[0, 0]) / 20.0)
    assert routh(g * k) == pytest.approx(0.0, abs=1e-7 * (routh(0.0)))
    assert routh(g * k * (1.0 - 1e-5)) > 0.0
