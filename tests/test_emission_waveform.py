"""Fourier coefficients against a fast Fourier transform of samples, and what they must keep to."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from budget.engine import waveform
from tests.emission_reference import cell_means, samples_chop

ORDERS = np.array([1.0, 2.0, 3.0, 7.0, 40.0, 311.0])

shares = st.floats(0.0, 0.3)


def spectrum(cells: np.ndarray) -> np.ndarray:
    n = cells.size
    c = np.fft.fft(cells)[ORDERS.astype(int)] / n
    return c * np.exp(-1j * np.pi * ORDERS / n) / np.sinc(ORDERS / n)


@given(shares, shares, st.floats(0.0, 1.0), st.floats(0.0, 2.0))
def test_the_pulse_is_that_of_its_samples(rise: float, fall: float, place: float, ripple: float) -> None:
    half = (rise + fall) / 2
    duty = half + place * (1 - 2 * half)
    got, mean = waveform.trapezoid(ORDERS, np.array([duty]), rise, fall, ripple)
    cells = samples_chop(duty, rise, fall, ripple, 1 << 15)
    np.testing.assert_allclose(got[0], spectrum(cells), atol=5e-7)  # what the samples fold back
    assert mean[0] == pytest.approx(cells.mean(), abs=1e-12)


@given(st.floats(0.0, 1.0))
def test_the_triangle_is_that_of_its_samples(duty: float) -> None:
    got = waveform.triangle(ORDERS, np.array([duty]))
    np.testing.assert_allclose(got[0], spectrum(cell_means([0, duty, 1], [-0.5, 0.5, -0.5], 1 << 15)), atol=5e-7)


def test_the_sine_has_one_line() -> None:
    got = waveform.sine(ORDERS)
    assert abs(got[0]) * math.sqrt(2) == pytest.approx(1 / math.sqrt(8))  # rms of a sine of peak-to-peak 1
    assert (got[1:] == 0).all()
    assert got[0] == -0.25j  # a sine, not a cosine


@given(st.floats(1e-12, 1e-3), st.integers(1, 1000))
def test_narrow_edges_lead_smoothly_to_steps(edge: float, order: int) -> None:
    n = np.array([float(order)])
    step, _ = waveform.trapezoid(n, np.array([0.37]), 0.0, 0.0)
    near, _ = waveform.trapezoid(n, np.array([0.37]), edge, edge)
    # each step of height 1 moves by half an edge, and loses at most (pi n edge)^2 / 6 of 1 / (2 pi n)
    bound = 2 / (2 * math.pi * order) * (math.pi * order * edge + (math.pi * order * edge) ** 2)
    assert abs(near[0, 0] - step[0, 0]) <= bound + 1e-15


def test_a_delay_is_a_delay() -> None:
    whole, _ = waveform.trapezoid(ORDERS, np.array([0.3]), 0.01, 0.02)
    shift = 120.0
    cells = np.roll(samples_chop(0.3, 0.01, 0.02, 0.0, 3 << 12), 1 << 12)
    n = cells.size
    c = np.fft.fft(cells)[ORDERS.astype(int)] / n * np.exp(-1j * np.pi * ORDERS / n) / np.sinc(ORDERS / n)
    np.testing.assert_allclose(whole[0] * waveform.delay(ORDERS, shift), c, atol=1e-7)
    assert waveform.delay(np.array([1e6]), 360.0)[0] == 1.0


@pytest.mark.parametrize(
    ("law", "at_half", "at_double"), [("constant", 0.4, 0.4), ("inverse-line", 0.8, 0.2), ("flyback", 4 / 7, 0.25)]
)
def test_duty_laws(law: str, at_half: float, at_double: float) -> None:
    got = waveform.duty_at(law, 0.4, 28.0, np.array([14.0, 28.0, 56.0]))
    np.testing.assert_allclose(got, [at_half, 0.4, at_double])


def test_room_for_the_edges() -> None:
    duty = np.array([0.05, 0.1, 0.5, 0.9, 0.95, 1.2])
    assert waveform.room(duty, 0.1, 0.1).tolist() == [False, True, True, True, False, False]
    assert waveform.room(np.array([0.3 - 0.1]), 0.1, 0.3).all()  # but for rounding


def test_a_pulse_that_fills_its_edges_is_a_triangle() -> None:
    got, mean = waveform.trapezoid(ORDERS, np.array([0.5]), 0.5, 0.5)
    wanted = waveform.triangle(ORDERS, np.array([0.5]))
    np.testing.assert_allclose(got, wanted, atol=1e-15)
    assert mean[0] == pytest.approx(0.5)
