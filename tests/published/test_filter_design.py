"""Input-filter design against published values.

Book: Erickson & Maksimovic, Fundamentals of Power Electronics, 3rd ed., chapter 17 (2nd ed., chapter 10). Beside each
printed value stands, where it has more digits, the one recomputed from the book's formula ("derived").
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from budget.engine.damping import (
    CLOSED_RC,
    CLOSED_RL,
    R_ACROSS_PART,
    RC_BESIDE,
    UNDAMPED,
    best_damping,
    rc_optimum,
    rl_optimum,
    shape,
)
from budget.engine.model import Branch, Ladder
from budget.engine.response import insertion_loss, output_impedance, peaks, setup_loss

LF = Branch("series", L=330e-6)
CF = Branch("shunt", C=470e-6)


def damper(c: float, r: float) -> Branch:
    return Branch("shunt", C=c, R=r)


def lr_across(lf: float, lb: float, rf: float) -> Ladder:
    """Lf with Lb and Rf in series across it, as two branches of the same impedance (Foster's first form; derived)."""
    share = lf / (lf + lb)
    return Branch("series", L=lf * lb / (lf + lb)), Branch("series", L=lf * share, Rp=rf * share**2)


def highest(ladder: Ladder, low: float, high: float) -> tuple[float, float]:
    """Frequency [Hz] and value [ohm] of the highest peak of |Zo|."""
    f = np.geomspace(low, high, 600)

    def exact(f: np.ndarray) -> np.ndarray:
        return np.abs(output_impedance(ladder, f))

    top = max(peaks(f, exact(f), exact), key=lambda peak: peak.value)
    return top.frequency, top.value


def test_undamped_filter_of_the_buck_example() -> None:
    """Book, 17.3: 330 uH and 470 uF, ff 400 Hz, R0f 0.84 ohm (derived: 404.12 Hz, 0.837931 ohm)."""
    found = shape((LF, CF))
    assert found is not None
    assert found.kind == UNDAMPED
    assert found.resonance == pytest.approx(404.12, abs=5e-3)
    assert found.characteristic == pytest.approx(0.837931, abs=5e-7)
    assert output_impedance((LF, CF), np.array([found.resonance * (1 + 1e-6)]))[0].__abs__() > 1e5


def test_first_cure_of_the_buck_example() -> None:
    """Book, 17.3: 4700 uF with 1 ohm across Cf; derived: peak 1.0076 ohm at 388.7 Hz."""
    frequency, value = highest((LF, CF, damper(4700e-6, 1.0)), 40.0, 4e3)
    assert value == pytest.approx(1.0076, abs=5e-5)
    assert frequency == pytest.approx(388.7, abs=0.05)


# Book, eq. 17.33-17.37 at Cb/Cf = n; derived from them: R/R0f, peak/R0f, f/ff.
RC = [(1.0, 1.4491, 2.4495, 0.8165), (2.5, 0.7981, 1.2000, 0.6667), (4.0, 0.6124, 0.8660, 0.5774)]
# Book, eq. 17.44-17.46 at Lb/Lf = n; derived from them.
RL = [(1.0, 0.5123, 3.4641, 0.8660), (2.0, 0.7027, 2.4495, 0.8165)]


@pytest.mark.parametrize(("n", "resistance", "peak", "frequency"), RC)
def test_optimum_of_a_capacitor_with_resistor(n: float, resistance: float, peak: float, frequency: float) -> None:
    assert rc_optimum(n) == pytest.approx((resistance, peak, frequency), abs=5e-5)
    found = shape((LF, CF, damper(n * 470e-6, 1.0)))
    best = best_damping((LF, CF, damper(n * 470e-6, 1.0)), 2)
    assert found is not None
    assert found.kind == RC_BESIDE
    assert best.method == CLOSED_RC
    assert best.resistance == pytest.approx(resistance * found.characteristic, rel=1e-4)
    assert best.peak == pytest.approx(peak * found.characteristic, rel=1e-4)
    assert best.frequency == pytest.approx(frequency * found.resonance, rel=1e-4)


@pytest.mark.parametrize(("n", "resistance", "peak", "frequency"), RL)
def test_optimum_of_a_resistor_across_a_second_choke(
    n: float, resistance: float, peak: float, frequency: float
) -> None:
    assert rl_optimum(n) == pytest.approx((resistance, peak, frequency), abs=5e-5)
    ladder = (LF, Branch("series", L=n * 330e-6, Rp=1.0), CF)
    found, best = shape(ladder), best_damping(ladder, 1)
    assert found is not None
    assert found.kind == R_ACROSS_PART
    assert best.method == CLOSED_RL
    assert best.peak == pytest.approx(peak * found.characteristic, rel=1e-4)


@pytest.mark.parametrize("n", [0.2, 0.5, 0.516, 1.0, 3.0])
def test_optimum_of_a_choke_with_resistor_across(n: float) -> None:
    """Book, eq. 17.39-17.43, "Rf-Lb parallel", reached through the equivalent branches: one formula proves the other.

    Book, 17.4.2: n = 0.516 gives R/R0f 0.93; n = 1 gives a peak of sqrt 6.
    """
    resistance = math.sqrt(n * (3 + 4 * n) * (1 + 2 * n) / (2 * (1 + 4 * n)))
    peak, frequency = math.sqrt(2 * n * (1 + 2 * n)), math.sqrt((1 + 2 * n) / (2 * n))
    if n == 0.516:
        assert resistance == pytest.approx(0.93, abs=5e-3)
    if n == 1.0:
        assert peak == pytest.approx(math.sqrt(6.0), rel=1e-12)
    r0, ff = math.sqrt(330e-6 / 470e-6), 1 / (2 * math.pi * math.sqrt(330e-6 * 470e-6))
    best = best_damping((*lr_across(330e-6, n * 330e-6, resistance * r0), CF), 1)
    assert best.method == CLOSED_RL
    assert best.resistance == pytest.approx(best.entered, rel=1e-9)
    assert best.peak == pytest.approx(peak * r0, rel=1e-9)
    assert best.entered_peak == pytest.approx(peak * r0, rel=1e-9)
    assert best.frequency == pytest.approx(frequency * ff, rel=1e-9)
    loss = insertion_loss((*lr_across(330e-6, n * 330e-6, 1.0), CF), np.array([1e9]))
    assert insertion_loss((LF, CF), np.array([1e9])) - loss == pytest.approx([20 * math.log10(1 + 1 / n)], abs=1e-3)


def test_design_for_one_ohm() -> None:
    """Book, 17.4.1: a peak of 1 ohm asks for n = 2.5, Cb 1200 uF, Rf 0.67 ohm; derived: 2.51913, 0.665741, 0.99055."""
    best = best_damping((LF, CF, damper(2.51913 * 470e-6, 0.67)), 2)
    assert best.peak == pytest.approx(1.0, abs=1e-6)
    assert best.resistance == pytest.approx(0.665741, abs=1e-6)
    assert best.resistance == pytest.approx(0.67, abs=5e-3)
    assert best.frequency == pytest.approx(268.84, abs=0.01)
    rounded = best_damping((LF, CF, damper(1200e-6, 0.67)), 2)
    assert rounded.entered_peak == pytest.approx(0.99055, abs=5e-6)


# Book, 17.4.5: section 1 at the converter, section 2 at the source, as printed.
SECTION_1 = (*lr_across(31.2e-6, 15.6e-6, 1.9), Branch("shunt", C=6.9e-6))
SECTION_2 = (*lr_across(5.8e-6, 2.9e-6, 0.65), Branch("shunt", C=11.7e-6))


def test_two_sections_at_the_frequency_of_the_switch() -> None:
    """Book, 17.4.5: 80 dB at 250 kHz, current drawn over current at the shorted line; derived: 79.764 dB."""
    loss = setup_loss(SECTION_2 + SECTION_1, np.array([250e3]), line=0.0)
    assert loss == pytest.approx([79.764], abs=1e-3)
    assert loss == pytest.approx([80.0], abs=0.5)


def test_two_sections_seen_from_the_converter() -> None:
    """Book, 17.4.5: |Zo| peaks at about 10 dBohm, 3 ohm; derived from the printed parts: 3.310 ohm at 12.14 kHz."""
    frequency, value = highest(SECTION_2 + SECTION_1, 1e3, 1e5)
    assert 20 * math.log10(value) == pytest.approx(10.0, abs=0.5)
    assert value == pytest.approx(3.310, abs=5e-4)
    assert frequency == pytest.approx(12.14e3, abs=5.0)


def test_each_section_alone() -> None:
    """Book, 17.4.5: designed for peaks of 3 and 1 ohm at 15.3 and 27.2 kHz; derived: 3.008 ohm at 15.48 kHz as printed.

    Unrounded parts of section 1: 31.192 uH, 15.596 uH, 1.9365 ohm, 6.9316 uF; of section 2: 5.8469 uH, 2.9235 uH,
    0.6455 ohm, 11.6938 uF (derived).
    """
    frequency, value = highest(SECTION_1, 1e3, 1e5)
    assert (value, frequency) == (pytest.approx(3.008, abs=5e-4), pytest.approx(15.48e3, abs=5.0))
    frequency, value = highest((*lr_across(31.192e-6, 15.596e-6, 1.9365), Branch("shunt", C=6.9316e-6)), 1e3, 1e5)
    assert (value, frequency) == (pytest.approx(3.0, abs=1e-4), pytest.approx(15.307e3, abs=1.0))
    frequency, value = highest((*lr_across(5.8469e-6, 2.9235e-6, 0.6455), Branch("shunt", C=11.6938e-6)), 1e3, 1e5)
    assert (value, frequency) == (pytest.approx(1.0, abs=1e-4), pytest.approx(27.220e3, abs=1.0))


def test_two_sections_on_a_50_uh_network() -> None:
    """Derived: 50 uH beside 50 ohm in each line, 250 kHz: the line carries 108.908 dB less than the converter draws."""
    w = 2 * math.pi * 250e3
    line = 2.0 / (1.0 / 50.0 + 1.0 / (1j * w * 50e-6))
    assert setup_loss(SECTION_2 + SECTION_1, np.array([250e3]), line) == pytest.approx([108.908], abs=1e-3)
