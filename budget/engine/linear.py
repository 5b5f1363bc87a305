"""The linear part of a network, driven through its modes, and what it does inside a step whose inputs are known.

Complex numbers of modes are kept as pairs of reals, so that products with them are products of real matrices.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import prod

import numpy as np
from numpy.typing import NDArray

from budget.engine.modes import Modes, step_weights
from budget.engine.statespace import StateSpace

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Linear:
    """R modes, the source and M inputs that drive them, and Y outputs: those of the state space, then its fluxes."""

    rate: Complex  # (R,) 1/s
    by_source: Complex  # (R,) of the source voltage
    drive_real: Floats  # (M, 2 R)
    show_real: Floats  # (2 R, Y)
    direct: Floats  # (Y, M)
    direct_source: Floats  # (Y,)
    late: Floats | None  # (Y, S) of the slopes of the corrections; None where there are none
    late_source: Floats  # (Y,) of the source's slope
    loads: int  # of the inputs, the first ones


def make_linear(space: StateSpace, modal: Modes) -> tuple[Linear, Complex, Complex]:
    """The linear part, and in modes what outputs see (Y, R) and what the source [V] and inputs [A] drive (R, M + 1)."""
    loads = space.converters.size
    show = np.concatenate((space.C, space.flux_C))
    direct = np.concatenate((space.D, space.flux_D))
    late = np.concatenate((space.D1, np.zeros_like(space.flux_D)))
    shown, driven = modal.seen(show), modal.driven(space.B)
    bent = late[:, 1 + loads :]
    return (
        Linear(
            rate=modal.rate,
            by_source=driven[:, 0],
            drive_real=as_real(driven[:, 1:].T),
            show_real=read_real(shown),
            direct=direct[:, 1:],
            direct_source=direct[:, 0],
            late=bent if bent.any() else None,
            late_source=late[:, 0],
            loads=loads,
        ),
        shown,
        driven,
    )


@dataclass(frozen=True, slots=True)
class Solved:
    """Steps of members (m,) whose inputs are known at the start, in the middle and at the end."""

    linear: Linear
    z: Complex  # (m, R) at the start, as all up to ``slope``
    g: Floats  # (m, M)
    drive: Complex  # (m, R) what these drive
    volts: Floats  # (m,) the source, V
    slope: Floats  # (m,) V/s
    length: Floats  # (m,) s
    ends: Floats  # (m, 2, M) in the middle and at the end
    pushed: Complex  # (m, 2, R) what these drive


def _inside(s: Solved, theta: Floats) -> tuple[Complex, Floats, Floats, Floats]:
    """z (m, T, R), inputs (m, T, M), their slopes and the source's voltage (m, T) at ``theta`` (m, T) of the steps."""
    by_source, h, g = s.linear.by_source, s.length, s.g
    w = step_weights(s.linear.rate, h, theta)
    z = w[:, :, 0] * s.z[:, None] + w[:, :, 1] * (s.volts[:, None] * by_source)[:, None]
    z += w[:, :, 2] * (s.slope[:, None] * by_source)[:, None]
    z += w[:, :, 3] * s.drive[:, None]
    z += w[:, :, 4] * s.pushed[:, :1]
    z += w[:, :, 5] * s.pushed[:, 1:]
    mix = np.stack(((1 - theta) * (1 - 2 * theta), 4 * theta * (1 - theta), theta * (2 * theta - 1)), axis=2)
    along = mix @ np.stack((g, s.ends[:, 0], s.ends[:, 1]), axis=1)
    one = 4.0 * s.ends[:, 0] - 3.0 * g - s.ends[:, 1]
    two = 2.0 * (g + s.ends[:, 1]) - 4.0 * s.ends[:, 0]
    tilt = (one[:, None] + 2.0 * theta[:, :, None] * two[:, None]) / h[:, None, None]
    return z, along, tilt, s.volts[:, None] + s.slope[:, None] * h[:, None] * theta


def exact(s: Solved, theta: Floats) -> tuple[Complex, Floats, Floats]:
    """Modes (m, T, R), outputs (m, T, Y) and inputs (m, T, M) [A] at ``theta`` (m, T), shares of the steps."""
    net = s.linear
    z, along, tilt, volts = _inside(s, theta)
    y = times(z.view(np.float64), net.show_real) + volts[:, :, None] * net.direct_source
    y = y + (s.slope[:, None] * net.late_source)[:, None] + times(along, net.direct.T)
    if net.late is not None:
        y = y + tilt[:, :, net.loads :] @ net.late.T
    return z, y, along


def _one_each(s: Solved, theta: Floats, outputs: Indices) -> Floats:
    """One of the ``outputs`` (m,) of each member at ``theta`` (m,) of its step."""
    net = s.linear
    z, along, tilt, volts = _inside(s, theta[:, None])
    found = np.einsum("mr,rm->m", z[:, 0].view(np.float64), net.show_real[:, outputs])
    found += volts[:, 0] * net.direct_source[outputs] + s.slope * net.late_source[outputs]
    found += np.einsum("mi,mi->m", along[:, 0], net.direct[outputs])
    if net.late is not None:
        found += np.einsum("mi,mi->m", tilt[:, 0, net.loads :], net.late[outputs])
    return np.asarray(found, dtype=np.float64)


def met_at(
    s: Solved, outputs: Indices, limit: Floats, rising: Bools, theta: Floats, bracket: Floats, chord: Floats
) -> Floats:
    """Where the ``outputs`` (m,), an index each, meet the ``limit`` (m,) [V]: the shares (m,) of the steps.

    On the exact solution, by chords.
    ``rising`` (m,): from below. ``theta`` (m,) is a guess, between the columns of ``bracket`` (m, 2), ``chord`` (m,)
    the slope there.
    """
    theta, (low, high) = theta.copy(), bracket.T.copy()
    for _ in range(8):
        f = _one_each(s, theta, outputs) - limit
        far = (np.abs(f) > 1e-10 * limit) & (high - low > 1e-12)
        if not far.any():
            break
        beyond = (f > 0.0) == rising
        high, low = np.where(far & beyond, theta, high), np.where(far & ~beyond, theta, low)
        step = theta - f / chord
        better = np.where((low < step) & (step < high), step, 0.5 * (low + high))
        theta = np.where(far, better, theta)
    return theta


def times(many: Floats, matrix: Floats) -> Floats:
    """``many`` (m, T, K) times ``matrix`` (K, Y), ratios, as one product, (m, T, Y); numpy would make m of it."""
    flat = many.reshape(prod(many.shape[:-1]), many.shape[-1]) @ matrix
    return np.asarray(flat.reshape(*many.shape[:-1], matrix.shape[1]), dtype=np.float64)


def as_real(matrix: Complex) -> Floats:
    """The ``matrix`` (M, R) as (M, 2 R), real and imaginary parts side by side; ratios stay."""
    return np.ascontiguousarray(matrix).view(np.float64)


def read_real(matrix: Complex) -> Floats:
    """The ``matrix`` (Y, R) as (2 R, Y): modes as reals times it are the real part of matrix times modes; ratios."""
    pairs = np.stack((matrix.real, -matrix.imag), axis=-1)
    return np.ascontiguousarray(pairs.reshape(matrix.shape[0], -1).T)
