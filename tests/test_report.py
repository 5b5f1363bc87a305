"""The reports: JSON against a recomputation that shares nothing with the program, the others as readable goldens."""

from __future__ import annotations

import contextlib
import csv
import io
import json
import random
import re
import tempfile
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.cli import run
from tests import naive

FOLDER = Path(__file__).parent.parent / "projects"

SMALL = """\
format = 1
[project]
title = "Bench supply | \\u001b[31mA_1"
[rules]
filter_load = "80 %"
[bus]
name = "main"
low = "20 V"
nominal = "24 V"
high = "28 V"
rating = "2 A"
[[filter]]
id = "F|1"
name = "Front"
rated_current = "1.5 A"
max_voltage = "27 V"
dm = [{ series = { L = "10 uH", R = "0 ohm" } }]
cm = [{ series = { L = "1 mH" } }]
[[converter]]
id = "C1"
name = "logic*"
filter = "F|1"
rated_power = "30 W"
output = [{ voltage = "12 V", current = "2 A" }]
efficiency = "80 %"
min_input = "18 V"
colour = "red"
[[converter]]
id = "C2"
rated_power = "10 W"
output = [{ voltage = "5 V", current = "1 A" }]
efficiency = "80 %"
[[case]]
id = "run"
duration = "9 h"
"""

# 24 W / 80 % = 30 W: 1.5 A at 20 V, exactly the rating of the filter, more than 80 % of it.
TEXT = """\
Bench supply | ?[31mA_1: FAIL (2 fail, 1 thin, 4 no data, 5 ok)
cases run; lines low, nominal, high

Checks, worst first
  status   check            subject  value  limit  wanted  margin      corner          note
  fail     allocation       C2
  fail     filter voltage   F|1       28 V   27 V          3.7 % over  high line
  thin     filter current   F|1      1.5 A  1.5 A   1.2 A  0 % left    run, low line
  no data  converter load   C2               10 W    10 W                              it has no filter
  no data  input low        C2                                                         it has no filter
  no data  input high       C1        28 V                             run, high line  not entered: converter max_input
  no data  input high       C2                                                         it has no filter
  ok       input low        C1        20 V   18 V          11 % left   run, low line
  ok       converter load   C1        24 W   30 W    30 W  20 % left   run
  ok       bus current      bus      1.5 A    2 A     2 A  25 % left   run, low line
  ok       allocation       C1
  ok       operating point  bus

Worst over these corners
                 output  input  current  of allowed  terminals  heat
  bus main         24 W   30 W    1.5 A        75 %       20 V   6 W
  F|1 Front        24 W   30 W    1.5 A       100 %       20 V   6 W
    C1 logic*      24 W   30 W    1.5 A                   20 V   6 W
  not allocated
    C2              0 W    0 W      0 A                          0 W

Energy at the nominal line
  case  duration  energy    charge
  run   9 h       270 Wh  11.25 Ah

Warnings
  converter C1, colour: is an unknown key; it is kept, and not used.

"""

MARKDOWN = r"""# Bench supply \| ?\[31mA\_1

**fail**: 2 fail, 1 thin, 4 no data, 5 ok; cases run; lines low, nominal, high.

## Checks, worst first

| status | check | subject | value | limit | wanted | margin | corner | note |
|---|---|---|---:|---:|---:|---|---|---|
| fail | allocation | C2 |  |  |  |  |  |  |
| fail | filter voltage | F\|1 | 28 V | 27 V |  | 3.7 % over | high line |  |
| thin | filter current | F\|1 | 1.5 A | 1.5 A | 1.2 A | 0 % left | run, low line |  |
| no data | converter load | C2 |  | 10 W | 10 W |  |  | it has no filter |
| no data | input low | C2 |  |  |  |  |  | it has no filter |
| no data | input high | C1 | 28 V |  |  |  | run, high line | not entered: converter max\_input |
| no data | input high | C2 |  |  |  |  |  | it has no filter |
| ok | input low | C1 | 20 V | 18 V |  | 11 % left | run, low line |  |
| ok | converter load | C1 | 24 W | 30 W | 30 W | 20 % left | run |  |
| ok | bus current | bus | 1.5 A | 2 A | 2 A | 25 % left | run, low line |  |
| ok | allocation | C1 |  |  |  |  |  |  |
| ok | operating point | bus |  |  |  |  |  |  |

## Worst over these corners

|  | output | input | current | of allowed | terminals | heat |
|---|---:|---:|---:|---:|---:|---:|
| bus main | 24 W | 30 W | 1.5 A | 75 % | 20 V | 6 W |
| F\|1 Front | 24 W | 30 W | 1.5 A | 100 % | 20 V | 6 W |
| C1 logic\* | 24 W | 30 W | 1.5 A |  | 20 V | 6 W |
| not allocated |  |  |  |  |  |  |
| C2 | 0 W | 0 W | 0 A |  |  | 0 W |

## Energy at the nominal line

| case | duration | energy | charge |
|---|---|---:|---:|
| run | 9 h | 270 Wh | 11.25 Ah |

## Warnings

- converter C1, colour: is an unknown key; it is kept, and not used.

"""

CSV = """\
file,check,subject,case,line,value,limit,wanted,unit,margin,margin_unit,status,note
bench.toml,allocation,C1,,,,,,,,,ok,
bench.toml,allocation,C2,,,,,,,,,fail,
bench.toml,operating point,bus,,,,,,,,,ok,
bench.toml,bus current,bus,run,low,1.5,2.0,2.0,A,0.25,ratio,ok,
bench.toml,filter current,F|1,run,low,1.5,1.5,1.2000000000000002,A,0.0,ratio,thin,
bench.toml,filter voltage,F|1,,high,28.0,27.0,,V,-0.037037037037037035,ratio,fail,
bench.toml,converter load,C1,run,,24.0,30.0,30.0,W,0.2,ratio,ok,
bench.toml,converter load,C2,,,,10.0,10.0,W,,,no data,it has no filter
bench.toml,input low,C1,run,low,20.0,18.0,,V,0.1111111111111111,ratio,ok,
bench.toml,input low,C2,,,,,,V,,,no data,it has no filter
bench.toml,input high,C1,run,high,28.0,,,V,,,no data,not entered: converter max_input
bench.toml,input high,C2,,,,,,V,,,no data,it has no filter
"""

# What one file prints as JSON, whose names are fixed for other programs.
PARTS = ["format", "title", "status", "checks", "operating", "emissions", "beats", "inrush", "stability", "energy"]
CHECK = [
    "check",
    "subject",
    "case",
    "line",
    "value",
    "limit",
    "wanted",
    "unit",
    "margin",
    "margin_unit",
    "status",
    "note",
]


def output(*arguments: str) -> tuple[int, str]:
    """Exit status and standard output of one command line, in this process: the DC part, which this file is about."""
    if arguments[0] == "check":
        arguments = ("check", "--dc", *arguments[1:])
    with contextlib.redirect_stdout(io.StringIO()) as out, contextlib.redirect_stderr(io.StringIO()):
        status = run(arguments)
    return status, out.getvalue()


@pytest.fixture
def small(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    monkeypatch.chdir(tmp_path)
    Path("bench.toml").write_text(SMALL)
    return "bench.toml"


def dc(text: str) -> str:
    """A report without its last words, whose wording is free."""
    return re.split(r"(?m)^(?:> )?These numbers are estimates", text)[0]


def test_text(small: str) -> None:
    status, text = output("check", small)
    assert status == 1
    assert dc(text) == TEXT
    assert text != dc(text)


def test_markdown(small: str) -> None:
    status, text = output("check", small, "--format", "markdown")
    assert status == 1
    assert dc(text) == MARKDOWN
    assert text != dc(text)


def test_csv(small: str) -> None:
    assert output("check", small, "--format", "csv") == (1, CSV)


def test_every_markdown_row_has_the_cells_of_its_heading(small: str) -> None:
    _, text = output("check", small, "--format", "markdown")
    tables = [block.splitlines() for block in text.split("\n\n") if block.startswith("|")]
    assert len(tables) == 3
    for table in tables:
        assert len({len(re.findall(r"(?<!\\)\|", line)) for line in table}) == 1


def test_wide_and_combining_letters_keep_the_columns(small: str) -> None:
    Path(small).write_text(SMALL.replace('"Front"', '"\u4e2d\u6587e\u0301"'), encoding="utf-8")
    _, text = output("check", small)
    front, logic = (
        next(line for line in text.splitlines() if line.strip().startswith(s)) for s in ("F|1 \u4e2d", "C1 l")
    )
    # two signs of two columns each and an accent that takes none: the line is one character shorter on the whole
    assert front.index("30 W") + 2 - 1 == logic.index("30 W")


def test_json_has_the_parts_others_rely_on(small: str) -> None:
    _, text = output("check", small, "--format", "json")
    assert text.isascii()
    data = json.loads(text)
    assert list(data) == [*PARTS, "warnings", "hold_up"]
    assert data["title"] == "Bench supply | \x1b[31mA_1"
    assert data["warnings"] == ["converter C1, colour: is an unknown key; it is kept, and not used."]
    assert all(list(row) == CHECK for row in data["checks"])
    first = data["operating"][0]
    assert list(first) == ["case", "line", "solved", "bus", "filters", "converters"]
    assert list(first["bus"]) == ["voltage", "current", "power"]
    assert list(first["filters"][0]) == ["id", "current", "output_voltage", "loss"]
    assert list(first["converters"][0]) == ["id", "output_power", "input_power", "current", "voltage", "loss"]
    assert first["converters"][1]["voltage"] is None
    assert [list(row) for row in data["energy"]] == [["case", "duration", "energy_wh", "charge_ah"]]
    assert [data[key] for key in ("emissions", "beats")] == [[], []], "what a project does not ask for is empty"
    assert [type(data[key]) for key in ("inrush", "stability")] == [list, list]


def test_a_corner_without_an_operating_point_has_no_lists(small: str) -> None:
    Path(small).write_text(SMALL.replace('R = "0 ohm"', 'R = "5 ohm"'))
    status, text = output("check", small, "--format", "json")
    assert status == 1
    data = json.loads(text)
    assert [list(row.items()) for row in data["operating"] if not row["solved"]] == [
        [("case", "run"), ("line", line), ("solved", False)] for line in ("low", "nominal")
    ]
    assert data["energy"] == [{"case": "run", "duration": 32400.0, "energy_wh": None, "charge_ah": None}]
    assert "no operating point" in output("check", small)[1]


@pytest.mark.filterwarnings("ignore::RuntimeWarning")  # of numpy: the numbers do overflow
def test_numbers_past_all_bounds_are_refused(small: str) -> None:
    huge = SMALL.replace('"12 V", current = "2 A"', '"1e200 V", current = "1e200 A"').replace('"1.5 A"', "1e-320")
    Path(small).write_text(huge)
    status, text = output("check", small)
    assert (status, text) == (2, "")


def test_large_numbers_are_null_or_said(small: str) -> None:
    huge = SMALL.replace('"12 V", current = "2 A"', '"1e14 V", current = "1e14 A"').replace('"1.5 A"', "1e-23")
    Path(small).write_text(huge)
    status, text = output("check", small, "--format", "json")
    assert status == 1
    assert not re.search("NaN|Infinity", text)
    for form in ("text", "markdown", "csv"):
        status, text = output("check", small, "--format", form)
        assert status == 1
        assert not re.search(r"\b(nan|inf)\b", text)


# -- against the plain recomputation


def compare(path: Path) -> None:
    """Run the command line on a project and compare all of its JSON with ``tests.naive``."""
    data = naive.read(path)
    points = naive.corners(data)
    status, text = output("check", str(path), "--format", "json")
    told = json.loads(text)

    operating = {(row["case"], row["line"]): row for row in told["operating"]}
    assert list(operating) == list(points)
    for key, point in points.items():
        row = operating[key]
        assert row["solved"]
        total = sum(point["through"].values())
        close(row["bus"], {"voltage": point["node"], "current": total, "power": point["node"] * total})
        for part, entry in zip(data["filter"], row["filters"], strict=True):
            amps = point["through"][part["id"]]
            volts, heat = point["output"][part["id"]], naive.resistance(part) * amps**2
            close(entry, {"id": part["id"], "current": amps, "output_voltage": volts, "loss": heat})
        for unit, entry in zip(data["converter"], row["converters"], strict=True):
            name = unit["id"]
            delivered, taken, _ = point["taken"][name]
            there = {"voltage": point["volts"][name], "current": point["amps"][name], "loss": taken - delivered}
            if not unit.get("filter"):
                there["voltage"] = None
            close(entry, {"id": name, "output_power": delivered, "input_power": taken, **there})

    expected = naive.checks(data, points)
    of_dc = [row for row in told["checks"] if row["check"] in naive.CHECKS]
    assert {(row["check"], row["subject"]) for row in of_dc} == set(expected)
    assert len(of_dc) == len(expected)
    for row in of_dc:
        wanted = dict(expected[row["check"], row["subject"]])
        assert (row["case"], row["line"]) in wanted.pop("corners"), row
        close({key: row[key] for key in wanted}, wanted)
        assert row["margin_unit"] == ("" if row["margin"] is None else "ratio")
    states = {row["status"] for row in told["checks"]}
    assert told["status"] == ("fail" if "fail" in states else "thin" if "thin" in states else "ok")
    assert len(told["energy"]) == len(naive.energy(data, points))
    for one, two in zip(told["energy"], naive.energy(data, points), strict=True):
        close(one, two)
    assert status == ("fail" in states)
    assert output("check", str(path), "--strict")[0] == bool(states & {"fail", "thin", "no data"})
    _, table = output("check", str(path), "--format", "csv")
    for row, cells in zip(told["checks"], csv.DictReader(io.StringIO(table)), strict=True):
        for key in ("value", "limit", "wanted", "margin"):  # full precision: the same float comes back
            assert (float(cells[key]) if cells[key] else None) == row[key]


def close(found: dict[str, Any], expected: dict[str, Any]) -> None:
    assert found == {
        k: pytest.approx(v, rel=1e-9, abs=1e-11) if isinstance(v, float) else v for k, v in expected.items()
    }


@pytest.mark.parametrize("name", ["heron", "ferry", "smallest"])
def test_json_agrees_with_a_plain_recomputation(name: str) -> None:
    compare(FOLDER / f"{name}.toml")


@settings(max_examples=100)
@given(st.integers(0, 10**9), st.integers(0, 4), st.integers(0, 7), st.integers(0, 3))
def test_random_projects_agree_with_a_plain_recomputation(seed: int, filters: int, converters: int, cases: int) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "random.toml"
        path.write_text(random_project(random.Random(seed), filters, converters, cases))
        compare(path)


def random_project(rng: random.Random, filters: int, converters: int, cases: int) -> str:
    """A project as a person might type it: lightly loaded, with some things left out and some limits exceeded."""

    def number(low: float, high: float, *units: tuple[str, float]) -> str:
        value = rng.uniform(low, high)
        unit, factor = rng.choice((("", 1.0), *units))
        return f'"{value / factor:.5g} {unit}"' if unit else f"{value:.6g}"

    def maybe(key: str, text: str) -> list[str]:
        return [f"{key} = {text}"] if rng.random() < 0.6 else []

    milli = {unit: ((unit, 1.0), ("m" + unit, 1e-3)) for unit in ("V", "A", "W", "ohm")}
    share = ("%", 0.01)
    low = rng.uniform(18, 24)
    lines = ["format = 1", "[rules]"]
    for key in ("filter_load", "bus_load", "converter_load"):
        lines += maybe(key, number(0.3, 1.0, share))
    lines += maybe("growth", number(-0.1, 0.2, share))
    lines += ["[bus]", f"low = {low:.5g}", f"nominal = {low + 4:.5g}", f"high = {low + 8:.5g}"]
    lines += maybe("resistance", number(0, 0.02, *milli["ohm"])) + maybe("rating", number(1, 30, *milli["A"]))
    lines += maybe("temperature", number(20, 100, ("degC", 1.0)))
    for k in range(filters):
        lines += ["[[filter]]", f'id = "F{k}"']
        lines += maybe("rated_current", number(1, 10, *milli["A"])) + maybe("max_voltage", number(20, 60, *milli["V"]))
        if rng.random() < 0.5:
            lines += ["derate_from = 50", f"derate_to = {rng.choice(('110', '120'))}"]
        if rng.random() < 0.7:
            loop = ", ".join(f"{{ series = {{ L = 1e-6, R = {number(0, 0.02, *milli['ohm'])} }} }}" for _ in range(2))
            lines += [f'dm = [{loop}, {{ shunt = {{ C = "1 uF", R = "3 ohm" }} }}]']
        else:
            lines += ["attenuation = [[1e5, 40, 30]]", f"resistance = {number(0, 0.05, *milli['ohm'])}"]
    for k in range(converters):
        lines += ["[[converter]]", f'id = "C{k}"', f"rated_power = {number(5, 60, ('W', 1.0))}"]
        if filters and rng.random() < 0.9:
            lines += [f'filter = "F{rng.randrange(filters)}"']
        outputs = ", ".join(
            f"{{ voltage = {number(-12, 12, *milli['V'])}, current = {number(0, 2, *milli['A'])} }}"
            for _ in range(rng.randint(1, 3))
        )
        lines += [f"output = [{outputs}]"]
        shares = sorted(rng.sample(range(5, 120), rng.randint(1, 4)))
        rows = ", ".join(f'["{s} %", {number(0.6, 0.97, share)}]' for s in shares)
        lines += [f"efficiency = {rng.choice((number(0.7, 0.95, share), f'[{rows}]'))}"]
        lines += maybe("idle_power", number(0, 2, *milli["W"])) + maybe("off_power", number(0, 1, *milli["W"]))
        lines += maybe("growth", number(0, 0.3, share)) + maybe("lead", f"{{ R = {number(0, 0.02, *milli['ohm'])} }}")
        lines += maybe("min_input", number(16, 22, *milli["V"])) + maybe("max_input", number(26, 40, *milli["V"]))
    for k in range(cases):
        loads = [
            f"C{n} = {rng.choice((number(0, 1.2, share), repr('off'), repr(f'{rng.uniform(0, 20):.3g} W')))}"
            for n in range(converters)
            if rng.random() < 0.6
        ]
        lines += ["[[case]]", f'id = "case{k}"', *maybe("duration", number(1, 9000, ("s", 1.0), ("min", 60.0)))]
        lines += ["load = { " + ", ".join(loads) + " }"]
    return "\n".join(lines) + "\n"
