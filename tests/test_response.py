"""Insertion loss, output impedance and peaks of one ladder."""

from __future__ import annotations

import warnings
from functools import reduce
from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from budget.engine.model import Branch, Ladder
from budget.engine.response import Feed, insertion_loss, output_impedance, peaks, refine, setup_loss

F = np.geomspace(1e3, 1e8, 26)
W = 2 * np.pi * F


def logs(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(np.log10(low), np.log10(high)).map(lambda x: float(10.0**x))


SERIES = st.builds(
    Branch,
    st.just("series"),
    R=logs(1e-3, 1.0),
    L=logs(1e-8, 1e-2),
    Rp=st.none() | logs(10.0, 1e5),
    Cp=st.none() | logs(1e-12, 1e-9),
)
SHUNT = st.builds(Branch, st.just("shunt"), R=logs(1e-3, 10.0), L=st.just(0.0) | logs(1e-10, 1e-7), C=logs(1e-10, 1e-3))
LADDERS = st.lists(SERIES | SHUNT, max_size=8).map(tuple)


def reversed_ladder(ladder: Ladder) -> Ladder:
    return ladder[::-1]


def impedance(part: Branch, w: float) -> complex:
    """Of one element by its definition, all of it again on purpose."""
    s = 1j * w
    z = complex(part.R)
    if part.L:
        y = 1 / (s * part.L)
        y += 1 / part.Rp if part.Rp else 0.0
        y += s * part.Cp if part.Cp else 0.0
        z += 1 / y
    return z + (1 / (s * part.C) if part.C else 0.0)


def nodal(ladder: Ladder, w: float, bus: complex, converter: complex) -> np.ndarray:
    """Matrix of the node equations: 1/``bus`` at node 0, the admittance ``converter`` at the last node."""
    count = 1 + sum(part.place == "series" for part in ladder)
    y = np.zeros((count, count), dtype=complex)
    y[0, 0] += 1 / bus
    y[-1, -1] += converter
    at = 0
    for part in ladder:
        g = 1 / impedance(part, w)
        if part.place == "shunt":
            y[at, at] += g
        else:
            y[at : at + 2, at : at + 2] += [[g, -g], [-g, g]]
            at += 1
    return y


def solved(ladder: Ladder, w: float, bus: complex, converter: complex, into: int, read: int) -> complex:
    """Voltage at one end for 1 A into one end."""
    y = nodal(ladder, w, bus, converter)
    drive = np.zeros(len(y))
    drive[into] = 1.0
    return complex(np.linalg.solve(y, drive)[read])


@given(LADDERS, st.integers(0, len(F) - 1), logs(1.0, 1e3), logs(1.0, 1e3))
def test_insertion_loss_against_node_equations(ladder: Ladder, k: int, source: float, load: float) -> None:
    found = insertion_loss(ladder, F[k : k + 1], source, load)[0]
    for into, read in ((0, -1), (-1, 0)):
        within = solved(ladder, W[k], source, 1 / load, into, read)
        without = solved((), W[k], source, 1 / load, into, read)
        assert found == pytest.approx(20 * np.log10(abs(without) / abs(within)), abs=1e-3)


@given(LADDERS, st.integers(0, len(F) - 1), logs(1e-2, 1e2), logs(1e-6, 1.0), logs(1e-10, 1e-6))
def test_setup_loss_against_node_equations(ladder: Ladder, k: int, r: float, g: float, c: float) -> None:
    """A noise current at the converter side; the line is inductive, the converter capacitive."""
    line, behind = r + 1j * W[k] * 50e-6, g + 1j * W[k] * c
    found = setup_loss(ladder, F[k : k + 1], np.array([line]), lambda w: g + 1j * w * c)[0]
    within, without = (solved(x, W[k], line, behind, -1, 0) for x in (ladder, ()))
    assert found == pytest.approx(20 * np.log10(abs(without) / abs(within)), abs=1e-3)


@given(LADDERS, st.integers(0, len(F) - 1), logs(1e-3, 1.0), logs(1e-9, 1e-5), logs(1e-9, 1e-4))
def test_output_impedance_against_node_equations(ladder: Ladder, k: int, r: float, h: float, c: float) -> None:
    others = 1j * W[k] * c
    bus = 1 / (1 / (r + 1j * W[k] * h) + others)
    found = output_impedance(ladder, F[k : k + 1], Feed(r, h), lambda w: 1j * w * c)[0]
    assert found == pytest.approx(solved(ladder, W[k], bus, 0.0, -1, -1), rel=1e-4)


@given(LADDERS)
def test_loss_in_50_ohm_has_no_direction(ladder: Ladder) -> None:
    back = insertion_loss(reversed_ladder(ladder), F)
    np.testing.assert_allclose(insertion_loss(ladder, F), back, rtol=0, atol=1e-6)


@given(LADDERS, logs(1.0, 1e3), logs(1.0, 1e3))
def test_a_set_up_and_a_bench_are_one_thing(ladder: Ladder, source: float, load: float) -> None:
    bench, setup = insertion_loss(ladder, F, source, load), setup_loss(ladder, F, source, 1 / load)
    np.testing.assert_allclose(bench, setup, rtol=0, atol=1e-6)


@given(LADDERS, logs(1e-3, 10.0), logs(1e-9, 1e-4))
def test_output_impedance_is_passive(ladder: Ladder, r: float, h: float) -> None:
    z = output_impedance(ladder, F, Feed(r, h))
    assert (z.real >= -1e-9 * np.abs(z)).all()


def test_textbook_cases() -> None:
    """Pozar, Microwave Engineering, section 4.4 (from memory), chain matrix of one element: 1 + Z/2Z0, 1 + YZ0/2."""
    choke = insertion_loss((Branch("series", L=10e-6),), F)
    np.testing.assert_allclose(choke, 20 * np.log10(np.abs(1 + 1j * W * 10e-6 / 100)), atol=1e-12)
    capacitor = insertion_loss((Branch("shunt", C=1e-6),), F)
    np.testing.assert_allclose(capacitor, 20 * np.log10(np.abs(1 + 1j * W * 25 * 1e-6)), atol=1e-12)


def test_without_elements() -> None:
    assert (insertion_loss((), F) == 0.0).all()
    assert (setup_loss((), F, 2j * W, 1e-3) == 0.0).all()
    np.testing.assert_allclose(output_impedance((), F, Feed(0.1, 1e-6)), 0.1 + 1j * W * 1e-6, rtol=1e-14)
    np.testing.assert_allclose(output_impedance((), F, 50.0, 1 / 50.0), 25.0, rtol=1e-14)
    assert (output_impedance((), F) == 0.0).all()


def test_open_and_short_ends() -> None:
    """Derived: a pure current into a shorted line sees a shunt at its own end as no loss at all, a choke neither."""
    ladder = (Branch("series", L=1e-6), Branch("shunt", C=1e-6))
    np.testing.assert_allclose(setup_loss(ladder, F, 0.0), 20 * np.log10(np.abs(1 - W**2 * 1e-12)), atol=1e-9)
    assert setup_loss(ladder[:1], F, 0.0) == pytest.approx(0.0)
    assert setup_loss(ladder[1:], F, 0.0) == pytest.approx(0.0)


EXTREMES = [
    Branch("series", R=r, L=h, Rp=rp, Cp=cp)
    for r, h, rp, cp in product((0.0, 1e6), (1e-12, 1e3), (None, 1e-6, 1e6), (None, 1e-15, 1.0))
] + [Branch("shunt", R=r, L=h, C=c) for r, h, c in product((0.0, 1e6), (0.0, 1e-12, 1.0), (1e-15, 1.0))]
WIDE = np.array([0.0, 1e-6, 1.0, 1.5915494309189535e5, 1e6, 1e12])


def test_extremes_stay_finite_without_a_warning() -> None:
    ladders = [(a, b, a, b) for a, b in product(EXTREMES, EXTREMES)] + [tuple(EXTREMES * 3)]
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for ladder in ladders:
            for source, load in ((50.0, 50.0), (0.0, 1e6)):
                assert np.isfinite(insertion_loss(ladder, WIDE, source, load)).all()
            assert np.isfinite(setup_loss(ladder, WIDE, 0.0)).all()
            assert np.isfinite(output_impedance(ladder, WIDE)).all()


def test_a_lossless_resonance_met_exactly_is_finite() -> None:
    f = np.array([1 / (2 * np.pi)])
    trap = (Branch("series", L=1.0, Cp=1.0), Branch("shunt", L=1.0, C=1.0))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for ladder in (trap, trap[::-1], trap[:1], trap[1:], (Branch("series", L=1.0), Branch("shunt", C=1.0))):
            assert np.isfinite(insertion_loss(ladder, f)).all()
            assert np.isfinite(output_impedance(ladder, f)).all()


def resonator(r: float) -> Ladder:
    return (Branch("series", L=1e-6, R=r), Branch("shunt", C=1e-6))


@pytest.mark.parametrize("r", [0.3, 0.1, 1e-2, 1e-4, 1e-6])
def test_a_peak_is_found_however_sharp(r: float) -> None:
    """Derived: |Z|^2 of R-L beside C, x = w^2 LC: L/C (x + a)/((1 - x)^2 + a x), a = R^2 C/L; Q near sqrt(L/C)/R."""
    a = r * r
    x = -a + np.sqrt(1 + 2 * a)  # where its derivative is zero
    value = np.sqrt((x + a) / ((1 - x) ** 2 + a * x))
    f = np.geomspace(1e3, 1e8, 300)

    def exact(f: np.ndarray) -> np.ndarray:
        return np.abs(output_impedance(resonator(r), f))

    (peak,) = peaks(f, exact(f), exact)
    assert peak.frequency == pytest.approx(np.sqrt(x) / (2e-6 * np.pi), rel=1e-6)
    assert peak.value == pytest.approx(value, rel=1e-6)
    if r < 0.05:
        assert peak.q == pytest.approx(1 / r, rel=1e-2)
    assert refine(exact, 1e5, 2.5e5) == pytest.approx((peak.frequency, peak.value), rel=1e-6)


def test_peaks_of_sampled_data_alone() -> None:
    f = np.geomspace(1e3, 1e8, 2000)
    magnitude = np.abs(output_impedance(resonator(0.1), f))
    (peak,) = peaks(f, magnitude)
    (sharp,) = peaks(f, magnitude, lambda f: np.abs(output_impedance(resonator(0.1), f)))
    assert peak.frequency == pytest.approx(sharp.frequency, rel=1e-4)
    assert peak.value == pytest.approx(sharp.value, rel=1e-4)
    assert peak.q == pytest.approx(sharp.q, rel=1e-2)


def test_height_is_over_the_higher_valley() -> None:
    f = np.geomspace(1.0, 1e4, 9)
    found = peaks(f, np.array([1.0, 10.0, 2.0, 100.0, 100.0, 3.0, 4.0, 4.0, 4.0]))
    assert [round(peak.height, 6) for peak in found] == [
        round(20 * np.log10(5.0), 6),
        round(20 * np.log10(100 / 3), 6),
    ]
    assert found[1].frequency == pytest.approx(np.sqrt(f[3] * f[4]), rel=0.3)


@pytest.mark.parametrize("magnitude", [[], [1.0], [1.0, 2.0], [1.0, 1.0, 1.0], [0.0, 0.0, 0.0], [3.0, 2.0, 1.0]])
def test_no_peaks(magnitude: list[float]) -> None:
    assert peaks(np.geomspace(1.0, 10.0, len(magnitude)), np.array(magnitude)) == ()


@given(st.lists(st.sampled_from([0.0, 1e-9, 1.0, 1.1, 2.0, 1e9]), min_size=3, max_size=30))
def test_peaks_of_anything(values: list[float]) -> None:
    f = np.geomspace(1.0, 1e6, len(values))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = peaks(f, np.array(values))
    for peak in found:
        assert f[0] < peak.frequency < f[-1]
        assert np.isfinite([peak.value, peak.height]).all()
        assert peak.q is None or peak.q > 0.0


def test_against_a_library_for_networks() -> None:
    """scikit-rf (BSD-3): two sections put together of its own resistors, inductors and capacitors, S21 in 50 ohm."""
    skrf = pytest.importorskip("skrf")
    from skrf.media import DefinedGammaZ0

    medium = DefinedGammaZ0(frequency=skrf.Frequency.from_f(F, unit="hz"), z0=50.0)

    def one(part: Branch) -> object:
        inner = medium.resistor(part.R) ** medium.inductor(part.L)
        if part.place == "series":
            return inner
        return medium.shunt(inner ** medium.capacitor(part.C) ** medium.short())

    stage = (
        Branch("series", L=4.7e-6, R=8e-3),
        Branch("shunt", C=3.3e-6, R=4e-3, L=5e-9),
        Branch("shunt", C=22e-6, R=0.55, L=15e-9),
    )
    network = reduce(pow, [one(part) for part in stage * 2])  # ** is its sign for a cascade
    expected = -20 * np.log10(np.abs(network.s[:, 1, 0]))
    np.testing.assert_allclose(insertion_loss(stage * 2, F), expected, rtol=0, atol=1e-3)
