"""The real program in a pseudo-terminal: what is typed arrives, little is sent, and poor terminals can read it.

Nothing here waits for a time to pass: each step reads the terminal until what is expected stands on it. The gaps
between keys of a burst are what is tested, not a means of waiting.
"""

from __future__ import annotations

import fcntl
import os
import pty
import select
import struct
import subprocess
import sys
import termios
import time
import tomllib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pyte
import pytest

from budget.ui import commands
from tests.screen.driving import TEXTS

ROOT = Path(__file__).parents[2]
FREE = [key for key in "jyzBEFGQZ&;" if key not in commands.BY_KEY]  # keys without a command
PATIENCE = 20.0  # seconds after which a test gives up; never reached on the way to success
KEYS = {
    "up": "\x1b[A",
    "down": "\x1b[B",
    "right": "\x1b[C",
    "left": "\x1b[D",
    "home": "\x1b[H",
    "end": "\x1b[F",
    "pageup": "\x1b[5~",
    "pagedown": "\x1b[6~",
    "enter": "\r",
    "tab": "\t",
    "escape": "\x1b",
    "space": " ",
    "backspace": "\x7f",
    "delete": "\x1b[3~",
    "ctrl+u": "\x15",
}


class Terminal:
    """One run of the program, its screen, and the bytes it has sent."""

    def __init__(self, arguments: list[str], width: int, height: int, settings: dict[str, str]) -> None:
        self.screen = pyte.Screen(width, height)
        self.stream = pyte.ByteStream(self.screen)
        self.sent = 0
        self.raw = b""
        self.marker = ""
        self.master, slave = pty.openpty()
        self._size(width, height)
        keep = {k: v for k, v in os.environ.items() if k in ("PATH", "HOME", "LD_LIBRARY_PATH", "TMPDIR")}
        environment = {**keep, "TERM": "xterm-256color", "LANG": "C.UTF-8", **settings}
        self.process = subprocess.Popen(
            [sys.executable, "-m", "budget", *arguments],
            cwd=ROOT,
            env=environment,
            stdin=slave,
            stdout=slave,
            stderr=slave,
            start_new_session=True,
            preexec_fn=lambda: fcntl.ioctl(0, termios.TIOCSCTTY, 0),
        )
        os.close(slave)

    def _size(self, width: int, height: int) -> None:
        fcntl.ioctl(self.master, termios.TIOCSWINSZ, struct.pack("HHHH", height, width, 0, 0))

    def resize(self, width: int, height: int) -> None:
        """As when a window is pulled: the kernel tells the program by SIGWINCH."""
        self.screen.resize(height, width)
        self._size(width, height)

    def write(self, data: str) -> None:
        os.write(self.master, data.encode())

    def press(self, keys: str, gap: float = 0.0) -> None:
        """Keys with spaces between; ``gap`` seconds from one to the next."""
        for key in keys.split():
            self.write(KEYS.get(key, key))
            if gap:
                time.sleep(gap)

    def read(self, seconds: float) -> bool:
        """Take what the program sends within ``seconds``; False at its end."""
        if not select.select([self.master], [], [], seconds)[0]:
            return True
        try:
            data = os.read(self.master, 65536)
        except OSError:
            return False
        self.sent += len(data)
        self.raw += data
        self.stream.feed(data)
        return bool(data)

    def until(self, done: Callable[[list[str]], bool]) -> list[str]:
        """Read until the screen is as expected."""
        end = time.monotonic() + PATIENCE
        while not done(self.screen.display):
            assert time.monotonic() < end, "\n".join(["this never came:", *self.screen.display])
            assert self.read(0.2), "\n".join(["the program ended:", *self.screen.display])
        return list(self.screen.display)

    def until_text(self, text: str) -> list[str]:
        return self.until(lambda lines: any(text in line for line in lines))

    def settle(self) -> list[str]:
        """Let everything typed so far take effect: a key that has no command is answered in its turn."""
        self.marker = FREE[1] if self.marker == FREE[0] else FREE[0]
        self.press(self.marker)
        return self.until(lambda lines: f"no command on the key {self.marker}" in lines[-2])

    def end(self) -> int:
        """Read to the end of the program; its exit status."""
        stop = time.monotonic() + PATIENCE
        while self.read(0.2):
            if self.process.poll() is not None and not select.select([self.master], [], [], 0)[0]:
                break
            assert time.monotonic() < stop, "the program did not end"
        return self.process.wait(PATIENCE)


@contextmanager
def terminal(file: Path, width: int = 80, height: int = 24, *options: str, **settings: str) -> Iterator[Terminal]:
    program = Terminal([*options, str(file)], width, height, settings)
    try:
        program.until(lambda lines: "FAIL" in lines[0])  # the first results are there
        yield program
    finally:
        program.process.kill()
        program.process.wait()
        os.close(program.master)


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "bus.toml"
    path.write_text(TEXTS["small"], encoding="utf-8")
    return path


def loads(file: Path) -> dict[str, dict[str, object]]:
    with file.open("rb") as handle:
        return {case["id"]: case.get("load", {}) for case in tomllib.load(handle)["case"]}


@pytest.mark.parametrize("gap", [0.0, 0.005, 0.030], ids=["0 ms", "5 ms", "30 ms"])
def test_a_burst_of_keys_lands_in_the_right_cells(file: Path, gap: float) -> None:
    """Cursor keys, digits, Enter, digits, Enter in one go, several times over: none lost, none in another cell."""
    with terminal(file) as program:
        for run in range(1, 4):
            start = "l pageup home right down down down"
            program.press(f"{start} 0 . {run} enter . {run} enter right 0 . 9 {run} tab up . {run} 5 enter", gap)
            program.settle()
            program.press("w")
            program.until(lambda lines: "saved bus.toml" in lines[-2])
            assert loads(file) == {
                "rest": {"C1": float(f"0.{run}"), "C2": f".{run}", "C3": "5 W"},
                "run": {"C3": float(f"0.9{run}"), "C2": f".{run}5"},
            }
            program.press("u u u u")
            program.settle()


def test_digits_after_a_move_never_go_to_the_cell_before(file: Path) -> None:
    with terminal(file) as program:
        for run in range(3):
            program.press(f"l pageup home right down down down 5 {run} % down 6 {run} % down")
            program.settle()
            program.press("w")
            program.until(lambda lines: "saved bus.toml" in lines[-2])
            assert loads(file)["rest"] == {"C1": f"5{run}%", "C2": f"6{run}%", "C3": "5 W"}


def test_an_edit_and_a_move_send_little(file: Path) -> None:
    with terminal(file) as program:
        program.press("l pageup home right down down down")
        program.settle()
        before = program.sent
        program.press("down")
        program.until(lambda lines: "load, C2" in lines[-4])
        assert program.sent - before < 1000
        before = program.sent
        program.press("6 0 % enter")
        program.until(lambda lines: "60 %" in lines[6] and "load, C2 = 60%: " in lines[-2])
        program.settle()
        assert program.sent - before < 4000
        program.press("s down down right")
        program.settle()
        before = program.sent
        program.press("right")
        program.until(lambda lines: "input power" in lines[-4])
        assert program.sent - before < 1000


def test_a_move_in_the_sheet_sends_little(file: Path) -> None:
    with terminal(file) as program:
        program.settle()
        for key, told in (("down", "filter FA"), ("down", "converter C1"), ("right", "output power"), ("up", "output")):
            before = program.sent
            program.press(key)
            program.until(lambda lines, told=told: told in lines[-4])  # type: ignore[misc]
            assert program.sent - before < 1000


def test_nothing_is_sent_while_nothing_happens(file: Path) -> None:
    with terminal(file) as program:
        program.settle()
        before = program.sent
        program.settle()  # one key is answered on one line
        assert program.sent - before < 200


def test_an_escape_sequence_in_two_pieces_is_one_key(file: Path) -> None:
    with terminal(file) as program:
        program.settle()
        for one, two in (("\x1b", "[B"), ("\x1b[", "B"), ("\x1b[6", "~"), ("\x1bO", "B")):
            program.press("pageup")
            program.until(lambda lines: "bus, name" in lines[-4])
            program.write(one)
            time.sleep(0.05)  # the gap between the pieces, as on a slow line
            program.write(two)
            for lines in (program.until(lambda lines: "bus, name" not in lines[-4]), program.settle()):
                assert lines[-4].startswith(("filter FA", "converter C4"))
                assert "Test bench" in lines[0]


def test_escape_alone_cancels(file: Path) -> None:
    with terminal(file) as program:
        program.press("down down enter")
        program.until_text("accept")
        program.press("x")
        program.until_text("firstx")
        program.press("escape")
        program.until(lambda lines: "firstx" not in "".join(lines))
        program.settle()


def test_the_screen_follows_the_window(file: Path) -> None:
    with terminal(file) as program:
        program.resize(160, 48)
        program.until(lambda lines: "k checks" in lines[-1] and "checks, worst first" in "\n".join(lines))
        program.resize(20, 5)
        program.until(lambda lines: "60x12" in lines[0])
        program.press("down")
        program.resize(80, 24)
        lines = program.until(lambda lines: lines[2].startswith("bus bench") and "filter FA" in lines[-4])
        assert lines[2].startswith("bus bench")
        assert "144%" in lines[3]


@pytest.mark.parametrize("term", ["xterm", "screen-256color", "vt100"])
def test_poor_terminals_can_read_it(file: Path, term: str) -> None:
    with terminal(file, TERM=term, LANG="C", NO_COLOR="1") as program:
        lines = program.settle()
        assert all(line.isascii() for line in lines)
        assert program.raw.isascii()
        assert "FAIL" in lines[0]
        assert "####" in lines[3]
        assert "144%" in lines[3]
        assert "FAIL" in lines[3]
        assert "thin" in lines[4]
        cells = [program.screen.buffer[y][x] for y in range(24) for x in range(80)]
        assert {(cell.fg, cell.bg) for cell in cells} == {("default", "default")}
        assert program.screen.buffer[2][0].reverse  # the cursor
        program.press("down down right right 5")
        program.until(lambda lines: "this cell is calculated" in lines[-4])
        program.press("escape")
        program.until(lambda lines: "calculated" not in lines[-4])
        program.press("end left left left left 5 X enter")
        lines = program.until(lambda lines: lines[-2].startswith("! "))
        assert "5X" in lines[-4]
        assert program.raw.isascii()


def test_a_locale_with_utf8_draws_bars(file: Path) -> None:
    with terminal(file) as program:
        assert "\u2588" in program.settle()[3]
    with terminal(file, 80, 24, "--ascii") as program:
        assert "####" in program.settle()[3]


def test_quitting_gives_the_terminal_back(file: Path) -> None:
    with terminal(file) as program:
        program.press("down D")
        program.until_text("duplicated FA")
        program.press("q")
        program.until_text("unsaved work")
        program.press("d")
        assert program.end() == 0
        assert program.raw.rstrip().rfind(b"\x1b[?1049l") > program.raw.rfind(b"\x1b[?1049h")
        assert file.read_text(encoding="utf-8") == TEXTS["small"]


def test_a_paste_of_a_megabyte_leaves_the_program_well(file: Path) -> None:
    with terminal(file) as program:
        program.settle()
        os.set_blocking(program.master, False)
        data = b"\x1b[200~" + b"7" * 1_000_000 + b"\x1b[201~"
        end = time.monotonic() + PATIENCE
        while data and time.monotonic() < end:  # a terminal takes and gives at once
            _, ready, _ = select.select([], [program.master], [], 0.2)
            if ready:
                data = data[os.write(program.master, data[:4096]) :]
            program.read(0)
        assert not data
        program.until(lambda lines: "7777" in lines[-4])
        program.press("escape")
        program.until(lambda lines: "7777" not in "".join(lines))
        program.settle()
