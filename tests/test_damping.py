"""Which elements damp a ladder, and the resistance with which they do it best."""

from __future__ import annotations

import math
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine import damping
from budget.engine.damping import (
    CLOSED_RC,
    CLOSED_RL,
    NO_OPTIMUM,
    NUMERICAL,
    Damping,
    best_damping,
    damping_branches,
    shape,
)
from budget.engine.model import Branch, Ladder
from budget.engine.response import Feed, output_impedance
from tests.test_response import EXTREMES, LADDERS, logs


def series(**parts: float) -> Branch:
    return Branch("series", **parts)


def shunt(**parts: float) -> Branch:
    return Branch("shunt", **parts)


TWO_STAGES = (
    series(L=4.7e-6, R=8e-3, Rp=900.0, Cp=9e-12),
    shunt(C=3.3e-6, R=4e-3, L=5e-9),
    shunt(C=22e-6, R=0.55, L=15e-9),
    series(L=3.3e-6, R=6e-3, Rp=900.0, Cp=8e-12),
    shunt(C=4.7e-6, R=4e-3, L=5e-9),
    shunt(C=22e-6, R=0.45, L=15e-9),
    shunt(C=100e-9, R=10e-3, L=1e-9),
)


def nothing(w: np.ndarray) -> np.ndarray:
    """No admittance at the bus node: the same network, but not the closed form's any more."""
    return np.zeros(w.shape, dtype=complex)


def dense_peak(ladder: Ladder, feed: Feed, low: float, high: float) -> float:
    return float(np.abs(output_impedance(ladder, np.geomspace(low, high, 20001), feed)).max())


@settings(max_examples=25, deadline=None)
@given(logs(1e-7, 1e-2), logs(1e-8, 1e-3), logs(0.2, 30.0), st.booleans())
def test_search_agrees_with_the_closed_forms(inductance: float, c: float, n: float, capacitive: bool) -> None:
    if capacitive:
        ladder, index, method = (series(L=inductance), shunt(C=c), shunt(C=n * c, R=1.0)), 2, CLOSED_RC
    else:
        ladder, index, method = (series(L=inductance), series(L=n * inductance, Rp=1.0), shunt(C=c)), 1, CLOSED_RL
    known, searched = best_damping(ladder, index), best_damping(ladder, index, others=nothing)
    assert (known.method, searched.method) == (method, NUMERICAL)
    assert searched.resistance == pytest.approx(known.resistance, rel=1e-3)
    assert searched.peak == pytest.approx(known.peak, rel=1e-6)
    assert searched.frequency == pytest.approx(known.frequency, rel=1e-3)


@pytest.mark.parametrize("index", [0, 2, 3, 5])
def test_search_finds_the_lowest_peak_of_a_real_filter(index: int) -> None:
    feed = Feed(0.05, 1e-6)
    best = best_damping(TWO_STAGES, index, feed)
    assert best.method == NUMERICAL
    assert best.resistance is not None
    assert best.peak is not None
    assert best.entered_peak == pytest.approx(dense_peak(TWO_STAGES, feed, 1e2, 1e6), rel=1e-4)
    key = "R" if TWO_STAGES[index].place == "shunt" else "Rp"

    def with_resistance(r: float) -> float:
        part = {name: getattr(TWO_STAGES[index], name) for name in ("place", "R", "L", "C", "Rp", "Cp")} | {key: r}
        return dense_peak((*TWO_STAGES[:index], Branch(**part), *TWO_STAGES[index + 1 :]), feed, 1e2, 1e6)

    assert with_resistance(best.resistance) == pytest.approx(best.peak, rel=1e-4)
    tried = [with_resistance(float(r)) for r in np.geomspace(1e-2, 1e2, 41) * best.resistance]
    assert min(tried) >= best.peak * (1 - 1e-6)


def test_the_feed_is_part_of_the_choke() -> None:
    ladder = (series(L=300e-6), shunt(C=470e-6), shunt(C=1200e-6, R=0.67))
    behind = best_damping(ladder, 2, Feed(0.0, 30e-6))
    assert behind.method == CLOSED_RC
    assert behind.resistance == pytest.approx(best_damping((series(L=330e-6), *ladder[1:]), 2).resistance, rel=1e-12)
    assert best_damping(ladder[1:], 1, Feed(0.0, 330e-6)).resistance == pytest.approx(behind.resistance, rel=1e-12)
    assert best_damping(ladder, 2, Feed(0.1, 30e-6)).method == NUMERICAL


def test_entered_zero_still_means_the_damping_branch() -> None:
    ladder = (series(L=330e-6), shunt(C=470e-6), shunt(C=1200e-6))
    best = best_damping(ladder, 2)
    assert best.method == CLOSED_RC
    assert best.entered == 0.0
    assert best.entered_peak is None  # nothing limits it
    assert best_damping((series(L=330e-6), series(L=330e-6), shunt(C=470e-6)), 1).entered is None


def test_a_resistor_across_the_only_choke_has_no_optimum() -> None:
    """Derived: R, L and C in parallel peak at R whatever R is."""
    ladder = (series(L=330e-6, Rp=1.5), shunt(C=470e-6))
    assert best_damping(ladder, 0) == Damping(
        None, None, None, NO_OPTIMUM, 1.5, pytest.approx(1.5, rel=1e-9), pytest.approx(404.1236, rel=1e-6)
    )


@pytest.mark.parametrize(
    ("ladder", "index"),
    [
        ((shunt(C=1e-6, R=1.0),), 0),  # no choke
        ((series(L=1e-6, Rp=1.0),), 0),  # no capacitor
        ((shunt(C=1e-6), series(L=1e-6, Rp=1.0)), 1),  # choke behind the last capacitor
        ((shunt(C=1e-6, R=1.0), series(L=1e-6), shunt(C=1e-6)), 0),  # shorted by the source
    ],
)
def test_nothing_to_gain(ladder: Ladder, index: int) -> None:
    best = best_damping(ladder, index)
    assert (best.resistance, best.peak, best.frequency, best.method) == (None, None, None, NO_OPTIMUM)


@pytest.mark.parametrize("part", [series(R=1.0), shunt(R=1.0, L=1e-6)])
def test_elements_that_cannot_damp(part: Branch) -> None:
    with pytest.raises(ValueError, match="shunt with C or a series element with L"):
        best_damping((part, shunt(C=1e-6)), 0)


def test_dampers_of_a_real_filter() -> None:
    found = damping_branches(TWO_STAGES)
    assert [(d.index, d.kind, d.main) for d in found] == [
        (2, damping.RC_BESIDE, 1),
        (5, damping.RC_BESIDE, 4),
    ]


@pytest.mark.parametrize(
    ("ladder", "expected"),
    [
        ((), []),
        ((shunt(C=1e-6),), []),
        ((series(L=1e-6),), []),
        ((series(L=4.7e-6), shunt(C=10e-6, R=4e-3), shunt(C=10e-6, R=6e-3)), []),  # two of a bank
        ((series(L=4.7e-6), shunt(C=100e-9), shunt(C=10e-6, R=6e-3)), []),  # a lossless bypass
        ((series(L=330e-6), shunt(C=1200e-6, R=0.67), shunt(C=470e-6)), [(1, 2)]),
        ((shunt(C=14e-6, R=2e-3), shunt(C=33e-6, R=0.18)), [(1, 0)]),  # behind a lead
        ((series(L=330e-6), series(L=330e-6, Rp=0.5), shunt(C=470e-6)), [(1, 2)]),
        ((series(L=330e-6, Rp=2.0), shunt(C=470e-6)), [(0, 1)]),
        ((series(L=330e-6, Rp=900.0), shunt(C=470e-6)), []),  # loss of the core
    ],
)
def test_dampers(ladder: Ladder, expected: list[tuple[int, int]]) -> None:
    assert [(d.index, d.main) for d in damping_branches(ladder)] == expected


@pytest.mark.parametrize(
    ("ladder", "kind"),
    [
        ((), None),
        ((shunt(C=1e-6),), None),
        ((series(L=1e-6),), None),
        ((series(L=1e-6), shunt(C=1e-6)), damping.UNDAMPED),
        ((series(L=1e-6, R=1e-5), shunt(C=1e-6)), damping.UNDAMPED),
        ((series(L=1e-6, R=1e-3), shunt(C=1e-6)), None),
        ((series(L=1e-6, Cp=1e-12), shunt(C=1e-6)), None),
        ((series(L=1e-6), shunt(C=1e-6, L=1e-9)), None),
        ((series(L=1e-6), shunt(C=1e-6), shunt(C=1e-6)), damping.UNDAMPED),
        ((series(L=1e-6), shunt(C=1e-6), shunt(C=4e-6, R=1.0)), damping.RC_BESIDE),
        ((series(L=1e-6), shunt(C=1e-6), shunt(C=4e-6, R=1.0), shunt(C=4e-6, R=2.0)), None),
        ((series(L=1e-6, Rp=1.0), shunt(C=1e-6)), damping.R_ACROSS),
        ((series(L=1e-6), series(L=1e-6, Rp=1.0), shunt(C=1e-6)), damping.R_ACROSS_PART),
        ((series(L=1e-6), shunt(C=1e-6), series(L=1e-6), shunt(C=1e-6)), None),
        ((shunt(C=1e-6), series(L=1e-6), shunt(C=1e-6), series(L=1e-6)), damping.UNDAMPED),
    ],
)
def test_shapes(ladder: Ladder, kind: str | None) -> None:
    found = shape(ladder)
    assert (found.kind if found else None) == kind


def finite(best: Damping) -> bool:
    numbers = (best.resistance, best.peak, best.frequency, best.entered_peak, best.entered_frequency)
    return all(number is None or math.isfinite(number) for number in numbers)


@settings(max_examples=30, deadline=None)
@given(LADDERS, logs(1e-3, 1.0), logs(1e-9, 1e-4))
def test_any_ladder_gets_an_answer(ladder: Ladder, r: float, h: float) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for index in range(min(len(ladder), 3)):
            best = best_damping(ladder, index, Feed(r, h))
            assert finite(best)
            if best.peak is not None and best.entered_peak is not None:
                assert best.peak <= best.entered_peak * (1 + 1e-6)
        damping_branches(ladder)


def test_extremes_get_an_answer_without_a_warning() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for k, part in enumerate(EXTREMES):
            other = EXTREMES[(7 * k + 3) % len(EXTREMES)]
            ladder = (part, other, part, shunt(C=1e-6))
            assert finite(best_damping(ladder, k % 3))
            shape(ladder)
            damping_branches(ladder)
