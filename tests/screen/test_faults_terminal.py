"""Two people, bursts of keys, windows that are pulled and long pastes, in a real pseudo-terminal.

Nothing here waits for a time to pass: each step reads the terminal until what is expected stands on it.
"""

from __future__ import annotations

import os
import random
import select
import time
from pathlib import Path

import pytest

from budget.session import open_file
from budget.ui.desk import Desk
from tests.screen.driving import SMALL, key_of, screen
from tests.screen.test_terminal import KEYS, PATIENCE, Terminal, terminal

QUESTION = "has it open"


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "bus.toml"
    path.write_text(SMALL, encoding="utf-8")
    return path


def feed(program: Terminal, data: bytes) -> None:
    """Send more than a terminal takes at once, reading meanwhile, as every terminal does."""
    os.set_blocking(program.master, False)
    end = time.monotonic() + PATIENCE
    while data and time.monotonic() < end:
        _, ready, _ = select.select([], [program.master], [], 0.2)
        if ready:
            data = data[os.write(program.master, data[:4096]) :]
        program.read(0)
    os.set_blocking(program.master, True)
    assert not data


# -- two at once


def test_the_second_session_reads_until_the_first_has_left(file: Path) -> None:
    with terminal(file) as first:
        with terminal(file) as second:
            lines = second.until_text(QUESTION)
            assert "r open it read-only" in lines[-1]
            assert "read-only" in lines[0]
            second.press("r")
            second.until_text("change and try as you like")
            second.press("enter X enter w")
            second.until_text("is read-only here")
            second.press("escape")
            second.until_text("change and try as you like")
            first.press("q")
            assert first.end() == 0
            second.press("w")
            second.until_text("saved bus.toml")
            assert "read-only" not in second.settle()[0]
            assert 'name = "benchX"' in file.read_text()
            second.press("q")
            assert second.end() == 0
        assert os.listdir(file.parent) == ["bus.toml"]


def test_a_killed_session_blocks_nobody(file: Path) -> None:
    with terminal(file) as first:
        assert first.process.poll() is None
    assert (file.parent / ".bus.toml.lock").exists()  # it was killed
    with terminal(file) as second:
        assert QUESTION not in "".join(second.settle())
        second.press("enter X enter w")
        second.until_text("saved bus.toml")


def test_a_copy_at_the_question(file: Path) -> None:
    with terminal(file), terminal(file) as second:
        second.until_text(QUESTION)
        second.press("c")
        second.until_text("this is a copy now")
        second.press("enter X enter w")
        second.until_text("saved bus.copy-1.toml")
        assert file.read_text() == SMALL
        assert "benchX" in (file.parent / "bus.copy-1.toml").read_text()


# -- keys faster than they can be painted


def test_five_thousand_keys_are_all_obeyed_in_their_order(file: Path) -> None:
    """The same keys on a desk without a terminal, painted after each of them, come to the same file."""
    rng = random.Random(5)
    moves = ["up", "down", "left", "right", "home", "end", "pageup", "pagedown", "enter", "tab", "backspace"]
    commands = [*"rltihu[]DVvcCdxn", *moves, *moves]  # not where keys do what the results suggest: those come late
    digits = [*"0123456789.%"]
    keys: list[str] = []
    while len(keys) < 5000:
        keys += rng.choices(commands, k=rng.randrange(1, 6))
        keys += [*rng.choices(digits, k=rng.randrange(0, 4)), rng.choice(moves)]
    other = file.with_name("other.toml")
    other.write_text(SMALL, encoding="utf-8")
    desk = Desk(open_file(other))
    keys.insert(0, "l")
    for key in keys:
        desk.key(*key_of(key))
        screen(desk)
    while desk.mode is not None:
        desk.key("escape")
    desk.session.save()
    assert other.read_text() != SMALL
    with terminal(file) as program:
        program.settle()
        feed(program, "".join(KEYS.get(key, key) for key in keys).encode())
        for _ in range(3):
            program.press("escape")
        program.press("s")
        program.settle()
        program.press("w")
        program.until_text("saved bus.toml")
        assert file.read_text() == other.read_text()


# -- windows that are pulled


def test_a_storm_of_sizes_ends_with_the_right_picture(file: Path) -> None:
    with terminal(file) as program:
        program.press("down down enter a b left")
        before = program.until(lambda lines: any("firstab" in line for line in lines))
        rng = random.Random(1)
        for _ in range(100):
            program._size(rng.randrange(1, 300), rng.randrange(1, 100))
            program.read(0)
        program.resize(20, 5)
        program.until(lambda lines: "60x12" in "".join(lines))
        program.resize(80, 24)
        program.until(lambda lines: lines == before)
        program.press("c enter")
        program.until_text("firstacb")
        program.settle()


def test_a_list_and_a_question_survive_a_tiny_window(file: Path) -> None:
    def tiny_and_back(program: Terminal) -> None:
        program.resize(20, 5)
        program.until(lambda lines: "60x12" in "".join(lines))
        program.resize(80, 24)
        program.until(lambda lines: "60x12" not in "".join(lines))

    with terminal(file) as program:
        program.press("down D q")
        program.until(lambda lines: "There is unsaved work" in lines[-2] and "discard" in lines[-1])
        tiny_and_back(program)
        program.until(lambda lines: "There is unsaved work" in lines[-2] and "discard" in lines[-1])
        program.press("escape space d o w n down")
        chosen = program.until(lambda lines: "down_" in lines[1] and lines[3].startswith("> "))
        tiny_and_back(program)
        program.until(lambda lines: lines[1:4] == chosen[1:4])
        program.press("u p backspace backspace")
        program.until(lambda lines: "down_" in lines[1])


# -- pasting


def test_long_pastes_anywhere_leave_the_program_well(file: Path) -> None:
    """While browsing, in a list, in an editor, on a question, on a calculated cell."""
    with terminal(file) as program:
        program.press("down D up")
        for where in ("", "space", "enter", "q", "right right"):
            program.press(where)
            feed(program, b"\x1b[200~" + b"7 kohm\r" * 60_000 + b"\x1b[201~")
            for _ in range(2):
                program.press("escape")
            program.press("s home")
            program.settle()
        program.press("u")
        program.until_text("undone: duplicated FA")
        program.press("w")
        program.until_text("saved bus.toml")
        assert file.read_text() == SMALL


def test_the_end_mark_inside_a_paste_does_no_harm(file: Path) -> None:
    """A terminal should take it out; where it does not, what follows is typed, in its order, and can be undone."""
    with terminal(file) as program:
        program.settle()
        feed(program, b"\x1b[200~one\x1b[201~ two\x1b[201~ three")
        program.until_text("one two three")
        program.press("enter")
        program.until_text("bus, name = one two three")
        program.press("u")
        program.until_text("undone: bus, name = one two three")
        program.settle()
        program.press("w")
        program.until_text("saved bus.toml")
        assert file.read_text() == SMALL
