"""Emissions of whole projects against the same project worked out by other ways, and what becomes of odd input."""

from __future__ import annotations

import json
import math
import warnings
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from budget.engine.checks import CheckRow
from budget.engine.emission import Emission, levels, shares
from budget.engine.evaluate import Result, evaluate_dc, with_emissions
from budget.engine.ladder import admittance, elements, impedance
from budget.engine.lines import lines_of, unfiltered
from budget.engine.model import (
    Branch,
    Bus,
    Case,
    Chop,
    CommonMode,
    Converter,
    Filter,
    Lead,
    LimitLine,
    Load,
    Output,
    Project,
    Ripple,
    Rules,
)
from budget.engine.operating import operating_points
from budget.report import tables
from tests import emission_reference as other

warnings.simplefilter("error")

FLAT = LimitLine("flat", "dBuV", "lisn-50uH", ((10e3, 60.0), (10e6, 60.0)), ((10e3, 150e3, 1e3), (150e3, 30e6, 10e3)))
STEPS = LimitLine(
    "steps",
    "dBuV",
    "lisn-5uH",
    ((150e3, 74.0), (500e3, 68.0), (2e6, 68.0), (2e6, 62.0), (3e6, 70.0)),
    ((9e3, 150e3, 200.0), (150e3, 1e6, 9e3), (1e6, 30e6, 120e3)),
)
CURRENT = LimitLine("current", "dBuA", "cap-10uF", ((100e3, 86.0), (2e6, 20.0), (3e6, 20.0)), ((1e3, 30e6, 10e3),))


def small(limit: LimitLine = FLAT, rules: Rules | None = None, **fields: Any) -> Project:
    """One converter of 100 kHz behind a plain filter on a stiff 28 V bus."""
    unit: dict[str, Any] = {
        "rated_power": 50.0,
        "output": (Output("out", 10.0, 4.0),),
        "efficiency": ((1.0, 0.9),),
        "filter": "F",
        "frequency": 100e3,
        "chop": Chop(0.4, 50e-9, 50e-9, 0.2),
        **fields,
    }
    ladder = (Branch("series", L=10e-6, R=0.01), Branch("shunt", C=10e-6, R=0.05))
    return Project(
        Bus(20.0, 28.0, 32.0),
        (Filter("F", dm=ladder),),
        (Converter("X", **unit),),
        (Case("full"),),
        rules or Rules(),
        (limit,),
        (limit,),
    )


def evaluate(project: Project, lines: tuple[int, ...] = (0, 1, 2), previous: Result | None = None) -> Result:
    """The part of ``evaluate`` that this file is about."""
    return with_emissions(evaluate_dc(project, lines), previous)


def check(result: Result, name: str = "flat") -> CheckRow:
    found = [row for row in result.checks if row.check == f"emission {name}"]
    assert len(found) == 1
    return found[0]


def found_rows(result: Result) -> tuple[Emission, ...]:
    assert result.emissions is not None
    return result.emissions.rows


@pytest.mark.parametrize("limit", [FLAT, STEPS, CURRENT], ids=lambda limit: limit.name)
@pytest.mark.parametrize("seed", range(4))
def test_a_random_project_agrees_with_dense_matrices_samples_and_a_stepped_receiver(
    seed: int, limit: LimitLine
) -> None:
    limit = replace(limit, points=tuple((min(f, 3e6), level) for f, level in limit.points))  # the other way is slow
    project = other.random_project(np.random.default_rng(seed), (limit,))
    result = evaluate(project)
    operating = result.operating
    rows = {(row.case, row.line): row for row in found_rows(result)}
    clocks = result.emissions.spectra[0].clocks if result.emissions else ()
    for c, line in ((0, 0), (1, 2)):
        row = rows[project.cases[c].id, ("low", "nominal", "high")[line]]
        assert not row.failures
        lines = other.project_lines(
            project, limit, operating.voltage[c, line], operating.current[c, line], operating.running[c]
        )
        spans = [(g, a, b, level) for g, _, a, b, level in lines]
        for rss, margin in ((False, row.margin_arithmetic), (True, row.margin_rss)):
            wanted = other.brute_margin(limit, spans, rss)
            if wanted is None:
                assert margin is None
                continue
            assert margin == pytest.approx(wanted[0], abs=1e-3)
            if rss == (project.rules.combine == "rss"):
                assert row.margin == margin
                assert row.frequency == pytest.approx(wanted[1], rel=1e-9)
                assert row.limit_level is not None
                assert row.level is not None
                assert row.limit_level - row.level == pytest.approx(margin)
                seen: dict[int, tuple[float, int]] = {}
                for g, n, a, b, level in lines:
                    if level > 10**-14.5 and a * (1 - 1e-12) <= row.frequency <= b * (1 + 1e-12):
                        seen[g] = max(seen.get(g, (0.0, 0)), (level, n))
                assert {x.clock for x in row.contributors if x.level > -170} == {clocks[g].name for g in seen}
                for part in row.contributors:
                    level, n = seen[next(g for g in seen if clocks[g].name == part.clock)]
                    assert part.level == pytest.approx(20 * math.log10(level / 1e-6), abs=1e-3)
                    assert part.harmonic == n


@pytest.mark.parametrize("seed", range(3))
def test_levels_for_the_views(seed: int) -> None:
    limit = replace(FLAT, points=((10e3, 60.0), (2e6, 60.0)))
    project = other.random_project(np.random.default_rng(seed + 100), (limit,))
    operating = operating_points(project)
    spectrum = lines_of(project, limit)
    corners = [(0, 1), (1, 0)]
    for lines, alone in ((spectrum, False), (unfiltered(project, spectrum), True)):
        got = levels(project, operating, lines, corners)
        np.testing.assert_allclose(got.dm + got.cm, got.level)
        for r, (c, k) in enumerate(corners):
            wanted = other.project_lines(
                project, limit, operating.voltage[c, k], operating.current[c, k], operating.running[c], alone=alone
            )
            assert len(wanted) == spectrum.frequency.size
            key = sorted(range(len(wanted)), key=lambda j: (wanted[j][0],))
            a = sorted((wanted[j][0], round(wanted[j][2]), wanted[j][4]) for j in key)
            b = sorted(
                (int(g), round(x), y)
                for g, x, y in zip(spectrum.clock, spectrum.low - spectrum.bandwidth / 2, got.level[r], strict=True)
            )
            np.testing.assert_allclose([x[2] for x in b], [x[2] for x in a], rtol=1e-4, atol=1e-16)


def test_shares_of_a_line_with_one_member_are_its_level() -> None:
    project = small(cm=CommonMode(30e-12, 50.0, 20e-9, 20e-9))
    result = evaluate(project)
    assert result.emissions is not None
    spectrum = result.emissions.spectra[0]
    for index in (0, 4, 30):
        got = levels(project, result.operating, spectrum, [(0, 0), (0, 1), (0, 2)])
        for line in range(3):
            own = shares(project, result.operating, spectrum, np.array([index]), (0, line))
            assert own.shape == (1, 1)
            np.testing.assert_allclose(own[0], got.level[line, index], rtol=1e-12)


def test_two_in_opposite_phase_leave_even_harmonics_only() -> None:
    project = small(clock="both")
    twin = replace(project.converters[0], id="Y", phase=180.0)
    pair = replace(project, converters=(project.converters[0], twin))
    operating = operating_points(pair)
    spectrum = lines_of(pair, FLAT)
    got = levels(pair, operating, spectrum, [(0, 1)]).level[0]
    own = shares(pair, operating, spectrum, np.array([1]), (0, 1))[0]
    assert got[0] < 1e-9 * got[1]
    assert got[1] == pytest.approx(own.sum())


def test_a_result_lends_its_spectra_until_the_network_changes() -> None:
    first = evaluate(small())
    assert first.emissions is not None
    heavier = replace(small(), cases=(Case("full", load=(("X", Load("share", 0.5)),)),))
    second = evaluate(heavier, previous=first)
    assert second.emissions is not None
    assert second.emissions.spectra[0] is first.emissions.spectra[0]
    assert found_rows(second) == found_rows(evaluate(heavier))
    for changed in (small(frequency=101e3), small(lead=Lead(L=1e-6)), small(replace(FLAT, setup="cap-10uF"))):
        third = evaluate(changed, previous=first)
        assert third.emissions is not None
        assert third.emissions.spectra[0] is not first.emissions.spectra[0]
        assert found_rows(third) == found_rows(evaluate(changed))
    assert with_emissions(second, second).checks == second.checks


def test_a_project_that_asks_for_none_has_none() -> None:
    result = evaluate(replace(small(), checked=()))
    assert found_rows(result) == ()
    assert not [row for row in result.checks if row.check.startswith("emission")]
    assert tables.as_json(evaluate_dc(small()), [])["emissions"] == []


def test_the_row_of_the_check() -> None:
    result = evaluate(small(rules=Rules(emission_margin=6.0)))
    row = check(result)
    worst = min((r for r in found_rows(result)), key=lambda r: r.margin or 0.0)
    assert (row.subject, row.unit, row.margin_unit, row.limit, row.wanted) == ("bus", "dBuV", "dB", 60.0, 54.0)
    assert (row.case, row.line, row.value, row.margin) == (worst.case, worst.line, worst.level, worst.margin)
    names = [r.check for r in result.checks]
    assert names.index("emission flat") > max(k for k, name in enumerate(names) if name == "input high")


@pytest.mark.parametrize(("by", "status"), [(10.0, "ok"), (6.0, "ok"), (5.9, "thin"), (0.0, "thin"), (-0.1, "fail")])
def test_status_by_the_margin(by: float, status: str) -> None:
    margin = check(evaluate(small())).margin
    assert margin is not None
    moved = replace(FLAT, points=tuple((f, level - margin + by) for f, level in FLAT.points))
    assert check(evaluate(small(moved))).status == status


def test_no_room_for_the_edges_fails_by_name_at_the_low_line_alone() -> None:
    project = small(chop=Chop(0.8, 50e-9, 50e-9), duty_law="inverse-line")  # 0.8 x 28/20 > 1
    result = evaluate(project)
    low, nominal, high = found_rows(result)
    assert low.failures == (("no room for the edges", "X"),)
    assert low.margin is None
    assert nominal.margin is not None
    assert high.margin is not None
    row = check(result)
    assert (row.status, row.case, row.line, row.margin, row.limit) == ("fail", "full", "low", None, None)
    assert row.remarks[0] == "no room for the edges: X"
    assert "X" in tables.check_row(row)["note"]
    assert check(evaluate(project, lines=(1, 2))).margin is not None
    off = replace(project, cases=(Case("full", load=(("X", Load("off")),)),))
    assert check(evaluate(off)).status == "ok"


@pytest.mark.parametrize("law", ["constant", "inverse-line", "flyback"])
def test_every_duty_follows_its_law_where_there_is_no_room(law: str) -> None:
    for noise in (
        {"chop": None, "ripple": Ripple(0.1, duty=0.9)},
        {"cm": CommonMode(1e-11, 50.0, 20e-9, 20e-9, duty=0.9)},
    ):
        rows = found_rows(evaluate(small(duty_law=law, **noise)))
        assert bool(rows[0].failures) == (law == "inverse-line")


def test_converters_without_a_description_are_named() -> None:
    project = small()
    mute = replace(project.converters[0], id="Y", chop=None, frequency=None)
    row = check(evaluate(replace(project, converters=(*project.converters, mute))))
    assert row.remarks == ("without a noise description: Y",)
    assert row.status != "no data"
    row = check(evaluate(replace(project, converters=(mute,))))
    assert (row.status, row.value, row.margin) == ("no data", None, None)


def test_no_operating_point_leaves_the_corner_out() -> None:
    project = replace(small(), bus=Bus(6.0, 28.0, 32.0, resistance=0.3))
    result = evaluate(project)
    assert not found_rows(result)[0].solved
    assert found_rows(result)[0].margin is None
    assert check(result).remarks == ("unsolved corners left out",)
    none = replace(project, bus=Bus(6.0, 6.0, 6.0, resistance=0.3))
    assert (check(evaluate(none)).status, check(evaluate(none)).remarks) == ("no data", ("no operating point",))


def test_nothing_in_the_band_is_ok_without_a_number() -> None:
    far = replace(FLAT, points=((10e3, 60.0), (50e3, 60.0)))
    row = check(evaluate(small(far, frequency=200e3)))
    assert (row.status, row.margin, row.remarks) == ("ok", None, ("no line in the band",))


def test_from_memory_and_without_bandwidth_are_said() -> None:
    assert "limit from memory" in check(evaluate(small(replace(FLAT, basis="memory")))).remarks
    assert "no receiver bandwidth" in check(evaluate(small(replace(FLAT, bandwidth=())))).remarks


def test_a_table_that_does_not_reach_the_band_is_held_and_said() -> None:
    project = small()
    table = Filter("F", attenuation=((1e6, 40.0, 40.0), (2e6, 40.0, 40.0)))
    row = check(evaluate(replace(project, filters=(table,))))
    assert row.remarks == ("table held beyond its ends: F",)
    assert row.margin is not None


def test_measured_lines_join_the_nearest_harmonic_or_stand_alone() -> None:
    spectrum = ((104e3, 60.0), (333e3, 50.0))
    alone = small(chop=None, spectrum=spectrum)
    lines = lines_of(alone, FLAT)
    assert lines.frequency.tolist() == [104e3, 333e3]
    assert lines.order.tolist() == [1, 3]
    with_cm = small(chop=None, spectrum=spectrum, cm=CommonMode(1e-12, 10.0, 1e-8, 1e-8))
    lines = lines_of(with_cm, FLAT)
    assert lines.frequency[:3].tolist() == [100e3, 200e3, 300e3]
    assert lines.probes.line.tolist() == [0, 2]
    free = small(chop=None, spectrum=spectrum, frequency=None)
    rows = found_rows(evaluate(free))
    assert {part.harmonic for row in rows for part in row.contributors} == {None}


def test_a_converter_that_is_off_stays_in_the_network() -> None:
    project = small()
    idle = replace(project.converters[0], id="Y", chop=None, frequency=None, input=(Branch("shunt", C=100e-6),))
    off = Case("full", load=(("Y", Load("off")),))
    both = replace(project, converters=(project.converters[0], idle), cases=(off,))
    alone = replace(project, cases=(Case("full"),))
    quiet, loud = check(evaluate(both)).margin, check(evaluate(alone)).margin
    assert quiet is not None
    assert loud is not None
    assert quiet > loud + 10


def test_the_json_has_what_was_found_and_no_nan() -> None:
    result = evaluate(small())
    document = tables.as_json(result, [])
    text = tables.dumps(document)
    entry = json.loads(text)["emissions"][0]
    row = found_rows(result)[0]
    assert entry["limit"] == "flat"
    assert entry["margin"] == row.margin
    assert entry["contributors"][0] == {
        "clock": "X",
        "converters": ["X"],
        "harmonic": row.contributors[0].harmonic,
        "level": row.contributors[0].level,
    }
    only = json.loads(tables.dumps(tables.as_json(evaluate(small(), lines=(2,)), [])))["emissions"]
    assert [e["line"] for e in only] == ["high"]


def test_beats_between_unrelated_clocks() -> None:
    base = small(control_bandwidth=10e3).converters[0]
    units = (
        base,
        replace(base, id="Y", frequency=115e3, frequency_tolerance=0.02),
        replace(base, id="Z", frequency=200e3, control_bandwidth=80e3),
        replace(base, id="W", frequency=None, chop=None),
    )
    found = evaluate(replace(small(), converters=units)).emissions
    assert found is not None
    by = {(b.clocks, b.orders): (b.low, b.high) for b in found.beats}
    assert by[("X", "Y"), (1, 1)] == pytest.approx((12.7e3, 17.3e3))
    assert by[("X", "Z"), (2, 1)] == (0.0, 0.0)
    assert ("X", "Y") not in {pair for pair, orders in by if orders == (2, 2)} or by[("X", "Y"), (2, 2)][0] < 20e3 * 4
    assert not any("W" in pair for pair, _ in by)
    assert by[("Y", "Z"), (1, 1)][0] == pytest.approx(200e3 - 117.3e3) if (("Y", "Z"), (1, 1)) in by else True
    same = evaluate(
        replace(small(clock="one"), converters=(replace(base, clock="one"), replace(base, id="Y", clock="one")))
    )
    assert same.emissions is not None
    assert same.emissions.beats == ()


def test_elements_are_impedance_and_admittance_of_each_branch() -> None:
    rng = np.random.default_rng(3)
    branches = [other.random_branch(rng, place) for place in ("series", "shunt") * 20]
    branches.append(Branch("shunt", C=1e-6, L=1e-8, Rp=3.0, Cp=1e-9))
    w = 2 * math.pi * np.array([10e3, 333e3, 40e6])
    for branch, shown in zip(branches, elements(branches, w), strict=True):
        z = np.array([other.branch_impedance(branch, x) for x in w.tolist()])
        np.testing.assert_allclose(shown if branch.place == "series" else 1.0 / shown, z, rtol=1e-12)
        np.testing.assert_allclose(impedance(branch, w), z, rtol=1e-12)
        if z.all():
            np.testing.assert_allclose(admittance(branch, w), 1.0 / z, rtol=1e-12)


# -- bad and odd input: a sound result, in time, and no warning of numpy (they are errors here)


def sound(project: Project) -> Result:
    result = evaluate(project)
    tables.dumps(tables.as_json(result, []))
    return result


def test_ladders_without_elements_and_zero_values() -> None:
    bare = Filter("F")
    result = sound(replace(small(input=(), lead=Lead()), filters=(bare,)))
    assert check(result).status == "fail"
    sound(small(cm=CommonMode(1e-12, 0.0, 0.0, 0.0), chop=Chop(0.5, 0.0, 0.0)))
    sound(small(chop=None, ripple=Ripple(0.0)))


def test_half_duty_has_even_harmonics_of_nothing() -> None:
    project = small(chop=None, cm=CommonMode(1e-11, 50.0, 0.0, 0.0, 0.5))
    result = sound(project)
    got = levels(project, result.operating, lines_of(project, FLAT), [(0, 0)]).level[0]
    assert (got[1::2] < 1e-12 * got[0]).all()


def test_a_lossless_resonance_met_exactly() -> None:
    w = 2 * math.pi * 100e3
    trap = Branch("shunt", C=1 / (w * w * 2**-20), L=2.0**-20)
    tank = Branch("series", L=2.0**-20, Cp=1 / (w * w * 2**-20))
    for ladder in ((trap,), (tank,), (trap, tank, trap, tank, trap)):
        sound(small(replace(FLAT, setup="cap-10uF"), input=ladder))
    resonant = Branch("series", L=1 / (w * w * 20e-6) * 2)
    sound(
        replace(
            small(replace(FLAT, setup="cap-10uF"), chop=None, ripple=Ripple(1.0)),
            filters=(Filter("F", dm=(resonant,)),),
        )
    )


def test_no_current_is_no_noise() -> None:
    project = replace(small(output=(Output("out", 10.0, 0.0),)))
    row = check(sound(project))
    assert (row.status, row.margin) == ("ok", None)


def test_a_bus_without_converters() -> None:
    row = check(sound(replace(small(), converters=())))
    assert row.status == "no data"
    row = check(sound(replace(small(), converters=(replace(small().converters[0], filter=""),))))
    assert row.status == "no data"


def test_more_lines_than_can_be_added_up_are_refused() -> None:
    row = check(sound(small(frequency=0.1)))
    assert (row.status, row.remarks) == ("no data", ("too many lines",))
    row = check(sound(small(frequency=1e3, frequency_tolerance=0.999999)))
    assert (row.status, row.remarks) == ("no data", ("too many lines",))


def test_a_slow_clock_over_a_wide_band() -> None:
    wide = replace(FLAT, points=((10e3, 60.0), (50e6, 60.0)))
    row = check(sound(small(wide, frequency=1e3, frequency_tolerance=0.01)))
    assert row.margin is not None


def test_a_band_of_one_frequency() -> None:
    point = replace(FLAT, points=((100e3, 60.0), (100e3, 50.0)))
    row = check(sound(small(point)))
    assert row.limit == 50.0


def test_absurd_numbers_fail_rather_than_vanish() -> None:
    row = check(sound(small(chop=None, spectrum=((100e3, 9000.0),))))
    assert row.status == "fail"
