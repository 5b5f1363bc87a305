"""What a user does to a document: every cell of the schema takes what it should and refuses the rest."""

from __future__ import annotations

import copy
import tomllib
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget import quantity
from budget.project import document as doc
from budget.project import edits, read, schema, starter
from budget.project.build import Shelf, build
from budget.project.document import Document, Path, from_data
from budget.project.problems import ProjectError
from budget.project.schema import Field
from budget.session import Session

TEXT = """
format = 1
shelf_files = ["s.toml"]
[bus]
low = "22 V"
nominal = "28 V"
high = "29 V"
[rules]
emissions = ["own"]
[[filter]]
id = "FL1"
dm = [{ series = { L = "4.7 uH", R = "8 mohm" }, note = "n" }, { shunt = { C = "1 uF" } }]
cm = []
[[filter]]
id = "FL2"
part = "lent"
[[converter]]
id = "CV1"
filter = "FL1"
rated_power = 50
output = [{ voltage = "12 V", current = "2 A" }]
efficiency = "88 %"
[[converter]]
id = "CV2"
part = "small"
filter = "FL2"
[[case]]
id = "full"
load = { CV1 = "60 %", CV2 = "off" }
[[limit]]
name = "own"
unit = "dBuV"
setup = "lisn-50uH"
points = [["10 kHz", 94], ["10 MHz", 60]]
"""
SHELVES = (
    Shelf(
        "s.toml",
        tomllib.loads("""
[shelf.filter.lent]
rated_current = "8 A"
dm = [{ shunt = { C = "1 uF" } }, { series = { L = "4.7 uH" } }]
cm = []
[shelf.converter.small]
rated_power = "20 W"
output = [{ voltage = "5 V", current = "2 A" }]
efficiency = 0.9
lead = { R = "5 mohm", L = "300 nH" }
"""),
    ),
)
F1, F2, C1, C2 = ("filter", 0), ("filter", 1), ("converter", 0), ("converter", 1)


def fresh() -> Document:
    return from_data(tomllib.loads(TEXT), TEXT)


def enter(path: Path, text: str, document: Document | None = None) -> Document:
    return edits.enter(document or fresh(), SHELVES, path, text)


def value(document: Document, path: Path) -> tuple[Any, bool]:
    return edits.value_at(document, SHELVES, path)


# -- every field of the schema


def cells(fields: tuple[Field, ...], base: Path) -> Iterator[tuple[Path, Field]]:
    """One cell for every field of a table, those of nested tables and rows included."""
    for spec in fields:
        at = (*base, spec.key)
        if spec.kind == schema.TABLE:
            yield from cells(spec.fields, at)
        elif spec.kind in (schema.TABLES, schema.LADDER):
            yield from cells(spec.fields, (*at, 0))
        elif spec.kind in (schema.ROWS, schema.CURVE):
            yield from (((*at, 0, n), column) for n, column in enumerate(spec.fields))
        elif spec.kind == schema.LOADS:
            yield (*at, "CV1"), schema.LOAD
        else:
            yield at, spec


def all_cells() -> list[tuple[Path, Field]]:
    found = [
        (("shelf_files",), schema.SHELF_FILES),
        (("converter", 0, "efficiency"), schema.CONVERTER_TABLE.field("efficiency")),
    ]
    for key, table in schema.TABLES_BY_KEY.items():
        found += list(cells(table.fields, (key, 0) if table.many else (key,)))
    for key in schema.SHELVES:
        found += list(cells(schema.shelf_table(key).fields, ("shelf", key, "a part")))
    return [(path, spec) for path, spec in found if spec is not None]


def with_room(path: Path) -> Document:
    """A document in which the list that the cell stands in has an item."""
    document = fresh()
    base = edits.owner(path)
    if path[0] == "shelf":
        document = doc.put(document, base, {})
    rest = path[len(base) :]
    if len(rest) > 1 and isinstance(rest[1], int):
        if not isinstance(doc.get(document, (*base, rest[0])), list) or not doc.get(document, (*base, rest[0])):
            document, _ = edits.new_item(document, SHELVES, (*base, rest[0]))
        if rest[0] == "efficiency" and not isinstance(doc.get(document, (*base, rest[0])), list):
            document, _ = edits.new_item(document, SHELVES, (*base, rest[0]))
    return document


def good(spec: Field) -> str:
    if spec.kind == schema.CHOICE:
        return spec.choices[-1]
    words = {
        schema.FILTER: "FL2",
        schema.PART: "lent",
        schema.TEXTS: "own, CE102",
        schema.TEXT: "any text",
        schema.IDENT: "X 1",
    }
    if spec.kind in words:
        return words[spec.kind]
    kind = quantity.KINDS[(spec.fields[-1] if spec.kind == schema.CURVE else spec).kind]
    return "50 %" if kind.name == "ratio" else kind.example


def bad(spec: Field) -> list[str]:
    if spec.kind == schema.CHOICE:
        return ["nix", "Series"]
    if spec.kind in (schema.FILTER, schema.PART):
        return ["nix", "a\x07b"]
    if spec.kind in (schema.TEXT, schema.TEXTS):
        return ["a\x1b[31mb"]
    if spec.kind == schema.IDENT:
        return ["", "  ", "x" * 41, "a\nb"]
    cell = spec.fields[-1] if spec.kind == schema.CURVE else spec
    texts = ["nix", "5 W V", "1 kg", "9" * 400, "1e400", "5 5", "(", "true", "nan", "inf"]
    if cell.low is not None:
        texts.append(str(cell.low - 1))
        texts += ["0"] * (cell.above and cell.low == 0)
    if cell.high is not None:
        texts.append(str(cell.high + 1))
    return texts


CELLS = all_cells()
NAMES = [".".join(map(str, path)) for path, _ in CELLS]


@pytest.mark.parametrize(("path", "spec"), CELLS, ids=NAMES)
def test_every_cell_takes_a_good_value(path: Path, spec: Field) -> None:
    assert edits.spec_at(path) is spec or edits.spec_at(path) == spec
    text = good(spec)
    if path == (*C1, "part"):
        text = "small"
    before = with_room(path)
    kept = copy.deepcopy(before.data)
    after = edits.enter(before, SHELVES, path, text)
    stored, lent = edits.value_at(after, SHELVES, path)
    assert edits.typed(stored) == text
    assert not lent
    assert before.data == kept
    assert edits.enter(after, SHELVES, path, text) is after  # typed again, nothing changes
    if spec is schema.LOAD:
        read.read_load(stored)
        return
    reading = read.Reading()
    assert read.read_field(spec, stored, reading, ())[1]
    assert reading.problems == []


@pytest.mark.parametrize(("path", "spec"), CELLS, ids=NAMES)
def test_no_cell_takes_a_bad_value(path: Path, spec: Field) -> None:
    document = with_room(path)
    kept = copy.deepcopy(document.data)
    for text in bad(spec):
        with pytest.raises(ProjectError) as caught:
            edits.enter(document, SHELVES, path, text)
        sentence = str(caught.value)
        assert sentence.isprintable(), text
        assert sentence.endswith(".")
        assert len(sentence) < 400
    assert document.data == kept


@pytest.mark.parametrize(("path", "spec"), CELLS, ids=NAMES)
def test_empty_text_clears_a_cell(path: Path, spec: Field) -> None:
    document = edits.enter(with_room(path), SHELVES, path, "small" if path == (*C1, "part") else good(spec))
    needed = spec.required or isinstance(path[-1], int) or path[-1] == "place"
    if needed and not (path[0] == "shelf" and len(path) == 4):
        with pytest.raises(ProjectError, match=r"emptied|left empty"):
            edits.enter(document, SHELVES, path, " ")
        return
    if needed:
        return
    cleared = edits.enter(document, SHELVES, path, " ")
    assert edits.typed(edits.value_at(cleared, SHELVES, path)[0]) == ""
    base = edits.owner(path)
    assert doc.get(cleared, base) is not None or path == ("shelf_files",) or len(base) == 1


@pytest.mark.parametrize(
    "path",
    [
        (),
        ("format",),
        ("nix", 0, "id"),
        ("filter",),
        F1,
        (*F1, "nix"),
        (*F1, "id", 0),
        (*F1, "dm"),
        (*F1, "dm", 0),
        (*F1, "dm", "L"),
        (*F1, "dm", 0, "series", "L"),
        (*C1, "efficiency", 0),
        (*C1, "efficiency", 0, 2),
        (*C1, "efficiency", 0, -1),
        (*C1, "chop"),
        ("rules", "emissions", 0),
        ("shelf", "case", "x", "id"),
        ("shelf", "filter", "x"),
        ("shelf", "filter", "x", "id"),
        ("case", 0, "load"),
        ("case", 0, "load", 0),
        ("filter", 9, "name"),
        ("filter", "x", "name"),
        ("filter", 9, "id"),
        ("filter", 9, "dm", 0, "place"),
        ("converter", 9, "chop", "duty"),
    ],
    ids=str,
)
def test_what_is_no_cell_cannot_be_typed_into(path: Path) -> None:
    with pytest.raises(ProjectError):
        enter(path, "series" if path[-1:] == ("place",) else "5")


def test_typed_text_is_stored_as_typed() -> None:
    path = ("bus", "rating")
    for text, stored in (
        ("28", 28),
        ("-0", None),
        ("0.90", "0.90"),
        ("2.5", 2.5),
        ("028", "028"),
        ("28.0", 28.0),
        ("1e3", "1e3"),
        (" 2 * 1.5 A + 200 mA ", "2 * 1.5 A + 200 mA"),
        ("4 500 mA", None),
    ):
        if stored is None:
            with pytest.raises(ProjectError):
                enter(path, text)
            continue
        now = doc.get(enter(path, text), path)
        assert now == stored
        assert type(now) is type(stored)
    assert doc.get(enter((*C1, "phase"), "-0"), (*C1, "phase")) == "-0"


def attempt(change: Callable[[], Any]) -> Any:
    """What ``change`` gives, None where it is refused: with a sentence."""
    refused = ""
    try:
        return change()
    except ProjectError as error:
        refused = str(error)
    assert refused.isprintable()
    assert refused.endswith(".")
    return None


@given(st.text(max_size=12), st.sampled_from(CELLS))
def test_any_text_is_taken_or_refused_with_a_sentence(text: str, cell: tuple[Path, Field]) -> None:
    document = with_room(cell[0])
    after = attempt(lambda: edits.enter(document, SHELVES, cell[0], text)) or document
    edits.typed(edits.value_at(after, SHELVES, cell[0])[0])


# -- ids


def test_renaming_a_filter() -> None:
    after = enter((*F1, "id"), "in")
    assert [c["filter"] for c in after.data["converter"]] == ["in", "FL2"]
    assert enter((*F1, "id"), "FL1", after).data["converter"] == fresh().data["converter"]


def test_renaming_a_converter_keeps_its_place_in_the_loads() -> None:
    after = enter((*C1, "id"), 'a."b')
    assert list(after.data["case"][0]["load"].items()) == [('a."b', "60 %"), ("CV2", "off")]


def test_renaming_a_limit() -> None:
    assert enter(("limit", 0, "name"), "mine").data["rules"]["emissions"] == ["mine"]
    with pytest.raises(ProjectError, match="taken"):
        enter(("limit", 0, "name"), "CE102")


@pytest.mark.parametrize("path", [F1, C1])
def test_ids_are_unique_over_filters_and_converters(path: Path) -> None:
    for taken in ("FL2", "CV2"):
        with pytest.raises(ProjectError, match="taken"):
            enter((*path, "id"), taken)
    same = fresh()
    assert enter((*F1, "id"), " FL1 ", same) is same


def test_of_two_rows_with_one_id_the_others_mean_the_first() -> None:
    twice = doc.put(fresh(), (*F2, "id"), "FL1")
    assert enter((*F2, "id"), "FL3", twice).data["converter"][0]["filter"] == "FL1"
    assert enter((*F1, "id"), "FL3", twice).data["converter"][0]["filter"] == "FL3"


def test_removing_a_filter_lets_its_converters_go() -> None:
    after = edits.remove_row(fresh(), F1)
    assert [c["filter"] for c in after.data["converter"]] == ["", "FL2"]
    assert [f["id"] for f in after.data["filter"]] == ["FL2"]


def test_removing_a_converter_and_a_limit() -> None:
    after = edits.remove_row(edits.remove_row(fresh(), C1), ("limit", 0))
    assert after.data["case"][0]["load"] == {"CV2": "off"}
    assert after.data["rules"]["emissions"] == []
    assert "limit" not in after.data


def test_removing_one_of_two_rows_with_one_id() -> None:
    twice = doc.put(fresh(), (*F2, "id"), "FL1")
    assert edits.remove_row(twice, F2).data["converter"][0]["filter"] == "FL1"


def test_to_filter() -> None:
    document = fresh()
    assert edits.to_filter(document, 0, "FL1") is document
    assert edits.to_filter(document, 0, "").data["converter"][0]["filter"] == ""


def test_new_rows_have_free_ids_and_break_nothing() -> None:
    document = fresh()
    for key in ("filter", "converter", "case", "limit"):
        document, path = edits.new_row(document, key, 0)
        assert path == (key, 0)
        document, path = edits.new_row(document, key, len(document.data[key]))
    assert build(document, SHELVES).problems == ()
    assert document.origin["filter"] == (None, 0, 1, None)
    assert starter.ROWS["filter"]["id"] == "FL1"


def test_a_copied_row_gets_a_free_id() -> None:
    document, _ = edits.insert_row(fresh(), ("filter", 1), doc.get(fresh(), F1))
    assert [f["id"] for f in document.data["filter"]] == ["FL1", "FL3", "FL2"]
    document, _ = edits.insert_row(fresh(), ("case", 1), {"name": "no id"})
    assert document.data["case"][1]["id"] == "case1"
    document, _ = edits.insert_row(fresh(), ("limit", 0), {"name": "CE102"})
    assert document.data["limit"][0]["name"] not in schema.LIMIT_SETS


# -- ladders and shelves


def test_a_changed_place_keeps_the_values() -> None:
    path = (*F1, "dm", 0)
    after = enter((*path, "place"), "shunt")
    assert doc.get(after, path) == {"shunt": {"L": "4.7 uH", "R": "8 mohm"}, "note": "n"}
    assert value(after, (*path, "L")) == ("4.7 uH", False)
    back = enter((*path, "place"), "series", after)
    assert back.data == fresh().data
    assert enter((*path, "place"), "series", back) is back


def test_an_emptied_element_keeps_its_place() -> None:
    after = edits.clear(fresh(), (*F1, "dm", 1, "C"))
    assert doc.get(after, (*F1, "dm", 1)) == {"shunt": {}}
    assert doc.get(enter((*F1, "dm", 1, "C"), "2 uF", after), (*F1, "dm", 1)) == {"shunt": {"C": "2 uF"}}


def test_an_emptied_shelf_part_stays() -> None:
    document = doc.put(fresh(), ("shelf", "filter", "x"), {"name": "n"})
    assert edits.clear(document, ("shelf", "filter", "x", "name")).data["shelf"] == {"filter": {"x": {}}}


def test_lent_fields_are_shown_as_lent() -> None:
    document = fresh()
    assert value(document, (*F2, "rated_current")) == ("8 A", True)
    assert value(document, (*F2, "dm", 0, "place")) == ("shunt", True)
    assert value(document, (*F2, "dm", 1, "L")) == ("4.7 uH", True)
    assert value(document, (*C2, "lead", "R")) == ("5 mohm", True)
    assert value(document, (*C2, "output", 0, "voltage")) == ("5 V", True)
    assert value(document, (*C2, "filter")) == ("FL2", False)
    assert value(edits.clear(document, (*C2, "filter")), (*C2, "filter")) == ("", False)
    unfiltered = doc.put(doc.drop(document, (*C2, "filter")), ("shelf", "converter", "small"), {"filter": "FL1"})
    assert value(unfiltered, (*C2, "filter")) == (None, False)  # a part lends no filter
    assert value(document, (*F1, "dm", 1, "C")) == ("1 uF", False)


def test_editing_a_nested_lent_field_copies_it_first() -> None:
    shelf = copy.deepcopy(SHELVES[0].data)
    after = enter((*F2, "dm", 1, "L"), "10 uH")
    assert doc.get(after, (*F2, "dm")) == [{"shunt": {"C": "1 uF"}}, {"series": {"L": "10 uH"}}]
    assert value(after, (*F2, "dm", 0, "C")) == ("1 uF", False)
    after = enter((*F2, "dm", 0, "place"), "series", after)
    assert doc.get(after, (*F2, "dm", 0)) == {"series": {"C": "1 uF"}}
    after = enter((*C2, "lead", "R"), "1 mohm")
    assert doc.get(after, (*C2, "lead")) == {"R": "1 mohm", "L": "300 nH"}
    assert SHELVES[0].data == shelf


def test_clearing_returns_to_the_shelf() -> None:
    after = enter((*F2, "rated_current"), "5 A")
    assert value(after, (*F2, "rated_current")) == ("5 A", False)
    assert value(enter((*F2, "rated_current"), "", after), (*F2, "rated_current")) == ("8 A", True)
    after = enter((*C2, "rated_power"), "", enter((*C2, "rated_power"), "5 W"))  # needed, and lent
    assert value(after, (*C2, "rated_power")) == ("20 W", True)
    after = edits.clear(enter((*F2, "dm", 1, "L"), "10 uH"), (*F2, "dm"))
    assert value(after, (*F2, "dm", 1, "L")) == ("4.7 uH", True)


def test_a_part_in_the_project_goes_before_one_in_a_file() -> None:
    document = doc.put(fresh(), ("shelf", "filter", "lent"), {"rated_current": 1})
    assert value(document, (*F2, "rated_current")) == (1, True)
    assert edits.shelf_names(document, SHELVES, "filter") == ("lent",)
    assert edits.shelf_names(document, SHELVES, "converter") == ("small",)


def test_the_first_field_of_a_nested_table_brings_what_it_needs() -> None:
    document = doc.put(fresh(), (*C1, "frequency"), "300 kHz")
    for path in ((*C1, "chop", "ripple"), (*C1, "cm", "shunt"), (*C1, "lead", "L")):
        document = enter(path, good(edits.spec_at(path)), document)  # type: ignore[arg-type]
    assert build(document, SHELVES).errors == ()
    assert set(document.data["converter"][0]["lead"]) == {"L"}


# -- items of lists

LISTS = [
    (*base, spec.key)
    for base, table in ((F1, schema.FILTER_TABLE), (C1, schema.CONVERTER_TABLE), (("limit", 0), schema.LIMIT))
    for spec in table.fields
    if spec.kind in (schema.TABLES, schema.LADDER, schema.ROWS, schema.CURVE)
]


@pytest.mark.parametrize("path", LISTS, ids=str)
def test_new_items_stay_readable_and_in_order(path: Path) -> None:
    document = doc.put(fresh(), (*C1, "frequency"), "300 kHz")
    if path[-1] == "attenuation":
        document = doc.put(doc.drop(doc.drop(document, (*F1, "dm")), (*F1, "cm")), (*F1, "resistance"), 0.1)
    document, item = edits.new_item(document, SHELVES, path)
    for at in (item, (*path, 0), path, (*path, 1)):
        before = len(doc.get(document, path))
        document, item = edits.new_item(document, SHELVES, at)
        assert len(doc.get(document, path)) == before + 1
        assert item[-1] == (before if at == path else int(at[-1]) + 1)
        assert build(document, SHELVES).problems == (), at


def test_efficiency_number_becomes_a_curve_of_the_same_value() -> None:
    after, item = edits.new_item(fresh(), SHELVES, (*C1, "efficiency"))
    assert doc.get(after, (*C1, "efficiency")) == [["20 %", "88 %"], ["100 %", "88 %"]]
    after, item = edits.new_item(after, SHELVES, item)
    assert doc.get(after, item) == ["60 %", "88 %"]
    after, _ = edits.new_item(fresh(), SHELVES, (*C2, "efficiency"))
    assert doc.get(after, (*C2, "efficiency", 1)) == ["100 %", 0.9]


def test_an_item_behind_lent_ones() -> None:
    after, item = edits.new_item(fresh(), SHELVES, (*F2, "dm", 0))
    assert item == (*F2, "dm", 1)
    assert len(doc.get(after, (*F2, "dm"))) == 3


def test_new_nested_tables() -> None:
    document = fresh()
    for key in ("lead", "chop", "ripple", "cm"):
        document, path = edits.new_item(document, SHELVES, (*C1, key))
        assert path == (*C1, key)
        with pytest.raises(ProjectError, match="already"):
            edits.new_item(document, SHELVES, path)


@pytest.mark.parametrize(
    "path", [(), F1, (*F1, "id"), ("case", 0, "load"), ("bus", "low"), ("filter", 9, "dm")], ids=str
)
def test_no_item_where_there_is_no_list(path: Path) -> None:
    with pytest.raises(ProjectError):
        edits.new_item(fresh(), SHELVES, path)


# -- a document of which nothing is as it should be


STRANGE = [5, "x", True, [], [5], {}, {"id": 5}, [{"id": [1], "filter": {}, "load": 5, "part": {}}], [[]]]


@settings(max_examples=200)
@given(st.dictionaries(st.sampled_from(schema.ROOT_KEYS), st.sampled_from(STRANGE)), st.sampled_from(CELLS))
def test_strange_documents_are_refused_with_a_sentence(data: dict[str, Any], cell: tuple[Path, Field]) -> None:
    document = from_data(copy.deepcopy(data))
    path, key = cell[0], str(cell[0][0])
    edits.value_at(document, (), path)
    edits.remove_row(document, path[:2])
    for text in (good(cell[1]), ""):
        attempt(lambda text=text: edits.enter(document, (), path, text))  # type: ignore[misc]
    attempt(lambda: edits.new_item(document, (), path))
    if key in starter.ROWS:
        attempt(lambda: edits.rename(document, (*path[:2], "id"), "new"))
        attempt(lambda: edits.new_row(document, key, 0))
    assert document.data == data


# -- undo


@st.composite
def step(draw: st.DrawFn) -> Any:
    path, spec = draw(st.sampled_from(CELLS))
    text = draw(st.sampled_from([good(spec), ""]))
    key, at, to = draw(st.sampled_from(sorted(starter.ROWS))), draw(st.integers(0, 3)), draw(st.integers(0, 3))
    return draw(
        st.sampled_from(
            (
                lambda d: edits.enter(d, SHELVES, path, text),
                lambda d: edits.new_row(d, key, min(at, len(d.data.get(key, []))))[0],
                lambda d: edits.remove_row(d, (key, at)),
                lambda d: doc.move(d, (key, at), to),
                lambda d: edits.new_item(d, SHELVES, path)[0],
            )
        )
    )


@given(st.lists(step(), max_size=15))
def test_as_many_undos_as_edits_give_the_first_document_itself(steps: list[Any]) -> None:
    session = Session(fresh(), shelves=SHELVES)
    first, data = session.document, copy.deepcopy(session.document.data)
    seen = [first]
    for change in steps:
        try:
            changed = change(session.document)
        except ProjectError:
            continue
        if session.apply("edit", changed, None):
            seen.append(session.document)
    last = session.document
    for document in reversed(seen[:-1]):
        assert session.undo(None) is not None
        assert session.document is document
    assert session.undo(None) is None
    assert session.document is first
    assert first.data == data
    for document in seen[1:]:
        assert session.redo(None) is not None
        assert session.document is document
    assert session.redo(None) is None
    assert session.document is last
    build(last, SHELVES)


def test_messages_of_cells_name_what_is_expected() -> None:
    for path, text, words in (
        (("bus", "low"), "5 A", "voltage"),
        ((*C1, "chop", "duty"), "150 %", "below 100 %"),
        ((*C1, "filter"), "FL9", "FL1, FL2"),
        ((*C1, "duty_law"), "x", "flyback"),
        (("case", 0, "load", "CV1"), "5 V", "power"),
    ):
        with pytest.raises(ProjectError, match=words):
            enter(path, text)


def test_cell_of_a_problem() -> None:
    assert edits.cell_of((*F1, "dm", 0, "series", "L")) == (*F1, "dm", 0, "L")
    assert edits.cell_of(("case", 0, "load", "series")) == ("case", 0, "load", "series")
    assert read.ident_fault("CV1") == ""
