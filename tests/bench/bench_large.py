"""A large project on the screen: ``python -m tests.bench.bench_large``. Not collected by pytest.

The real program in a pseudo-terminal of 80x24 with 200 converters behind 40 filters in 12 cases, while it calculates
stability and switch-on behind the keys all the time: how long a key waits for its paint, and the memory of the whole
program. Times mean something on an idle machine only.
"""

from __future__ import annotations

import os
import re
import statistics
import sys
import tempfile
import time
from pathlib import Path

from budget.project import store
from budget.project.document import from_data
from tests.bench.bench_scale import HERON, tree
from tests.bench.bench_sheet import Terminal, late, report

ROUNDS = 30
SECONDS = 90.0  # with stability and switch-on behind it, until the memory is read


def memory(pid: int) -> float:
    """Peak resident memory so far [MB]."""
    found = re.search(r"VmHWM:\s+(\d+) kB", Path(f"/proc/{pid}/status").read_text())
    assert found is not None
    return int(found[1]) / 1024


def pressed(terminal: Terminal, key: str) -> float:
    """Milliseconds from a key to the first output it brings."""
    terminal.show(terminal.read(0.02), lambda _: False)
    start = time.perf_counter()
    os.write(terminal.master, key.encode())
    chunks = terminal.read(0.2)
    terminal.show(chunks, lambda _: False)
    return 1e3 * ((chunks[0][0] if chunks else time.perf_counter()) - start)


def main() -> None:
    with tempfile.TemporaryDirectory() as home:
        file = Path(home) / "large.toml"
        file.write_text(store.render(from_data(tree())).text)
        (Path(home) / "shelf.toml").write_text(HERON.with_name("shelf.toml").read_text())
        terminal = Terminal([sys.executable, "-m", "budget", str(file)], home)
        try:
            terminal.show(terminal.read(1.0, 8.0), lambda _: False)
            begun = time.perf_counter()
            for title, reference in (("", False), (", against a reference", True)):
                if reference:
                    pressed(terminal, "K")
                kinds: dict[str, list[float]] = {"cursor": [], "digit": [], "Enter": []}
                for k in range(ROUNDS):
                    kinds["cursor"].append(pressed(terminal, "\x1b[B"))
                    if k < 9 and not reference:
                        pressed(terminal, "\x1b[C")
                    elif k % 2:
                        kinds["digit"] += [pressed(terminal, c) for c in f"{40 + k}"]
                        kinds["Enter"].append(pressed(terminal, "\r"))
                        terminal.show(terminal.read(0.5), lambda _: False)  # what follows comes while the next keys do
                for name, values in kinds.items():
                    report(f"{name}: key to paint{title}, median", statistics.median(values), "ms")
                    report(f"{name}: key to paint{title}, 95th percentile", late(values), "ms", 100)
            while time.perf_counter() - begun < SECONDS:
                pressed(terminal, "\x1b[A")
                terminal.show(terminal.read(1.0, 1.0), lambda _: False)
            report("peak memory of the program", memory(terminal.pid), "MB", 400)
        finally:
            terminal.close()


if __name__ == "__main__":
    main()
