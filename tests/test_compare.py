"""Compare: what differs in inputs and results of two projects."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine.evaluate import evaluate_dc, with_emissions
from budget.project import edits, store
from budget.project.build import build
from budget.project.document import Document, put
from budget.project.document import Path as Cells
from budget.report import compare as report
from budget.report import tables
from budget.study.compare import Comparison, Variant, compare
from budget.study.paths import cell_at, resolve
from budget.study.paths import put as put_number

DEMO = store.load(Path(__file__).parent.parent / "projects" / "heron.toml")


def path(text: str, document: Document = DEMO.document) -> Cells:
    return resolve(document, DEMO.shelves, text)


def edit(**cells: str) -> Document:
    """The demo with texts typed into cells; ``__`` stands for the dot."""
    document = DEMO.document
    for cell, text in cells.items():
        document = edits.enter(document, DEMO.shelves, path(cell.replace("__", "."), document), text)
    return document


def variant(document: Document, name: str = "b", emissions: bool = False) -> Variant:
    built = build(document, DEMO.shelves)
    assert built.project is not None
    result = evaluate_dc(built.project)
    return Variant(name, document, DEMO.shelves, with_emissions(result) if emissions else result)


@cache
def demo(emissions: bool = False) -> Variant:
    return variant(DEMO.document, "a", emissions)


def against_demo(document: Document, emissions: bool = False) -> Comparison:
    return compare(demo(emissions), variant(document, "b", emissions))


def test_a_project_does_not_differ_from_itself() -> None:
    found = compare(demo(True), variant(DEMO.document, "b", True))
    assert (found.inputs, found.checks, found.energy) == ((), (), ())
    assert not found.worse
    assert "no inputs differ; no check changed" in report.as_text(found)


def test_moving_the_gimbal_drive_mends_the_demo() -> None:
    found = against_demo(edit(CV11__filter="FL3"), emissions=True)
    assert [(i.path, i.kind, i.before, i.after) for i in found.inputs] == [("CV11.filter", "changed", "FL2", "FL3")]
    filters = {c.row.subject: c for c in found.checks if c.row.check == "filter current"}
    assert filters["FL2"].verdict == "better"
    assert (filters["FL2"].before and filters["FL2"].before.status) == "fail"
    assert filters["FL3"].verdict == "worse"
    assert not filters["FL3"].turned_worse
    assert found.status[0] == "fail"
    assert not found.worse
    assert found.lower
    assert any(c.row.check.startswith("emission ") for c in found.checks)
    back = compare(variant(edit(CV11__filter="FL3")), demo())
    assert back.worse
    assert back.checks[0].row.subject == "FL2"


def test_a_failing_check_that_fails_by_more_is_worse() -> None:
    found = against_demo(edit(CV3__output__0__current="4.2 A"))
    assert found.worse
    assert [(c.row.check, c.row.subject) for c in found.checks if c.turned_worse] == [("filter current", "FL2")]
    assert {e.case for e in found.energy} <= {case.id for case in demo().result.project.cases}
    assert found.energy


@pytest.mark.parametrize(
    ("cell", "text"),
    [
        ("CV3.output.0.current", "4000 mA"),  # written otherwise
        ("FL2.dm.0.L", "4.7 uH"),  # as the shelf lends it, now the row's own
        ("CV3.frequency_tolerance", "0 %"),  # the default, or what the shelf has
        ("climb.load.CV3", "off"),
    ],
)
def test_one_value_in_two_ways_is_no_difference(cell: str, text: str) -> None:
    document = edit(**{cell.replace(".", "__"): text})
    wanted = edits.value_at(DEMO.document, DEMO.shelves, path(cell))[0]
    found = against_demo(document)
    if cell in ("climb.load.CV3", "CV3.frequency_tolerance") and str(wanted) != text:
        assert [i.path for i in found.inputs] == [cell]
    else:
        assert found.inputs == ()
        assert found.checks == ()


NUMBERS = (
    "bus.resistance",
    "bus.temperature",
    "rules.growth",
    "rules.emission_margin",
    "FL1.dm.0.L",
    "FL3.isolation",
    "CV1.output.0.current",
    "CV2.output.2.voltage",
    "CV3.lead.L",
    "CV4.frequency",
    "CV5.rated_power",
    "CV6.efficiency",
    "survey.duration",
    "survey.load.CV11",
)


@settings(max_examples=30, deadline=None)
@given(name=st.sampled_from(NUMBERS), factor=st.floats(1.001, 1.2))
def test_one_number_changed_is_one_input_that_differs(name: str, factor: float) -> None:
    cell = cell_at(DEMO.document, DEMO.shelves, path(name))
    assert cell.value is not None
    value = cell.value * factor
    document = put_number(DEMO.document, DEMO.shelves, cell, value)
    found = against_demo(document)
    assert [i.path for i in found.inputs] == [name]
    assert cell_at(document, DEMO.shelves, cell.path).value == value


def test_the_order_of_rows_does_not_matter() -> None:
    data = dict(DEMO.document.data)
    data["converter"] = list(reversed(data["converter"]))
    found = against_demo(Document(data))
    assert found.inputs == ()
    assert not found.worse


def test_rows_that_only_one_has() -> None:
    document, new = edits.new_row(DEMO.document, "converter", 0, filter="FL1")
    document = edits.rename(document, (*new, "id"), "CV99")
    document = edits.remove_row(document, path("CV4.rated_power", document)[:2])
    found = against_demo(document)
    inputs = {(i.path, i.kind) for i in found.inputs}
    assert ("CV99", "added") in inputs
    assert ("CV4", "removed") in inputs
    verdicts = {(c.row.subject, c.verdict) for c in found.checks}
    assert {("CV99", "new"), ("CV4", "gone")} <= verdicts


def test_an_element_of_a_ladder_has_its_fields_under_plain_paths() -> None:
    document = edit(FL2__dm__0__L="10 uH")  # the whole ladder is the row's own now
    found = against_demo(document)
    assert [(i.path, i.before, i.after) for i in found.inputs] == [("FL2.dm.0.L", "4.7 uH", "10 uH")]


def test_reports_of_every_kind() -> None:
    nasty = put(
        edit(CV6__output__0__current="2 A", rules__emissions=""), path("CV1.name"), "x | <b> \x1b[2J \u2028 end"
    )
    found = against_demo(nasty, emissions=True)
    text, marked = report.as_text(found), report.as_markdown(found)
    assert all(c.isprintable() or c == "\n" for c in text + marked)
    assert "CV6.output.0.current" in text
    assert "Checks that got worse" in text
    assert "\\|" in marked
    data = json.loads(tables.dumps(report.as_json(found)))
    assert data["worse"] is True
    assert {"path": "CV6.output.0.current", "kind": "changed", "before": "300 mA", "after": "2 A"} in data["inputs"]
    worst = data["checks"][0]
    assert worst["turned_worse"]
    assert worst["after"]["status"] == "fail"
    assert any(c["verdict"] == "gone" and c["check"].startswith("emission ") for c in data["checks"])


def test_strict_counts_a_smaller_margin_as_worse(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from budget.cli import run

    folder = Path(__file__).parents[1] / "projects"
    text = (folder / "smallest.toml").read_text()
    one, two = tmp_path / "one.toml", tmp_path / "two.toml"
    one.write_text(text)
    two.write_text(text.replace('current = "1.5 A"', 'current = "1.6 A"'))
    assert run(["compare", str(one), str(two)]) == 0
    assert run(["compare", str(one), str(two), "--strict"]) == 1
    assert "less margin" in capsys.readouterr().out
