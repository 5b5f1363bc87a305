"""Pictures in characters: their size, their signs, that no peak is lost, and that nothing makes them fail."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from budget.ui.plot import SYMBOLS, Line, Plot, Trace, draw

LEFT = 8  # columns of axis numbers and the axis


def text(lines: list[Line]) -> list[str]:
    return ["".join(part for part, _ in line) for line in lines]


def body(plot: Plot, width: int = 80, height: int = 24, ascii_only: bool = True) -> list[str]:
    """The rows of the canvas alone, from the top."""
    return [line[LEFT:] for line in text(draw(plot, width, height, ascii_only=ascii_only))[:-2]]


def column(rows: list[str], k: int) -> str:
    """One column from the floor up."""
    return "".join(row[k] for row in reversed(rows))


def cell(share: float, cells: int) -> int:
    return min(cells - 1, max(0, int(share * cells + 1e-9)))


anything = st.floats(allow_nan=True, allow_infinity=True)
tame = st.floats(-1e6, 1e6)
pairs = st.lists(st.tuples(st.one_of(anything, tame), st.one_of(anything, tame)), max_size=30)
kinds = st.sampled_from(["curve", "step", "stems", "dots"])
units = st.sampled_from(["", "frequency", "time", "voltage", "resistance"])


@st.composite
def traces(draw_: st.DrawFn) -> Trace:
    points = draw_(pairs)
    symbol = draw_(st.sampled_from(SYMBOLS + "-^"))
    return Trace("t", symbol, [x for x, _ in points], [y for _, y in points], draw_(kinds), draw_(st.just("trace0")))


ranges = st.one_of(st.none(), st.tuples(st.one_of(anything, tame), st.one_of(anything, tame)))
plots = st.builds(
    Plot,
    st.lists(traces(), max_size=4).map(tuple),
    x_kind=units,
    y_label=st.text("dBuVohm ", max_size=12),
    log_x=st.booleans(),
    log_y=st.booleans(),
    x_range=ranges,
    y_range=ranges,
    y_kind=units,
    cursor=st.one_of(st.none(), st.tuples(anything, anything)),
)
ONE = Trace("t", "a", [1.0], [1.0])


# -- size and signs


@settings(max_examples=300, deadline=None)
@given(plots, st.integers(1, 200), st.integers(1, 60), st.booleans())
@example(Plot((ONE,), x_range=(1e300, -1e300), log_x=False), 80, 24, True)
@example(Plot((ONE,), log_x=False, y_range=(1e20, 1e20), x_range=(1e20, 1e20)), 80, 24, True)
@example(Plot((ONE,), y_range=(math.nan, 1.0), x_range=(0.0, math.inf)), 80, 24, True)
@example(Plot((Trace("t", "a", [1.0, 2.0], [-1.7e308, 1.7e308]),)), 80, 24, True)
@example(Plot((Trace("t", "a", [1.0, 2.0], [1e-320, 2e-320]),), log_y=True), 80, 24, True)
@example(Plot((Trace("t", "a", [5e-324, 1.7e308], [5e-324, 1.7e308]),), log_y=True), 80, 24, True)
def test_the_picture_has_the_size_asked_for_whatever_it_shows(
    plot: Plot, width: int, height: int, ascii_only: bool
) -> None:
    lines = draw(plot, width, height, ascii_only=ascii_only)
    assert [len(line) for line in text(lines)] == [width] * height
    assert not ascii_only or all(line.isascii() for line in text(lines))


@settings(max_examples=60, deadline=None)
@given(plots, st.integers(24, 160), st.integers(5, 50))
def test_the_ascii_twin_differs_in_signs_only(plot: Plot, width: int, height: int) -> None:
    one, two = (text(draw(plot, width, height, ascii_only=a)) for a in (True, False))
    for a, b in zip(one, two, strict=True):
        assert all(x == y or not y.isascii() for x, y in zip(a, b, strict=True))


@pytest.mark.parametrize("points", [(), ((math.nan, 1.0),), ((1.0, math.inf),), ((0.0, 1.0),), ((-5.0, 1.0),)])
def test_what_has_no_point_to_draw_says_so(points: tuple[tuple[float, float], ...]) -> None:
    plot = Plot((Trace("t", "a", [x for x, _ in points], [y for _, y in points]),), empty="no line in the band")
    assert text(draw(plot, 40, 10))[0].rstrip() == "no line in the band"


def test_a_picture_that_is_too_small_keeps_its_size() -> None:
    assert [len(line) for line in text(draw(Plot((ONE,)), 23, 5))] == [23] * 5
    assert [len(line) for line in text(draw(Plot((ONE,)), 80, 4))] == [80] * 4


# -- peaks


@settings(max_examples=60, deadline=None)
@given(
    st.integers(5, 50_000),
    st.integers(0, 2**31),
    st.integers(30, 160),
    st.integers(8, 50),
    st.sampled_from(["curve", "stems", "dots"]),
)
def test_no_peak_is_lost_however_many_points_there_are(
    count: int, seed: int, width: int, height: int, kind: str
) -> None:
    import numpy as np

    random = np.random.default_rng(seed)
    y = random.normal(size=count)
    y[random.integers(count)] += 1000.0  # one sharp peak, one point wide
    x = np.linspace(0.0, 1.0, count)
    rows = body(
        Plot(
            (Trace("t", "a", x.tolist(), y.tolist(), kind),), log_x=False, x_range=(0.0, 1.0), y_range=(-10.0, 1100.0)
        ),
        width,
        height,
    )
    cells, levels = width - LEFT, height - 2
    tops: dict[int, float] = {}
    for a, b in zip(x.tolist(), y.tolist(), strict=True):
        k = cell(a, cells)
        tops[k] = max(tops.get(k, -math.inf), b)
    for k, top in tops.items():
        seen = column(rows, k).rindex("a")
        wanted = cell((top + 10.0) / 1110.0, levels)
        assert seen >= wanted if kind == "curve" else seen == wanted
    assert any("a" in row for row in rows[: levels - cell(0.85, levels)])


@settings(max_examples=30, deadline=None)
@given(
    st.lists(
        st.tuples(st.sampled_from(["curve", "step"]), st.lists(st.floats(0.0, 1.0), min_size=16, max_size=16)),
        min_size=2,
        max_size=4,
    )
)
def test_the_highest_point_of_every_curve_is_seen_among_the_others(curves: list[tuple[str, list[float]]]) -> None:
    x = [(k + 0.5) / 16 for k in range(16)]
    made = tuple(Trace(str(n), SYMBOLS[n], x, y, kind) for n, (kind, y) in enumerate(curves))
    plot = Plot(made, log_x=False, x_range=(0.0, 1.0), y_range=(0.0, 1.0))
    rows = body(plot, 24, 18)
    alone = {t.symbol: body(replace(plot, traces=(t,)), 24, 18) for t in made}
    for k in range(16):
        tops = {symbol: column(lines, k).rindex(symbol) for symbol, lines in alone.items()}
        for level in set(tops.values()):
            assert column(rows, k)[level] in {symbol for symbol, top in tops.items() if top == level}


def test_curves_that_lie_upon_each_other_are_both_seen() -> None:
    one = Trace("one", "a", [0.0, 1.0], [1.0, 1.0])
    rows = body(Plot((one, replace(one, symbol="b"), replace(one, symbol="c")), log_x=False, x_range=(0.0, 1.0)))
    line = next(row for row in rows if row.strip())
    assert {line.count(s) for s in "abc"} == {24}


@given(st.integers(2, 400))
def test_a_limit_line_has_no_gap(count: int) -> None:
    f = [10e3 * 1000.0 ** (k / (count - 1)) for k in range(count)]
    levels = [94.0 - 34.0 * k / (count - 1) for k in range(count)]
    rows = body(Plot((Trace("limit", "-", f, levels, "step"),), x_range=(10e3, 10e6)))
    assert all(column(rows, k).strip() for k in range(72))


def test_a_step_down_is_a_vertical_stroke() -> None:
    rows = body(Plot((Trace("s", "-", [0.0, 0.5, 0.5, 1.0], [10.0, 10.0, 0.0, 0.0], "step"),), log_x=False))
    assert column(rows, 10).count("-") == 1
    assert column(rows, 60).count("-") == 1
    assert max(column(rows, k).count("-") for k in (35, 36, 37)) > 15


@given(st.sampled_from(["curve", "step"]), st.integers(1, 60))
def test_a_curve_beyond_the_range_leaves_by_the_edge(kind: str, far: int) -> None:
    rows = body(
        Plot(
            (Trace("t", "a", [0.0, 0.5, 1.0], [0.0, far * 10.0, 0.0], kind),),
            log_x=False,
            x_range=(0.0, 1.0),
            y_range=(0.0, 10.0),
        )
    )
    assert column(rows, 36)[-1] == "a"
    assert rows[-1][0] == "a"


def test_a_gap_of_nan_is_a_gap() -> None:
    rows = body(Plot((Trace("t", "a", [0.0, 0.4, 0.5, 0.6, 1.0], [1.0, 1.0, math.nan, 1.0, 1.0]),), log_x=False))
    joined = "".join(column(rows, k).strip() or " " for k in range(72)).strip()
    assert set(joined) == {"a", " "}
    assert joined.split() == ["a" * 27, "a" * 27]


def test_points_at_zero_and_below_are_left_out_of_a_logarithmic_axis() -> None:
    rows = body(Plot((Trace("t", "a", [-1.0, 0.0, 1.0, 10.0, 100.0], [5.0, 9.0, 1.0, 2.0, 3.0], "dots"),)))
    assert sum(row.count("a") for row in rows) == 3
    rows = body(Plot((Trace("t", "a", [1.0, 10.0, 100.0], [0.0, 1.0, 10.0], "dots"),), log_y=True))
    assert sum(row.count("a") for row in rows) == 2


# -- kinds


def test_stems_stand_on_the_floor_and_dots_do_not() -> None:
    for kind, stem in (("stems", "."), ("dots", " ")):
        rows = body(Plot((Trace("t", "a", [0.25, 0.75], [5.0, 9.0], kind),), log_x=False, y_range=(0.0, 10.0)))
        at = next(k for k in range(72) if "a" in column(rows, k))
        assert column(rows, at).rstrip() == stem * 11 + "a"
    assert "\u00b7" in "".join(body(Plot((Trace("t", "a", [1.0, 2.0], [0.0, 9.0], "stems"),)), 80, 24, False))


def test_stems_below_the_floor_or_beside_the_axis_are_not_drawn() -> None:
    plot = Plot((Trace("t", "a", [0.5, 0.6, 7.0], [-5.0, 5.0, 5.0], "stems"),), log_x=False)
    rows = body(replace(plot, x_range=(0.0, 1.0), y_range=(0.0, 10.0)))
    assert sum(row.count("a") for row in rows) == 1


@pytest.mark.parametrize("value", [0.0, 1.0, -3.0, 1e-12, 1e12, 123456.789])
def test_a_constant_curve_is_one_level_line(value: float) -> None:
    rows = body(Plot((Trace("t", "a", [0.0, 1.0], [value, value]),), log_x=False, x_range=(0.0, 1.0)))
    assert [row for row in rows if row.strip()] == ["a" * 72]


@pytest.mark.parametrize("kind", ["curve", "step", "stems", "dots"])
def test_one_point_is_seen(kind: str) -> None:
    for log in (True, False):
        rows = body(Plot((Trace("t", "a", [7.0], [3.0], kind),), log_x=log, log_y=log))
        assert sum(row.count("a") for row in rows) == 1


# -- axes


def ticks(plot: Plot, width: int = 80) -> dict[int, str]:
    """The columns of the ticks below, with the numbers beneath."""
    lines = text(draw(plot, width, 24, ascii_only=True))
    axis, labels = lines[-2], lines[-1]
    return {k: labels[max(0, k - 3) : k + 4].strip() for k in range(LEFT, width) if axis[k] == "+"}


def test_the_ticks_of_a_logarithmic_axis_stand_at_the_decades() -> None:
    for low, high, names in (
        (10e3, 10e6, ["10k", "100k", "1M", "10M"]),
        (1e3, 100e6, ["1k", "10k", "100k", "1M", "10M", "100M"]),
        (10.0, 1e6, ["10", "100", "1k", "10k", "100k", "1M"]),
    ):
        found = ticks(Plot((Trace("t", "a", [low, high], [0.0, 1.0]),), x_range=(low, high)))
        for k, (at, label) in enumerate(found.items()):
            share = math.log10(10.0 ** (math.log10(low) + k) / low) / math.log10(high / low)
            assert at == LEFT + cell(share, 72)
            assert label in (names[k], f"{names[k]} Hz"[:7])
        assert len(found) == len(names)


@given(st.floats(1.0, 1e9), st.floats(1.01, 2.0))
def test_a_narrow_logarithmic_axis_has_ticks_too(low: float, ratio: float) -> None:
    found = ticks(Plot((Trace("t", "a", [low, low * ratio], [0.0, 1.0]),), x_range=(low, low * ratio)))
    assert len(found) >= 2


@given(st.floats(-1e5, 1e5), st.floats(0.01, 1e5))
def test_the_numbers_of_a_linear_axis_are_where_they_say(low: float, size: float) -> None:
    plot = Plot((Trace("t", "a", [1.0, 2.0], [low, low + size]),), y_range=(low, low + size))
    lines = text(draw(plot, 80, 24, ascii_only=True))[:-2]
    found = [(21 - k, float(line[: LEFT - 1])) for k, line in enumerate(lines) if line[: LEFT - 1].strip()]
    assert len(found) >= 2
    for level, value in found:
        assert low + size * (level - 0.01) / 22 - 1e-3 * abs(value) <= value
        assert value <= low + size * (level + 1.01) / 22 + 1e-3 * abs(value)


@pytest.mark.parametrize(("low", "high"), [(100.001, 100.009), (-0.00012, 0.00034), (1e-9, 9e-9), (99990.0, 100010.0)])
def test_no_two_numbers_of_an_axis_are_the_same(low: float, high: float) -> None:
    lines = text(draw(Plot((Trace("t", "a", [1.0, 2.0], [low, high]),)), 80, 24, ascii_only=True))[:-2]
    labels = [line[: LEFT - 1].strip() for line in lines if line[: LEFT - 1].strip()]
    assert len(labels) >= 2
    assert len(set(labels)) == len(labels)


def test_axis_numbers_have_their_prefix_and_the_axis_its_unit() -> None:
    last = text(draw(Plot((Trace("t", "a", [0.0, 0.035], [0.0, 1.0]),), "time", "A", log_x=False), 80, 24))[-1]
    assert last.startswith("A ")
    assert last.rstrip().endswith("s")
    assert "10m" in last
    last = text(draw(Plot((Trace("t", "a", [1e4, 5e7], [0.0, 1.0]),), y_label="dBuV"), 80, 24))[-1]
    assert last.startswith("dBuV ")
    assert last.rstrip().endswith("Hz")


# -- the cursor


@given(st.floats(0.001, 0.999), st.floats(0.0, 1.0), st.integers(24, 160), st.integers(5, 50))
def test_the_cursor_stands_in_its_column_from_top_to_bottom(x: float, y: float, width: int, height: int) -> None:
    plot = Plot((Trace("t", "a", [0.0, 1.0], [0.0, 1.0]),), log_x=False, x_range=(0.0, 1.0), y_range=(0.0, 1.0))
    lines = draw(replace(plot, cursor=(x, y)), width, height, ascii_only=True)[:-2]
    k = cell(x, width - LEFT)
    for n, line in enumerate(lines):
        cells = [(sign, tone) for part, tone in line for sign in part][LEFT:]
        here = height - 3 - n == cell(y, height - 2)
        assert (cells[k][1] == "cursor") == here
        assert cells[k][0] in ("+a" if here else ":a")
        assert all(tone != "cursor" for m, (_, tone) in enumerate(cells) if m != k)


@pytest.mark.parametrize("mark", [(5.0, 0.5), (-1.0, 0.5), (math.nan, 0.5), (0.0, 0.5)])
def test_a_cursor_beside_the_picture_is_not_drawn(mark: tuple[float, float]) -> None:
    plot = Plot((Trace("t", "a", [0.1, 1.0], [0.0, 1.0]),))
    assert draw(replace(plot, cursor=mark), 80, 24) == draw(plot, 80, 24)


@pytest.mark.parametrize("y", [math.nan, math.inf, -math.inf, 1e9, -1e9])
def test_a_cursor_above_or_below_keeps_its_column(y: float) -> None:
    plot = Plot((Trace("t", "a", [0.1, 1.0], [0.0, 1.0]),), cursor=(0.5, y))
    assert any(tone == "cursor" for line in draw(plot, 80, 24) for _, tone in line)
