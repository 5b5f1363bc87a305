"""The desk driven by keys, without a screen: every command everywhere, editing as in a sheet, and undo all the way."""

from __future__ import annotations

import tempfile
import tomllib
from collections.abc import Iterator
from contextlib import chdir
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from budget.engine.model import LINES
from budget.project import edits, schema, store, toml_text
from budget.project.document import Document, get
from budget.report import words
from budget.session import Outcome, Session, open_file
from budget.ui import commands
from budget.ui.actions import ACTIONS
from budget.ui.commands import COMMANDS
from budget.ui.desk import VIEWS, Ask, Desk, Edit, Pick
from budget.ui.view import Cell, Row
from tests.screen.driving import (
    PROJECTS,
    TEXTS,
    Log,
    calculated,
    desk_of,
    key_of,
    on_file,
    press,
    screen,
    session_of,
    shown,
    small,
    typed,
)

# Keys that reach a program in every terminal, also through a multiplexer and over SSH (measured in tmux 3.3a): arrows,
# Home, End, PageUp, PageDown, Tab, Enter, Escape, Space, Delete, F2 to F9, and whatever types a printable sign.
ARRIVE = {
    *("up", "down", "left", "right", "home", "end", "pageup", "pagedown", "tab", "enter", "escape", "space", "delete"),
    *(f"f{n}" for n in range(2, 10)),
    "question_mark",
}


def at(desk: Desk, *path: str | int) -> None:
    """Put the cursor on the cell of a path, as following a check does."""
    desk.go_to(path)
    assert desk.here()[1].path == path


def on(desk: Desk, ident: str, column: str = "name") -> None:
    """Put the cursor of the sheet on the row of an id, by the key that finds rows, and there on a column."""
    press(desk, "s g")
    typed(desk, ident)
    press(desk, "enter home")
    titles = [c.title for c in desk.view().sections[0].columns]
    for _ in range(titles.index(column)):
        press(desk, "right")
    row, _ = desk.here()
    assert row is not None
    assert row.cells[0].text.split()[0] == ident


def value(desk: Desk, *path: str | int) -> object:
    return edits.value_at(desk.session.document, desk.session.shelves, path)[0]


def text_of(desk: Desk) -> str:
    assert isinstance(desk.mode, Edit)
    return desk.mode.text


def ids(desk: Desk, key: str) -> list[object]:
    return [row.get("id") for row in desk.session.document.data.get(key, [])]


# -- the table of commands


def test_every_key_has_one_command() -> None:
    keys = [key for command in COMMANDS for key in command.keys]
    assert len(keys) == len(set(keys))
    assert len({command.name for command in COMMANDS}) == len(COMMANDS)


def test_the_first_key_of_every_command_arrives_on_every_terminal() -> None:
    for command in COMMANDS:
        first = command.keys[0]
        assert first in ARRIVE or (len(first) == 1 and first.isascii() and first.isprintable()), command


def test_no_key_of_a_command_starts_a_number() -> None:
    assert not commands.STARTS_NUMBER & set(commands.BY_KEY)


def test_commands_and_actions_belong_together() -> None:
    assert {command.name for command in COMMANDS} == set(ACTIONS)
    assert {command.group for command in COMMANDS} == set(commands.GROUPS)


def test_help_and_the_list_of_commands_name_every_key() -> None:
    desk = small()
    press(desk, "?")
    told = "\n".join(" ".join(cell.text for cell in row.cells) for _, row in desk.lines() if row is not None)
    press(desk, "escape space")
    assert isinstance(desk.mode, Pick)
    listed = "\n".join(text for text, _ in desk.mode.shown())
    for command in COMMANDS:
        for key in command.keys:
            assert commands.key_text(key) in told
            assert commands.key_text(key) in listed


@pytest.mark.parametrize("command", COMMANDS, ids=lambda c: c.name)
def test_every_command_can_be_chosen_from_the_list(command: commands.Command) -> None:
    desk = small()
    press(desk, "space")
    assert isinstance(desk.mode, Pick)
    desk.mode.index = [name for _, name in desk.mode.shown()].index(command.name)
    press(desk, "enter")
    shown(desk)


# -- every command, in every view, on every kind of row


def kinds(desk: Desk, seen: set[object]) -> Iterator[tuple[int, int]]:
    """Line and column of one cell of every kind that the present view has and that was not ``seen`` yet."""
    for index, (_, row) in enumerate(desk.lines()):
        for column, cell in enumerate(row.cells if row is not None else ()):
            assert row is not None
            kind = (_shape(row), _sort(cell))
            if kind not in seen:
                seen.add(kind)
                yield index, column


def _shape(row: Row) -> object:
    return (len(row.key), type(row.key[-1]) if row.key else None, row.item is None, str(row.key[:1]))


def _sort(cell: Cell) -> object:
    spec = edits.spec_at(cell.path) if cell.path is not None else None
    return (spec.kind if spec else "", cell.path is None, cell.leads is None, cell.item is None)


def state(desk: Desk) -> tuple[object, ...]:
    """Everything a command may change."""
    return (
        desk.session.document,
        desk.session.generation,
        desk.view_name,
        desk.subject,
        desk.spot(),
        type(desk.mode),
        desk.message,
        desk.corner,
        desk.options,
        desk.job,
    )


IDLE = {  # these may leave everything as it is, where it already is as they would make it
    *(command.name for command in COMMANDS if command.group == "move" and command.name != "find"),
    *(command.name for command in COMMANDS if command.name.startswith("view_")),
    *("help", "worst"),
}


@pytest.mark.parametrize("name", list(TEXTS))
@pytest.mark.parametrize("view", list(VIEWS))
def test_every_command_does_something_or_says_why_not(view: str, name: str) -> None:
    first = session_of(TEXTS[name])
    outcome = calculated(first.document)
    subjects: list[tuple[str | int, ...]] = [("bus",)]
    if view == "fields":
        subjects += [
            (key, n) for key in ("filter", "converter") for n, _ in enumerate(first.document.data.get(key, []))
        ]
    seen: set[object] = set()
    for subject in subjects:
        model = fresh(first, outcome, view, subject)[0]
        for index, column in list(kinds(model, seen)):
            row = model.lines()[index][1]
            for command in COMMANDS:
                desk, log = fresh(first, outcome, view, subject, model)
                desk.cursor.index, desk.cursor.column = index, column
                desk.cursor.key = row.key if row is not None else ()
                before = state(desk)
                desk.key(*key_of(command.keys[0]))
                if command.name == "quit":
                    assert log.left == 1
                elif command.name not in IDLE and (view, command.name) not in (("help", "edit"), ("sheet", "go_back")):
                    assert state(desk) != before, (view, subject, index, column, command.name)


def fresh(
    first: Session, outcome: Outcome, view: str, subject: tuple[str | int, ...], model: Desk | None = None
) -> tuple[Desk, Log]:
    """A new desk on the same document; views are plain data, so those of ``model`` serve it too."""
    session = Session(first.document, file_problems=first.file_problems, saved=first.document)
    session.accept(outcome)
    desk, log = desk_of(session, live=False)
    desk.view_name, desk.subject = view, subject
    if model is not None:
        desk._views, desk._stamp = dict(model._views), model._stamp
    return desk, log


SIGNS = "0123456789.+-(%, abcdefghijklmnopqstuvwxyzACDNORUVX[]<>?"  # without W, / and ~: nothing is saved elsewhere
KEYS = [
    *("up", "down", "left", "right", "home", "end", "pageup", "pagedown", "tab", "shift+tab"),
    *("enter", "enter", "enter", "escape", "escape", "delete", "backspace", "space", "ctrl+u", "ctrl+c", "ctrl+v"),
    *(f"f{n}" for n in range(1, 10)),
    *SIGNS.replace(" ", ""),
]


@settings(max_examples=50, deadline=None)
@given(
    st.sampled_from(list(TEXTS)),
    st.lists(
        st.one_of(
            st.sampled_from(KEYS),
            st.sampled_from(["D", "n", "R", "X", "V", "d", "v", "[", "]", "<", ">", "u"]),
            st.text(max_size=5).map(lambda text: f"paste:{text}"),
        ),
        max_size=40,
    ),
)
def test_any_keys_leave_a_document_that_can_be_saved_and_undone(name: str, keys: list[str]) -> None:
    with tempfile.TemporaryDirectory() as folder, chdir(folder):
        session = session_of(TEXTS[name])
        desk, _ = desk_of(session)
        first = session.document
        for key in keys:
            if key.startswith("paste:"):
                desk.paste(key[6:])
            else:
                desk.key(*key_of(key))
            desk.here()
        text = store.render(session.document).text
        assert toml_text.same(tomllib.loads(text), session.document.data)
        press(desk, "escape escape")
        steps = 0
        while session.done:
            press(desk, "u")
            steps += 1
        assert session.document is first
        for _ in range(steps):
            press(desk, "U")
        assert toml_text.same(tomllib.loads(text), session.document.data)


# -- moving


def test_arrows_home_end_pages_and_tab() -> None:
    desk = small()
    press(desk, "down down right right")
    assert (desk.row_index(), desk.cursor.column) == (3, 2)
    press(desk, "up left")
    assert (desk.row_index(), desk.cursor.column) == (2, 1)
    press(desk, "tab tab")
    assert desk.cursor.column == 3
    press(desk, "shift+tab")
    assert desk.cursor.column == 2
    press(desk, "end")
    assert desk.cursor.column == len(desk.lines()[2][0].columns) - 1
    press(desk, "home pagedown")
    assert desk.cursor.column == 0
    assert desk.row_index() == len(desk.lines()) - 1
    press(desk, "pageup")
    assert desk.row_index() == 1
    press(desk, "up left")
    assert (desk.row_index(), desk.cursor.column) == (1, 0)


def test_a_row_is_found_by_id_or_name() -> None:
    desk = small()
    press(desk, "g")
    typed(desk, "secon")
    press(desk, "enter")
    assert desk.here()[0].item == ("converter", 1)  # type: ignore[union-attr]
    press(desk, "f g")
    typed(desk, "FB")
    press(desk, "enter")
    assert (desk.view_name, desk.subject) == ("fields", ("filter", 1))


@pytest.mark.parametrize("command", [c for c in COMMANDS if c.name.startswith("view_")], ids=lambda c: c.name)
def test_every_view_is_one_key_away_from_every_other(command: commands.Command) -> None:
    for view in VIEWS:
        desk = small()
        desk.view_name = view
        press(desk, command.keys[0])
        assert desk.view_name == command.name.removeprefix("view_")


def test_the_fields_are_those_of_the_selected_row() -> None:
    desk = small()
    for ident, subject in (("FB", ("filter", 1)), ("C2", ("converter", 1)), ("bus", ("bus",))):
        on(desk, ident)
        press(desk, "f")
        assert desk.subject == subject
        press(desk, "escape")


def test_every_field_of_the_file_has_a_cell() -> None:
    """Each field of the schema, also inside ladders, lists and tables, is a cell that can be edited, or says how it is
    added."""
    desk = small()
    paths = {path for view in ("rules", "project", "loads", "limits") for path in _paths(desk, view)}
    for subject in [("bus",), *(("filter", n) for n in range(3)), *(("converter", n) for n in range(4))]:
        desk.subject = subject
        paths |= _paths(desk, "fields")
    cells = {_plain(path) for path in paths}
    for table in schema.TABLES_BY_KEY.values():
        for spec in table.fields:
            if spec.kind == schema.LOADS:
                assert ("case", "load", "C1") in cells
            elif spec.kind in (schema.TABLES, schema.LADDER, schema.TABLE):
                for inner in spec.fields:
                    assert (table.key, spec.key, inner.key) in cells
            elif spec.kind in (schema.ROWS, schema.CURVE):
                for column in range(len(spec.fields)):
                    assert (table.key, spec.key, column) in cells
            elif (table.key, spec.key) != ("case", "id"):  # the heading of its column; e renames it
                assert (table.key, spec.key) in cells


def _paths(desk: Desk, view: str) -> set[tuple[str | int, ...]]:
    desk.view_name = view
    return {cell.path for _, row in desk.lines() if row for cell in row.cells if cell.path is not None}


def _plain(path: tuple[str | int, ...]) -> tuple[str | int, ...]:
    """A path without the numbers of rows and items; the number of a column stays."""
    base = len(edits.owner(path))
    rest = path[base:]
    if len(rest) > 2 and isinstance(rest[1], int):
        rest = (rest[0], *rest[2:])
    return (path[0], *rest)


# -- editing


def test_enter_edits_and_accepts_and_goes_down() -> None:
    desk = small()
    on(desk, "C1", "rated")
    press(desk, "enter")
    assert text_of(desk) == "80 W"
    press(desk, "backspace backspace backspace")
    typed(desk, "5 W")
    press(desk, "enter")
    assert value(desk, "converter", 0, "rated_power") == "85 W"
    assert desk.mode is None
    assert desk.here()[0].item == ("converter", 2)  # type: ignore[union-attr]  # the row below, behind the same filter


def test_a_typed_number_replaces_the_value() -> None:
    desk = small()
    on(desk, "C1", "rated")
    press(desk, "9 0 tab")
    assert value(desk, "converter", 0, "rated_power") == 90
    assert desk.here()[1].path == ("converter", 0, "filter")


@pytest.mark.parametrize(
    ("key", "down", "right"),
    [("enter", 1, 0), ("down", 1, 0), ("up", -1, 0), ("tab", 0, 1), ("shift+tab", 0, -1)],
)
def test_keys_that_accept_move_on(key: str, down: int, right: int) -> None:
    desk = small()
    press(desk, "l down down down down")
    before = desk.row_index(), desk.cursor.column
    press(desk, f"4 0 {key}")
    assert desk.mode is None
    assert (desk.row_index(), desk.cursor.column) == (before[0] + down, before[1] + right)
    assert value(desk, "case", 0, "load", "C2") == 40


def test_escape_leaves_everything_as_it_was() -> None:
    desk = small()
    before = desk.session.document
    on(desk, "C1", "rated")
    press(desk, "9 9 escape")
    assert desk.mode is None
    assert desk.session.document is before
    assert not desk.session.done


def test_the_caret_moves_within_the_text() -> None:
    desk = small()
    on(desk, "C1", "rated")
    press(desk, "1 2 3 home 9 end 8 left left delete")
    assert text_of(desk) == "9128"
    press(desk, "backspace right right 7")
    assert text_of(desk) == "9187"
    press(desk, "ctrl+u")
    assert text_of(desk) == ""


def test_an_error_stays_with_what_was_typed_until_it_is_mended() -> None:
    desk = small()
    on(desk, "C1", "rated")
    for wrong in ("9 A", "-5", "1,5", "5 X"):
        press(desk, "9")
        press(desk, "ctrl+u")
        typed(desk, wrong)
        press(desk, "enter")
        assert text_of(desk) == wrong
        assert isinstance(desk.mode, Edit)
        assert desk.mode.error
        lines = screen(desk)
        assert lines[-2].startswith("! ")
        assert wrong in lines[-4]
        assert value(desk, "converter", 0, "rated_power") == "80 W"
        press(desk, "escape")
    press(desk, "9 A enter backspace W enter")
    assert value(desk, "converter", 0, "rated_power") == "9W"
    assert desk.mode is None


@pytest.mark.parametrize(
    ("path", "words_shown"),
    [
        (("converter", 0, "rated_power"), ("Rated output power", "unit W", "above 0 W", "needed")),
        (("converter", 0, "start_delay"), ("From reaching turn_on", "unit s", "at least 0 s", "default 0 s")),
        (("rules", "growth"), ("Added to every output power", "%", "default 0 %")),
        (("filter", 0, "dm", 0, "L"), ("Inductance", "unit H", "above 0 H")),
        (("converter", 0, "efficiency", 0, 1), ("Output power over input power", "%", "at most 100 %")),
    ],
)
def test_meaning_unit_default_and_limits_stand_below_a_cell_that_is_edited(
    path: tuple[str | int, ...], words_shown: tuple[str, ...]
) -> None:
    desk = small()
    at(desk, *path)
    press(desk, "5")
    told = "\n".join(screen(desk)[-4:])
    for word in words_shown:
        assert word in told


def test_typing_on_a_calculated_cell_changes_nothing_and_no_key_gets_through() -> None:
    desk = small()
    on(desk, "C1", "out W")
    before = desk.session.document
    press(desk, "5 R X n q 7 enter")
    assert desk.mode is None
    assert desk.session.document is before
    assert desk.view_name == "sheet"


def test_a_burst_of_keys_lands_where_it_was_meant() -> None:
    desk = small()
    press(desk, "l down down down 5 . 2 enter 7 enter right 3 0 % enter")
    assert value(desk, "case", 0, "load", "C1") == 5.2
    assert value(desk, "case", 0, "load", "C2") == 7
    assert value(desk, "case", 1, "load", "C3") == "30%"


def test_delete_puts_the_default_back() -> None:
    desk = small()
    at(desk, "bus", "resistance")
    press(desk, "delete")
    assert value(desk, "bus", "resistance") is None
    press(desk, "up backspace")
    at(desk, "bus", "low")
    press(desk, "delete")
    assert "cannot be left empty" in desk.message


def test_copy_cut_and_paste_of_a_cell() -> None:
    desk, log = desk_of(session_of(TEXTS["small"]))
    on(desk, "C1", "rated")
    press(desk, "c down v")
    assert value(desk, "converter", 2, "rated_power") == "80 W"
    assert log.clips == ["80 W"]
    at(desk, "case", 0, "load", "C1")
    press(desk, "x")
    assert value(desk, "case", 0, "load", "C1") is None
    press(desk, "right v")
    assert value(desk, "case", 1, "load", "C1") == "50 %"
    on(desk, "C1", "out W")
    press(desk, "c")
    assert log.clips[-1] == desk.here()[1].text  # the number of a calculated cell can be copied
    press(desk, "v")
    assert "calculated" in desk.message


def test_text_pasted_by_the_terminal_replaces_the_value_and_is_one_line() -> None:
    desk = small()
    on(desk, "C1", "rated")
    desk.paste("\r\n 77 W\x07\r\nsecond line")
    assert text_of(desk) == "77 W"
    press(desk, "enter")
    assert value(desk, "converter", 0, "rated_power") == "77 W"


def test_a_paste_of_a_megabyte_is_cut_and_cannot_be_entered_as_a_number() -> None:
    desk = small()
    on(desk, "C1", "rated")
    desk.paste("7" * 1_000_000)
    assert len(text_of(desk)) <= 2000
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert desk.mode.error
    shown(desk)
    desk.paste("8" * 1_000_000)
    assert len(text_of(desk)) <= 2000


def test_fill_takes_the_value_above() -> None:
    desk = small()
    at(desk, "case", 0, "load", "C2")
    press(desk, "d d d")
    assert [value(desk, "case", 0, "load", f"C{n}") for n in (1, 2, 3, 4)] == ["50 %"] * 4
    press(desk, "pageup d")
    assert desk.message == "there is no cell of the same kind above."


def test_a_cell_with_choices_is_picked_from_a_list() -> None:
    desk = small()
    at(desk, "rules", "combine")
    press(desk, "enter")
    assert isinstance(desk.mode, Pick)
    assert [text for text, _ in desk.mode.shown()] == ["arithmetic", "rss"]
    press(desk, "r s enter")
    assert value(desk, "rules", "combine") == "rss"
    at(desk, "filter", 0, "dm", 0, "place")
    press(desk, "enter down enter")
    assert get(desk.session.document, ("filter", 0, "dm", 0)) == {"shunt": {"L": "4.7 uH", "R": "8 mohm"}}


def test_an_element_can_be_shown_as_it_is_after_its_place_was_changed_and_undone() -> None:
    desk = small()
    first = desk.session.document
    at(desk, "filter", 0, "dm", 0, "place")
    press(desk, "enter down enter u")
    assert desk.session.document is first
    assert desk.here()[1].text == "series"


# -- rows


def test_new_rows_and_undo_of_each() -> None:
    desk = small()
    first = desk.session.document
    on(desk, "FB")
    press(desk, "n")
    assert ids(desk, "converter") == ["C1", "C2", "C3", "C4", "CV1"]
    assert value(desk, "converter", 4, "filter") == "FB"
    press(desk, "N")
    assert ids(desk, "filter") == ["FA", "FB", "FC", "FL1"]
    press(desk, "u u")
    assert desk.session.document is first
    on(desk, "bus")
    press(desk, "n")
    assert len(ids(desk, "filter")) == 4
    press(desk, "u")
    assert desk.session.document is first


def test_duplicate_remove_and_undo() -> None:
    desk = small()
    first = desk.session.document
    on(desk, "C1")
    press(desk, "D")
    assert ids(desk, "converter") == ["C1", "C5", "C2", "C3", "C4"]
    assert desk.here()[0].item == ("converter", 1)  # type: ignore[union-attr]
    press(desk, "R")
    assert ids(desk, "converter") == ["C1", "C2", "C3", "C4"]
    press(desk, "u u")
    assert desk.session.document is first


def test_after_removing_a_row_the_cursor_stays_where_it_was_on_the_screen() -> None:
    desk = small()
    on(desk, "C3")  # behind FA; in the file C4, which has no filter, comes after it
    line = desk.row_index()
    press(desk, "R")
    assert desk.row_index() in (line, line - 1)


def test_removing_a_filter_lets_its_converters_go_and_undo_brings_all_back() -> None:
    desk = small()
    first = desk.session.document
    for ident in ("FA", "FB", "FC"):
        on(desk, ident)
        press(desk, "R")
    assert ids(desk, "filter") == []
    assert [row.get("filter", "") for row in desk.session.document.data["converter"]] == ["", "", "", ""]
    assert "not allocated" in shown(desk)
    on(desk, "C1")
    press(desk, ">")
    assert "no filter yet" in desk.message
    press(desk, "u u u")
    assert desk.session.document is first


def test_copy_cut_and_paste_of_a_row() -> None:
    desk = small()
    first = desk.session.document
    on(desk, "C1")
    press(desk, "C")
    on(desk, "C2")
    press(desk, "V")
    assert ids(desk, "converter") == ["C1", "C2", "C5", "C3", "C4"]
    assert value(desk, "converter", 2, "filter") == "FB"
    press(desk, "X")
    assert ids(desk, "converter") == ["C1", "C2", "C3", "C4"]
    press(desk, "u u")
    assert desk.session.document is first
    on(desk, "FA")
    press(desk, "V")
    assert value(desk, "converter", 4, "filter") == "FA"


def test_a_converter_that_is_cut_and_pasted_keeps_its_loads() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "X")
    on(desk, "FB")
    press(desk, "V")
    assert "C1" in ids(desk, "converter")
    assert value(desk, "case", 0, "load", "C1") == "50 %"


def test_a_duplicate_runs_as_the_row_it_is_of() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "D")
    assert value(desk, "case", 0, "load", "C5") == "50 %"


def test_rows_of_lists_are_copied_into_like_lists_only() -> None:
    desk = small()
    at(desk, "filter", 0, "dm", 1, "C")
    press(desk, "C")
    at(desk, "converter", 0, "input", 0, "L")
    press(desk, "V")
    assert len(value(desk, "converter", 0, "input")) == 3  # type: ignore[arg-type]
    at(desk, "converter", 0, "output", 0, "voltage")
    press(desk, "V")
    assert "does not fit here" in desk.message


@pytest.mark.parametrize(
    "path",
    [
        ("converter", 0, "output", 0, "voltage"),
        ("converter", 0, "efficiency", 0, 0),
        ("converter", 0, "input", 0, "L"),
        ("converter", 2, "spectrum", 0, 0),
        ("filter", 0, "dm", 0, "R"),
        ("filter", 0, "cm", 0, "L"),
        ("filter", 1, "dm", 0, "L"),  # lent by the shelf: the row gets its own
        ("filter", 2, "attenuation", 0, 1),
        ("limit", 0, "points", 0, 1),
        ("limit", 0, "bandwidth", 0, 0),
    ],
)
def test_items_of_every_list_are_added_removed_moved_and_undone(path: tuple[str | int, ...]) -> None:
    desk = small()
    first = desk.session.document
    at(desk, *path)
    where = path[: len(edits.owner(path)) + 1]

    def length() -> int:
        items = value(desk, *where)
        assert isinstance(items, list)
        return len(items)

    count = length()
    press(desk, "n")
    assert length() == count + 1
    press(desk, "R")
    assert length() == count
    press(desk, "D")
    assert length() == count + 1
    press(desk, "C V")
    assert length() == count + 2
    press(desk, "X X")
    assert length() == count
    if count > 1:
        at(desk, *path)
        was = value(desk, *where)
        press(desk, "]")
        assert value(desk, *where) != was
        press(desk, "[")
        assert value(desk, *where) == was
    while desk.session.done:
        press(desk, "u")
    assert desk.session.document is first


@pytest.mark.parametrize(
    ("subject", "key"),
    [
        (("converter", 1), "lead"),
        (("converter", 1), "input"),
        (("converter", 1), "spectrum"),
        (("converter", 1), "chop"),
        (("converter", 1), "cm"),
        (("filter", 0), "attenuation"),
        (("filter", 2), "dm"),
    ],
)
def test_what_a_row_does_not_have_yet_is_added_by_n(subject: tuple[str | int, ...], key: str) -> None:
    desk = small()
    first = desk.session.document
    desk.view_name, desk.subject = "fields", subject
    desk.cursor.key = (*subject, key)
    assert "n adds it" in shown(desk)
    press(desk, "n")
    assert value(desk, *subject, key)
    press(desk, "u")
    assert desk.session.document is first


def test_one_efficiency_becomes_a_curve() -> None:
    desk = small()
    at(desk, "converter", 1, "efficiency")
    press(desk, "n")
    assert value(desk, "converter", 1, "efficiency") == [["20 %", "88 %"], ["100 %", "88 %"]]


def test_load_cases_are_added_duplicated_renamed_and_removed() -> None:
    desk = small()
    first = desk.session.document
    press(desk, "l n")
    assert ids(desk, "case") == ["rest", "case1", "run"]
    press(desk, "left D")
    assert ids(desk, "case") == ["rest", "rest1", "case1", "run"]
    assert value(desk, "case", 1, "load", "C2") == "off"
    press(desk, "e ctrl+u")
    typed(desk, "idle")
    press(desk, "enter ]")
    assert ids(desk, "case") == ["rest", "case1", "idle", "run"]
    press(desk, "R R")
    assert len(ids(desk, "case")) == 2
    while desk.session.done:
        press(desk, "u")
    assert desk.session.document is first


def test_limit_lines_are_added_and_removed() -> None:
    desk = small()
    first = desk.session.document
    press(desk, "i pagedown pagedown n")
    assert [row["name"] for row in desk.session.document.data["limit"]] == ["own", "own1"]
    press(desk, "R")
    assert len(desk.session.document.data["limit"]) == 1
    press(desk, "pageup R")
    assert "limit" not in desk.session.document.data
    assert value(desk, "rules", "emissions") == ["CE102"]
    while desk.session.done:
        press(desk, "u")
    assert desk.session.document is first


def test_shelf_parts_are_added_edited_renamed_taken_and_removed() -> None:
    desk = small()
    first = desk.session.document
    press(desk, "h n")
    typed(desk, "conv")
    press(desk, "enter")
    typed(desk, "small one")
    press(desk, "enter")
    assert "small one" in get(desk.session.document, ("shelf", "converter"))
    press(desk, "enter")
    assert desk.subject == ("shelf", "converter", "small one")
    at(desk, "shelf", "converter", "small one", "rated_power")
    press(desk, "3 0 enter")
    assert value(desk, "shelf", "converter", "small one", "rated_power") == 30
    on(desk, "C2")
    press(desk, "p")
    typed(desk, "small")
    press(desk, "enter")
    assert value(desk, "converter", 1, "part") == "small one"
    press(desk, "h pagedown up")
    assert desk.item() == ("shelf", "converter", "small one")
    press(desk, "R")
    assert "is used by C2" in desk.message
    press(desk, "e ctrl+u")
    typed(desk, "other")
    press(desk, "enter")
    assert value(desk, "converter", 1, "part") == "other"
    while desk.session.done:
        press(desk, "u")
    assert desk.session.document is first


def test_an_id_is_renamed_everywhere() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "e ctrl+u")
    typed(desk, "CX")
    press(desk, "enter")
    assert value(desk, "case", 0, "load", "CX") == "50 %"
    assert value(desk, "case", 0, "load", "C1") is None
    on(desk, "FA")
    press(desk, "e ctrl+u")
    typed(desk, "FX")
    press(desk, "enter")
    assert value(desk, "converter", 0, "filter") == "FX"
    assert value(desk, "converter", 2, "filter") == "FX"


def test_a_taken_id_is_refused_with_the_text_kept() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "e ctrl+u F B enter")
    assert text_of(desk) == "FB"
    assert "is taken" in screen(desk)[-2]
    press(desk, "2 enter")
    assert ids(desk, "converter")[0] == "FB2"


def test_reordering_keeps_to_the_filter() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "]")
    assert [i for i in ids(desk, "converter") if i in ("C1", "C3")] == ["C3", "C1"]
    press(desk, "]")
    assert desk.message == "this row is the last already."
    press(desk, "[ [")
    assert desk.message == "this row is the first already."


def test_a_converter_moves_to_another_filter_by_one_key() -> None:
    desk = small()
    on(desk, "C1")
    homes = []
    for _ in range(4):
        press(desk, ">")
        homes.append(value(desk, "converter", 0, "filter"))
        assert desk.here()[0].item == ("converter", 0)  # type: ignore[union-attr]
    assert homes == ["FB", "FC", "", ""]
    assert "no filter beyond" in desk.message
    press(desk, "<")
    assert value(desk, "converter", 0, "filter") == "FC"
    press(desk, "m")
    typed(desk, "FA")
    press(desk, "enter")
    assert value(desk, "converter", 0, "filter") == "FA"


# -- what an edit changed


def test_the_bottom_line_says_what_an_edit_changed() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, ">")
    line = screen(desk)[-2]
    assert line.startswith("C1 behind FB: ")
    assert "FA current 4.335 A -> " in line
    press(desk, "u")
    assert desk.message.startswith("undone: C1 behind FB: ")
    on(desk, "C1", "note")
    press(desk, "7 enter")
    assert desk.message.endswith("no result changed")


def test_what_is_typed_again_changes_nothing() -> None:
    desk = small()
    on(desk, "C1", "rated")
    press(desk, "enter enter")
    assert not desk.session.done
    assert not desk.session.dirty


def test_results_of_an_older_document_are_let_go() -> None:
    desk, _ = desk_of(session_of(TEXTS["small"]), live=False)
    old = calculated(desk.session.document)
    on(desk, "C1", "rated")
    press(desk, "9 9 enter")
    assert not desk.accept(old)
    assert desk.session.outcome is None


# -- checks and what they follow from


@pytest.mark.parametrize("name", ["heron", "ferry", "smallest"])
def test_every_check_of_the_projects_leads_to_a_cell_that_can_be_edited(name: str) -> None:
    follow_all(open_file(PROJECTS / f"{name}.toml"))


@pytest.mark.parametrize("name", list(TEXTS))
def test_every_check_leads_to_a_cell_that_can_be_edited(name: str) -> None:
    follow_all(session_of(TEXTS[name]))


def follow_all(session: Session) -> None:
    desk, _ = desk_of(session)
    press(desk, "k")
    count = sum(row is not None for _, row in desk.lines())
    assert session.result is not None
    assert count == len(session.result.checks)
    for n in range(count):
        press(desk, "k home pageup pageup pageup pageup pageup pageup")
        for _ in range(n):
            press(desk, "down")
        press(desk, "enter")
        assert desk.view_name != "checks"
        if "n adds it" in desk.here()[1].text:  # where there is none yet, n makes it
            press(desk, "n")
            assert desk.here()[1].path is not None, n
            press(desk, "u")
            continue
        assert desk.here()[1].path is not None, n
        press(desk, "enter")
        assert isinstance(desk.mode, (Edit, Pick))
        press(desk, "escape")


def test_checks_stand_from_worst_to_best() -> None:
    desk = small()
    press(desk, "k")
    states = [row.cells[0].text for _, row in desk.lines() if row is not None]
    rank = {"FAIL": 0, "thin": 1, "no data": 2, "ok": 3}
    assert states == sorted(states, key=lambda state: rank[state])


def test_every_bad_cell_is_listed_and_leads_to_its_cell() -> None:
    desk = small("broken")
    press(desk, "b")
    outcome = desk.session.outcome
    assert outcome is not None
    for n, problem in enumerate(outcome.built.problems):
        press(desk, "b")
        desk.cursor.key = ("fault", n)
        press(desk, "enter")
        row, cell = desk.here()
        assert row is not None
        if problem.error and cell.path == edits.cell_of(problem.path):
            assert cell.mark == "!"
            assert problem.text[:20] in shown(desk)


def test_mending_a_bad_cell_takes_its_mark_away() -> None:
    desk = small("broken")
    at(desk, "bus", "rating")
    press(desk, "2 0 enter up")
    assert desk.here()[1].mark == ""
    assert desk.session.outcome is not None
    assert ("bus", "rating") not in {problem.path for problem in desk.session.outcome.built.problems}


def test_the_rest_calculates_beside_bad_cells() -> None:
    desk = small("broken")
    assert desk.session.result is not None
    assert {row.subject for row in desk.session.result.checks} >= {"FB", "C2"}


# -- corners


def test_worst_is_shown_first_and_a_corner_can_be_chosen() -> None:
    desk = small()
    assert f"worst of {2 * len(LINES)} corners" in screen(desk)[0]
    on(desk, "C1", "out W")
    assert "run, low line" in screen(desk)[-4]
    press(desk, "o")
    typed(desk, "rest, high")
    press(desk, "enter")
    assert "rest, high line" in screen(desk)[0]
    assert desk.here()[1].text == "37"
    press(desk, "O")
    assert desk.here()[1].text == "74"


def test_the_load_of_a_corner_can_be_edited_in_the_sheet() -> None:
    desk = small()
    press(desk, "o")
    typed(desk, "rest, low")
    press(desk, "enter")
    on(desk, "C1", "load")
    assert desk.here()[1].path == ("case", 0, "load", "C1")
    press(desk, "2 5 % enter")
    assert value(desk, "case", 0, "load", "C1") == "25%"


# -- the file


@pytest.fixture
def own(tmp_path: Path) -> Path:
    path = tmp_path / "bus.toml"
    path.write_text(TEXTS["small"], encoding="utf-8")
    return path


def edited(path: Path) -> tuple[Desk, Log]:
    desk, log = on_file(path)
    on(desk, "C1", "rated")
    press(desk, "9 0 enter")
    assert desk.session.dirty
    assert "*" in screen(desk)[0]
    return desk, log


def saved(path: Path) -> Document:
    return open_file(path).document


def test_saving_writes_what_was_typed(own: Path) -> None:
    desk, _ = edited(own)
    press(desk, "w")
    assert desk.message == "saved bus.toml"
    assert not desk.session.dirty
    assert "*" not in screen(desk)[0]
    assert get(saved(own), ("converter", 0, "rated_power")) == 90
    press(desk, "u")
    assert desk.session.dirty


def test_quitting_asks_only_where_something_is_unsaved(own: Path) -> None:
    desk, log = on_file(own)
    press(desk, "q")
    assert log.left == 1
    desk, log = edited(own)
    press(desk, "q")
    assert isinstance(desk.mode, Ask)
    assert "unsaved" in screen(desk)[-2]
    press(desk, "escape q d")
    assert log.left == 1
    assert get(saved(own), ("converter", 0, "rated_power")) == "80 W"
    press(desk, "q s")
    assert log.left == 2
    assert get(saved(own), ("converter", 0, "rated_power")) == 90


def changed_by_another(own: Path) -> Desk:
    desk, _ = edited(own)
    own.write_text(TEXTS["small"].replace("bench", "desk"), encoding="utf-8")
    assert desk.session.changed_on_disk()
    press(desk, "w")
    assert isinstance(desk.mode, Ask)
    return desk


def test_a_file_changed_on_disk_can_be_left_alone(own: Path) -> None:
    desk = changed_by_another(own)
    assert "changed on disk" in screen(desk)[-2]
    press(desk, "escape")
    assert desk.session.dirty
    assert get(saved(own), ("bus", "name")) == "desk"


def test_a_file_changed_on_disk_can_be_reloaded_and_that_undone(own: Path) -> None:
    desk = changed_by_another(own)
    mine = desk.session.document
    press(desk, "r")
    assert value(desk, "bus", "name") == "desk"
    assert not desk.session.dirty
    press(desk, "u")
    assert desk.session.document is mine


def test_of_a_file_changed_on_disk_a_copy_can_be_kept(own: Path) -> None:
    desk = changed_by_another(own)
    press(desk, "c")
    assert get(saved(own), ("bus", "name")) == "desk"
    assert get(saved(own.with_name("bus.mine-1.toml")), ("converter", 0, "rated_power")) == 90


def test_a_file_changed_on_disk_can_be_overwritten_and_is_kept_beside(own: Path) -> None:
    desk = changed_by_another(own)
    press(desk, "o")
    assert get(saved(own), ("converter", 0, "rated_power")) == 90
    assert get(saved(own.with_name("bus.theirs-1.toml")), ("bus", "name")) == "desk"
    assert not desk.session.dirty


def test_saving_as_asks_before_it_overwrites_and_refuses_what_cannot_be(own: Path) -> None:
    desk, _ = edited(own)
    for text, answer in (
        ("", "a file name was expected"),
        (str(own.parent), "is a folder"),
        ("no/x", "does not exist"),
    ):
        press(desk, "W ctrl+u")
        typed(desk, text)
        press(desk, "enter")
        assert answer in shown(desk, 200)
        press(desk, "escape")
    other = own.with_name("other.toml")
    other.write_text("x = 1\n", encoding="utf-8")
    press(desk, "W ctrl+u")
    typed(desk, str(other))
    press(desk, "enter")
    assert isinstance(desk.mode, Ask)
    press(desk, "escape")
    assert other.read_text(encoding="utf-8") == "x = 1\n"
    press(desk, "W ctrl+u")
    typed(desk, str(other))
    press(desk, "enter o")
    assert get(saved(other), ("converter", 0, "rated_power")) == 90
    assert desk.session.path == other


def test_saving_into_another_folder_takes_the_shelf_along(tmp_path: Path) -> None:
    for name in ("heron.toml", "shelf.toml"):
        (tmp_path / name).write_bytes((PROJECTS / name).read_bytes())
    (tmp_path / "sub").mkdir()
    desk, _ = on_file(tmp_path / "heron.toml")
    press(desk, "W ctrl+u")
    typed(desk, str(tmp_path / "sub" / "copy.toml"))
    press(desk, "enter")
    assert (tmp_path / "sub" / "shelf.toml").read_bytes() == (PROJECTS / "shelf.toml").read_bytes()
    opened, _ = on_file(tmp_path / "sub" / "copy.toml")
    assert opened.session.outcome is not None
    assert not opened.session.outcome.built.errors


def test_words_of_a_check_say_its_corner() -> None:
    desk = small()
    assert desk.session.result is not None
    worst = words.by_severity(desk.session.result.checks)
    told = [words.sentence(row) for row in worst if row.case]
    assert all("line)" in sentence or "(" in sentence for sentence in told)


def test_among_the_fields_of_a_row_its_commands_act_on_that_row() -> None:
    desk = small()
    on(desk, "C1")
    press(desk, "f down down >")
    assert value(desk, "converter", 0, "filter") == "FB"
    press(desk, "e ctrl+u C X enter")
    assert ids(desk, "converter")[0] == "CX"
    press(desk, "p")
    typed(desk, "brick")
    press(desk, "enter")
    assert value(desk, "converter", 0, "part") == "brick"
    assert desk.view_name == "fields"
