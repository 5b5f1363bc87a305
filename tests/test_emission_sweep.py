"""The worst tuning of the receiver against trying every candidate and many others, one line at a time."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine.model import LimitLine
from budget.engine.sweep import largest, plan, worst
from tests.emission_reference import brute_margin, limit_value

Line = tuple[int, float, float, float]  # clock, seen from, seen to, level

LIMITS = (
    LimitLine("flat", "dBuV", "lisn-50uH", ((10.0, 60.0), (100.0, 60.0))),
    LimitLine("falls", "dBuV", "lisn-50uH", ((10.0, 94.0), (50.0, 60.0), (100.0, 60.0))),
    LimitLine(
        "steps",
        "dBuV",
        "lisn-50uH",
        ((10.0, 50.0), (30.0, 70.0), (30.0, 40.0), (60.0, 40.0), (60.0, 66.0), (100.0, 20.0)),
    ),
    LimitLine("point", "dBuV", "lisn-50uH", ((50.0, 30.0), (50.0, 40.0))),
)


@st.composite
def lines(draw: st.DrawFn) -> list[Line]:
    """Lines on a coarse raster, so that ends often coincide; most reach into 10 to 100 Hz and overlap."""
    found = []
    for _ in range(draw(st.integers(1, 25))):
        start = draw(st.integers(5, 100))
        end = max(10, start + draw(st.integers(0, 60)))
        level = draw(st.sampled_from([0.0, 1e-6, 1e-6, 3e-6, 0.5e-3, 2.0]))
        found.append((draw(st.integers(0, 4)), float(start), float(end), level))
    return found


def tune(limit: LimitLine, given_lines: list[Line]) -> tuple[tuple[float, float] | None, tuple[float, float] | None]:
    first, last = limit.points[0][0], limit.points[-1][0]
    some = sorted(x for x in given_lines if x[2] >= first and x[1] <= last)
    clock, start, end, level = (np.array([x[k] for x in some], dtype=np.intp if k == 0 else float) for k in range(4))
    sweep = plan(limit, clock, 5, start, end)
    found = worst(sweep, level[None, :])
    return tuple(t[0] and (t[0].margin, t[0].frequency) for t in found)  # type: ignore[return-value]


@given(lines(), st.sampled_from(LIMITS))
@settings(deadline=None, max_examples=150)
def test_the_worst_tuning_is_that_of_trying_all(some: list[Line], limit: LimitLine) -> None:
    for got, rss in zip(tune(limit, some), (False, True), strict=True):
        wanted = brute_margin(limit, some, rss)
        if wanted is None or got is None:
            assert wanted is got
            continue
        assert got[0] == pytest.approx(wanted[0], abs=1e-9)
        assert got[1] == wanted[1]
        between = np.linspace(limit.points[0][0], limit.points[-1][0], 173).tolist()
        elsewhere = brute_margin(limit, some, rss, between)
        assert elsewhere is not None
        assert got[0] <= elsewhere[0] + 1e-9


@given(lines())
@settings(deadline=None, max_examples=50)
def test_several_corners_at_once_are_as_one_by_one(some: list[Line]) -> None:
    limit = LIMITS[2]
    some = sorted(x for x in some if x[2] >= 10.0 and x[1] <= 100.0)
    clock, start, end, level = (np.array([x[k] for x in some], dtype=np.intp if k == 0 else float) for k in range(4))
    sweep = plan(limit, clock, 5, start, end)
    scaled = level * np.array([[1.0], [0.3], [0.0]])
    for both, power in zip(worst(sweep, scaled), (1, 2), strict=True):
        assert both[2] is None
        for row in (0, 1):
            alone = worst(sweep, scaled[row : row + 1])[power - 1][0]
            assert (alone is None) == (both[row] is None)
            if alone is not None and both[row] is not None:
                assert (alone.margin, alone.frequency) == (both[row].margin, both[row].frequency)  # type: ignore[union-attr]


def test_a_line_counts_from_end_to_end_inclusive() -> None:
    touching = [(0, 20.0, 30.0, 1e-3), (1, 30.0, 40.0, 1e-3)]
    got = tune(LIMITS[0], touching)
    assert got[0] == pytest.approx((60 - 20 * math.log10(2e3), 30.0))
    apart = [(0, 20.0, 30.0, 1e-3), (1, 30.0001, 40.0, 1e-3)]
    assert tune(LIMITS[0], apart)[0] == pytest.approx((0.0, 20.0))


def test_ends_that_meet_but_for_rounding_touch() -> None:
    x = 0.1 + 0.2  # 0.30000000000000004
    got = tune(LIMITS[0], [(0, 20.0, 100 * 0.3, 1e-3), (1, 100 * x, 40.0, 1e-3)])
    assert got[0] is not None
    assert got[0][0] == pytest.approx(60 - 20 * math.log10(2e3))


def test_one_clock_never_adds_to_itself() -> None:
    got = tune(LIMITS[0], [(0, 20.0, 50.0, 1e-3), (0, 20.0, 50.0, 1e-3), (0, 30.0, 40.0, 2e-3)])
    assert got[0] == pytest.approx((60 - 20 * math.log10(2e3), 30.0))


def test_lines_outside_count_as_far_as_they_reach_in() -> None:
    got = tune(LIMITS[0], [(0, 2.0, 10.0, 1e-3)])
    assert got[0] == pytest.approx((0.0, 10.0))


def test_the_lower_value_holds_at_a_step() -> None:
    got = tune(LIMITS[2], [(0, 60.0, 70.0, 1e-3)])
    assert got[0] is not None
    assert got[0][1] == 60.0
    assert got[0][0] == pytest.approx(limit_value(LIMITS[2], 60.0) - 60.0)


def test_a_wide_range_of_levels_does_not_hide_a_small_line_that_decides() -> None:
    limit = LimitLine("wide", "dBuV", "lisn-50uH", ((10.0, 300.0), (50.0, 300.0), (50.0, 0.0), (100.0, 0.0)))
    lines_ = [(0, 20.0, 30.0, 1e8)] + [(1, 60.0 + k, 60.5 + k, 1e-7 * (1 + k / 1e7)) for k in range(30)]
    got = tune(limit, lines_)
    wanted = brute_margin(limit, lines_, rss=False)
    assert got[0] == pytest.approx(wanted)


def test_deep_overlap_within_a_clock() -> None:
    rng = np.random.default_rng(1)
    start = np.sort(rng.uniform(5, 60, 3000))
    end = np.maximum(start + rng.uniform(0, 40, 3000), 10.0)
    level = rng.uniform(0, 1, 3000)
    sweep = plan(LIMITS[0], np.zeros(3000, dtype=np.intp), 1, start, end)
    table = largest(sweep, level[None, :])[0]
    for q in rng.integers(0, sweep.candidate.size, 200).tolist():
        f = sweep.candidate[q]
        inside = (sweep.start <= f) & (sweep.end >= f)
        slot = int(np.searchsorted(sweep.slot, q, side="right")) - 1
        assert table[slot] == (level[inside].max() if inside.any() else 0.0)
