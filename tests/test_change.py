"""What an edit changed, in words."""

from __future__ import annotations

from dataclasses import replace

import pytest

from budget.engine.evaluate import Result, evaluate, evaluate_dc
from budget.engine.model import Bus, Case, Converter, Filter, Load, Output, Project, Rules
from budget.report.change import describe

# Ideal wires and converters on 10 V: every current is a tenth of a power.
PROJECT = Project(
    Bus(10.0, 10.0, 10.0, rating=20.0),
    filters=tuple(Filter(name, rated_current=10.0, max_voltage=40.0) for name in ("FL1", "FL2")),
    converters=tuple(
        Converter(
            name,
            rated_power=100.0,
            output=(Output("", 1.0, watts),),
            efficiency=((1.0, 1.0),),
            filter=behind,
            min_input=8.0,
            max_input=16.0,
        )
        for name, behind, watts in (("CV1", "FL1", 20.0), ("CV2", "FL2", 74.0))
    ),
    cases=(Case("full"),),
    rules=Rules(filter_load=0.8),
)


def converter(name: str, project: Project = PROJECT, **changes: object) -> Project:
    rows = tuple(replace(c, **changes) if c.id == name else c for c in project.converters)  # type: ignore[arg-type]
    return replace(project, converters=rows)


def power(name: str, watts: float, project: Project = PROJECT) -> Project:
    return converter(name, project, output=(Output("", 1.0, watts),))


def filters(**changes: object) -> Project:
    return replace(PROJECT, filters=tuple(replace(f, **changes) for f in PROJECT.filters))  # type: ignore[arg-type]


def told(new: Project, old: Project = PROJECT, limit: int = 3) -> list[str]:
    return describe(evaluate_dc(old), evaluate_dc(new), limit).split("; ")


def test_a_filter_that_gets_too_much() -> None:
    assert told(power("CV2", 99.0), limit=1) == ["FL2 current 7.4 A -> 9.9 A, now thin"]
    assert told(power("CV2", 100.1), limit=2) == [
        "FL2 current 7.4 A -> 10.01 A, now over its allowance",
        "CV2 load 74 W -> 100.1 W, now over its limit",
    ]


def test_a_filter_that_is_relieved() -> None:
    heavy = power("CV2", 81.0, power("CV1", 20.0))
    assert told(PROJECT, heavy, limit=1) == ["FL2 current 8.1 A -> 7.4 A, now with the wanted margin"]
    over = converter("CV1", power("CV2", 81.0), filter="FL2")
    assert told(heavy, over, limit=1) == ["FL2 current 10.1 A -> 8.1 A, now within its limit, but thin"]


def test_a_smaller_filter() -> None:
    assert told(filters(rated_current=7.0), limit=1) == ["FL2 current limit 10 A -> 7 A, now over its allowance"]
    assert told(filters(rated_current=9.6), limit=2) == [
        "FL1 current limit 10 A -> 9.6 A",
        "FL2 current limit 10 A -> 9.6 A",
    ]
    assert told(replace(PROJECT, rules=Rules(filter_load=0.9)), limit=1) == ["FL1 current wanted 8 A -> 9 A"]


def test_filters_are_told_before_what_is_behind_them() -> None:
    assert told(power("CV1", 30.0)) == [
        "FL1 current 2 A -> 3 A",
        "bus current 9.4 A -> 10.4 A",
        "CV1 load 20 W -> 30 W",
    ]


def test_the_worst_state_comes_first() -> None:
    first = told(replace(power("CV2", 85.0), bus=replace(PROJECT.bus, low=7.0, rating=5.0)), limit=4)
    assert first[0].endswith("over the rating") or first[0].endswith("over its allowance")
    assert [("now thin" in words) for words in first] == sorted("now thin" in words for words in first)
    assert any(
        words == "CV1 low V 10 V -> 7 V, now too low"
        for words in told(replace(PROJECT, bus=replace(PROJECT.bus, low=7.0)), limit=9)
    )


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"filter": ""}, "CV1 allocation, now not allocated"),
        ({"min_input": 11.0}, "CV1 low V limit 8 V -> 11 V, now too low"),
        ({"max_input": 9.0}, "CV1 high V limit 16 V -> 9 V, now too high"),
        ({"max_input": None}, "CV1 high V limit 16 V -> none, now without data"),
        ({"rated_power": 19.0}, "CV1 load limit 100 W -> 19 W, now over its limit"),
    ],
)
def test_what_is_said_of_each_check(changes: dict[str, object], words: str) -> None:
    assert words in told(converter("CV1", **changes), limit=9)


def test_back_again() -> None:
    loose = converter("CV1", filter="")
    assert "CV1 allocation, now allocated" in told(PROJECT, loose, limit=9)


def test_a_bus_that_cannot_carry_it() -> None:
    weak = replace(PROJECT, bus=replace(PROJECT.bus, resistance=1.0))  # 25 W at most
    assert told(weak, limit=1) == ["bus operating point, the bus cannot carry it now"]
    assert told(PROJECT, weak, limit=1) == ["bus operating point, the bus carries it now"]


def test_things_that_come_and_go() -> None:
    more = replace(
        PROJECT,
        filters=(*PROJECT.filters, Filter("FL3")),
        converters=(*PROJECT.converters, replace(PROJECT.converters[0], id="CV3", output=(Output("", 1.0, 0.0),))),
    )
    assert told(more) == ["CV3 is new", "FL3 is new"]
    assert told(PROJECT, more) == ["CV3 is gone", "FL3 is gone"]


def test_nothing_changed() -> None:
    assert told(replace(PROJECT, title="other")) == ["no result changed"]
    assert told(power("CV1", 20.000001)) == ["no result changed"], "what the screen does not show is not told"


def test_a_case_of_its_own_does_not_matter_until_it_is_the_worst() -> None:
    less = replace(PROJECT, cases=(*PROJECT.cases, Case("idle", load=(("CV1", Load("off")), ("CV2", Load("off"))))))
    assert told(less) == ["no result changed"]


def test_at_most_so_many_findings() -> None:
    for limit in range(1, 6):
        assert len(told(power("CV2", 120.0), limit=limit)) <= limit


@pytest.mark.parametrize(("old", "new"), [(False, False), (False, True), (True, False)])
def test_without_a_result(old: bool, new: bool) -> None:
    result: Result = evaluate(PROJECT)
    words = describe(result if old else None, result if new else None)
    assert words == ("the bus cannot be read, so nothing is calculated" if old else "")
