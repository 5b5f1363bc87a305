"""One ladder by itself: insertion loss, output impedance and its peaks.

Directions. A ladder runs from the bus side to the converter side; noise comes from the converter and is read at the
bus. Insertion loss does not depend on the direction: with the same impedance at either end, ``line`` at the bus and
``load`` at the converter, the ratio of what arrives without the filter to what arrives with it is

    (A Zload + B + C Zline Zload + D Zline) / (Zline + Zload)

from whichever end it is driven, by an emf behind the impedance or by a current beside it, and whether voltage or
current is read (reciprocity of passive networks; chain form of two-ports, Pozar, Microwave Engineering, 4th ed.,
section 4.4). So one function serves the bench in 50 ohm and the real set-up. Saturation plays no part here.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from budget.engine.ladder import Complex, Floats, carry
from budget.engine.model import Ladder

OverFrequency = complex | Complex | Callable[[Floats], Complex]
"""One number, one for each frequency, or a function of the angular frequency [rad/s]."""

TINY = 1e-300  # ohm, siemens or ratio: keeps a lossless resonance that is met exactly finite
_SLOWEST = 1e-9  # Hz; stands in for zero, where a series capacitor has no impedance to tell


@dataclass(frozen=True, slots=True)
class Feed:
    """The loop from the source to the node where the filters are tied, source shorted."""

    resistance: float = 0.0  # [ohm]
    inductance: float = 0.0  # [H]

    def impedance(self, w: Floats) -> Complex:
        """R + jwL [ohm] at the angular frequencies ``w`` [rad/s], shape (K,)."""
        return np.asarray(self.resistance + 1j * w * self.inductance, dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class Peak:
    """A local maximum of a magnitude over frequency."""

    frequency: float  # [Hz]
    value: float  # in the unit of the magnitude
    height: float  # [dB] over the higher of the two valleys beside it (each reaches to a higher peak or to the end)
    q: float | None  # frequency over the width at value / sqrt 2; None where a valley is not as deep as that


def insertion_loss(ladder: Ladder, f: Floats, source: OverFrequency = 50.0, load: OverFrequency = 50.0) -> Floats:
    """Voltage or current that arrives without the filter over that with it [dB], shape (K,).

    ``f`` (K,) [Hz]; ``source`` is the impedance [ohm] at the bus side and ``load`` that at the converter side. With
    50 and 50 ohm this is the insertion loss of a data sheet, DM and CM alike. Negative where a filter amplifies.
    """
    w = _angular(f)
    return _loss(ladder, w, _at(source, w), _at(load, w), np.ones(w.shape, dtype=np.complex128))


def setup_loss(ladder: Ladder, f: Floats, line: OverFrequency, behind: OverFrequency = 0.0) -> Floats:
    """Reading at a set-up without the filter over that with it [dB], shape (K,), for noise from the converter side.

    ``f`` (K,) [Hz]; ``line`` is what closes the bus side [ohm]: twice the set-up's line impedance in DM, half of it
    in CM (with whatever else hangs on the bus in parallel). ``behind`` is the admittance [S] at the converter side:
    lead and input ladder in DM, capacitance to chassis in CM, and zero for a pure current. It holds for noise
    injected at the terminals and for noise from within the converter, as ``behind`` stays the same either way.
    """
    w = _angular(f)
    return _loss(ladder, w, _at(line, w), np.ones(w.shape, dtype=np.complex128), _at(behind, w))


def output_impedance(
    ladder: Ladder, f: Floats, source: Feed | OverFrequency = 0.0, others: OverFrequency = 0.0
) -> Complex:
    """Impedance [ohm] seen from the converter side back into the filter, shape (K,).

    ``f`` (K,) [Hz]; ``source`` is the feed, or the impedance [ohm] that closes the bus side; ``others`` is the
    admittance [S] of all else that is tied to the bus node: other filters with what is behind them.
    """
    w = _angular(f)
    zs = source.impedance(w) if isinstance(source, Feed) else _at(source, w)
    v, i, _ = steps(ladder[::-1], w, zs, 1.0 + zs * _at(others, w))
    return np.asarray(v / np.where(np.abs(i) < TINY, TINY, i), dtype=np.complex128)


def peaks(
    f: Floats, magnitude: Floats, exact: Callable[[Floats], Floats] | None = None, least: float = 0.1
) -> tuple[Peak, ...]:
    """Local maxima by rising frequency, those lower than ``least`` dB over their surroundings left out.

    ``f`` rising [Hz] and ``magnitude`` in any unit, both (K,). ``exact`` gives the magnitude at frequencies [Hz] of
    shape (P,): with it each maximum and its width are found on the function itself, without it from a parabola
    through three points, log over log. The ends of the band are not maxima.
    """
    f = np.asarray(f, dtype=np.float64)
    y = np.log(np.maximum(np.asarray(magnitude, dtype=np.float64), TINY))
    found = []
    for first, last in _tops(y):
        low, high = _valley(y[first::-1]), _valley(y[last:])
        height = float(20.0 / np.log(10.0) * (y[first] - max(y[first - low], y[last + high])))
        if height < least:
            continue
        if exact is not None:
            at, value = refine(exact, float(f[first - 1]), float(f[last + 1]))
        else:
            at, value = _parabola(np.log(f[first - 1 : last + 2]), y[first - 1 : last + 2])
        below = _half_power(f[first::-1], y[first::-1], at, value, low, exact)
        above = _half_power(f[last:], y[last:], at, value, high, exact)
        q = None if below is None or above is None or above <= below else at / (above - below)
        found.append(Peak(at, value, height, q))
    return tuple(found)


def refine(exact: Callable[[Floats], Floats], low: float, high: float) -> tuple[float, float]:
    """Frequency [Hz] and value of the maximum of ``exact`` between two frequencies that have just one between them.

    ``exact`` takes frequencies [Hz] of shape (P,) and gives magnitudes of shape (P,).
    """
    x, value = zoom(lambda at: exact(np.exp(at[0]))[None, :], np.log([low]), np.log([high]), 26)
    return float(np.exp(x[0])), float(value[0])


def zoom(function: Callable[[Floats], Floats], low: Floats, high: Floats, rounds: int) -> tuple[Floats, Floats]:
    """Place and value (a ratio or any unit) of the maximum in each of M brackets, shapes (M,), all narrowed together.

    ``function`` takes and gives shape (M, 5). A round leaves a third of each bracket.
    """
    part = np.arange(1, 6) / 6.0
    rows = np.arange(low.size)
    place, value = 0.5 * (low + high), np.zeros(low.size)
    for _ in range(rounds):
        step = (high - low) / 6.0
        x = low[:, None] + (high - low)[:, None] * part
        y = function(x)
        best = np.argmax(y, axis=1)
        place, value = x[rows, best], y[rows, best]
        low, high = place - step, place + step
    return place, value


def steps(ladder: Ladder, w: Floats, v: Complex, i: Complex) -> tuple[Complex, Complex, Floats]:
    """``carry`` element by element, shapes (K,): v and i, scaled, and the log10 of the scale as a ratio.

    Scaled at each element, since a long ladder of extreme parts leaves the range of floating point.
    """
    scale = np.zeros(w.shape)
    for branch in reversed(ladder):
        v, i = carry((branch,), w, v, i)
        size = np.maximum(np.maximum(np.abs(v), np.abs(i)), TINY)
        v, i, scale = v / size, i / size, scale + np.log10(size)
    return v, i, scale


def _angular(f: Floats) -> Floats:
    return 2.0 * np.pi * np.maximum(np.asarray(f, dtype=np.float64), _SLOWEST)


def _at(what: OverFrequency, w: Floats) -> Complex:
    values = what(w) if callable(what) else what
    return np.broadcast_to(np.asarray(values, dtype=np.complex128), w.shape)


def _loss(ladder: Ladder, w: Floats, line: Complex, v: Complex, i: Complex) -> Floats:
    """``v`` and ``i`` at the converter side tell its impedance v/i, so that neither open nor short needs a division."""
    without = np.abs(v + line * i)
    v, i, scale = steps(ladder, w, v, i)
    through = np.abs(v + line * i)
    return np.asarray(20.0 * (np.log10(np.maximum(through, TINY)) + scale - np.log10(np.maximum(without, TINY))))


def _tops(y: Floats) -> list[tuple[int, int]]:
    """First and last index of each local maximum (more than one point where the top is flat), ends left out."""
    edges = np.flatnonzero(np.diff(y) != 0.0)
    starts = np.concatenate(([0], edges + 1))
    ends = np.concatenate((edges, [y.size - 1]))
    level = y[starts] if y.size else y
    top = np.flatnonzero((level[1:-1] > level[:-2]) & (level[1:-1] > level[2:])) + 1
    return [(int(starts[k]), int(ends[k])) for k in top]


def _valley(y: Floats) -> int:
    """Offset of the lowest point on the way from a top, y[0], to the first higher point or the end."""
    higher = np.flatnonzero(y > y[0])
    return int(np.argmin(y[: higher[0]] if higher.size else y))


def _parabola(x: Floats, y: Floats) -> tuple[float, float]:
    """Vertex of the parabola through both ends and the middle of the top, log over log."""
    x0, x1, x2 = float(x[0]), float(x[1] + x[-2]) / 2.0, float(x[-1])
    rise, fall = (float(y[1]) - float(y[0])) / (x1 - x0), (float(y[-1]) - float(y[1])) / (x2 - x1)
    bend = (fall - rise) / (x2 - x0)  # below zero at a maximum
    at = x1 - (rise + bend * (x1 - x0)) / (2.0 * bend)
    return float(np.exp(at)), float(np.exp(float(y[1]) - bend * (at - x1) ** 2))


def _half_power(
    f: Floats, y: Floats, at: float, value: float, valley: int, exact: Callable[[Floats], Floats] | None
) -> float | None:
    """Frequency [Hz] where the magnitude has fallen to ``value`` / sqrt 2, on the way from a top to its valley."""
    level = float(np.log(value) - 0.5 * np.log(2.0))
    beyond = f > at if f[-1] > f[0] else f < at  # the sample at the top may lie on the other slope of a sharp peak
    under = np.flatnonzero(beyond[: valley + 1] & (y[: valley + 1] < level))
    if not under.size:
        return None
    k = int(under[0])
    over = k > 0 and bool(beyond[k - 1])
    inside, outside = (float(f[k - 1]) if over else at), float(f[k])
    if exact is None:
        top = float(y[k - 1]) if over else float(np.log(value))
        return float(inside * (outside / inside) ** ((top - level) / (top - float(y[k]))))
    for _ in range(20):
        middle = float(np.sqrt(inside * outside))
        over = float(exact(np.array([middle]))[0]) > value / np.sqrt(2.0)
        inside, outside = (middle, outside) if over else (inside, middle)
    return float(np.sqrt(inside * outside))
