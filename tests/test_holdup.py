"""Hold-up: energy of a capacitor under constant power."""

from __future__ import annotations

from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budget.engine.holdup import hold_up, hold_up_capacitance
from budget.engine.model import Case, Load, Project
from budget.engine.operating import operating_points
from tests.dc_trees import tree


@pytest.mark.parametrize(
    ("watts", "start", "end", "farads"), [(100.0, 28.0, 18.0, 21.739e-3), (500.0, 270.0, 200.0, 1519.76e-6)]
)
def test_two_examples(watts: float, start: float, end: float, farads: float) -> None:
    """Derived: C = 2 P t/(V1^2 - V2^2) for 50 ms."""
    assert hold_up_capacitance(watts, 50e-3, start, end) == pytest.approx(farads, rel=3e-5)


@given(st.floats(0.1, 1e4), st.floats(1e-4, 1.0), st.floats(10.0, 400.0), st.floats(0.05, 0.95))
def test_a_capacitor_under_constant_power_lasts_that_long(watts: float, time: float, start: float, low: float) -> None:
    """By stepping the voltage instead of the energy: dt = C v dv/P, summed over equal steps of v (exact midpoints)."""
    end = low * start
    farads = hold_up_capacitance(watts, time, start, end)
    assert farads is not None
    steps = 200
    dv = (start - end) / steps
    lasted = sum(farads * (end + (k + 0.5) * dv) * dv / watts for k in range(steps))
    assert lasted == pytest.approx(time, rel=1e-9)


def test_nothing_can_hold_a_voltage_that_is_not_there() -> None:
    assert hold_up_capacitance(10.0, 1e-3, 18.0, 18.0) is None
    assert hold_up_capacitance(10.0, 1e-3, 17.0, 18.0) is None


@dataclass
class _Stand:
    """A converter with the two fields, whether or not the model has them."""

    part: Any
    hold_up: float | None
    hold_up_to: float | None

    def __getattr__(self, name: str) -> Any:
        return getattr(self.part, name)


def test_rows_of_a_project() -> None:
    cases = (
        Case("full"),
        Case("off", load=(("C0.0", Load("off")),)),
        Case("half", load=(("C0.0", Load("share", 0.5)),)),
    )
    project: Project = tree((20.0, 28.0, 32.0), 0.1, [(0.05, [(100.0, 0.01), (10.0, 0.0)])], cases)
    o = operating_points(project)
    first, second = project.converters
    asked: Any = SimpleNamespace(
        cases=project.cases, converters=(_Stand(first, 5e-3, 12.0), _Stand(second, 5e-3, None))
    )
    rows = hold_up(asked, o)
    assert [(r.id, r.case) for r in rows] == [("C0.0", "full"), ("C0.0", "off"), ("C0.0", "half")]
    assert rows[1].capacitance is None
    for row, case in ((rows[0], 0), (rows[2], 2)):
        v, p = o.voltage[case, 0, 0], o.input_power[case, 0]
        assert row.capacitance == pytest.approx(2.0 * p * 5e-3 / (v * v - 144.0), rel=1e-12)


def test_no_operating_point_no_number() -> None:
    project = tree(12.0, 1.0, [(0.0, [(100.0, 0.0)])])
    asked: Any = SimpleNamespace(cases=project.cases, converters=(_Stand(project.converters[0], 5e-3, 8.0),))
    assert hold_up(asked, operating_points(project))[0].capacitance is None
