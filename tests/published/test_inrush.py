"""Switch-on against published circuits, invariants and an independent integration."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from scipy.integrate import quad, solve_ivp

from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Output, Project, Rules
from budget.engine.transient import FilterRun, Run, inrush
from tests.dense_network import Reference
from tests.transient_projects import random_project


def circuit(
    volts: float, ohms: float, henry: float, farad: float, window: float, saturation: float | None = None
) -> Run:
    """A series R-L-C, its R half in the feed and half in the filter, switched on at once."""
    choke = Branch("series", R=0.5 * ohms, L=henry, saturation=saturation)
    part = Filter("F", dm=(choke, Branch("shunt", C=farad)))
    bus = Bus(volts, volts, volts, resistance=0.5 * ohms)
    project = Project(bus, (part,), (), (Case("full"),), Rules(inrush_window=window))
    return inrush(project, only=[(0, "on-high")]).runs[0]


def only_filter(run: Run) -> FilterRun:
    (part,) = run.filters
    return part


# Nilsson & Riedel, Electric Circuits, 8.4 (step response of a series RLC circuit): circuit data of Example 8.12 of the
# 12th edition (overdamped: v = 48 - 64 e^-2500t + 16 e^-10000t) and of an earlier edition (280 ohm: v = 48 - 48
# e^-1400t cos 4800t - 14 e^-1400t sin 4800t), the latter from memory. First row: an open teaching lesson, i = (1/3)
# e^-100t sin 300t, printed .209 A. The others derived from the same formulas. Peak voltage None: no overshoot.
SERIES = [
    (10.0, 20.0, 0.1, 100e-6, 0.2, 0.208537, 13.5092, 2.5e-4),
    (48.0, 1250.0, 0.1, 0.4e-6, 10e-3, 30.2381e-3, None, 3.6864e-7),
    (48.0, 280.0, 0.1, 0.4e-6, 20e-3, 65.955e-3, 67.200, 1.645714e-6),
    (28.0, 0.1, 10e-6, 220e-6, 5e-3, 95.1907, 41.122, 0.8624),
    (28.0, 0.1, 1e-6, 1000e-6, 5e-3, 233.724, None, 3.92),
    (270.0, 0.5, 50e-6, 100e-6, 5e-3, 241.743, 352.353, 7.29),
]


@pytest.mark.parametrize(("volts", "ohms", "henry", "farad", "window", "peak", "top", "i2t"), SERIES)
def test_series_circuit(
    volts: float, ohms: float, henry: float, farad: float, window: float, peak: float, top: float | None, i2t: float
) -> None:
    run = circuit(volts, ohms, henry, farad, window)
    assert run.bus_peak == pytest.approx(peak, rel=2e-5)
    assert only_filter(run).peak == pytest.approx(peak, rel=2e-5)
    assert only_filter(run).peak_voltage == pytest.approx(top if top else volts, rel=2e-5)
    assert run.bus_i2t == pytest.approx(i2t, rel=2e-5)


def test_waveform_of_the_overdamped_circuit() -> None:
    """Nilsson & Riedel, Example 8.12: v(t) = 48 - 64 e^-2500t + 16 e^-10000t at every point of the waveform."""
    run = circuit(48.0, 1250.0, 0.1, 0.4e-6, 10e-3)
    assert run.wave is not None
    for t, v in zip(run.wave.time.tolist(), run.wave.outputs[:, 0].tolist(), strict=True):
        assert v == pytest.approx(48.0 - 64.0 * math.exp(-2500.0 * t) + 16.0 * math.exp(-10000.0 * t), abs=1e-9)


def test_critical_damping() -> None:
    """Nilsson & Riedel, 8.4 (critically damped response): i = (V/L) t e^(-R t/2 L), greatest 2 V/(e R) at 2 L/R.

    The network then has no basis of modes.
    """
    run = circuit(48.0, 1000.0, 0.1, 0.4e-6, 10e-3)
    assert run.bus_peak == pytest.approx(2.0 * 48.0 / (math.e * 1000.0), rel=1e-5)
    assert run.bus_i2t == pytest.approx(0.4e-6 * 48.0**2 / 2000.0, rel=1e-5)


@pytest.mark.parametrize("zeta", [0.05, 0.234521, 0.7])
def test_overshoot(zeta: float) -> None:
    """Overshoot exp(-pi zeta/sqrt(1 - zeta^2)), standard second-order response; peak current V sqrt(C/L) exp(-zeta
    acos(zeta)/sqrt(1 - zeta^2)), derived from it."""
    volts, henry, farad = 28.0, 10e-6, 220e-6
    run = circuit(volts, 2.0 * zeta * math.sqrt(henry / farad), henry, farad, 20e-3)
    root = math.sqrt(1.0 - zeta * zeta)
    assert only_filter(run).peak_voltage == pytest.approx(volts * (1 + math.exp(-math.pi * zeta / root)), rel=1e-5)
    assert run.bus_peak == pytest.approx(
        volts * math.sqrt(farad / henry) * math.exp(-zeta * math.acos(zeta) / root), rel=1e-5
    )


@pytest.mark.parametrize("henry", [1e-12, 1e-7, 1e-5, 1e-4])
@pytest.mark.parametrize("saturation", [None, 100.0, 40.0, 5.0])
def test_i2t_to_full_charge_is_that_of_the_capacitor(henry: float, saturation: float | None) -> None:
    """Derived: a capacitor charged from a stiff source leaves C V^2/2 in the resistance, whatever the inductor does."""
    run = circuit(28.0, 0.1, henry, 220e-6, 40e-3, saturation)
    assert run.bus_i2t == pytest.approx(220e-6 * 28.0**2 / 0.2, rel=5e-5)


@pytest.mark.parametrize("saturation", [100.0, 60.0, 40.0, 10.0])
def test_saturating_choke(saturation: float) -> None:
    """Independent: di/dt = (V - R i - v)/L(i) integrated by scipy, L(i) as the field ``saturation`` is defined."""

    def rhs(t: float, x: list[float]) -> tuple[float, float]:
        ind = 10e-6 * max(1.0 / (1.0 + 3.0 / 7.0 * (x[0] / saturation) ** 2), 0.05)
        return (28.0 - 0.1 * x[0] - x[1]) / ind, x[0] / 220e-6

    found = solve_ivp(rhs, (0.0, 3e-4), (0.0, 0.0), method="DOP853", rtol=1e-9, atol=1e-9, max_step=4e-7)
    run = circuit(28.0, 0.1, 10e-6, 220e-6, 3e-4, saturation)
    assert run.bus_peak == pytest.approx(found.y[0].max(), rel=2e-4)
    assert only_filter(run).peak_voltage == pytest.approx(found.y[1].max(), rel=2e-4)
    assert run.bus_peak is not None
    assert run.bus_peak > 95.1907  # without saturation


def test_slow_rise_charges_at_constant_current() -> None:
    """Common practice (soft charging, I = C dV/dt): 1000 uF to 28 V in 10 ms takes 2.8 A, and i2t 50 times less."""
    part = Filter("F", dm=(Branch("shunt", C=1000e-6),))
    bus = Bus(28.0, 28.0, 28.0, resistance=0.1, rise=10e-3)
    run = inrush(Project(bus, (part,), (), (Case("full"),), Rules(inrush_window=12e-3))).runs[0]
    assert run.bus_peak == pytest.approx(2.8, rel=1e-6)
    ramp, tau = 2.8**2, 0.1 * 1000e-6
    charging = quad(lambda t: ramp * (1 - math.exp(-t / tau)) ** 2, 0.0, 10e-3)[0]
    after = ramp * tau / 2.0 * (1.0 - math.exp(-2 * 2e-3 / tau))
    assert run.bus_i2t == pytest.approx(charging + after, rel=1e-5)


def test_two_equal_sections_without_loss_pass_twice_the_source() -> None:
    """Derived: in a lossless ladder of two equal sections the far capacitor exceeds 2 V; its modes are at 0.618 and
    1.618 of 1/sqrt(L C), with shares 1.1708 and 0.1708 of the source, so that it cannot pass 2.3416 V per volt."""
    rungs = (Branch("series", L=10e-6), Branch("shunt", C=100e-6)) * 2
    project = Project(Bus(1.0, 1.0, 1.0), (Filter("F", dm=rungs),), (), (Case("full"),), Rules(inrush_window=3e-3))
    top = only_filter(inrush(project, only=[(0, "on-high")]).runs[0]).peak_voltage
    assert top is not None
    unit = math.sqrt(10e-6 * 100e-6)
    slow, fast = (math.sqrt(5) - 1) / 2, (math.sqrt(5) + 1) / 2
    expected = max(
        1.0 - 1.170820393 * math.cos(slow * k * 1e-7 / unit) + 0.170820393 * math.cos(fast * k * 1e-7 / unit)
        for k in range(30001)
    )
    assert top == pytest.approx(expected, rel=1e-5)
    assert 2.2 < top < 2.3417


@pytest.mark.parametrize(
    ("seed", "event"), [(1, "on-low"), (10, "on-high"), (16, "surge"), (19, "surge"), (30, "on-low"), (36, "on-high")]
)
def test_against_a_stiff_integrator(seed: int, event: str) -> None:
    """Independent: nodal equations integrated by scipy's Radau, thresholds as its events; converters start and trip."""
    project = random_project(seed)
    project = replace(project, rules=Rules(inrush_window=2e-3), bus=replace(project.bus, surge_time=0.5e-3))
    run = inrush(project, only=[(0, event)]).runs[0]
    found = Reference(project).run(0, event, rtol=1e-6)
    assert run.bus_peak == pytest.approx(found["bus_peak"], rel=2e-4)
    assert run.bus_i2t == pytest.approx(found["bus_i2t"], rel=2e-4)
    assert [f.peak for f in run.filters] == pytest.approx(found["filter_peak"].tolist(), rel=2e-4)
    assert [f.i2t for f in run.filters] == pytest.approx(found["filter_i2t"].tolist(), rel=2e-4)
    assert [f.peak_voltage for f in run.filters] == pytest.approx(found["output_peak"].tolist(), rel=2e-4)
    assert [c.peak_voltage for c in run.converters] == pytest.approx(found["terminal_peak"].tolist(), rel=2e-4)
    for part, start in zip(run.converters, found["runs_at"], strict=True):
        assert part.runs_at is None if start is None else part.runs_at == pytest.approx(start, rel=2e-4)


def test_a_system_that_is_unstable_is_followed_although_it_starts_at_rest() -> None:
    """A constant power P on L and C oscillates where P/(C v^2) > R/L (Middlebrook's condition; here derived).

    Steps long enough to make the mode die away in the numbers would leave it at rest.
    """
    for ohms, grows in ((0.01, True), (0.2, False)):
        dm = (Branch("series", L=1e-6, R=0.01), Branch("shunt", C=300e-6))
        load = Converter(
            "C",
            100.0,
            (Output("o", 10.0, 10.0),),
            ((1.0, 1.0),),
            filter="F",
            turn_on=20.0,
            turn_off=18.0,
            soft_start=1e-3,
            lead=Lead(R=ohms, L=1e-6),
            input=(Branch("shunt", C=3e-6),),
        )
        bus = Bus(28.0, 28.0, 28.0, resistance=0.02, rise=1e-3)
        run = inrush(
            Project(bus, (Filter("F", dm=dm),), (load,), (Case("full"),), Rules(inrush_window=3e-3)), limit=3000
        )
        top = run.runs[0].converters[0].peak_voltage
        assert top is not None
        assert (top > 31.0) == grows
