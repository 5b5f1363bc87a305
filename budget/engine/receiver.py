"""What the measuring side puts on the bus: the set-up in place of the source, the limit line, the receiver's bandwidth.

Set-ups and limit lines are those of MIL-STD-461 and its relatives; the values stand with each limit set.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import LimitLine

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

MICRO = 1e-6  # levels are in dB over one microvolt or microampere


def line_impedance(setup: str, w: Floats) -> Complex:
    """Impedance [ohm] of one line to chassis on the unit's side, shape (K,), at angular frequencies (K,) [rad/s].

    ``lisn-50uH``: MIL-STD-461E/F/G Figure 6 with the source side closed by its 8 uF and 5 ohm only; ``lisn-5uH``: 5 uH
    with 10 uF at the source; ``cap-10uF``: the feed-through capacitor of the older revisions.
    """
    s = np.zeros(w.shape, dtype=np.complex128)
    s.imag = w
    if setup == "cap-10uF":
        return 1.0 / (s * 10e-6)
    if setup == "lisn-50uH":
        port = 1.0 / (s * 0.25e-6) + 50.0 * 1000.0 / 1050.0
        source = s * 50e-6 + 5.0 + 1.0 / (s * 8e-6)
    elif setup == "lisn-5uH":
        port = 1.0 / (s * 0.1e-6) + 50.0 * 5000.0 / 5050.0
        source = s * 5e-6 + 1.0 / (s * 10e-6)
    else:
        raise ValueError(f'unknown set-up "{setup}"')
    return np.asarray(port * source / (port + source), dtype=np.complex128)


def band(limit: LimitLine) -> tuple[float, float]:
    """First and last frequency [Hz] of a limit line."""
    return limit.points[0][0], limit.points[-1][0]


def limit_at(limit: LimitLine, frequency: Floats) -> Floats:
    """Limit (K,) in dB at the frequencies (K,) [Hz]: dB linear over log frequency, the lower value at a step.

    Outside the band the value of its nearer end is held.
    """
    f = np.array([p[0] for p in limit.points], dtype=np.float64)
    level = np.array([p[1] for p in limit.points], dtype=np.float64)
    at = np.searchsorted(f, frequency, side="right") - 1
    low = np.clip(at, 0, f.size - 1)
    high = np.clip(at + 1, 0, f.size - 1)
    ratio = f[high] / f[low]
    share = np.log(np.clip(frequency, f[0], f[-1]) / f[low]) / np.where(ratio > 1.0, np.log(ratio), 1.0)
    value = level[low] + (level[high] - level[low]) * np.clip(share, 0.0, 1.0)
    distinct, first = np.unique(f, return_index=True)
    lowest = np.minimum.reduceat(level, first)
    met = np.clip(np.searchsorted(distinct, frequency), 0, distinct.size - 1)
    return np.where(distinct[met] == frequency, lowest[met], value)


def bandwidth_at(limit: LimitLine, frequency: Floats) -> Floats:
    """Receiver bandwidth (K,) [Hz] at the frequencies (K,) [Hz]; 0 where the limit has no rows.

    A row holds from its first frequency up to, not at, its second; below the first row the first holds, elsewhere
    outside the rows the last.
    """
    rows = limit.bandwidth
    if not rows:
        return np.zeros(frequency.shape)
    value = np.where(frequency < rows[0][0], rows[0][2], rows[-1][2])
    for start, end, width in reversed(rows):
        value = np.where((frequency >= start) & (frequency < end), width, value)
    return value


def decibel(value: float) -> float:
    """Level in dB over a microvolt or microampere of an r.m.s. value [V or A] above zero."""
    return float(20.0 * np.log10(value / MICRO))
