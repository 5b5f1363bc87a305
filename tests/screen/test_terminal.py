"""The real program in a pseudo-terminal: what is typed arrives, little is sent, and poor terminals can read it.

Nothing here waits for a time to pass: each step reads the terminal until what is expected stands on it. The gaps
between keys of a burst are what is tested, not a means of waiting.
"""

from __future__ import annotations

import fcntl
import os
import pty
import re
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
from types import SimpleNamespace

import pyte
import pytest

from budget import cli
from budget.ui import commands
from tests.bench.bench_sheet import project_text
from tests.screen.driving import TEXTS

ROOT = Path(__file__).parents[2]
FREE = [key for key in "&;\\`{}" if key not in commands.BY_KEY]  # keys without a command
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
    "ctrl+s": "\x13",
    "ctrl+q": "\x11",
}
SGR = re.compile(rb"\x1b\[([0-9;]*)m")
MODES = re.compile(rb"\x1b\[\?([0-9;]+)h")


class Terminal:
    """One run of the program, its screen, and the bytes it has sent."""

    def __init__(
        self, arguments: list[str], width: int, height: int, settings: dict[str, str], flow_control: bool = False
    ) -> None:
        self.screen = pyte.Screen(width, height)
        self.stream = pyte.ByteStream(self.screen)
        self.sent = 0
        self.raw = b""
        self.marker = ""
        self.master, slave = pty.openpty()
        if flow_control:
            line = termios.tcgetattr(slave)
            line[0] |= termios.IXON | termios.IXOFF
            termios.tcsetattr(slave, termios.TCSANOW, line)
        self._size(width, height)
        keep = {
            k: v for k, v in os.environ.items() if k in ("PATH", "HOME", "LD_LIBRARY_PATH", "TMPDIR", "XDG_STATE_HOME")
        }
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
def terminal(
    file: Path,
    width: int = 80,
    height: int = 24,
    *options: str,
    flow_control: bool = False,
    sign: str = "FAIL",
    **settings: str,
) -> Iterator[Terminal]:
    program = Terminal([*options, str(file)], width, height, settings, flow_control)
    try:
        program.until(lambda lines: sign in lines[0])  # the first results are there
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
        assert program.sent - before <= 500
        before = program.sent
        program.press("6 0 % enter")
        program.until(lambda lines: "60 %" in lines[6] and "load, C2 = 60%: " in lines[-2])
        program.settle()
        assert program.sent - before < 4000
        program.press("s down down right")
        program.settle()
        quiet(program)
        before = program.sent
        program.press("right")
        program.until(lambda lines: "input power" in lines[-4])
        assert program.sent - before <= 500


def test_a_move_in_the_sheet_sends_little(file: Path) -> None:
    with terminal(file) as program:
        program.settle()
        for key, told in (("down", "filter FA"), ("down", "converter C1"), ("right", "output power"), ("up", "output")):
            before = program.sent
            program.press(key)
            program.until(lambda lines, told=told: told in lines[-4])  # type: ignore[misc]
            assert program.sent - before <= 500


def test_an_edit_that_changes_every_row_sends_little_also_against_a_reference(tmp_path: Path) -> None:
    """24 converters: the resistance of the feed is in every row, and each row gets a line of changes below it."""
    path = tmp_path / "bus.toml"
    path.write_text(project_text().replace("60 W", "45 W"), encoding="utf-8")
    with terminal(path, sign="no data") as program:
        ready(program)
        program.press("home end left")
        program.until(lambda lines: "bus, resistance" in lines[-4])
        program.press("9 m")
        program.until(lambda lines: "9m" in lines[-4])
        before = program.sent
        program.press("enter")
        ready(program, "resistance = 9m: ")
        assert 0 < program.sent - before <= 4000
        quiet(program)
        program.press("K up 1 1 m")
        program.until(lambda lines: "11m" in lines[-4])
        before = program.sent
        program.press("enter")
        ready(program, "resistance = 11m: ")
        program.until(lambda lines: sum(line.startswith(("change", "  change")) for line in lines) > 8)
        # All rows and as many lines of changes: some 3.6 kB, more where stages are painted apart on a busy machine.
        assert 0 < program.sent - before <= 6000
        program.press("home")
        program.settle()
        quiet(program)
        for key in ("down", "down", "right", "up"):
            before = program.sent
            program.press(key)
            program.settle()
            assert program.sent - before <= 500 + 100  # and the answer to the key that settles


def quiet(program: Terminal) -> None:
    """Until nothing more is on its way: results of later stages, and those of the reference."""
    before = -1
    while before != program.sent:
        before = program.sent
        program.read(0.5)


def ready(program: Terminal, told: str = "") -> list[str]:
    """Wait for all results."""
    return program.until(
        lambda lines: (
            "~" not in lines[0] and told in lines[-2] and "calculating" not in lines[-2] and "~" not in lines[5]
        )
    )


def test_nothing_is_sent_while_nothing_happens(file: Path) -> None:
    with terminal(file) as program:
        ready(program)
        program.settle()
        before = program.sent
        program.read(1.2)  # as long as the longest pause between two looks at the terminal; it returns if anything came
        assert program.sent == before


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


def test_escape_and_a_key_right_behind_it_are_two_keys(file: Path) -> None:
    """Esc, then Enter, a digit or a letter in one go: what was typed is not taken, and the next key means itself."""
    with terminal(file) as program:
        program.press("down down enter x x escape enter escape f")
        program.until(lambda lines: "converter C1" in lines[0] or "meaning" in lines[1])
        program.press("escape s end left left left left left 5 escape escape")
        lines = program.settle()
        assert "firstxx" not in "".join(lines)
        assert not any("*" in line for line in lines[:1])  # nothing was changed


def test_bytes_that_are_no_text_do_not_end_it(file: Path) -> None:
    """A noisy line, or a terminal of another encoding: an e with an accent from one of Latin-1, then keys."""
    with terminal(file) as program:
        os.write(program.master, b"\xe9\xff\xc3j\x80")
        program.settle()
        program.press("down down enter")
        program.until_text("accept")
        os.write(program.master, b"\xe9t\xe9u")
        program.until_text("first\ufffdt\ufffdu")
        program.press("escape")
        program.until(lambda lines: "\ufffd" not in "".join(lines))
        program.settle()


def test_flow_control_of_the_line_does_not_stop_it(file: Path) -> None:
    """With XON/XOFF on, Ctrl+S would stop the screen and Ctrl+Q let it go; here they are keys like any other."""
    with terminal(file, flow_control=True) as program:
        program.press("ctrl+s")
        program.until(lambda lines: "saved bus.toml" in lines[-2])
        program.press("down")
        program.settle()
        program.press("ctrl+q")
        assert program.end() == 0


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


def looks(program: Terminal, *, ascii_only: bool, colour: bool) -> None:
    """The sheet can be read, and was sent with nothing but what every terminal has."""
    lines = program.settle()
    assert lines[2].startswith("bus bench")
    assert "FAIL" in lines[0]
    assert ("#####" if ascii_only else "\u2588" * 5) in lines[3]
    assert "144%" in lines[3]
    assert "FAIL" in lines[3]
    assert "thin" in lines[4]
    assert "? help" in lines[-1].replace("  ", " ")
    assert program.raw.isascii() == ascii_only
    sent = {int(code or b"0") for codes in SGR.findall(program.raw) for code in codes.split(b";")}
    assert sent <= {0, 1, 2, 4, 7, 39, 49} | ({31, 35} if colour else set())  # of blinking and of mixed colours nothing
    assert (31 in sent) == colour
    modes = {int(code) for codes in MODES.findall(program.raw) for code in codes.split(b";")}
    assert modes <= {7, 25, 1004, 1049, 2004}  # none that takes the mouse from the terminal's own selection
    buffer = program.screen.buffer
    assert not any(buffer[y][x].blink for y in range(24) for x in range(80))
    assert buffer[2][0].reverse  # the cursor, seen without colour
    assert buffer[2][0].bold
    assert buffer[2][0].fg == "default"
    if not colour:
        assert {(buffer[y][x].fg, buffer[y][x].bg) for y in range(24) for x in range(80)} == {("default", "default")}


UTF8, ABSENT = "C.UTF-8", "tlh_KX.UTF-8"


@pytest.mark.parametrize(
    ("settings", "ascii_only", "colour"),
    [
        ({"TERM": "xterm", "LANG": UTF8}, False, True),
        ({"TERM": "xterm-256color", "LANG": UTF8, "COLORTERM": "truecolor"}, False, True),
        ({"TERM": "linux", "LANG": UTF8}, False, True),
        ({"TERM": "tmux-256color", "LANG": UTF8, "COLORTERM": "truecolor", "NO_COLOR": "1"}, False, False),
        ({"TERM": "screen", "LC_ALL": "C"}, True, True),
        ({"TERM": "screen-256color", "LANG": ABSENT}, True, True),
        ({"TERM": "tmux", "LC_ALL": "POSIX", "NO_COLOR": "1"}, True, False),
        ({"TERM": "vt100", "LANG": UTF8}, True, True),
    ],
    ids=lambda value: value["TERM"] if isinstance(value, dict) else None,
)
def test_every_terminal_can_show_it(file: Path, settings: dict[str, str], ascii_only: bool, colour: bool) -> None:
    with terminal(file, **settings) as program:
        looks(program, ascii_only=ascii_only, colour=colour)
        program.press("down down right right 5")
        program.until(lambda lines: "this cell is calculated" in lines[-4])
        program.press("escape")
        program.until(lambda lines: "calculated" not in lines[-4])
        program.press("end left left left left 5 X enter")
        lines = program.until(lambda lines: lines[-2].startswith("! 'X' is not a unit"))
        assert "5X" in lines[-4]
        assert program.raw.isascii() == ascii_only


def test_a_terminal_that_cannot_place_text_is_told_so(file: Path) -> None:
    program = Terminal([str(file)], 80, 24, {"TERM": "dumb"})
    try:
        assert program.end() == cli.UNUSABLE
        told = " ".join(" ".join(program.screen.display).split())
        assert "TERM=dumb" in told
        assert "budget check FILE" in told
        assert b"\x1b" not in program.raw
    finally:
        program.process.kill()
        os.close(program.master)


def test_ascii_is_for_every_locale_that_is_not_utf8(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cli, "sys", SimpleNamespace(flags=SimpleNamespace(utf8_mode=0), _xoptions={}))
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("PYTHONUTF8", raising=False)
    for encoding, ascii_only in (("UTF-8", False), ("utf8", False), ("ISO-8859-1", True), ("ANSI_X3.4-1968", True)):
        monkeypatch.setattr(cli.locale, "getencoding", lambda encoding=encoding: encoding)
        assert cli._ascii_terminal() == ascii_only
    monkeypatch.setenv("PYTHONUTF8", "1")
    assert not cli._ascii_terminal()


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
