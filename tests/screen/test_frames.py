"""Every view at every size: exact widths, ASCII alone where asked, no state told by tone alone, no text lost unsaid.

Then what the terminal must be able to do and the user must be able to reach: colours that read on black and on white,
keys that arrive everywhere, every command's key on the screen at 80 by 24.
"""

from __future__ import annotations

import re
from functools import cache

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.cells import cell_len
from rich.color import ColorType

from budget.ui import commands, told
from budget.ui.app import STYLES
from budget.ui.commands import COMMANDS
from budget.ui.desk import VIEWS, Ask, Desk, Edit, Pick, command_items
from budget.ui.layout import layout, size
from budget.ui.paint import SMALLEST, frame, plain
from budget.ui.view import Cell, Row, View
from tests.screen.driving import SMALL, TEXTS, demo, press, screen, shown, small, typed, written

SIZES = ((80, 24), (160, 48), (100, 30), (61, 13), (60, 12), (130, 40), (200, 60))
KEY = {command.name: command.keys[0] for command in COMMANDS}
LONG = "a note that goes on: " + " ".join(f"word{k}" for k in range(120))


def held(ascii_only: bool) -> Desk:
    """A project with a reference, a change since, and a text far longer than the screen is wide."""
    desk = small(ascii_only=ascii_only)
    press(desk, KEY["hold"])
    desk.go_to(("converter", 0, "rated_power"))
    press(desk, "7 5 enter")
    desk.go_to(("converter", 1, "note"))
    press(desk, "enter ctrl+u")
    desk.paste(LONG)
    press(desk, "enter s")
    return desk


PROJECTS = (*TEXTS, "held", "heron")
# Nothing is as good as is wanted.
STRICT = SMALL.replace(
    'filter_load = "80 %"', 'filter_load = "9 %"\nstability_margin = "60 dB"\ngrowth = "1 %"'
).replace('converter_load = "80 %"', 'converter_load = "9 %"\nemission_margin = "60 dB"')


@cache
def looked_at(project: str, ascii_only: bool = True) -> Desk:
    """A desk that is looked at and not changed."""
    if project in TEXTS:
        return small(project, ascii_only=ascii_only)
    if project == "strict":
        return written(STRICT, ascii_only=ascii_only)[0]
    return held(ascii_only) if project == "held" else demo(project, ascii_only=ascii_only)[0]


def show(desk: Desk, view: str) -> View:
    desk.view_name = view
    desk.subject = ("filter", 0) if view == "response" and desk.session.result is not None else ("bus",)
    return desk.view()


def cells(view: View) -> list[tuple[Row, Cell]]:
    return [(row, cell) for section in view.sections for row in section.rows for cell in row.cells]


@pytest.mark.parametrize("ascii_only", [True, False], ids=["ascii", "unicode"])
@pytest.mark.parametrize("project", PROJECTS)
@pytest.mark.parametrize("view", list(VIEWS))
def test_a_view_fills_every_size(view: str, project: str, ascii_only: bool) -> None:
    desk = looked_at(project, ascii_only)
    show(desk, view)
    for width, height in SIZES:
        lines = [plain(line) for line in frame(desk, width, height)]
        assert [cell_len(line) for line in lines] == [width] * height
        assert all(line.isprintable() for line in lines)
        assert not ascii_only or all(line.isascii() for line in lines)
        hints = lines[-1].split()
        assert {"?", "Space"} <= set(hints)  # from where every other key can be found


# -- states in words


SAYS = re.compile(
    r"FAIL|thin|ok\b|no data|[!^~]|error|warning|left out|gone|left\b|over\b|UNSTABLE|caution|not checked|"
    r"fails already|^-\d|[1-9]\d\d%"
)


@pytest.mark.parametrize("project", [*PROJECTS, "strict"])
@pytest.mark.parametrize("view", list(VIEWS))
def test_no_state_is_told_by_tone_alone(view: str, project: str) -> None:
    """The cell itself has the word or the sign, or the first cell of its row, which is always in sight."""
    for row, cell in cells(show(looked_at(project), view)):
        if cell.tone in ("fail", "thin", "ok") and cell.text.strip() and view != "help":  # there are only sentences
            first = row.cells[0]
            assert SAYS.search(cell.mark + cell.text) or SAYS.search(first.mark + first.text), (view, cell)


def contrast(one: tuple[int, int, int], two: tuple[int, int, int]) -> float:
    """The ratio of relative luminances, as in the W3C's guidelines for readable text (WCAG 2, from memory)."""

    def luminance(colour: tuple[int, int, int]) -> float:
        linear = [v / 12.92 if v <= 0.03928 else ((v + 0.055) / 1.055) ** 2.4 for v in (c / 255 for c in colour)]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    high, low = sorted((luminance(one), luminance(two)), reverse=True)
    return (high + 0.05) / (low + 0.05)


# The first eight colours and their bright twins, from memory: as xterm has them, and as the PC console has them.
XTERM = {"red": ((205, 0, 0), (255, 0, 0)), "magenta": ((205, 0, 205), (255, 0, 255))}
CONSOLE = {"red": ((170, 0, 0), (255, 85, 85)), "magenta": ((170, 0, 170), (255, 85, 255))}


def test_colours_read_on_black_and_on_white() -> None:
    """Red and magenta alone are told apart from both; bold may or may not make them bright, on the console it does."""
    for name, style in STYLES.items():
        assert style.bgcolor is None, name
        if style.color is None:
            continue
        assert style.color.type == ColorType.STANDARD  # one of the terminal's own, whatever it can
        for ground in ((0, 0, 0), (255, 255, 255)):
            shades = XTERM[style.color.name][: 2 if style.bold else 1]
            shades += (CONSOLE[style.color.name][1 if style.bold else 0],)
            for shade in shades:
                assert contrast(shade, ground) >= 3.0, (name, shade, ground)


def test_styles_need_nothing_that_terminals_lack_or_change() -> None:
    for name, style in STYLES.items():
        more = (style.blink, style.blink2, style.strike, style.italic, style.overline, style.link)
        assert not any(more), name
    for name in ("cursor", "bar", "panel"):  # seen without any colour
        assert STYLES[name].reverse
    alike = {"panel", "cursor"}  # one is a whole line
    shapes = [STYLES[name] for name in ("", "head", "heading", "pale", "bar", "cursor", "edit")]
    assert len({str(style) for style in shapes}) == len(shapes)
    assert all(STYLES[name].bold for name in alike)


# -- nothing is lost unsaid


def test_all_columns_and_titles_can_be_read_at_80_by_24() -> None:
    """A title that were cut would hide what a column or view is; columns are scrolled to, never cut."""
    for project in ("small", "heron", "empty"):
        desk = looked_at(project)
        for name in VIEWS:
            view = show(desk, name)
            first = screen(desk)[0]
            if name not in ("sheet", "response", "reach"):  # those are called as the project, the filter, the cell
                assert f" {view.title} " in first.replace(" * ", " "), (name, first)
            for section in view.sections:
                for left in range(len(section.columns)):
                    for slot in layout(section, desk.grid_width, left):
                        assert size(section.columns[slot.column].title) <= slot.width, (name, slot)


def test_commands_can_be_read_whole_in_the_list_at_80_by_24() -> None:
    assert all(len(text) <= 78 for text, _ in command_items())
    desk = small()
    press(desk, "space")
    seen: set[str] = set()
    for _ in COMMANDS:
        seen.update(line[2:].rstrip() for line in screen(desk))
        press(desk, "down")
    assert {text for text, _ in command_items()} <= seen
    press(desk, "escape ?")
    seen = set()
    for _ in desk.lines():
        seen.update(line.split(None, 1)[0] for line in screen(desk)[1:-4] if line.strip())
        press(desk, "down")
    assert {commands.keys_text(c).split()[0] for c in COMMANDS} <= seen


@pytest.mark.parametrize("project", ["small", "broken", "held", "heron"])
@pytest.mark.parametrize("view", list(VIEWS))
def test_what_is_cut_says_so_and_can_be_read_whole(view: str, project: str) -> None:
    """For each cell: its whole text and all that is told of it, below the grid, or at full length by one key."""
    desk = looked_at(project)
    show(desk, view)
    desk.say("")
    frame(desk, 80, 24)
    at = desk.spot()
    numbers = [k for k, (_, row) in enumerate(desk.lines()) if row is not None]
    for number in numbers[:: max(1, len(numbers) // 12)]:
        row = desk.lines()[number][1]
        assert row is not None
        desk.cursor.key, desk.cursor.index = row.key, number
        for column, cell in enumerate(row.cells):
            desk.cursor.column = column
            lines = screen(desk)
            below = [line.rstrip() for line in lines[-4:-1]]
            whole = " ".join(told.everything(desk))
            seen = " ".join(below).replace(told.MORE, "").split()
            assert seen == whole.split() or any(line.endswith(told.MORE) for line in below)
            assert set(seen) <= set(whole.split())
            grid = "\n".join(lines[1:-4])
            text = cell.text.strip()
            if text and text not in grid:
                assert " ".join(text.split()) in " ".join(whole.split()), (cell, whole)
    desk.stand_at(at)


def test_a_number_or_text_that_does_not_fit_ends_in_a_sign() -> None:
    desk = small()
    desk.go_to(("converter", 0, "name"))
    press(desk, "enter ctrl+u")
    typed(desk, "a name of more letters than the column has")
    press(desk, "enter s down down")
    assert screen(desk)[4].startswith("  C1 a name of +")
    assert "a name of more letters than the column has" in shown(desk).split("\n")[-3]


words = st.lists(st.text("abcdefgh", min_size=1, max_size=12), max_size=60).map(" ".join)


@settings(max_examples=200, deadline=None)
@given(st.lists(words, max_size=4), st.integers(20, 100), st.integers(1, 3))
def test_paragraphs_fill_the_lines_there_are(texts: list[str], width: int, room: int) -> None:
    paragraphs = [[(text, "")] for text in texts if text]
    lines = [plain(line) for line in told.placed(paragraphs, width, room)]
    assert len(lines) <= room
    assert all(len(line) <= width for line in lines)
    everything = " ".join(texts).split()
    if not any(line.endswith(told.MORE) for line in lines):
        assert " ".join(lines).split() == everything
    for line in lines:
        shown_words, more, _ = line.partition(told.MORE)
        for word in shown_words.split()[: -1 if more else None]:  # the last one may be cut
            assert word in everything


@settings(max_examples=200, deadline=None)
@given(st.text(st.characters(codec="utf-8", exclude_categories=("Cc", "Cs", "Mn", "Me", "Cf"))), st.integers(4, 40))
def test_a_text_is_broken_without_a_loss(text: str, width: int) -> None:
    at = told.breaks(text, width)
    assert "".join(text[a:b] for a, b in at).replace(" ", "") == text.replace(" ", "")
    for start, end in at:
        assert size(text[start:end]) <= width
        assert told.plain(told.part([(text[:3], "a"), (text[3:], "b")], start, end)) == text[start:end]


def test_the_key_for_the_full_length_shows_cell_and_message() -> None:
    desk = held(True)
    desk.go_to(("converter", 1, "note"))
    desk.say("; ".join(f"finding {k} of a long message" for k in range(9)))
    lines = screen(desk)
    assert any(line.rstrip().endswith(told.MORE) for line in lines[-4:-2])
    assert lines[-2].rstrip().endswith(told.MORE)
    press(desk, KEY["read"])
    assert isinstance(desk.mode, Pick)
    text = " ".join(line for line, _ in desk.mode.items)
    assert LONG in text
    assert "finding 8" in text
    typed(desk, "x")  # it is a text to read: nothing narrows it
    assert len(desk.mode.shown()) == len(desk.mode.items)
    assert "Up/Down read on" in screen(desk)[-1].replace("  ", " ")
    press(desk, "enter")
    assert desk.mode is None
    assert "finding 0" in desk.message


def test_a_question_or_a_refusal_has_the_lines_it_needs() -> None:
    desk = small()
    question = "Is this a question of more words than one line of a small terminal has room for, or is it not one?"
    desk.ask(question, {"y": ("yes", lambda: None)})
    assert question in " ".join(line.strip() for line in screen(desk)[-4:-1])
    press(desk, "escape")
    desk.go_to(("converter", 0, "rated_power"))
    press(desk, "5 X enter")
    assert isinstance(desk.mode, Edit)
    told_there = " ".join(line.strip() for line in screen(desk)[-4:-1])
    assert desk.mode.error in told_there
    assert "5X" in told_there


# -- small terminals


@pytest.mark.parametrize(("width", "height"), [(59, 24), (80, 11), (20, 5), (7, 3), (1, 1), (300, 2)])
def test_below_the_smallest_there_is_a_clear_line(width: int, height: int) -> None:
    for view in VIEWS:
        desk = looked_at("small")
        show(desk, view)
        lines = screen(desk, width, height)
        assert [len(line) for line in lines] == [width] * height
        assert "needs 60x12; this is"[:width].startswith(lines[0].rstrip()[:5])
        if width * height > 60:
            assert f"needs 60x12; this is {width}x{height}" in " ".join(line.strip() for line in lines)


def test_a_picture_without_room_gives_its_lines_to_the_table() -> None:
    desk = looked_at("small")
    show(desk, "spectrum")
    lines = screen(desk, *SMALLEST)
    assert lines[1].startswith("line")
    assert sum("Hz" in line for line in lines[1:-4]) >= 5


# -- ASCII


def test_signs_of_other_scripts_keep_their_cells_in_ascii() -> None:
    desk = small()
    desk.go_to(("converter", 0, "name"))
    press(desk, "enter ctrl+u")
    desk.paste("Gerät 電源 5 µF 10 Ω e\u0301te\u0301")
    press(desk, "enter s down down")
    lines = screen(desk, 160, 48)
    assert lines[4].startswith("  C1 Gerat ???? 5 uF 10")
    assert {line[:160].isascii() for line in lines} == {True}


# -- keys


PLAIN = frozenset(
    (
        *("up", "down", "left", "right", "home", "end", "pageup", "pagedown"),
        *("enter", "escape", "tab", "space", "delete", "backspace", "question_mark"),
    )
)


def is_plain(key: str) -> bool:
    """Whether a key arrives on every terminal: a character, or one of the keys that all of them have."""
    return key in PLAIN or (len(key) == 1 and key.isascii() and key.isprintable())


def test_every_command_has_a_key_that_arrives_everywhere() -> None:
    for command in COMMANDS:
        assert is_plain(command.keys[0]), command.name
    keys = [key for command in COMMANDS for key in command.keys]
    assert len(keys) == len(set(keys))


def test_typing_choosing_and_answering_need_only_such_keys() -> None:
    """Whatever the hint line offers with Ctrl can be done without."""
    desk = small()
    for keys in ("", "enter", "r down down down down down down enter", "g", "down D q", KEY["read"]):
        press(desk, keys)
        told_keys = [key for pair, _ in desk.hint_pairs() for key in pair.split("/")]
        shown_as = {commands.key_text(key) for key in PLAIN}
        for key in filter(str.strip, told_keys):
            assert key in shown_as or len(key) == 1 or key in ("type", "Ctrl+U"), key
        press(desk, "escape escape s")
    one, other = small(), small()
    for desk, clear in ((one, "ctrl+u"), (other, " ".join(["backspace"] * len("ladders")))):
        press(desk, f"down enter {clear}")
        typed(desk, "new")
        press(desk, "enter")
    assert one.session.document.data == other.session.document.data
    third = small()
    press(third, "down delete enter")  # or emptied first, by one key
    typed(third, "new")
    press(third, "enter")
    assert third.session.document.data == one.session.document.data


def test_the_hint_of_enter_says_what_it_does_here() -> None:
    desk = small()
    assert "Enter type text" in screen(desk)[-1].replace("  ", " ")  # on a name: letters alone are commands
    press(desk, "right")
    assert "Enter go there" in screen(desk)[-1].replace("  ", " ")
    press(desk, "end left")
    assert "Enter edit" in screen(desk)[-1].replace("  ", " ")
    press(desk, "r down down down down down down")
    assert "Enter choose" in screen(desk)[-1].replace("  ", " ")
    press(desk, "?")
    assert "Enter" not in screen(desk)[-1]


def test_undo_is_offered_once_there_is_something_to_undo() -> None:
    desk = small()
    assert "u undo" not in screen(desk)[-1].replace("  ", " ")
    press(desk, "down D")
    assert "u undo" in screen(desk)[-1].replace("  ", " ")


@pytest.mark.parametrize("key", list("RXDCVNx"))
def test_a_word_typed_into_a_text_by_mistake_can_be_undone(key: str) -> None:
    """On a text cell letters are commands until Enter; none of those that change anything is for good."""
    desk = small()
    before = desk.session.document.data
    press(desk, f"down down {key}")
    for _ in range(3):
        press(desk, "escape")
        if desk.session.document.data != before:
            press(desk, "u")
    assert desk.session.document.data == before


@pytest.mark.parametrize("key", ["alt+5", "alt+x", "alt+shift+r", "alt+shift+u"])
def test_escape_and_a_key_that_arrive_as_one_are_two(key: str) -> None:
    desk = small()
    press(desk, "down enter")
    typed(desk, "typed")
    desk.key(key, None)
    assert not isinstance(desk.mode, Ask)
    if key == "alt+5":
        assert isinstance(desk.mode, Edit)  # of the cell, begun anew with the digit
        assert desk.mode.text == "5"
    else:
        assert desk.mode is None
    names = [row["name"] for row in desk.session.document.data["filter"] if "name" in row]
    assert "typed" not in names
