"""The real program in a pseudo-terminal, killed at random moments, again and again; every life goes on with the last.

    python -m tests.bench.kill_many --count 300

Each life takes back what the one before left, types numbers into cells and saves now and then, until a signal ends it:
at any moment, also while it starts and while it saves. After each it is read from outside what is on disk: nothing that
stood on the screen for a second may be missing, nothing may be there out of turn, and the project file must be one of
the states that were there, whole.
"""

from __future__ import annotations

import argparse
import hashlib
import os
import re
import signal
import tempfile
import time
from collections import Counter
from pathlib import Path
from random import Random

from budget.keeping.find import Found, search
from budget.project import store
from budget.session import HISTORY, open_file
from tests.screen.driving import TEXTS
from tests.screen.test_terminal import KEYS, Terminal

SIGNALS = (signal.SIGKILL, signal.SIGKILL, signal.SIGTERM, signal.SIGHUP)
PROMISE = 1.0  # seconds within which an accepted edit is on disk
_TYPED = re.compile(r"load case \w+, load, \w+ = (\d+)\b")


class Chain:
    """Lives of the program on one file, one after the other."""

    def __init__(self, folder: Path, seed: int) -> None:
        self.path = folder / "bus.toml"
        self.path.write_text(TEXTS["small"], encoding="utf-8")
        self.random = Random(seed)
        self.number = 0  # of the last edit that is known to be on disk
        self.seen: dict[int, float] = {}  # when an edit stood on the screen first
        self.ended: Counter[str] = Counter()
        self.asked = 0
        self.saves = 0
        self.young = 0  # edits that were lost within the promised second

    def live(self) -> None:
        """One life, and what is on disk after it."""
        number = self.random.choice(SIGNALS)
        program = Terminal([str(self.path)], 80, 24, {"XDG_STATE_HOME": str(self.path.parent / "state")})
        try:
            begun = time.monotonic()
            early = self.random.random() < 0.15
            if early:
                self._watch(program, begun + self.random.uniform(0.0, 0.9))
            else:
                self._begin(program)
                self._work(program, time.monotonic() + self.random.uniform(0.0, 1.6))
            killed = time.monotonic()
            os.kill(program.process.pid, number)
            program.end()
        finally:
            program.process.kill()
            program.process.wait()
            os.close(program.master)
        self.ended[f"{number.name}{' at the start' if early else ''}"] += 1
        self._check(killed)

    def _watch(self, program: Terminal, until: float) -> None:
        """Read what comes until then, and note what edits stand on the screen."""
        while (left := until - time.monotonic()) > 0:
            if not program.read(left):
                break
            self._note(program)

    def _note(self, program: Terminal) -> None:
        found = _TYPED.search(" ".join(line.strip() for line in program.screen.display[-4:-1]))
        if found:
            self.seen.setdefault(int(found[1]), time.monotonic())

    def _begin(self, program: Terminal) -> None:
        lines = program.until(lambda lines: "take it back" in lines[-1] or "quit" in lines[-1])
        if "take it back" in lines[-1]:
            self.asked += 1
            program.press("t")
            program.until(lambda lines: "is back" in " ".join(lines[-4:]) and "quit" in lines[-1])
        program.press("s l pageup home right down down down")

    def _work(self, program: Terminal, until: float) -> None:
        number = self.number
        while time.monotonic() < until:
            if self.random.random() < 0.15:
                program.write("w")
                self.saves += 1
            else:
                number += 1
                program.write(f"{number}{KEYS['enter']}")
            self._watch(program, min(until, time.monotonic() + self.random.choice((0.0, 0.01, 0.05, 0.1))))

    def _check(self, killed: float) -> None:
        found = search(self.path)
        assert not found.notes, found.notes
        assert len(found.found) <= 1
        typed = [int(text) for one in found.found for text in self._numbers(one)]
        first, last = (typed[0], typed[-1]) if typed else (1, 0)
        assert typed == list(range(first, last + 1)), f"not in turn: {typed[:5]} to {typed[-5:]}"
        assert first == 1 or len(typed) == HISTORY  # the session lets its oldest steps go
        promised = [number for number, when in self.seen.items() if when <= killed - PROMISE]
        assert last >= max(promised, default=0), f"{last} is on disk, {max(promised)} was accepted"
        lost = [number for number in self.seen if number > last]
        self.young += len(lost)
        for number in lost:
            del self.seen[number]
        self.number = last
        self._check_file(found.found)

    def _numbers(self, one: Found) -> list[str]:
        assert not one.work.damage, one.work.damage
        matches = [_TYPED.fullmatch(step.label) for step in one.work.done]
        assert all(matches)
        return [match[1] for match in matches if match]

    def _check_file(self, found: tuple[Found, ...]) -> None:
        """The file is what one of the states would have been saved as, to the last byte."""
        digest = hashlib.sha256(self.path.read_bytes()).hexdigest()
        open_file(self.path)
        if digest == hashlib.sha256(TEXTS["small"].encode()).hexdigest():
            return
        for one in found:
            for document in (one.work.document, *(step.document for step in reversed(one.work.done))):
                if hashlib.sha256(store.render(document).text.encode()).hexdigest() == digest:
                    return
        raise AssertionError("the file is none of the states that were there")

    def told(self) -> str:
        """What the lives came to."""
        ended = ", ".join(f"{count} {name}" for name, count in sorted(self.ended.items()))
        return (
            f"{self.ended.total()} lives ended ({ended}): {self.number} edits on disk, none missing that had stood on "
            f"the screen for {PROMISE:g} s ({self.young} younger ones lost); {self.saves} times saved, the file whole "
            f"each time; {self.asked} starts asked and took back"
        )


def main() -> None:
    """Kill it as often as asked; any edit that is missing ends the run with an error."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--count", type=int, default=300, help="how many lives (default: 300)")
    parser.add_argument("--seed", type=int, default=1, help="of the random moments (default: 1)")
    options = parser.parse_args()
    for number in SIGNALS[2:]:  # as in a shell of one's own: what was started by nohup would ignore one
        signal.signal(number, signal.SIG_DFL)
    with tempfile.TemporaryDirectory() as folder:
        chain = Chain(Path(folder), options.seed)
        for number in range(1, options.count + 1):
            chain.live()
            if number % 50 == 0 or number == options.count:
                print(chain.told(), flush=True)


if __name__ == "__main__":
    main()
