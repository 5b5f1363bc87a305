"""Document -> project: each rule of the file format, every problem at once, and the cache."""

from __future__ import annotations

import copy
import datetime
import tomllib
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine import model
from budget.project import document as doc
from budget.project import schema
from budget.project.build import Built, Cache, Shelf, build
from budget.project.document import Document, Path, from_data
from budget.project.problems import Problem

BASE: dict[str, Any] = tomllib.loads("""
format = 1
[project]
title = "T"
[rules]
emissions = ["CE102", "own"]
[bus]
low = "22 V"
nominal = 28
high = "29 V"
surge = "50 V"
surge_time = "12 ms"
surge_rise = "1 ms"
[[filter]]
id = "FL1"
rated_current = "8 A"
derate_from = "60 degC"
derate_to = "110 degC"
max_voltage = "40 V"
dm = [{ series = { L = "4.7 uH", R = "8 mohm", Rp = "900 ohm", saturation = "20 A" } },
      { shunt = { C = "4.7 uF", R = "6 mohm" }, note = "x" }]
cm = [{ series = { L = "1 mH" } }]
[[filter]]
id = "FL2"
attenuation = [["100 kHz", 40, 30], ["10 MHz", 60, 50]]
resistance = "10 mohm"
[[converter]]
id = "CV1"
filter = "FL1"
rated_power = "50 W"
output = [{ name = "a", voltage = "12 V", current = "2 * 1.5 A + 200 mA" }, { voltage = -5, current = 0.5 }]
efficiency = [["20 %", "80 %"], [1, 0.88]]
min_input = "16 V"
max_input = "40 V"
lead = { R = "5 mohm" }
input = [{ shunt = { C = "10 uF", R = "5 mohm" } }]
frequency = "300 kHz"
clock = "main"
chop = { duty = "40 %", rise = "30 ns", fall = "30 ns", ripple = "20 %" }
cm = { capacitance = "60 pF", swing = "60 V", rise = "30 ns", fall = "30 ns" }
[[converter]]
id = "CV2"
part = "small"
filter = "FL2"
[[case]]
id = "full"
load = { CV1 = 0.6, CV2 = "12 W" }
[[case]]
id = "quiet"
load = { CV1 = "off" }
[[limit]]
name = "own"
unit = "dBuV"
setup = "lisn-50uH"
points = [["10 kHz", "94 dBuV"], ["500 kHz", 60], ["500 kHz", 50]]
bandwidth = [["10 kHz", "150 kHz", "1 kHz"]]
[shelf.converter.small]
rated_power = "20 W"
output = [{ voltage = "5 V", current = "2 A" }]
efficiency = 0.9
frequency = "300 kHz"
clock = "main"
""")
MISSING = object()
Changes = dict[Path, Any]


def changed(changes: Changes) -> Document:
    document = from_data(copy.deepcopy(BASE))
    for path, value in changes.items():
        document = doc.drop(document, path) if value is MISSING else doc.put(document, path, copy.deepcopy(value))
    return document


def made(changes: Changes | None = None, *shelves: Shelf) -> Built:
    return build(changed(changes or {}), shelves)


def project(built: Built) -> model.Project:
    assert built.project is not None
    return built.project


def told(built: Built) -> list[tuple[Path, bool]]:
    return [(p.path, p.error) for p in built.problems]


def well_said(problem: Problem) -> None:
    sentence = problem.sentence()
    assert sentence.isprintable()
    assert sentence.isascii()
    assert problem.place
    assert problem.source or sentence.startswith(problem.place)
    assert sentence[-1] in ".:" or sentence.endswith("))")
    assert len(sentence) < 600


def test_the_base_is_without_a_fault() -> None:
    assert made().problems == ()
    assert made().left_out == ()


C1, F1, F2, L1 = ("converter", 0), ("filter", 0), ("filter", 1), ("limit", 0)
ELEMENT = {"series": {"L": 1e-6}}
SHUNT = {"shunt": {"C": 1e-6}}
# What is changed, the cells that are named, and the rows that are left out.
RULES: list[tuple[str, Changes, list[Path], list[str]]] = [
    (
        "no id",
        {(*C1, "id"): MISSING, ("case", 0, "load"): {}, ("case", 1, "load"): {}},
        [(*C1, "id")],
        ["converter number 1"],
    ),
    ("empty id", {(*F2, "id"): " ", ("converter", 1, "filter"): ""}, [(*F2, "id")], [" "]),
    ("id twice", {(*F2, "id"): "FL1", ("converter", 1, "filter"): ""}, [(*F2, "id")], []),
    ("id in two tables", {("converter", 1, "id"): "FL2", ("case", 0, "load"): {}}, [("converter", 1, "id")], []),
    ("case twice", {("case", 1, "id"): "full"}, [("case", 1, "id")], []),
    ("unknown filter", {(*C1, "filter"): "FL9"}, [(*C1, "filter")], []),
    ("unknown part", {(*C1, "part"): "nix"}, [(*C1, "part")], []),
    ("a part of the other table", {(*F1, "part"): "small"}, [(*F1, "part")], []),
    ("format as text", {("format",): "1"}, [("format",)], []),
    ("format 0", {("format",): 0}, [("format",)], []),
    ("bus not in order", {("bus", "low"): 30}, [("bus", "nominal")], []),
    ("half a surge", {("bus", "surge_rise"): MISSING}, [("bus", "surge_rise")], []),
    ("half a derating", {(*F1, "derate_to"): MISSING}, [(*F1, "derate_to")], []),
    ("derating upside down", {(*F1, "derate_to"): "50 degC"}, [(*F1, "derate_to")], []),
    ("cm without dm", {(*F1, "dm"): MISSING}, [(*F1, "dm")], ["FL1"]),
    ("cm and resistance", {(*F1, "dm"): MISSING, (*F1, "resistance"): 1}, [(*F1, "resistance"), (*F1, "dm")], ["FL1"]),
    ("neither", {(*F1, "dm"): MISSING, (*F1, "cm"): MISSING}, [(*F1, "dm")], ["FL1"]),
    ("table beside ladder", {(*F2, "dm"): [ELEMENT]}, [(*F2, "attenuation")], ["FL2"]),
    ("table without resistance", {(*F2, "resistance"): MISSING}, [(*F2, "resistance")], ["FL2"]),
    ("ladder with resistance", {(*F1, "resistance"): 1}, [(*F1, "resistance")], []),
    ("series with C", {(*F1, "dm", 0): {"series": {"C": 1e-6}}}, [(*F1, "dm", 0, "series", "C")], ["FL1"]),
    ("Rp without L", {(*F1, "dm", 0): {"series": {"Rp": 9}}}, [(*F1, "dm", 0, "series", "Rp")], ["FL1"]),
    ("shunt without C", {(*F1, "dm", 1): {"shunt": {"R": 9}}}, [(*F1, "dm", 1, "shunt", "C")], ["FL1"]),
    ("shunt with a bad C", {(*F1, "cm", 0): {"shunt": {"C": "x"}}}, [(*F1, "cm", 0, "shunt", "C")], ["FL1"]),
    (
        "saturation in a shunt",
        {(*F1, "dm", 1, "shunt", "saturation"): 1},
        [(*F1, "dm", 1, "shunt", "saturation")],
        ["FL1"],
    ),
    ("an element of two", {(*F1, "dm", 0): {**ELEMENT, **SHUNT}}, [(*F1, "dm", 0)], ["FL1"]),
    ("an element of none", {(*F1, "dm", 0): {}}, [(*F1, "dm", 0)], ["FL1"]),
    ("input that cannot be read", {(*C1, "input"): [5]}, [(*C1, "input", 0)], ["CV1"]),
    ("efficiency falling", {(*C1, "efficiency"): [[1, 0.8], [0.2, 0.9]]}, [(*C1, "efficiency", 1, 0)], ["CV1"]),
    ("efficiency twice", {(*C1, "efficiency"): [[1, 0.8], [1, 0.9]]}, [(*C1, "efficiency", 1, 0)], ["CV1"]),
    ("efficiency above 1", {(*C1, "efficiency", 0, 1): "101 %"}, [(*C1, "efficiency", 0, 1)], ["CV1"]),
    ("efficiency number above 1", {(*C1, "efficiency"): 88}, [(*C1, "efficiency")], ["CV1"]),
    ("no efficiency points", {(*C1, "efficiency"): []}, [(*C1, "efficiency")], ["CV1"]),
    ("attenuation falling", {(*F2, "attenuation", 1, 0): 10}, [(*F2, "attenuation", 1, 0)], ["FL2"]),
    ("attenuation short", {(*F2, "attenuation", 1): [10, 5]}, [(*F2, "attenuation", 1)], ["FL2"]),
    ("attenuation empty", {(*F2, "attenuation"): []}, [(*F2, "attenuation")], ["FL2"]),
    ("clocks disagree", {(*C1, "frequency"): "301 kHz"}, [("converter", 1, "frequency")], []),
    ("clocks' tolerances", {(*C1, "frequency_tolerance"): "1 %"}, [("converter", 1, "frequency_tolerance")], []),
    ("one point", {(*L1, "points"): [[1, 1]]}, [("rules", "emissions"), (*L1, "points")], ["own"]),
    ("points falling", {(*L1, "points", 1, 0): 10}, [("rules", "emissions"), (*L1, "points", 1, 0)], ["own"]),
    (
        "points of another unit",
        {(*L1, "points", 1, 1): "60 dBuA"},
        [("rules", "emissions"), (*L1, "points", 1, 1)],
        ["own"],
    ),
    ("a built-in name", {(*L1, "name"): "CE101-ship", ("rules", "emissions"): []}, [(*L1, "name")], []),
    ("bandwidth upside down", {(*L1, "bandwidth", 0, 1): 1}, [(*L1, "bandwidth", 0)], []),
    ("load of nobody", {("case", 0, "load", "CV9"): 1}, [("case", 0, "load", "CV9")], []),
    ("load below 0", {("case", 0, "load", "CV1"): -1}, [("case", 0, "load", "CV1")], []),
    ("load in volts", {("case", 0, "load", "CV1"): "5 V"}, [("case", 0, "load", "CV1")], []),
    ("unknown emission", {("rules", "emissions"): ["CE102", "XX"]}, [("rules", "emissions")], []),
    ("two noises", {(*C1, "ripple"): {"pp": 1}}, [(*C1, "ripple")], []),
    ("noise without frequency", {(*C1, "frequency"): MISSING, (*C1, "clock"): ""}, [(*C1, "frequency")], []),
    ("input limits crossed", {(*C1, "min_input"): 41}, [(*C1, "min_input")], []),
    ("turn_off above turn_on", {(*C1, "turn_on"): 18, (*C1, "turn_off"): 19}, [(*C1, "turn_off")], []),
    ("turn_off above min_input", {(*C1, "turn_off"): 17}, [(*C1, "turn_off")], []),
    ("no output", {(*C1, "output"): []}, [(*C1, "output")], ["CV1"]),
    ("output without voltage", {(*C1, "output", 1): {"current": 1}}, [(*C1, "output", 1, "voltage")], ["CV1"]),
    ("a bad note in an output", {(*C1, "output", 1, "note"): 5}, [(*C1, "output", 1, "note")], []),
    ("a bad note in a ladder", {(*F1, "dm", 0, "series", "note"): 5}, [(*F1, "dm", 0, "series", "note")], []),
    ("chop without duty", {(*C1, "chop", "duty"): MISSING}, [(*C1, "chop", "duty")], []),
    ("wrong dimension", {(*C1, "rated_power"): "5 A"}, [(*C1, "rated_power")], ["CV1"]),
    ("a date for a number", {(*C1, "rated_power"): datetime.date(2024, 1, 1)}, [(*C1, "rated_power")], ["CV1"]),
    ("true for a number", {(*C1, "rated_power"): True}, [(*C1, "rated_power")], ["CV1"]),
    ("400 digits", {("bus", "rating"): 10**400}, [("bus", "rating")], []),
    ("6000 digits", {("bus", "rating"): 16**5000, ("format",): -(16**5000)}, [("format",), ("bus", "rating")], []),
    ("a row that is none", {("case",): [5]}, [("case",)], []),
    ("a list of files that is none", {("shelf_files",): [5]}, [("shelf_files",)], []),
    ("shelf of no kind", {("shelf", "case"): {}}, [("shelf", "case")], []),
    ("part that is none", {("shelf", "filter"): {"x": 5}}, [("shelf", "filter", "x")], []),
    ("part with an id", {("shelf", "converter", "small", "id"): "X"}, [("shelf", "converter", "small", "id")], []),
]


@pytest.mark.parametrize(("changes", "cells", "left_out"), [r[1:] for r in RULES], ids=[r[0] for r in RULES])
def test_a_broken_rule_is_told_once_and_the_rest_calculates(
    changes: Changes, cells: list[Path], left_out: list[str]
) -> None:
    built = made(changes)
    assert sorted(p.path for p in built.errors) == sorted(cells, key=str) or [p.path for p in built.errors] == cells
    assert set(built.left_out) == {
        *left_out,
        *(i.replace("FL", "CV") for i in left_out),
    }  # what is behind it goes with it
    for problem in built.problems:
        well_said(problem)
    if changes.get(("bus", "low")) != 30:
        assert project(built).bus.nominal == 28.0


def test_no_bus_no_project() -> None:
    built = made({("bus",): MISSING})
    assert built.project is None
    assert told(built) == [(("bus",), True)]
    assert made({("bus", "high"): "x"}).project is None


def test_a_newer_format_is_refused_and_not_guessed_at() -> None:
    built = made({("format",): 2, ("bus",): 5})
    assert built.project is None
    assert told(built) == [(("format",), True)]
    assert "newer" in built.problems[0].text


def test_warnings_do_not_make_the_file_unusable() -> None:
    built = made(
        {
            ("format",): MISSING,
            (*F1, "cm"): MISSING,
            ("bus", "colour"): 1,
            (*C1, "chop", "colour"): 1,
            (*F1, "dm", 0, "colour"): 1,
            ("colour",): 1,
            ("shelf", "converter", "small", "colour"): 1,
        }
    )
    assert built.errors == ()
    assert sorted(map(str, (p.path for p in built.warnings))) == sorted(
        map(
            str,
            (
                ("format",),
                (*F1, "cm"),
                ("bus", "colour"),
                (*C1, "chop", "colour"),
                (*F1, "dm", 0, "colour"),
                ("colour",),
                ("shelf", "converter", "small", "colour"),
            ),
        )
    )


def test_every_table_takes_a_note() -> None:
    notes = [
        (),
        ("project",),
        ("rules",),
        ("bus",),
        F1,
        C1,
        ("case", 0),
        L1,
        ("shelf", "converter", "small"),
        ("shelf",),
    ]
    notes += [("shelf", "converter"), (*C1, "chop"), (*C1, "cm"), (*C1, "lead"), (*C1, "output", 0), (*F1, "dm", 0)]
    notes += [(*F1, "dm", 0, "series"), ("case", 0, "load")]
    assert made({(*path, "note"): "remember" for path in notes}).problems == ()


def test_all_problems_at_once_and_the_rest_calculates() -> None:
    built = made({("bus", "rating"): "x", (*C1, "rated_power"): "x", (*C1, "phase"): "5 V", (*F2, "isolation"): -1})
    assert len(built.errors) == 4
    assert [c.id for c in project(built).converters] == ["CV2"]
    assert project(built).bus.rating is None


def test_bad_cell_with_a_default_is_calculated_with_it() -> None:
    p = project(
        made(
            {
                ("rules", "growth"): "5 V",
                ("rules", "combine"): "loud",
                (*C1, "phase"): [],
                (*C1, "duty_law"): "nix",
                (*C1, "chop", "ripple"): "300 %",
                (*C1, "cm", "duty"): 5,
                ("case", 0, "load", "CV1"): "5 V",
            }
        )
    )
    assert (p.rules.growth, p.rules.combine) == (0.0, "arithmetic")
    assert (p.converters[0].phase, p.converters[0].duty_law) == (0.0, "constant")
    assert p.converters[0].chop == model.Chop(0.4, 30e-9, 30e-9, 0.0)
    assert p.converters[0].cm is not None
    assert p.converters[0].cm.duty == 0.5
    assert p.cases[0].load == (("CV2", model.Load("power", 12.0)),)


def test_what_cannot_be_read_is_not_half_used() -> None:
    p = project(made({(*C1, "chop", "duty"): "x", (*C1, "cm", "rise"): -1}))
    assert p.converters[0].chop is None
    assert p.converters[0].cm is None
    p = project(made({(*C1, "ripple"): {"pp": 1}}))
    assert p.converters[0].chop is not None
    assert p.converters[0].ripple is None
    p = project(made({(*C1, "frequency"): "x", (*C1, "clock"): ""}))
    assert (p.converters[0].chop, p.converters[0].cm) == (None, None)
    p = project(made({(*C1, "turn_off"): 17}))
    assert p.converters[0].turn_off == pytest.approx(0.9 * 16)
    assert project(made({("rules", "emissions"): ["XX", "CE102", "CE102"]})).rules.emissions == ("CE102",)


def test_converter_behind_a_filter_that_is_left_out_goes_with_it() -> None:
    p = project(made({(*F1, "rated_current"): 1, (*F1, "dm"): 5}))
    assert [f.id for f in p.filters] == ["FL2"]
    assert [c.id for c in p.converters] == ["CV2"]


def test_of_two_rows_with_one_id_the_first_counts() -> None:
    p = project(
        made({(*F2, "id"): "FL1", ("converter", 1, "filter"): "", ("case", 1): {"id": "full", "name": "other"}})
    )
    assert len(p.filters) == 1
    assert p.filters[0].dm
    assert [c.name for c in p.cases] == [""]


def test_values_arrive_in_si() -> None:
    p = project(made())
    c = p.converters[0]
    assert c.output == (model.Output("a", 12.0, pytest.approx(3.2)), model.Output("", -5.0, 0.5))
    assert c.efficiency == ((0.2, 0.8), (1.0, 0.88))
    assert c.input == (model.Branch("shunt", R=5e-3, C=pytest.approx(10e-6)),)
    assert p.filters[0].dm[0] == model.Branch("series", 8e-3, pytest.approx(4.7e-6), None, 900.0, None, 20.0)
    assert p.filters[1].attenuation == ((100e3, 40.0, 30.0), (10e6, 60.0, 50.0))
    assert p.converters[1].efficiency == ((1.0, 0.9),)
    assert p.cases[0].load == (("CV1", model.Load("share", 0.6)), ("CV2", model.Load("power", 12.0)))
    assert p.cases[1].load == (("CV1", model.Load("off")),)
    assert p.limits[0].points[1:] == ((500e3, 60.0), (500e3, 50.0))
    assert p.title == "T"


def test_defaults_of_the_contract() -> None:
    minimal = {
        "format": 1,
        "bus": {"low": 22, "nominal": 28, "high": 29},
        "filter": [{"id": "F", "dm": [{"series": {}}], "cm": [], "max_voltage": 40}],
        "converter": [
            {
                "id": "C",
                "rated_power": 10,
                "output": [{"voltage": 5, "current": 1}],
                "efficiency": 0.8,
                "min_input": 20,
                "max_input": 36,
                "frequency": 1e5,
                "ripple": {"pp": 1},
                "cm": {"capacitance": 1e-12, "swing": 1, "rise": 0, "fall": -0.0},
            }
        ],
    }
    built = build(from_data(minimal))
    assert built.problems == ()
    p = project(built)
    assert p.rules == model.Rules(1.0, 1.0, 1.0, 0.0, 6.0, 6.0, "arithmetic", (), 20e-3)
    assert (p.bus.resistance, p.bus.inductance, p.bus.temperature, p.bus.rise, p.bus.rating) == (0, 0, 25, 0, None)
    assert p.cases == (model.Case("full"),)
    f, c = p.filters[0], p.converters[0]
    assert (f.max_surge, f.isolation, f.rated_current) == (40, None, None)
    assert f.dm == (model.Branch("series"),)
    assert (c.filter, c.growth, c.idle_power, c.off_power, c.max_surge) == ("", None, None, 0, 36)
    assert (c.turn_on, c.turn_off) == (20, pytest.approx(18))
    assert (c.start_delay, c.soft_start, c.lead, c.input, c.clock) == (0, 0, model.Lead(0, 0), (), "")
    assert (c.frequency_tolerance, c.phase, c.duty_law, c.chop) == (0, 0, "constant", None)
    assert c.ripple == model.Ripple(1, "triangle", 0.5)
    assert c.cm == model.CommonMode(1e-12, 1, 0, 0, 0.5, 0)
    assert c.cm is not None
    assert str(c.cm.fall) == "0.0"  # zero has no sign
    given = {**minimal["converter"][0], "turn_on": 24, "max_surge": 50}  # type: ignore[index, dict-item]
    c = project(build(from_data({**minimal, "converter": [given]}))).converters[0]
    assert (c.turn_on, c.turn_off, c.max_surge) == (24, pytest.approx(21.6), 50)


def test_efficiency_number_is_the_point_at_full_power() -> None:
    assert project(made({(*C1, "efficiency"): "85 %"})).converters[0].efficiency == ((1.0, 0.85),)


SMALL = ("shelf", "converter", "small")


def test_a_fault_of_a_part_is_told_at_the_shelf_alone() -> None:
    built = made({(*SMALL, "phase"): "5 V"})
    assert told(built) == [((*SMALL, "phase"), True)]
    assert built.problems[0].place == "shelf converter small, phase"


def test_a_row_overrides_its_part() -> None:
    c = project(made({("converter", 1, "rated_power"): 30})).converters[1]
    assert (c.rated_power, c.output[0].voltage, c.filter) == (30, 5, "FL2")


@pytest.mark.parametrize(
    ("part", "row", "cell"),
    [
        ({"turn_off": 20}, {"turn_on": 18}, "turn_off"),
        ({"spectrum": [[1e5, 40]]}, {"chop": {"duty": 0.5, "rise": 0, "fall": 0}}, "spectrum"),
        ({"min_input": 20}, {"max_input": 18}, "min_input"),
        ({"derate_from": 60}, {}, "derate_to"),
    ],
)
def test_a_conflict_between_row_and_part_is_told_at_the_row(part: Any, row: Any, cell: str) -> None:
    both: Changes = {(*SMALL, k): v for k, v in part.items()} | {("converter", 1, k): v for k, v in row.items()}
    assert told(made(both)) == [(("converter", 1, cell), True)]


def test_a_ladder_beside_the_table_of_a_part_is_told() -> None:
    part = {"attenuation": BASE["filter"][1]["attenuation"], "resistance": 1}
    built = made({("shelf", "filter"): {"t": part}, (*F1, "part"): "t"})
    assert told(built) == [((*F1, "attenuation"), True)]
    assert built.left_out == ("FL1", "CV1")


def test_parts_of_files() -> None:
    part = {"rated_power": 5, "output": [{"voltage": 5, "current": 1}], "efficiency": 2}
    shelf = Shelf("parts/a.toml", {"shelf": {"converter": {"small": {}, "big": part}}})
    built = made({(*C1, "part"): "big"}, shelf)
    assert [(p.source, p.path) for p in built.problems] == [
        ("parts/a.toml", SMALL),
        ("parts/a.toml", ("shelf", "converter", "big", "efficiency")),
    ]
    assert "this file" in built.problems[0].text
    for problem in built.problems:
        assert problem.sentence().startswith("parts/a.toml: shelf converter")


def test_a_shelf_file_of_a_newer_format_is_not_used() -> None:
    built = made({(*C1, "part"): "big"}, Shelf("a.toml", {"format": 2, "shelf": {"converter": {"big": {}}}}))
    assert [p.path for p in built.problems] == [("format",), (*C1, "part")]


def test_names_may_hold_anything() -> None:
    name = 'a."b"\u00e4 [filter]'
    document = changed({("shelf", "converter"): {name: BASE["shelf"]["converter"]["small"], "converter": {}}})
    document = doc.put(document, ("converter", 1, "part"), name)
    document = doc.put(doc.put(document, ("converter", 1, "id"), name), ("case", 0, "load"), {name: "off"})
    built = build(document)
    assert built.problems == ()
    assert project(built).converters[1].id == name
    assert project(built).cases[0].load == ((name, model.Load("off")),)


def test_long_and_strange_texts_are_shortened_in_messages() -> None:
    for text in ("x" * 100_000, "\x1b[31m\u202e\x00\n" * 50, "9" * 5000 + " V", "(" * 5000):
        built = made({("bus", "rating"): text, (*C1, "part"): text, ("rules", "emissions"): [text], (text,): 1})
        assert len(built.problems) == 4
        for problem in built.problems:
            well_said(problem)


# -- any value anywhere


def places(node: Any, path: Path = ()) -> list[Path]:
    items: list[tuple[Any, Any]] = []
    if isinstance(node, dict):
        items = list(node.items())
    elif isinstance(node, list):
        items = list(enumerate(node))
    return [p for key, value in items for p in ((*path, key), *places(value, (*path, key)))]


SCALARS = st.one_of(
    st.booleans(),
    st.integers(),
    st.sampled_from([10**400, -(10**400), 0, -1, 2]),
    st.floats(),
    st.text(st.characters(max_codepoint=127), max_size=50),
    st.sampled_from(
        ["", "off", "5 V", "FL1", "FL2", "CV1", "small", "\x07", "1e999 V", "-3 %", "own", "CE102", "9" * 300]
    ),
    st.sampled_from([datetime.date(2024, 2, 29), datetime.time(1, 2), datetime.datetime(2024, 1, 1, 5)]),
)
ANYTHING = st.recursive(
    SCALARS,
    lambda inner: st.one_of(
        st.lists(inner, max_size=3),
        st.dictionaries(
            st.sampled_from(["id", "series", "shunt", "C", "L", "filter", "converter", "\x1b", "note"]),
            inner,
            max_size=3,
        ),
    ),
    max_leaves=6,
)
SHELVED = {"shelf": {"filter": {"x": BASE["filter"][0] | {"note": 1}}, "converter": {"small": {}}}, "format": 1}


@settings(max_examples=300)
@given(st.lists(st.tuples(st.sampled_from(places(BASE)), ANYTHING), min_size=1, max_size=3), st.booleans())
def test_build_takes_any_value_anywhere(changes: list[tuple[Path, Any]], shelved: bool) -> None:
    document = from_data(BASE)
    for path, value in changes:
        if doc.get(document, path, MISSING) is not MISSING:
            document = doc.put(document, path, value)
    built = build(document, (Shelf("s.toml", SHELVED),) if shelved else ())
    for problem in built.problems:
        well_said(problem)
    if built.project is not None:
        ids = [f.id for f in built.project.filters]
        assert len(set(ids)) == len(ids)
        assert {c.filter for c in built.project.converters} <= {"", *ids}
        assert built.project.cases


@settings(max_examples=200)
@given(st.sampled_from(places(SHELVED)), ANYTHING)
def test_build_takes_any_shelf(path: Path, value: Any) -> None:
    shelf = doc.put(Document(SHELVED), path, value).data
    for problem in build(from_data(BASE), (Shelf("s\n.toml", shelf),)).problems:
        well_said(problem)


# -- the cache


@given(st.lists(st.tuples(st.sampled_from(places(BASE)), SCALARS), max_size=6))
def test_the_cache_changes_nothing(changes: list[tuple[Path, Any]]) -> None:
    cache, document = Cache(), from_data(BASE)
    for path, value in changes:
        if doc.get(document, path, MISSING) is not MISSING:
            document = doc.put(document, path, value)
        first, cached, plain = build(document, cache=cache), build(document, cache=cache), build(document)
        assert repr(first) == repr(cached) == repr(plain)


def test_unchanged_rows_are_the_same_engine_objects() -> None:
    shelf = Shelf("s.toml", {"shelf": {"converter": {"big": BASE["shelf"]["converter"]["small"]}}})
    cache, before = Cache(), changed({(*C1, "part"): "big"})
    old = project(build(before, (shelf,), cache))
    new = project(build(doc.put(before, (*F1, "rated_current"), 9), (shelf,), cache))
    assert all(a is b for a, b in zip(old.converters, new.converters, strict=True))  # also those with a part
    assert all(a is b for a, b in zip(old.cases, new.cases, strict=True))
    assert old.filters[1] is new.filters[1]
    assert (old.filters[0].rated_current, new.filters[0].rated_current) == (8, 9)


def test_a_changed_part_changes_its_rows() -> None:
    cache, before = Cache(), changed({})
    build(before, cache=cache)
    after = project(build(doc.put(before, (*SMALL, "rated_power"), 25), cache=cache))
    assert after.converters[1].rated_power == 25


def test_the_cache_holds_only_the_present_rows() -> None:
    cache, document = Cache(), changed({})
    for n in range(20):
        document = doc.put(document, (*F1, "name"), str(n))
        build(document, cache=cache)
    assert len(cache.rows) == 2 + 2 + 2 + 1 + 1


def test_schema_and_engine_agree_on_their_fields() -> None:
    for key, kind in (
        ("filter", model.Filter),
        ("converter", model.Converter),
        ("bus", model.Bus),
        ("case", model.Case),
    ):
        known = {f.key for f in schema.TABLES_BY_KEY[key].fields} - {"note", "part"}
        assert known == set(kind.__dataclass_fields__), key
