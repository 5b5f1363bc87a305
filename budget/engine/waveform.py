"""Exact Fourier coefficients of the noise waveforms, for many duties and harmonics at once.

Every waveform is a chain of straight pieces, in shares of the period. A piece of width w, centred on m, that runs from
a to b adds to c_n = (1/T) integral of x(t) e^(-j 2 pi n t/T)

    w e^(-j 2 pi n m) ((a + b)/2 j0(pi n w) - j (b - a)/2 j1(pi n w))

with the spherical Bessel functions j0(x) = sin(x)/x and j1(x) = (sin(x) - x cos(x))/x^2, which stay exact as the piece
gets narrow: an edge of no width simply adds nothing (derived; the trapezoid with equal edges is Paul, Introduction to
EMC, section 3.2). The r.m.s. value of harmonic n is sqrt(2) |c_n|.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SLACK = 1e-12  # of a period: edges that fill the whole duty still fit


def duty_at(law: str, duty: float, nominal: float, voltage: Floats) -> Floats:
    """Duty (R,), a ratio, at the terminal voltages (R,) [V]; ``duty`` holds at ``nominal`` [V]."""
    if law == "constant":
        return np.full(voltage.shape, duty)
    if law == "inverse-line":
        return duty * nominal / voltage
    quotient = duty / (1.0 - duty) * nominal / voltage
    return quotient / (1.0 + quotient)


def room(duty: Floats, rise: float, fall: float) -> Bools:
    """Whether the edges (shares of the period) find room in the duties (R,) and beside them."""
    half = 0.5 * (rise + fall)
    return (duty >= half - _SLACK) & (duty + half <= 1.0 + _SLACK)


def trapezoid(order: Floats, duty: Floats, rise: float, fall: float, ripple: float = 0.0) -> tuple[Complex, Floats]:
    """Pulse of height 1 whose top climbs by ``ripple``: coefficients (R, n) in its unit and its mean (R,), a ratio.

    ``order`` (n,) harmonics, ``duty`` (R,) at half height; ``rise`` and ``fall`` are shares of the period. Breakpoints
    are (0, 0), (rise, 1 - ripple/2), (rise/2 + D - fall/2, 1 + ripple/2), (rise/2 + D + fall/2, 0). Where the edges
    find no room the top has no width; see ``room``.
    """
    start, end = 1.0 - 0.5 * ripple, 1.0 + 0.5 * ripple
    top = np.maximum(duty - 0.5 * (rise + fall), 0.0)
    total = _piece(order, np.full(duty.shape, rise), np.full(duty.shape, 0.5 * rise), 0.0, start)
    total = total + _piece(order, top, rise + 0.5 * top, start, end)
    total = total + _piece(order, np.full(duty.shape, fall), rise + top + 0.5 * fall, end, 0.0)
    return total, 0.5 * rise * start + top + 0.5 * fall * end


def triangle(order: Floats, duty: Floats) -> Complex:
    """Triangle from -1/2 at 0 to +1/2 at the duty and back: coefficients (R, n), a ratio to its peak-to-peak value."""
    up = np.minimum(duty, 1.0)
    return _piece(order, up, 0.5 * up, -0.5, 0.5) + _piece(order, 1.0 - up, 0.5 * (1.0 + up), 0.5, -0.5)


def sine(order: Floats) -> Complex:
    """Sine of peak-to-peak value 1: coefficients (n,), a ratio to it."""
    return np.where(order == 1.0, -0.25j, 0.0j)


def delay(order: Floats, phase: float) -> Complex:
    """Factors (n,), a ratio, for a waveform delayed by ``phase`` [deg] of its period."""
    return _turn(order * (phase / 360.0))


def _piece(order: Floats, width: Floats, centre: Floats, a: float, b: float) -> Complex:
    """One straight piece: coefficients (R, n); ``width`` and ``centre`` (R,) are shares of the period."""
    x = np.pi * np.multiply.outer(width, order)
    safe = np.where(x > 0.0, x, 1.0)
    j0 = np.where(x > 0.0, np.sin(x) / safe, 1.0)
    value = np.empty(x.shape, dtype=np.complex128)
    value.real = 0.5 * (a + b) * j0
    if a == b:
        value.imag = 0.0
    else:
        square = x * x  # below 0.25 the closed form of j1 cancels, and four terms of its series are exact
        series = x / 3.0 * (1.0 - square / 10.0 * (1.0 - square / 28.0 * (1.0 - square / 54.0 * (1.0 - square / 88.0))))
        value.imag = -0.5 * (b - a) * np.where(x < 0.25, series, (j0 - np.cos(x)) / safe)
    value *= _turn(np.multiply.outer(centre, order))
    value *= width[:, None]
    return value


def _turn(turns: Floats) -> Complex:
    """e^(-j 2 pi turns), whole turns taken off first."""
    angle = (-2.0 * np.pi) * (turns - np.rint(turns))
    out = np.empty(turns.shape, dtype=np.complex128)
    out.real = np.cos(angle)
    out.imag = np.sin(angle)
    return out
