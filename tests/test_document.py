"""The document: an edit makes a new one and shares what it did not touch; origins follow their rows."""

from __future__ import annotations

import copy
from collections.abc import Callable
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budget.project import document as doc
from budget.project.document import Document, from_data

Edit = Callable[[Document], Document]
KEYS = ("filter", "converter")


def fresh() -> Document:
    rows = {key: [{"id": f"{key}{n}", "dm": [{"series": {"L": n}}]} for n in range(3)] for key in KEYS}
    return from_data({"format": 1, "bus": {"low": 22, "lead": {"R": 1}}, **rows, "odd": 5}, "text")


@st.composite
def edits(draw: st.DrawFn) -> Edit:
    key, at, to = draw(st.sampled_from(KEYS)), draw(st.integers(0, 4)), draw(st.integers(-1, 5))
    return draw(
        st.sampled_from(
            (
                lambda d: doc.put(d, ("bus", "low"), at),
                lambda d: doc.put(d, (key, at, "name"), to) if doc.get(d, (key, at)) else d,
                lambda d: doc.drop(d, (key, at, "dm")),
                lambda d: doc.drop(d, ("bus", "lead", "R")),
                lambda d: doc.insert(d, (key, min(at, len(doc.get(d, (key,), [])))), {"id": f"new{to}"}),
                lambda d: doc.remove(d, (key, at)),
                lambda d: doc.move(d, (key, at), to),
                lambda d: doc.move(d, (key, at, "dm", 0), to),
            )
        )
    )


@given(st.lists(edits(), max_size=12))
def test_edits_leave_the_old_document_as_it_was(sequence: list[Edit]) -> None:
    document = fresh()
    for edit in sequence:
        before, origin = copy.deepcopy(document.data), copy.deepcopy(dict(document.origin))
        changed = edit(document)
        assert document.data == before
        assert document.origin == origin
        document = changed


@given(st.lists(edits(), max_size=12))
def test_origin_follows_the_rows(sequence: list[Edit]) -> None:
    document = fresh()
    for edit in sequence:
        document = edit(document)
    for key in KEYS:
        rows = document.data.get(key, [])
        assert len(document.origin[key]) == len(rows)
        for row, origin in zip(rows, document.origin[key], strict=True):
            assert row["id"].startswith("new") if origin is None else row["id"] == f"{key}{origin}"


@given(edits())
def test_unchanged_rows_are_the_same_objects(edit: Edit) -> None:
    before = fresh()
    after = edit(before)
    for key in KEYS:
        old = {id(row) for row in before.data[key]}
        assert sum(id(row) not in old for row in after.data.get(key, [])) <= 1
    assert after.data["filter"] is before.data["filter"] or after.data["converter"] is before.data["converter"]


def test_get() -> None:
    document = fresh()
    assert doc.get(document, ("filter", 1, "dm", 0, "series", "L")) == 1
    strange: tuple[doc.Path, ...] = (
        ("nix",),
        ("filter", 9),
        ("filter", -1),
        ("filter", "id"),
        ("bus", 0),
        ("odd", "x"),
    )
    for path in strange:
        assert doc.get(document, path, "none") == "none"


def test_put_makes_the_tables_on_the_way() -> None:
    document = doc.put(fresh(), ("shelf", "filter", "a.b", "note"), "x")
    assert document.data["shelf"] == {"filter": {"a.b": {"note": "x"}}}
    for path in (("odd", "low"), ("filter", 7, "id"), ("filter", "id"), ("bus", 0)):
        with pytest.raises(KeyError):
            doc.put(fresh(), path, 1)


def test_drop_takes_an_emptied_nested_table_along() -> None:
    document = doc.drop(fresh(), ("bus", "lead", "R"))
    assert document.data["bus"] == {"low": 22}
    document = doc.drop(doc.drop(document, ("bus", "low")), ("format",))
    assert document.data["bus"] == {}
    assert "format" not in document.data


@pytest.mark.parametrize(
    "path", [("odd", "x"), ("bus", "low", "x"), ("nix", "x"), ("filter", 0), ("filter", 0, "id", "f")]
)
def test_drop_of_what_is_not_there_changes_nothing(path: doc.Path) -> None:
    document = fresh()
    assert doc.drop(document, path) is document


@pytest.mark.parametrize(("path", "to"), [(("odd", 0), 1), (("nix", 0), 0), (("filter", 9), 0), (("filter", 1), 1)])
def test_move_and_remove_of_what_is_not_there_change_nothing(path: doc.Path, to: int) -> None:
    document = fresh()
    assert doc.move(document, path, to) is document
    if path != ("filter", 1):
        assert doc.remove(document, path) is document


def test_rows_without_an_origin_can_be_moved() -> None:
    document = Document({"case": [{"id": "a"}, 5]})
    assert doc.move(document, ("case", 0), 1).data["case"] == [5, {"id": "a"}]


def test_insert_into_something_else_than_a_list() -> None:
    with pytest.raises(KeyError):
        doc.insert(fresh(), ("odd", 0), {})


def test_remove_of_the_last_row_and_a_new_one() -> None:
    document: Any = from_data({"case": [{"id": "a"}]}, "text")
    document = doc.remove(document, ("case", 0))
    assert (document.data, document.origin) == ({}, {"case": ()})
    document = doc.insert(document, ("case", 0), {"id": "b"})
    assert document.origin == {"case": (None,)}
