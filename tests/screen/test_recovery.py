"""Killed at any moment, in a terminal and without one: what was accepted is there again, and the file is whole.

Nothing here waits for a time to pass, except for the moments at which a process is killed: those are what is tested.
"""

from __future__ import annotations

import hashlib
import json
import os
import pty
import select
import signal
import subprocess
import sys
import time
import tomllib
from dataclasses import dataclass
from pathlib import Path
from random import Random
from typing import Any

import pyte
import pytest

from budget.keeping import lines, places, recover
from budget.keeping.find import search
from budget.keeping.journal import Journal
from budget.keeping.patch import unpack
from budget.project import document as doc
from budget.project.document import Document
from budget.session import Session, open_file
from budget.ui.desk import Ask, Desk
from budget.ui.paint import frame, plain
from budget.ui.recovery import Keeper, pack_spot, spot_of
from tests.bench.kill_many import Chain
from tests.screen.driving import TEXTS, press, typed
from tests.screen.test_terminal import ROOT, Terminal, terminal

TEXT = """\
format = 1  # of the file
[bus]
low = "22 V"
[[converter]]
id = "A"  # first
[[converter]]
id = "B"
[[converter]]
id = "C"
"""

# -- hundreds of kills without a screen

LIVES = 120
MOMENTS = 0.03  # seconds within which one is killed


@dataclass(frozen=True)
class State:
    """What a session was after a number of events."""

    document: Document
    done: tuple[str, ...]
    undone: tuple[str, ...]
    trials: tuple[str, ...]
    dirty: bool


def do(session: Session, random: Random, count: int) -> None:
    """One deed, which depends on the numbers drawn alone."""
    what, number = random.randrange(10), random.randrange(3)
    document = session.document
    if what < 4:
        session.apply(f"edit {count}", doc.put(document, ("bus", "low"), count), ("sheet", count))
    elif what == 4:
        session.apply(f"row {count}", doc.insert(document, ("converter", number), {"id": f"n{count}"}), None)
    elif what == 5:
        session.apply(f"move {count}", doc.move(document, ("converter", 0), number), None)
    elif what == 6:
        session.undo(None)
    elif what == 7:
        session.redo(None)
    elif what == 8:
        session.save()
    else:
        session.hold_as(f"t{number}")


@dataclass(frozen=True)
class Life:
    """A process that did something: with what numbers, and after how many events it was killed.

    ``late``: the one before it was killed between a save and the word of it, which so is its own first word.
    """

    seed: int
    events: int
    late: bool


def mirror(path: Path, lives: list[Life]) -> tuple[list[State], set[str]]:
    """What these lives were one after the other, after each event; and what the file was meanwhile."""
    path.write_text(TEXT)
    session = open_file(path)
    states = [state(session)]
    files = {digest(path)}

    def tell(kind: str) -> None:
        if kind == "saved":
            files.add(digest(path))
        if kind != "saving" and (kind != "saved" or len(states) > 1):  # nothing is kept before there is something
            states.append(state(session))

    session.tell = tell
    for number, one in enumerate(lives):
        if one.late:
            session.tell = lambda _: None
            session.save()
            files.add(digest(path))
            session.tell = tell
        if number:  # the events that say that it goes on, and what was saved
            states += [state(session)] * min(1 + one.late, one.events + 1 - len(states))
        random, count = Random(one.seed), 0
        until = one.events + (one is lives[-1])  # it may have been killed just after a save, the event that comes next
        while len(states) <= until:
            count += 1
            do(session, random, one.seed * 1000 + count)
    return states, files


def state(session: Session) -> State:
    return State(
        session.document,
        tuple(step.label for step in session.done),
        tuple(step.label for step in session.undone),
        tuple(trial.name for trial in session.trials),
        session.dirty,
    )


def digest(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


def life(path: Path, seed: int, out: int) -> None:
    """A process that takes back what is there and goes on, telling after each deed how many events are on disk."""
    try:
        session = open_file(path)
        kept = Journal(session)
        session.tell = kept.note
        found = search(path).found
        if found:
            recover.take_back(session, kept, found[0])
        random, count, events = Random(seed), 0, found[0].work.events if found else 0
        os.write(out, f"{events} ".encode())
        events += bool(found)

        def tell(kind: str) -> None:
            nonlocal events
            events += kind != "saving" and (kind != "saved" or kept.begun)
            kept.note(kind)

        session.tell = tell
        while True:
            count += 1
            do(session, random, seed * 1000 + count)
            if kept.flush(20):
                os.write(out, f"{events} ".encode())
    except BaseException as error:
        os.write(out, f"failed: {error!r}".encode())
    finally:
        os._exit(1)


def test_killed_at_hundreds_of_moments_nothing_that_was_on_disk_is_missing(tmp_path: Path) -> None:
    """A life is killed within some milliseconds of work; the next one goes on with what is left, up to three times."""
    random = Random(7)
    lengths: list[int] = []
    path = tmp_path / "now" / "bus.toml"
    other = tmp_path / "mirror" / "bus.toml"
    for folder in (path.parent, other.parent):
        folder.mkdir()
    lives: list[Life] = []
    late = False
    for number in range(LIVES):
        if number % 3 == 0:
            for file in path.parent.iterdir():
                file.unlink()
            path.write_text(TEXT)
            lives, late = [], False
        told = killed(path, number, random.uniform(0.0, MOMENTS), early=number % 10 == 9)
        (found,) = search(path).found or (None,)
        events = found.work.events if found is not None else 0
        assert events >= told
        if events > (lives[-1].events if lives else 0):  # else it was killed before it did anything
            lives.append(Life(number, events, late))
        for file in other.parent.iterdir():
            file.unlink()
        states, files = mirror(other, lives)
        assert digest(path) in files
        if found is None:
            continue
        lengths.append(events)
        alike(found.work.document, states[events], found.work.done, found.work.undone)
        late = digest(path) != found.work.digest
        session = open_file(path)
        kept = Journal(session)
        settled = recover.settled(found, session)
        recover.take_back(session, kept, found)
        assert not session.changed_on_disk()  # the file was never one that the journal does not know
        assert session.dirty == (states[events].dirty and not late)
        assert settled == (not session.dirty)
        if found.work.trials is not None:
            assert tuple(t.name for t in session.trials) == states[events].trials
        kept.close(remove=False)
        os.truncate(found.name, found.length)  # without the words of this look at it
    assert len(lengths) > LIVES / 2
    assert len(set(lengths)) > 5  # they were at different places when it came


def alike(document: Document, was: State, done: list, undone: list) -> None:  # type: ignore[type-arg]
    assert document.data == was.document.data
    assert dict(document.origin) == dict(was.document.origin)
    assert tuple(step.label for step in done) == was.done
    assert tuple(step.label for step in undone) == was.undone


def killed(path: Path, seed: int, after: float, early: bool) -> int:
    """Let a life begin and kill it some seconds after, or, with ``early``, perhaps before; how many events it has told.

    Those it tells are on disk.
    """
    out, into = os.pipe()
    process = os.fork()
    if process == 0:
        os.close(out)
        life(path, seed, into)
    os.close(into)
    told = b""
    try:
        if not early:
            told += os.read(out, 65536)  # it is about to begin
        end = time.monotonic() + after
        while (left := end - time.monotonic()) > 0:
            if select.select([out], [], [], left)[0]:
                told += os.read(out, 65536)
        os.kill(process, signal.SIGKILL)
        os.waitpid(process, 0)
        while more := os.read(out, 65536):
            told += more
    finally:
        os.close(out)
    assert b"failed" not in told, told
    return int(told.split()[-1]) if told else 0


# -- in a terminal


def test_lives_in_a_terminal_go_on_with_one_another(tmp_path: Path) -> None:
    """As ``tests.bench.kill_many`` does it hundreds of times."""
    chain = Chain(tmp_path, seed=5)
    for _ in range(5):
        chain.live()
    assert chain.number > 0


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "bus.toml"
    path.write_text(TEXTS["small"], encoding="utf-8")
    return path


def loads(file: Path) -> dict[str, object]:
    with file.open("rb") as handle:
        found: dict[str, object] = tomllib.load(handle)["case"][0]["load"]
        return found


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGKILL], ids=lambda number: number.name)
def test_after_a_signal_the_next_start_offers_the_work(file: Path, number: signal.Signals) -> None:
    with terminal(file) as program:
        program.press("l down down down 5 enter")
        program.until(lambda lines: "load, C1 = 5" in said(lines))
        program.press("7 enter u")
        program.until(lambda lines: "undone" in said(lines))
        journal = file.with_name(f".{file.name}.journal")
        program.until(lambda _: b'"undo"' in journal.read_bytes())  # within a second; a kill may come before
        program.process.send_signal(number)
        status = program.end()
    assert status == (-number if number == signal.SIGKILL else 128 + number)
    if number == signal.SIGTERM:
        told = program.raw.rpartition(b"\x1b[?1049l")[2].decode()
        assert "the work that was not saved is kept in" in told
        assert ".bus.toml.journal" in told.replace("\r\n", "")
    assert loads(file) == {"C1": "50 %", "C2": "off", "C3": "5 W"}
    with terminal(file) as program:
        program.until(lambda lines: "was not saved: 3 changes" in said(lines))
        program.press("d")
        lines = program.until(lambda lines: "in this work" in lines[1] and not lines[3].strip())  # all of it is painted
        assert "rest.load.C1" in lines[2]
        assert "50 %" in lines[2]
        assert not lines[3].strip()
        program.press("enter t")
        program.until(lambda lines: "is back" in said(lines))
        program.settle()
        program.press("U")
        program.until(lambda lines: "done again" in said(lines) and "C2 = 7" in said(lines))
        program.press("w")
        program.until_text("saved bus.toml")
        program.press("q")
        assert program.end() == 0
    assert loads(file) == {"C1": 5, "C2": 7, "C3": "5 W"}
    assert os.listdir(file.parent) == ["bus.toml"]


def test_when_the_terminal_goes_the_program_leaves_and_the_work_stays(file: Path) -> None:
    with terminal(file) as program:
        enter_five(program)
        os.close(program.master)
        program.master = os.open(os.devnull, os.O_RDWR)
        assert program.process.wait(20) == 128 + signal.SIGHUP
    found_five(file)


def enter_five(program: Terminal) -> None:
    program.press("l down down down 5 enter")
    program.until(lambda lines: "load, C1 = 5" in said(lines))


def found_five(file: Path) -> None:
    (found,) = search(file).found
    assert [step.label for step in found.work.done] == ["load case rest, load, C1 = 5"]


class Driven(Terminal):
    """The program started by a script, which may make it fail."""

    def __init__(self, script: str, file: Path, **more: Any) -> None:
        self.screen = pyte.Screen(80, 24)
        self.stream = pyte.ByteStream(self.screen)
        self.sent, self.raw, self.marker = 0, b"", ""
        self.master, slave = pty.openpty()
        self._size(80, 24)
        self.process = subprocess.Popen(
            [sys.executable, "-c", script, str(file)],
            cwd=ROOT,
            env={**os.environ, "TERM": "xterm-256color", "LANG": "C.UTF-8"},
            stdin=slave,
            stdout=slave,
            stderr=slave,
            start_new_session=True,
            **more,
        )
        os.close(slave)

    def __enter__(self) -> Driven:
        return self

    def __exit__(self, *_: object) -> None:
        self.process.kill()
        self.process.wait()
        os.close(self.master)


RUN = "from budget.__main__ import main; main()"


def test_a_terminal_that_goes_without_a_word_is_noticed(file: Path) -> None:
    """It is not the controlling terminal of its session, so that no signal tells that it was closed."""
    with Driven(RUN, file) as program:
        program.until(lambda lines: "FAIL" in lines[0])
        enter_five(program)
        os.close(program.master)
        program.master = os.open(os.devnull, os.O_RDWR)
        assert program.process.wait(20) == 128 + signal.SIGHUP
    found_five(file)


def test_a_stalled_line_does_not_keep_a_signal_from_ending_it(file: Path) -> None:
    """Nobody reads what it sends; the event loop stands still at last, the journal does not."""
    with terminal(file) as program:
        enter_five(program)
        os.set_blocking(program.master, False)
        keys = b"\x1b[6~k\x1b[5~l" * 2000
        while keys and select.select([], [program.master], [], 0.5)[1]:
            keys = keys[os.write(program.master, keys[:512]) :]
        program.process.send_signal(signal.SIGTERM)
        assert program.process.wait(20) == 128 + signal.SIGTERM
    found_five(file)


def test_an_unexpected_error_is_one_sentence_and_the_work_is_kept(file: Path, state_of_the_tests: Path) -> None:
    script = (
        "from budget.ui.app import BudgetApp\n"
        "def fail(self, *_):\n"
        "    raise ZeroDivisionError('made for the test')\n"
        "BudgetApp.on_later = fail\n"
        "BudgetApp.late = lambda self, _: self.later(print) if self.desk.session.done else None\n" + RUN
    )
    with Driven(script, file) as program:
        program.until(lambda lines: "FAIL" in lines[0])
        program.press("l down down down 5 enter")
        assert program.end() == 1
        told = program.raw.rpartition(b"\x1b[?1049l")[2].decode().replace("\r\n", "\n")
    assert "Traceback" not in told
    assert "made for the test" in told
    lines = [line[line.index("budget: ") :] for line in told.split("\n") if "budget: " in line]
    assert lines[0].startswith("budget: the sheet was ended by a fault of this program: see ")
    assert "budget.log" in lines[0]
    assert lines[1].startswith("budget: the work that was not saved is kept in ")
    assert "in fail" in (state_of_the_tests / "budget" / "budget.log").read_text()
    found_five(file)


# -- the question, on a desk without a screen


def left_by(path: Path, keys: str, *texts: str) -> None:
    """What a session leaves that was cut off after these keys."""
    desk = Desk(open_file(path), ascii_only=True)
    keeper = Keeper(desk)
    keeper.begin()
    press(desk, keys)
    for text in texts:
        typed(desk, text)
        press(desk, "enter")
    assert keeper.journal.flush(20)
    keeper.end(clean=False)


def started(path: Path) -> tuple[Desk, Keeper]:
    desk = Desk(open_file(path), ascii_only=True)
    keeper = Keeper(desk)
    keeper.begin()
    return desk, keeper


def shown(desk: Desk, width: int = 80, height: int = 24) -> list[str]:
    return [plain(line) for line in frame(desk, width, height)]


def message(desk: Desk, width: int = 80) -> str:
    return said(shown(desk, width))


def said(lines: list[str]) -> str:
    """The message, over as many lines as it takes."""
    return " ".join(line.strip() for line in lines[-4:-1])


def test_the_cursor_is_where_it_was(file: Path) -> None:
    left_by(file, "down down f down", "new name")
    desk, keeper = started(file)
    assert isinstance(desk.mode, Ask)
    press(desk, "t")
    assert desk.view_name == "fields"
    assert desk.subject == ("converter", 0)
    assert desk.spot().key == ("converter", 0, "name")
    assert "is back" in desk.message
    press(desk, "u")
    assert doc.get(desk.session.document, ("converter", 0, "name")) == "first"
    keeper.end(clean=True)
    assert os.listdir(file.parent) == ["bus.toml"]


def test_nothing_is_lost_by_one_key(file: Path) -> None:
    left_by(file, "l down down down", "5", "7")
    desk, keeper = started(file)
    assert "was not saved: 2 changes (last: load case rest, load, C2 = 7)" in message(desk)
    assert " ".join(shown(desk)[-1].split()) == "t take it back d what differs x discard it Esc go back"
    press(desk, "q 5 enter escape")  # none of them is an answer, Esc puts it off
    assert desk.mode is None
    assert "waits; I shows it again" in message(desk)
    press(desk, "I enter x")
    assert "Discard 2 changes" in message(desk)
    press(desk, "x x d escape")
    keeper.end(clean=True)
    desk, keeper = started(file)  # it was put off, so it is asked again
    press(desk, "x y")
    assert "I brings it back" in message(desk)
    press(desk, "I")
    assert "rest.load.C1" in "\n".join(shown(desk))
    press(desk, "enter t")
    assert [step.label for step in desk.session.done][-1] == "load case rest, load, C2 = 7"
    keeper.end(clean=False)
    desk, keeper = started(file)
    press(desk, "x y")
    keeper.end(clean=True)  # discarded in this session: kept until the next is left
    assert len(recover.aside(file)) == 1
    desk, keeper = started(file)
    assert desk.mode is None
    keeper.end(clean=True)
    assert os.listdir(file.parent) == ["bus.toml"]


def test_work_taken_back_late_is_one_step_beside_what_was_done_meanwhile(file: Path) -> None:
    left_by(file, "l down down down", "5")
    desk, keeper = started(file)
    press(desk, "escape l down down down down")
    typed(desk, "9")
    press(desk, "enter I enter t")
    case = ("case", 0, "load")
    assert doc.get(desk.session.document, case) == {"C1": 5, "C2": "off", "C3": "5 W"}
    press(desk, "u")
    assert doc.get(desk.session.document, case) == {"C1": "50 %", "C2": 9, "C3": "5 W"}
    keeper.end(clean=True)
    assert sorted(os.listdir(file.parent)) == [".bus.toml.journal-old", "bus.toml"]


def test_several_left_sessions_are_asked_about_one_after_the_other(file: Path) -> None:
    left_by(file, "l down down down", "5")
    desk, keeper = started(file)
    press(desk, "escape l down down down")
    typed(desk, "6")
    press(desk, "enter")
    keeper.end(clean=False)
    desk, keeper = started(file)
    assert "C1 = 6" in message(desk)
    press(desk, "t")
    assert isinstance(desk.mode, Ask)
    assert "C1 = 5" in message(desk)
    press(desk, "x y")
    assert desk.mode is None
    assert doc.get(desk.session.document, ("case", 0, "load", "C1")) == 6
    keeper.end(clean=True)


def test_saved_work_comes_back_without_a_question(file: Path) -> None:
    left_by(file, "l down down down", "5")
    desk, keeper = started(file)
    press(desk, "t w")
    keeper.end(clean=False)
    desk, keeper = started(file)
    assert desk.mode is None
    assert not desk.session.dirty
    assert "was cut off; it is saved, its 1 step can be undone" in message(desk)
    press(desk, "u")
    assert doc.get(desk.session.document, ("case", 0, "load", "C1")) == "50 %"
    keeper.end(clean=True)


def test_what_happened_to_the_file_is_said(file: Path) -> None:
    left_by(file, "l down down down", "5")
    text = file.read_text()
    file.write_text(text + "# theirs\n")
    desk, keeper = started(file)
    assert "was not saved: 1 change; the file was changed since" in message(desk)
    press(desk, "t w")
    assert "changed on disk" in message(desk)
    press(desk, "c")
    assert file.read_text() == text + "# theirs\n"
    copies = [name for name in os.listdir(file.parent) if "mine" in name]
    assert len(copies) == 1
    keeper.end(clean=False)
    file.unlink()
    session = recover.without_file(file)
    assert session is not None
    desk = Desk(session, ascii_only=True)
    keeper = Keeper(desk)
    keeper.begin()
    assert "; the file is gone" in message(desk)
    press(desk, "t")
    assert doc.get(desk.session.document, ("case", 0, "load", "C1")) == 5
    keeper.end(clean=False)


def test_a_journal_that_cannot_be_written_is_said_once(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def write(*_: object) -> int:
        raise OSError(28, "No space left on device")

    desk, keeper = started(file)
    real = os.pwrite
    monkeypatch.setattr(os, "pwrite", write)
    press(desk, "down down")
    assert not keeper.tick()
    press(desk, "l down down down 5 enter")
    assert not keeper.journal.flush(20)
    assert keeper.tick()
    assert "the journal cannot be written (no space left on device): save soon" in message(desk)
    desk.say("")
    assert not keeper.tick()
    monkeypatch.setattr(os, "pwrite", real)
    press(desk, "6 enter")
    assert keeper.journal.flush(20)
    assert keeper.tick()
    assert desk.message == "the journal is written again"
    keeper.end(clean=True)


def test_cursor_positions_survive_and_any_other_is_the_top(file: Path) -> None:
    desk = Desk(open_file(file))
    for view in ("sheet", "fields", "loads", "checks"):
        desk.view_name = view
        assert spot_of(unpack(json.loads(json.dumps(pack_spot(desk.spot()))))) == desk.spot()
    top = spot_of(None)
    for strange in ("x", [], ["nowhere", (), (), 0, 0], ["sheet", [], (), 0, 0], ["sheet", (), (), "a", 0]):
        assert spot_of(strange) == top


def test_names_and_texts_of_a_journal_are_shown_without_control_characters(file: Path) -> None:
    left_by(file, "l down down down", "5")
    name = places.candidates(file)[0]
    first, *rest = name.read_bytes().splitlines(keepends=True)
    head = lines.decode(first)
    record = lines.decode(rest[0])
    assert head is not None
    assert record is not None
    head |= {"user": "an\x1b[31mna", "host": "la\x07b"}
    record["label"] = "evil\x1b]0;title\x07"
    name.write_bytes(lines.encode(head) + lines.encode(record))
    desk, keeper = started(file)
    question = message(desk, 160)
    assert "by an?[31mna on la?b was not saved: 1 change (last: evil?]0;title?)" in question
    press(desk, "d")
    assert all(line.isprintable() for line in shown(desk))
    keeper.end(clean=False)
