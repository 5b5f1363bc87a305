"""Limit sets: the files, the voltage rules, what the project makes of their names, limits and bandwidths in between."""

from __future__ import annotations

import itertools
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest

from budget.engine.model import LimitLine
from budget.engine.receiver import bandwidth_at, limit_at
from budget.project import limits, schema
from budget.project.build import build
from budget.project.document import Document
from tests.emission_reference import bandwidth_value, limit_value

FILES = Path(limits.__file__).parent.parent / "standards"


def line(name: str, nominal: float = 28.0) -> LimitLine:
    found = limits.resolve(name, (), nominal)
    assert found is not None
    return found


def test_the_names_of_the_schema_are_those_of_the_files() -> None:
    assert set(limits.builtin()) == set(schema.LIMIT_SETS)
    assert {path.stem for path in FILES.glob("*.toml")} == set(schema.LIMIT_SETS)
    for name, data in limits.builtin().items():
        assert data["name"] == name


@pytest.mark.parametrize("name", schema.LIMIT_SETS)
def test_every_set_is_complete(name: str) -> None:
    data = limits.builtin()[name]
    assert data["unit"] in ("dBuV", "dBuA")
    assert data["setup"] in ("lisn-50uH", "lisn-5uH", "cap-10uF")
    assert data["basis"] in ("read", "memory")
    assert data["title"]
    assert data["source"].isascii()
    assert ("memory" in data["source"]) == (data["basis"] == "memory")
    frequencies = [f for f, _ in data["points"]]
    assert frequencies == sorted(frequencies)
    first, last = frequencies[0], frequencies[-1]
    rows = data["bandwidth"]
    assert rows[0][0] <= first
    assert rows[-1][1] >= last
    assert all(a[1] == b[0] for a, b in itertools.pairwise(rows))


@pytest.mark.parametrize(
    ("nominal", "more"),
    [(12, 0), (28, 0), (114.9, 0), (115, 6), (219, 6), (220, 9), (269, 9), (270, 10), (439, 10), (440, 12), (1000, 12)],
)
def test_ce102_relaxes_in_the_published_steps(nominal: float, more: float) -> None:
    assert line("CE102", nominal).points == ((10e3, 94.0 + more), (500e3, 60.0 + more), (10e6, 60.0 + more))


@pytest.mark.parametrize(("nominal", "more"), [(28.0, 0.0), (28.1, 10.0), (270.0, 10.0)])
def test_ce101_of_aircraft_has_a_curve_for_more_than_28_v(nominal: float, more: float) -> None:
    assert line("CE101-aircraft", nominal).points[0] == (30.0, 100.0 + more)


def test_other_sets_do_not_move_with_the_voltage() -> None:
    for name in set(schema.LIMIT_SETS) - {"CE102", "CE101-aircraft"}:
        assert line(name, 28.0) == line(name, 270.0)


def project(names: str, more: str = "", nominal: str = "270 V") -> object:
    text = f"""
format = 1
[rules]
emissions = [{names}]
[bus]
low = "20 V"
nominal = "{nominal}"
high = "300 V"
{more}
"""
    built = build(Document(tomllib.loads(text)))
    assert built.project is not None
    return built.project.checked


OWN = """
[[limit]]
name = "quay"
unit = "dBuA"
setup = "cap-10uF"
points = [["10 kHz", "80 dB"], ["1 MHz", "40 dB"]]
"""


def test_the_project_has_the_lines_that_its_rules_name_once_each() -> None:
    found = project('"quay", "CE102", "quay"', OWN)
    assert isinstance(found, tuple)
    assert [li.name for li in found] == ["quay", "CE102"]
    assert found[0].basis == "own"
    assert found[1].basis == "read"
    assert found[1].points[0] == (10e3, 104.0)
    assert project("") == ()


def test_between_the_points_the_limit_is_straight_over_log_frequency() -> None:
    ce102 = line("CE102")
    f = np.array([10e3, 20e3, 50e3, 100e3, 499e3, 500e3, 3e6, 10e6])
    np.testing.assert_allclose(limit_at(ce102, f), [limit_value(ce102, x) for x in f.tolist()], rtol=1e-12)
    assert limit_at(ce102, np.array([3e6]))[0] == 60.0


def test_at_a_step_the_lower_value_holds_and_beyond_the_ends_the_end() -> None:
    steps = LimitLine(
        "s", "dBuV", "lisn-50uH", ((1e4, 70.0), (1e5, 70.0), (1e5, 50.0), (1e6, 50.0), (1e6, 80.0), (1e7, 60.0))
    )
    f = np.array([1e3, 1e4, 9.9e4, 1e5, 1.1e5, 1e6, math.sqrt(1e13), 1e8])
    np.testing.assert_allclose(limit_at(steps, f), [70, 70, 70, 50, 50, 50, 70, 60])


def test_bandwidth_rows() -> None:
    rows = ((10e3, 150e3, 1e3), (150e3, 1e6, 10e3), (2e6, 3e6, 30e3))
    some = LimitLine("b", "dBuV", "lisn-50uH", ((1e4, 1.0), (1e7, 1.0)), rows)
    f = np.array([1e3, 10e3, 149e3, 150e3, 999e3, 1e6, 1.5e6, 2e6, 3e6, 1e9])
    wanted = [1e3, 1e3, 1e3, 10e3, 10e3, 30e3, 30e3, 30e3, 30e3, 30e3]
    assert bandwidth_at(some, f).tolist() == wanted
    assert [bandwidth_value(some, x) for x in f.tolist()] == wanted
    assert bandwidth_at(LimitLine("n", "dBuV", "lisn-50uH", some.points), f).tolist() == [0.0] * 10
