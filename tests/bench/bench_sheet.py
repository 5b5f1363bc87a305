"""What the user waits for, measured from outside: ``python -m tests.bench.bench_sheet``. Not collected by pytest.

The real program runs in a pseudo-terminal of 80x24. The same keys go to a desk in this process, whose frame says what
the screen must come to; the clock stops at the chunk of output after which an emulated terminal shows exactly that.
Each figure stands beside what is wanted. Ratios hold on any machine; times mean something on an idle one.
"""

from __future__ import annotations

import contextlib
import fcntl
import math
import os
import pty
import re
import select
import shutil
import signal
import statistics
import struct
import subprocess
import sys
import tempfile
import termios
import time
from collections.abc import Callable
from pathlib import Path

import pyte

from budget.engine.evaluate import evaluate_dc
from budget.engine.model import Project
from budget.project import store
from budget.project.build import build
from budget.session import open_file, stages
from budget.ui.desk import Desk
from budget.ui.paint import frame, plain
from tests.bench import bench_operating

ROOT = Path(__file__).parents[2]
WIDTH, HEIGHT = 80, 24
QUIET = 0.12  # seconds without output after which nothing more is on its way
KEYS = {"\r": "enter", "\x1b[A": "up", "\x1b[B": "down", "\x1b[C": "right", "\x1b[D": "left", "\x15": "ctrl+u"}
FILTERS, CONVERTERS, CASES = 6, 24, 4

# A bare application that shows as many cells.
BARE = f"""
from textual.app import App
from textual.widgets import DataTable
class Bare(App):
    def compose(self):
        yield DataTable()
    def on_mount(self):
        table = self.query_one(DataTable)
        table.add_columns(*[f"column {{n}}" for n in range(13)])
        for r in range({1 + FILTERS + CONVERTERS}):
            table.add_row(*[f"row{{r}}-{{n}}" for n in range(13)])
Bare().run(mouse=False)
"""


EDITS = 20  # of a number, for each column


def project_text() -> str:
    """The project of the measurement: 24 converters behind 6 filters, 4 cases."""
    lines = [
        'format = 1\n[project]\ntitle = "Bench"\n[rules]\nfilter_load = "80 %"\ngrowth = "5 %"\n'
        'inrush_window = "200 us"'
    ]
    lines.append(
        '[bus]\nname = "bus"\nlow = "22 V"\nnominal = "28 V"\nhigh = "32 V"\nrating = "60 A"\nresistance = "8 mohm"'
    )
    for k in range(FILTERS):
        lines.append(
            f'[[filter]]\nid = "FL{k + 1}"\nname = "Filter {k + 1}"\nrated_current = "12 A"\nmax_voltage = "40 V"\n'
            'derate_from = "60 degC"\nderate_to = "110 degC"\n'
            'dm = [{ series = { L = "4.7 uH", R = "8 mohm" } }, { shunt = { C = "4.7 uF", R = "6 mohm" } }, '
            '{ shunt = { C = "47 uF", R = "500 mohm" } }]\n'
            'cm = [{ series = { L = "1 mH" } }, { shunt = { C = "10 nF" } }]'
        )
    for k in range(CONVERTERS):
        lines.append(
            f'[[converter]]\nid = "CV{k + 1}"\nname = "Load {k + 1}"\nfilter = "FL{k % FILTERS + 1}"\n'
            f'rated_power = "60 W"\noutput = [{{ name = "main", voltage = "12 V", current = "{2 + k / 20:.4g} A" }}]\n'
            'efficiency = [["10 %", "74 %"], ["25 %", "85 %"], ["50 %", "90 %"], ["100 %", "89 %"]]\n'
            'idle_power = "1 W"\nmin_input = "16 V"\nmax_input = "40 V"\nlead = { R = "5 mohm", L = "300 nH" }'
        )
    for k in range(CASES):
        loads = ", ".join(f'CV{n + 1} = "{50 + 10 * k} %"' for n in range(k, CONVERTERS, CASES + 1))
        lines.append(f'[[case]]\nid = "case{k + 1}"\nduration = "{10 * (k + 1)} min"\nload = {{ {loads} }}')
    return "\n".join(lines) + "\n"


# -- a program in a pseudo-terminal


class Terminal:
    """A child in a pseudo-terminal, and an emulated screen of what it has written."""

    def __init__(self, command: list[str], home: str) -> None:
        self.screen = pyte.Screen(WIDTH, HEIGHT)
        self.stream = pyte.ByteStream(self.screen)
        self.started = time.perf_counter()
        self.pid, self.master = pty.fork()
        if self.pid == 0:
            try:
                fcntl.ioctl(0, termios.TIOCSWINSZ, struct.pack("HHHH", HEIGHT, WIDTH, 0, 0))
                os.execve(command[0], command, environment(home))
            finally:
                os._exit(127)

    def read(self, quiet: float = QUIET, least: float = 0.0) -> list[tuple[float, bytes]]:
        """Chunks of output with the times they came, until there is none for ``quiet`` seconds."""
        chunks: list[tuple[float, bytes]] = []
        end = time.perf_counter() + max(quiet, least)
        while (left := end - time.perf_counter()) > 0:
            if select.select([self.master], [], [], left)[0]:
                with contextlib.suppress(OSError):
                    data = os.read(self.master, 65536)
                    chunks.append((time.perf_counter(), data))
                    end = max(end, time.perf_counter() + quiet)
        return chunks

    def show(self, chunks: list[tuple[float, bytes]], arrived: Callable[[list[str]], bool]) -> float | None:
        """Replay chunks; the time of the first one after which ``arrived`` holds for the lines of the screen."""
        at = None
        for when, data in chunks:
            self.stream.feed(re.sub(rb"\x1b\[[?>=<][0-9;]*(?:\$p|u|t|q)", b"", data))  # questions pyte would print
            if at is None and arrived(self.screen.display):
                at = when
        return at

    def processor_time(self) -> float:
        """Seconds of processor time of the child so far; coarse, but the same on a busy machine."""
        fields = Path(f"/proc/{self.pid}/stat").read_text().rpartition(")")[2].split()
        return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")

    def close(self) -> None:
        with contextlib.suppress(ProcessLookupError):
            os.kill(self.pid, signal.SIGKILL)
        os.waitpid(self.pid, 0)
        os.close(self.master)


def environment(home: str) -> dict[str, str]:
    """As an installed program has it: bytecode is kept, the terminal is one over SSH, nothing of the tester's."""
    skip = ("PYTHONDONTWRITEBYTECODE", "NO_COLOR", "COLORTERM", "LANG", "TEXTUAL", "COLUMNS", "LINES")
    kept = {k: v for k, v in os.environ.items() if k not in skip and not k.startswith("LC_")}
    own = {"TERM": "xterm-256color", "LC_ALL": "C.UTF-8", "HOME": home, "XDG_STATE_HOME": home, "PYTHONPATH": str(ROOT)}
    return {**kept, **own}


class Both:
    """The program in its terminal, and a desk in this process that is given the same keys."""

    def __init__(self, file: Path, home: str) -> None:
        for left in file.parent.glob(f".{file.name}.*"):  # of a program that was killed: it would be offered
            left.unlink()
        self.terminal = Terminal([sys.executable, "-m", "budget", str(file)], home)
        twin = Path(home) / "twin" / file.name  # the program's own file is locked by it
        twin.parent.mkdir(exist_ok=True)
        shutil.copy(file, twin)
        self.desk = Desk(open_file(twin))
        self.calculate()
        self.terminal.show(self.terminal.read(0.5, 3.0), lambda _: False)
        self.check("the first screen")

    def calculate(self) -> None:
        """Results of the present document; ``first`` is the screen once the DC part of them is painted."""
        if self.desk.session.fresh:
            self.first = self.expected()
            return
        results = stages(self.desk.session.snapshot())
        self.desk.accept(next(results))
        self.first = self.expected()
        for outcome in results:
            self.desk.accept(outcome)

    def expected(self) -> list[str]:
        return [plain(line) for line in frame(self.desk, WIDTH, HEIGHT)]

    def check(self, what: str) -> None:
        lines = self.expected()
        if self.terminal.screen.display != lines:
            pairs = zip(self.terminal.screen.display, lines, strict=True)
            differing = "\n".join(f"  screen {a!r}\n  wanted {b!r}" for a, b in pairs if a != b)
            raise SystemExit(f"{what} is not what the desk paints:\n{differing}")

    def press(self, *keys: str) -> tuple[float, int]:
        """Seconds from the last key to the settled screen, and the bytes written from then on."""
        for key in keys:
            self.desk.key(KEYS.get(key, key), key if key.isprintable() and len(key) == 1 else None)
            frame(self.desk, WIDTH, HEIGHT)
        self.calculate()
        lines, first = self.expected(), self.first
        for key in keys[:-1]:
            os.write(self.terminal.master, key.encode())
            self.terminal.show(self.terminal.read(0.02), lambda _: False)
        if len(keys) > 1:
            self.terminal.show(self.terminal.read(), lambda _: False)
        shown = self.terminal.screen.display == lines
        start = time.perf_counter()
        os.write(self.terminal.master, keys[-1].encode())
        chunks = self.terminal.read()
        if shown and not chunks:
            return 0.0, 0
        at = self.terminal.show(chunks, lambda display: display in (first, lines))
        patience = 20
        while self.terminal.screen.display != lines and (patience := patience - 1):  # later stages follow
            chunks += (late := self.terminal.read(0.2, 0.4))
            later = self.terminal.show(late, lambda display: display in (first, lines))
            at = later if at is None else at
        if at is None or self.terminal.screen.display != lines:
            self.check(f"the screen after {keys}")
        assert at is not None
        return at - start, sum(len(data) for _, data in chunks)


# -- what is measured


def report(what: str, found: float, unit: str, wanted: float | None = None, more: str = "") -> None:
    """One line; what misses its mark says so."""
    mark = (
        "" if wanted is None else f"   wanted <= {wanted:g} {unit}".rstrip() + ("" if found <= wanted else "   MISSED")
    )
    print(f"{what:<58} {found:9.4g} {unit:<3}{more:<24}{mark}", flush=True)


def late(values: list[float]) -> float:
    """The 95th percentile."""
    return sorted(values)[math.ceil(0.95 * len(values)) - 1]


def edits(file: Path, home: str) -> None:
    both = Both(file, home)
    try:
        columns = [column.title for column in both.desk.view().sections[0].columns]
        moves = [both.press("\x1b[B") for _ in range(10)] + [both.press("\x1b[A") for _ in range(8)]
        rightward = [both.press("\x1b[C") for _ in range(columns.index("rated"))]
        report("cursor down or up: key to paint, median", 1e3 * statistics.median(t for t, _ in moves), "ms")
        report("cursor down or up: bytes, median", statistics.median(n for _, n in moves), "B")
        report("cursor right: bytes, median (largest, scrolling)", statistics.median(n for _, n in rightward), "B",
               more=f" (largest {max(n for _, n in rightward)})")  # fmt: skip
        for column in ("rated", "lead R"):
            while both.desk.cursor.column != columns.index(column):
                both.press("\x1b[C")
            found, spent = [], both.terminal.processor_time()
            for k in range(EDITS):
                text = f"{41.3 + 0.37 * k:.4g}" if column == "rated" else f"{3 + 0.5 * k:.3g}m"
                found.append(both.press(*text, "\r"))
                if k % 4 == 3:
                    both.press("\x1b[B" if k % 8 == 3 else "\x1b[A")
                both.press("\x1b[A")
            times, sizes = [1e3 * t for t, _ in found], [n for _, n in found]
            spent = both.terminal.processor_time() - spent
            report(f"{column}: processor time of an edit with all its keys", 1e3 * spent / EDITS, "ms")
            report(f"{column}: Enter to painted result, median", statistics.median(times), "ms")
            report(f"{column}: Enter to painted result, 95th percentile", late(times), "ms", 25)
            report(f"{column}: bytes per edit, median", statistics.median(sizes), "B", 4000)
            report(f"{column}: bytes per edit, largest", max(sizes), "B", 4000)
        for column in ("note", "name"):
            while both.desk.cursor.column != columns.index(column):
                both.press("\x1b[C" if both.desk.cursor.column < columns.index(column) else "\x1b[D")
            found = []
            for k in range(6):
                found.append(both.press("\r", "\x15", *f"text {k}", "\r"))
                both.press("\x1b[A")
            typed = [both.press("\r", "\x15", "q"), both.press("r"), both.press("s"), both.press("\r")]
            report(f"{column}: Enter to painted, median", 1e3 * statistics.median(t for t, _ in found), "ms")
            report(f"{column}: bytes per edit, median", statistics.median(n for _, n in found), "B", 1000)
            report(f"{column}: bytes per edit, largest", max(n for _, n in found), "B", 1000)
            report(f"{column}: bytes per typed character", statistics.median(n for _, n in typed[1:3]), "B")
            both.press("\x1b[A")
    finally:
        both.terminal.close()


def held(file: Path, home: str) -> None:
    """Against a reference: each row whose numbers change gets a line below it; the feed's resistance changes all."""
    both = Both(file, home)
    try:
        both.press("K")
        columns = [column.title for column in both.desk.view().sections[0].columns]
        while both.desk.cursor.column != columns.index("lead R"):
            both.press("\x1b[C")
        found = []
        for k in range(EDITS // 2):
            found.append(both.press(*f"{9 + 0.5 * k:.3g}m", "\r"))
            both.press("\x1b[A")
        report("every row against a reference: first edit", found[0][1], "B", 4000)
        report("every row against a reference: later edits, largest", max(n for _, n in found[1:]), "B", 4000)
        report("every row against a reference: Enter to painted, median",
               1e3 * statistics.median(t for t, _ in found), "ms")  # fmt: skip
        moves = [both.press("\x1b[B") for _ in range(4)] + [both.press("\x1b[A") for _ in range(4)]
        report("against a reference: bytes per move, largest", max(n for _, n in moves), "B", 500)
    finally:
        both.terminal.close()


def first_paint(file: Path, home: str) -> None:
    desk = Desk(open_file(file))
    names = [plain(line)[:16] for line in frame(desk, WIDTH, HEIGHT)[1 : HEIGHT - 5]]

    def once(command: list[str], arrived: Callable[[list[str]], bool]) -> float:
        terminal = Terminal(command, home)
        try:
            at = terminal.show(terminal.read(0.5, 3.0), arrived)
        finally:
            terminal.close()
        if at is None:
            raise SystemExit("the first screen never came:\n" + "\n".join(terminal.screen.display))
        return at - terminal.started

    def own() -> float:
        return once(
            [sys.executable, "-m", "budget", str(file)],
            lambda lines: [line[:16] for line in lines[1 : HEIGHT - 5]] == names,
        )

    def bare() -> float:
        return once([sys.executable, "-c", BARE], lambda lines: lines[HEIGHT - 2].startswith(f" row{HEIGHT - 3}-0"))

    ratio("process start to first painted sheet", own, bare, 7, 1.5)


def check_command(home: str) -> None:
    def once(*arguments: str) -> float:
        start = time.perf_counter()
        done = subprocess.run(
            [sys.executable, *arguments], env=environment(home), stdout=subprocess.DEVNULL, check=False, cwd=ROOT
        )
        assert done.returncode in (0, 1)
        return time.perf_counter() - start

    heron = str(ROOT / "projects" / "heron.toml")
    ratio("budget check --dc heron.toml : import numpy", lambda: once("-m", "budget", "check", "--dc", heron),
          lambda: once("-c", "import numpy"), 9, 3.0)  # fmt: skip


def ratio(what: str, one: Callable[[], float], other: Callable[[], float], times: int, wanted: float) -> None:
    """The ratio of two medians, measured in alternation after a warm-up of both."""
    one(), other()
    pairs = [(one(), other()) for _ in range(times)]
    a, b = (statistics.median(values) for values in zip(*pairs, strict=True))
    report(what, a / b, "", wanted, f" ({1e3 * a:.0f} : {1e3 * b:.0f} ms)")


def engine(project: Project) -> None:
    def median(one: Project, repeats: int) -> float:
        return bench_operating.milliseconds(lambda: evaluate_dc(one), repeats)

    report(f"evaluate, {CONVERTERS} converters, {FILTERS} filters, {CASES} cases", median(project, 200), "ms", 3)
    report("evaluate, 500 converters, 40 filters, 4 cases", median(bench_operating.project(500, 40), 60), "ms", 50)
    sizes = (250, 500, 1000)
    found = [median(bench_operating.project(size, 40), 60) for size in sizes]
    words = " : ".join(f"{value:.2f}" for value in found)
    report("evaluate, 500 over 250 converters", found[1] / found[0], "", more=f" ({words} ms)")
    report("evaluate, 1000 over 500 converters", found[2] / found[1], "")


def main() -> None:
    print(f"load average {os.getloadavg()[0]:.2f} on {os.cpu_count()} processors")
    with tempfile.TemporaryDirectory() as home:
        file = Path(home) / "bench.toml"
        file.write_text(project_text(), encoding="utf-8")
        loaded = store.load(file)
        project = build(loaded.document, loaded.shelves).project
        assert project is not None
        engine(project)
        check_command(home)
        first_paint(file, home)
        edits(file, home)
        held(file, home)


if __name__ == "__main__":
    main()
