"""Check rows from the DC operating points, and what evaluate adds to them."""

from __future__ import annotations

import json
import math
from dataclasses import asdict, replace
from typing import Any

import pytest
from hypothesis import given, settings

from budget.engine.checks import CheckRow, worst_status
from budget.engine.evaluate import Result
from budget.engine.evaluate import evaluate_dc as evaluate
from budget.engine.model import Bus, Case, Converter, Filter, Load, Project, Rules
from tests.dc_trees import converter, table_filter, tree, trees

ORDER = [
    "allocation",
    "operating point",
    "bus current",
    "filter current",
    "filter voltage",
    "converter load",
    "input low",
    "input high",
]


def project(**fields: Any) -> Project:
    """A stiff 20/25/40 V bus, filters A and B, converters X (100 W behind A) and Y (50 W behind B), one case."""
    usual: dict[str, Any] = {
        "bus": Bus(20.0, 25.0, 40.0, rating=10.0),
        "filters": (table_filter("A", rated_current=8.0, max_voltage=50.0), table_filter("B", rated_current=4.0)),
        "converters": (
            converter("X", 100.0, "A", rated_power=125.0, min_input=16.0, max_input=40.0),
            converter("Y", 50.0, "B", min_input=25.0, max_input=32.0),
        ),
        "cases": (Case("full"),),
    }
    return Project(**{**usual, **fields})


def row(result: Result | Project, check: str, subject: str = "bus") -> CheckRow:
    rows = (evaluate(result) if isinstance(result, Project) else result).checks
    found = [r for r in rows if (r.check, r.subject) == (check, subject)]
    assert len(found) == 1
    return found[0]


def with_filter(p: Project, **fields: Any) -> Project:
    return replace(p, filters=(replace(p.filters[0], **fields), *p.filters[1:]))


def with_converter(p: Project, **fields: Any) -> Project:
    return replace(p, converters=(replace(p.converters[0], **fields), *p.converters[1:]))


def with_bus(p: Project, **fields: Any) -> Project:
    return replace(p, bus=replace(p.bus, **fields))


def test_rows_stand_in_the_order_of_the_checks_and_of_the_project() -> None:
    rows = [(r.check, r.subject) for r in evaluate(project()).checks]
    assert rows == sorted(rows, key=lambda r: ORDER.index(r[0]))
    assert [s for c, s in rows if c == "filter current"] == ["A", "B"]
    assert [s for c, s in rows if c == "input high"] == ["X", "Y"]
    assert len(rows) == 2 + 1 + 1 + 2 + 2 + 2 + 2 + 2


def test_bus_current_is_worst_at_the_low_line() -> None:
    r = row(project(), "bus current")
    assert (r.case, r.line, r.value, r.limit, r.unit) == ("full", "low", 7.5, 10.0, "A")
    assert (r.margin, r.margin_unit, r.status) == (0.25, "ratio", "ok")


@pytest.mark.parametrize(
    ("rating", "share", "status", "margin"),
    [
        (10.0, 1.0, "ok", 0.25),
        (10.0, 0.75, "ok", 0.25),  # exactly the wanted share
        (10.0, 0.7, "thin", 0.25),
        (7.5, 1.0, "ok", 0.0),  # exactly the limit
        (7.5, 0.5, "thin", 0.0),
        (6.0, 1.0, "fail", -0.25),
    ],
)
def test_status_and_margin(rating: float, share: float, status: str, margin: float) -> None:
    r = row(with_bus(project(rules=Rules(bus_load=share)), rating=rating), "bus current")
    assert (r.status, r.margin, r.wanted) == (status, margin, rating * share)


def test_the_worst_case_is_named_and_the_first_wins_a_tie() -> None:
    cases = (Case("idle", load=(("X", Load("share", 0.1)),)), Case("one"), Case("two"))
    r = row(project(cases=cases), "filter current", "A")
    assert (r.case, r.line, r.value) == ("one", "low", 5.0)
    high = row(project(cases=cases), "input high", "X")
    assert (high.case, high.line) == ("idle", "high")


def test_filter_current_is_held_against_the_derated_rating() -> None:
    p = with_filter(
        with_bus(project(rules=Rules(filter_load=0.5)), temperature=75.0), derate_from=50.0, derate_to=100.0
    )
    r = row(p, "filter current", "A")
    assert (r.value, r.limit, r.wanted, r.status, r.margin) == (5.0, 4.0, 2.0, "fail", -0.25)
    half_entered = with_filter(p, derate_to=None)
    assert row(half_entered, "filter current", "A").limit == 8.0


def test_published_filter_share() -> None:
    """EEE-INST-002 (NASA, May 2003), section F2: EMI filters carry at most half of their rated current."""
    p = project(rules=Rules(filter_load=0.5))
    assert row(with_filter(p, rated_current=10.0), "filter current", "A").status == "ok"
    assert row(with_filter(p, rated_current=9.9), "filter current", "A").status == "thin"


def test_a_rating_derated_to_nothing_fails_without_a_ratio() -> None:
    p = with_filter(with_bus(project(), temperature=125.0), derate_from=50.0, derate_to=100.0)
    r = row(p, "filter current", "A")
    assert (r.value, r.limit, r.margin, r.margin_unit, r.status) == (5.0, 0.0, None, "", "fail")
    off = replace(p, cases=(Case("off", load=(("X", Load("off")),)),))
    assert row(off, "filter current", "A").status == "ok"  # nothing flows


def test_filter_voltage_is_the_high_line() -> None:
    r = row(project(), "filter voltage", "A")
    assert (r.case, r.line, r.value, r.limit, r.margin, r.status) == (None, "high", 40.0, 50.0, 0.2, "ok")
    assert row(with_filter(project(), max_voltage=39.9), "filter voltage", "A").status == "fail"
    missing = row(project(), "filter voltage", "B")
    assert (missing.status, missing.missing, missing.value) == ("no data", ("filter.max_voltage",), 40.0)


def test_converter_load() -> None:
    p = project(rules=Rules(growth=0.25, converter_load=0.9), cases=(Case("a", load=(("X", Load("off")),)), Case("b")))
    r = row(p, "converter load", "X")
    assert (r.case, r.line, r.value, r.limit, r.wanted, r.status) == ("b", None, 125.0, 125.0, 112.5, "thin")
    hot = with_converter(with_bus(p, temperature=75.0), derate_from=50.0, derate_to=100.0)
    assert row(hot, "converter load", "X").limit == 62.5
    assert row(hot, "converter load", "X").status == "fail"


def test_a_sum_that_differs_from_the_rating_by_rounding_alone_is_no_overload() -> None:
    part = converter("X", 1.1 * 3, "A", rated_power=3.3)
    assert 1.1 * 3 > 3.3
    r = row(project(converters=(part,)), "converter load", "X")
    assert (r.status, r.margin, r.remarks) == ("ok", 0.0, ())


def test_load_beyond_the_efficiency_table_is_remarked() -> None:
    p = with_converter(project(cases=(Case("a", load=(("X", Load("off")),)), Case("b"))), efficiency=((0.5, 0.9),))
    result = evaluate(p)
    assert row(result, "converter load", "X").remarks == ("beyond data",)
    assert row(result, "converter load", "Y").remarks == ()
    assert result.warnings == (("beyond data", "X", "b"),)


def test_input_voltage_limits() -> None:
    p = project()
    low = row(p, "input low", "Y")
    assert (low.value, low.limit, low.margin, low.status, low.line) == (20.0, 25.0, -0.2, "fail", "low")
    high = row(p, "input high", "Y")
    assert (high.value, high.limit, high.margin, high.status, high.line) == (40.0, 32.0, -0.25, "fail", "high")
    assert row(p, "input low", "X").margin == 0.25
    assert row(p, "input high", "X").status == "ok"  # at the limit
    bare = with_converter(p, min_input=None, max_input=None)
    assert row(bare, "input low", "X").missing == ("converter.min_input",)
    assert row(bare, "input high", "X").missing == ("converter.max_input",)


def test_input_low_counts_only_where_the_converter_runs() -> None:
    loaded = Case("loaded", load=(("Y", Load("off")),))
    light = Case("light", load=(("X", Load("off")),))
    base = with_bus(project(cases=(loaded, light)), resistance=0.2)
    low = row(base, "input low", "Y")
    assert low.case == "light"
    high = row(base, "input high", "Y")
    assert (high.case, high.value) == ("light", row(base, "input high", "X").value)
    never = row(replace(base, cases=(loaded,)), "input low", "Y")
    assert (never.status, never.value, never.remarks) == ("no data", None, ("never runs",))
    assert row(replace(base, cases=(loaded,)), "input high", "Y").status == "fail"


@pytest.mark.parametrize("home", ["", "gone"])
def test_a_converter_without_a_filter(home: str) -> None:
    result = evaluate(with_converter(project(), filter=home))
    r = row(result, "allocation", "X")
    assert (r.status, r.value, r.case, r.margin) == ("fail", None, None, None)
    assert row(result, "allocation", "Y").status == "ok"
    for check in ("converter load", "input low", "input high"):
        r = row(result, check, "X")
        assert (r.status, r.value, r.remarks) == ("no data", None, ("not allocated",))
    assert result.status == "fail"


def test_corners_without_a_point_are_left_out_and_said() -> None:
    p = tree((11.0, 12.0, 13.0), 1.0, [(0.0, [(33.0, 0.0)])], (Case("a", duration=60.0), Case("b")))
    p = with_bus(with_filter(with_converter(p, min_input=5.0), rated_current=9.0), rating=9.0)
    result = evaluate(p)
    r = row(result, "operating point")
    assert (r.status, r.case, r.line, r.value, r.margin) == ("fail", "a", "low", None, None)
    for check, subject in (("bus current", "bus"), ("filter current", "F0"), ("input low", "C0.0")):
        r = row(result, check, subject)
        assert (r.status, r.line, r.remarks) == ("ok", "nominal", ("unsolved corners left out",))
    assert row(result, "converter load", "C0.0").remarks == ()
    assert result.status == "fail"
    assert result.energy[0].charge_ah is not None


def test_no_operating_point_anywhere() -> None:
    p = tree(12.0, 1.0, [(0.0, [(40.0, 0.0)])], (Case("a", duration=60.0),))
    p = with_bus(with_filter(with_converter(p, min_input=5.0, max_input=20.0), rated_current=9.0), rating=9.0)
    result = evaluate(p)
    for check, subject in (
        ("bus current", "bus"),
        ("filter current", "F0"),
        ("input low", "C0.0"),
        ("input high", "C0.0"),
    ):
        r = row(result, check, subject)
        assert (r.status, r.value, r.case, r.remarks) == ("no data", None, None, ("no operating point",))
        assert r.limit is not None
    assert row(result, "converter load", "C0.0").status == "ok"
    assert (result.energy[0].energy_wh, result.energy[0].charge_ah) == (None, None)


def test_no_data_keeps_the_value_and_does_not_change_the_status() -> None:
    result = evaluate(tree(20.0, 0.0, [(0.0, [(100.0, 0.0)])]))
    r = row(result, "bus current")
    assert (r.status, r.missing, r.value, r.line) == ("no data", ("bus.rating",), 5.0, "low")
    assert (r.limit, r.wanted, r.margin, r.margin_unit) == (None, None, None, "")
    assert row(result, "filter current", "F0").missing == ("filter.rated_current",)
    assert result.status == "ok"


def test_overall_status_is_the_worst() -> None:
    def rows(*statuses: str) -> list[CheckRow]:
        return [CheckRow("x", "y", None, None, None, None, None, "", None, "", s) for s in statuses]

    assert worst_status(rows("ok", "no data")) == "ok"
    assert worst_status(rows("ok", "thin", "no data")) == "thin"
    assert worst_status(rows("thin", "fail", "ok")) == "fail"
    assert worst_status([]) == "ok"


def test_energy_and_charge_at_the_source_and_the_nominal_line() -> None:
    """Derived: 20 W at 10 V behind 1 ohm from 12 V is 2 A, so 24 W at the source; for half an hour 12 Wh and 1 Ah."""
    cases = (Case("a", duration=1800.0), Case("b"), Case("c", duration=0.0))
    energy = evaluate(tree((11.0, 12.0, 13.0), 1.0, [(0.0, [(20.0, 0.0)])], cases)).energy
    assert [e.case for e in energy] == ["a", "c"]
    assert energy[0].energy_wh == pytest.approx(12.0, rel=1e-13)
    assert energy[0].charge_ah == pytest.approx(1.0, rel=1e-13)
    assert energy[1].energy_wh == 0.0


def test_a_bare_bus() -> None:
    result = evaluate(Project(Bus(20.0, 28.0, 32.0), cases=(Case("full"),)))
    assert [r.check for r in result.checks] == ["operating point", "bus current"]
    assert result.status == "ok"
    only_filter = evaluate(Project(Bus(20.0, 28.0, 32.0), (Filter("A", rated_current=1.0),), (), (Case("full"),)))
    assert row(only_filter, "filter current", "A").value == 0.0
    lone: Converter = converter("X", 10.0)
    assert row(Project(Bus(20.0, 28.0, 32.0), (), (lone,), (Case("full"),)), "allocation", "X").status == "fail"


@settings(max_examples=60, deadline=None)
@given(trees(stress=3.0))
def test_rows_agree_with_the_operating_points_and_hold_no_nan(p: Project) -> None:
    p = replace(
        p,
        bus=replace(p.bus, rating=5.0),
        filters=tuple(replace(f, rated_current=2.0) for f in p.filters),
        converters=tuple(replace(c, min_input=0.8 * p.bus.low, max_input=p.bus.nominal) for c in p.converters),
    )
    result = evaluate(p)
    json.dumps([asdict(r) for r in result.checks], allow_nan=False)
    o = result.operating
    corners = [(c, n) for c in range(len(p.cases)) for n in range(3) if o.solved[c, n]]
    assert row(result, "operating point").status == ("ok" if o.solved.all() else "fail")
    for k, f in enumerate(p.filters):
        value = row(result, "filter current", f.id).value
        assert value == max((float(o.filter_current[c, n, k]) for c, n in corners), default=None)
    for k, part in enumerate(p.converters):
        seen = [float(o.voltage[c, n, k]) for c, n in corners]
        r = row(result, "input high", part.id)
        assert r.value == max(seen, default=None)
        low = [float(o.voltage[c, n, k]) for c, n in corners if o.running[c, k]]
        r = row(result, "input low", part.id)
        assert r.value == min(low, default=None)
        if r.value is not None and r.limit is not None:
            assert (r.status == "fail") == (r.value < r.limit * (1 - 1e-12))
            assert r.margin is not None
            assert math.copysign(1.0, r.margin) == (-1.0 if r.status == "fail" else 1.0)
