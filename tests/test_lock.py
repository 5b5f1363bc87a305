"""Two sessions on one project: who has it, who gives way, and that no dead one blocks it."""

from __future__ import annotations

import errno
import json
import os
import re
import signal
import stat
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budget import trials
from budget.keeping import lock, places
from budget.keeping.lock import Holder, Lock, take
from budget.project.document import put
from budget.project.problems import ProjectError
from budget.session import ReadOnlyError, Session, open_demo, open_file
from budget.ui import sharing
from budget.ui.desk import Ask, Desk
from budget.ui.recovery import Keeper
from tests.screen.driving import EMPTY, press, shown, typed

NAME = ("bus", "name")


@pytest.fixture(autouse=True)
def state(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A state folder of its own, so that nothing is left for the next test."""
    folder = tmp_path / "state"
    monkeypatch.setenv("XDG_STATE_HOME", str(folder))
    return folder / "budget"


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "one" / "bus.toml"
    path.parent.mkdir()
    path.write_text(EMPTY, encoding="utf-8")
    return path


@pytest.fixture
def locks() -> Iterator[Callable[[Path], Lock | Holder]]:
    """Takes locks, and lets all of them go at the end."""
    taken: list[Lock] = []

    def get(path: Path, before: Holder | None = None) -> Lock | Holder:
        found = take(path, before)
        if isinstance(found, Lock):
            taken.append(found)
        return found

    yield get
    for one in taken:
        one.release()


Take = Callable[..., Lock | Holder]


def files(folder: Path) -> set[str]:
    return set(os.listdir(folder)) if folder.is_dir() else set()


def beside(file: Path) -> Path:
    return file.with_name(f".{file.name}.lock")


def holder_line(**more: Any) -> str:
    told = {"host": "elsewhere", "user": "mia", "pid": 4242, "born": "", "locked": False, "since": 1e9}
    return json.dumps({**told, **more}) + "\n"


def no_flock(monkeypatch: pytest.MonkeyPatch, number: int = errno.ENOLCK) -> None:
    def refuse(*_: Any) -> None:
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(places.fcntl, "flock", refuse)


# -- the lock itself


def test_the_second_is_told_who_has_it(file: Path, locks: Take) -> None:
    first = locks(file)
    assert isinstance(first, Lock)
    assert not first.trouble
    assert first.name == beside(file)
    second = locks(file)
    assert isinstance(second, Holder)
    assert second.owner is not None
    assert (second.owner.pid, second.owner.host) == (os.getpid(), places.host_name())
    told = second.told()
    assert places.me().user in told
    assert f"process {os.getpid()}" in told
    assert re.search(r" has it open since \d\d:\d\d$", told)
    assert told.isprintable()


def test_a_lock_that_is_let_go_leaves_nothing_and_can_be_taken(file: Path, locks: Take) -> None:
    for _ in range(3):
        one = locks(file)
        assert isinstance(one, Lock)
        one.release()
        one.release()
        assert files(file.parent) == {"bus.toml"}


def test_the_lock_is_on_the_real_file(file: Path, tmp_path: Path, locks: Take) -> None:
    link = tmp_path / "link.toml"
    link.symlink_to(file)
    assert isinstance(locks(link), Lock)
    assert isinstance(locks(file), Holder)
    assert beside(file).exists()
    assert files(tmp_path) >= {"link.toml", "one"}


def test_it_may_be_read_by_whoever_may_read_the_project(file: Path, locks: Take) -> None:
    for mode in (0o664, 0o600):
        file.chmod(mode)
        one = locks(file)
        assert stat.S_IMODE(beside(file).stat().st_mode) == mode
        assert isinstance(one, Lock)
        one.release()


def test_a_killed_process_blocks_nothing(file: Path, locks: Take) -> None:
    code = (
        "import sys, signal; from pathlib import Path; from budget.keeping.lock import take\n"
        "held = take(Path(sys.argv[1])); print(type(held).__name__, flush=True); signal.pause()"
    )
    child = subprocess.Popen([sys.executable, "-c", code, str(file)], stdout=subprocess.PIPE, text=True)
    try:
        assert child.stdout is not None
        assert child.stdout.readline() == "Lock\n"
        found = locks(file)
        assert isinstance(found, Holder)
        assert found.owner is not None
        assert found.owner.pid == child.pid
    finally:
        child.send_signal(signal.SIGKILL)
        child.wait()
    assert beside(file).exists()
    assert isinstance(locks(file), Lock)


def test_only_one_of_many_at_once_gets_it(file: Path) -> None:
    """Also where a dead one left its file."""
    for left in (False, True):
        if left:
            beside(file).write_text(holder_line(host=places.host_name(), pid=2**22 + 1, locked=True))
        found: list[Lock | Holder] = []
        start = threading.Barrier(8)

        def go(start: threading.Barrier = start, found: list[Lock | Holder] = found) -> None:
            start.wait()
            found.append(take(file))

        threads = [threading.Thread(target=go) for _ in range(8)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        held = [one for one in found if isinstance(one, Lock)]
        assert len([one for one in held if one.check() is None and one.name == beside(file)]) == 1
        for one in held:
            one.release()
        assert files(file.parent) == {"bus.toml"}


@given(st.one_of(st.binary(max_size=200), st.sampled_from([b"{}", b"[]", b"null", b'{"host": 5}', b"[" * 4000])))
def test_anything_may_stand_in_a_lock_file(tmp_path_factory: pytest.TempPathFactory, content: bytes) -> None:
    """A file that names nobody and that nobody has locked holds nothing back."""
    file = tmp_path_factory.mktemp("any") / "bus.toml"
    file.write_text(EMPTY)
    beside(file).write_bytes(content)
    one = take(file)
    assert isinstance(one, Lock)
    one.release()


@given(
    st.dictionaries(
        st.sampled_from(["host", "user", "pid", "born", "locked", "since"]),
        st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=40)),
    )
)
def test_who_has_it_is_told_without_control_characters(more: dict[str, Any]) -> None:
    owner, since = lock._read(holder_line(**more).encode())
    told = Holder(owner, since, (0, 0), 0.0).told()
    assert told.isprintable()
    assert told.endswith("has it open") or " since " in told
    assert len(told) < 130


@pytest.mark.parametrize("what", ["folder", "pipe", "link"])
def test_what_is_no_lock_file_is_left_alone_and_said(file: Path, locks: Take, what: str, state: Path) -> None:
    place = beside(file)
    {"folder": place.mkdir, "pipe": lambda: os.mkfifo(place), "link": lambda: place.symlink_to(file)}[what]()
    one = locks(file)
    assert isinstance(one, Lock)
    assert one.name is not None
    assert one.name.parent == state
    assert "no lock beside the file" in one.trouble
    assert os.path.lexists(place)
    assert file.read_text() == EMPTY
    assert isinstance(locks(file), Holder)  # at least this user's own sessions see each other


@pytest.mark.parametrize("number", [errno.EACCES, errno.EROFS, errno.ENOSPC])
def test_where_nothing_can_be_written_the_state_folder_serves(
    file: Path, locks: Take, state: Path, number: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    make = lock.tempfile.mkstemp

    def refuse(**options: Any) -> Any:
        if options["dir"] == file.parent:
            raise OSError(number, os.strerror(number))
        return make(**options)

    monkeypatch.setattr(lock.tempfile, "mkstemp", refuse)
    one = locks(file)
    assert isinstance(one, Lock)
    assert one.name is not None
    assert one.name.parent == state
    assert bool(one.trouble) == (number == errno.ENOSPC)
    assert isinstance(locks(file), Holder)
    assert files(file.parent) == {"bus.toml"}


def test_a_reader_sees_the_lock_of_one_who_may_write(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    assert isinstance(locks(file), Lock)

    def refuse(**_: Any) -> Any:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(lock.tempfile, "mkstemp", refuse)
    assert isinstance(locks(file), Holder)


def test_a_lock_that_fails_is_a_warning(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(**_: Any) -> Any:
        raise OSError(errno.EIO, "Input/output error")

    monkeypatch.setattr(lock.tempfile, "mkstemp", refuse)
    one = locks(file)
    assert isinstance(one, Lock)
    assert one.name is None
    assert "input/output error" in one.trouble
    assert one.check() is None
    desk = Desk(open_file(file))
    sharing.begin(desk, Keeper(desk))
    assert "no lock can be made" in desk.message
    press(desk, "Enter")
    assert not desk.session.read_only


def test_no_hard_links(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: Any, **__: Any) -> None:
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(lock.os, "link", refuse)
    one = locks(file)
    assert isinstance(one, Lock)
    assert isinstance(locks(file), Holder)
    one.release()
    assert files(file.parent) == {"bus.toml"}


# -- where the kernel's locks do not work


@pytest.mark.parametrize("number", [errno.ENOLCK, errno.EOPNOTSUPP, errno.ENOSYS, errno.EBADF])
def test_without_locks_a_living_process_of_this_machine_holds_it(
    file: Path, locks: Take, number: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    no_flock(monkeypatch, number)
    one = locks(file)
    assert isinstance(one, Lock)
    assert "locks do not work" in one.trouble
    assert isinstance(locks(file), Holder)
    one.release()
    assert isinstance(locks(file), Lock)


def test_without_locks_a_dead_process_does_not(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    no_flock(monkeypatch)
    with subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE) as child:
        born = places.born(child.pid)
        here = {"host": places.host_name(), "pid": child.pid, "born": born}
        beside(file).write_text(holder_line(**here))
        assert isinstance(locks(file), Holder)
        child.communicate(b"\n")
    one = locks(file)
    assert isinstance(one, Lock)
    one.release()
    # Its number may have gone to another process since: that one is not the holder.
    boot, _, start = places.born(os.getpid()).partition("-")
    beside(file).write_text(holder_line(host=places.host_name(), pid=os.getpid(), born=f"{boot}-{int(start) - 1}"))
    assert isinstance(locks(file), Lock)


@pytest.mark.parametrize("works", [True, False])
@pytest.mark.parametrize(("silent", "held"), [(0, True), (60, True), (119, True), (121, False), (1e6, False)])
def test_another_machine_holds_it_as_long_as_it_is_heard_of(
    file: Path, locks: Take, works: bool, silent: float, held: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Also where the lock looks free: a network folder may keep locks from other machines."""
    if not works:
        no_flock(monkeypatch)
    beside(file).write_text(holder_line(locked=works))
    then = time.time() - silent
    os.utime(beside(file), (then, then))
    found = locks(file)
    assert isinstance(found, Holder) == held
    if isinstance(found, Holder):
        assert "mia on elsewhere has it open since 2001" in found.told()


def test_one_that_is_never_touched_is_dead_whatever_the_clocks_say(
    file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch
) -> None:
    beside(file).write_text(holder_line())
    os.utime(beside(file), (time.time() + 1e6,) * 2)  # the server's clock was set back since
    first = locks(file)
    assert isinstance(first, Holder)
    second = locks(file, first)
    assert isinstance(second, Holder)
    assert second.noticed == first.noticed
    later = time.monotonic() + lock.STALE
    monkeypatch.setattr(lock.time, "monotonic", lambda: later)
    os.utime(beside(file), (time.time() + 2e6,) * 2)  # touched: its holder lives
    assert isinstance(locks(file, second), Holder)
    os.utime(beside(file), (time.time() + 1e6,) * 2)
    again = replace(second, stamp=(second.stamp[0], beside(file).stat().st_mtime_ns))
    assert isinstance(locks(file, again), Lock)


@pytest.mark.parametrize("works", [True, False])
@pytest.mark.parametrize("jump", [-1e7, -200, 200, 1e7])
def test_a_jump_of_the_clock_ends_no_lock_of_this_machine(
    file: Path, locks: Take, works: bool, jump: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    if not works:
        no_flock(monkeypatch)
    one = locks(file)
    assert isinstance(one, Lock)
    real = time.time
    monkeypatch.setattr(lock.time, "time", lambda: real() + jump)
    os.utime(beside(file), (real() - jump,) * 2)
    assert isinstance(locks(file), Holder)
    assert one.check() is None


# -- while it is held


def test_it_is_touched_and_made_anew_where_it_was_removed(file: Path, locks: Take) -> None:
    one = locks(file)
    assert isinstance(one, Lock)
    os.utime(beside(file), (0, 0))
    assert one.check() is None
    assert beside(file).stat().st_mtime > 1e9
    beside(file).unlink()
    assert one.check() is None
    assert beside(file).exists()
    assert isinstance(locks(file), Holder)
    beside(file).write_bytes(b"")  # emptied: the kernel still knows
    assert isinstance(found := locks(file), Holder)
    assert found.told() == "another session has it open"


def test_a_thread_keeps_it_alive(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    touched = threading.Event()
    real = os.utime

    def touch(*arguments: Any) -> None:
        real(*arguments)
        touched.set()

    monkeypatch.setattr(lock.os, "utime", touch)
    monkeypatch.setattr(lock, "BEAT", 0.01)
    assert isinstance(locks(file), Lock)
    assert touched.wait(20)


def test_one_that_was_cut_off_too_long_gives_way(file: Path, locks: Take, monkeypatch: pytest.MonkeyPatch) -> None:
    """A machine that slept wakes up, and its lock is another's by now."""
    no_flock(monkeypatch)
    first = open_file(file)
    assert first.claim()
    assert first.lock is not None
    os.utime(beside(file), (0, 0))
    monkeypatch.setattr(places, "host_name", lambda: "another")
    second = open_file(file)
    assert second.claim()
    monkeypatch.undo()
    assert not first.lost()
    first.document = put(first.document, NAME, "mine")
    with pytest.raises(ReadOnlyError, match="on another has it open"):
        first.save()
    assert first.read_only
    assert first.lock is None
    assert file.read_text() == EMPTY
    second.release()
    first.save()
    assert "mine" in file.read_text()
    first.release()


# -- the session


def second(file: Path) -> tuple[Session, Session]:
    one, two = open_file(file), open_file(file)
    assert one.claim()
    assert not two.claim()
    return one, two


def change(session: Session, name: str) -> None:
    session.apply("x", put(session.document, NAME, name), None)


def test_read_only_saves_nothing_until_the_other_has_left(file: Path) -> None:
    one, two = second(file)
    change(two, "two")
    with pytest.raises(ReadOnlyError):
        two.save()
    with pytest.raises(ReadOnlyError):
        two.save(over=True)
    with pytest.raises(ReadOnlyError):
        two.save_as(file, over=True)
    assert file.read_text() == EMPTY
    one.release()
    two.save()
    assert not two.read_only
    assert "two" in file.read_text()
    assert not one.claim()
    two.release()
    assert files(file.parent) == {"bus.toml"}


def test_read_only_trials_live_in_the_session_and_are_joined_later(file: Path) -> None:
    one, two = second(file)
    change(one, "one")
    one.hold_as("a")
    one.hold_as("b")
    change(two, "two")
    assert "open read-only" in two.hold_as("a")
    assert "open read-only" in two.hold()
    assert [t.name for t in trials.read(file).trials] == ["a", "b"]
    one.release()
    two.save()
    now = trials.read(file)
    assert [(t.name, t.document.data["bus"]["name"]) for t in now.trials] == [("a", "two"), ("b", "one")]
    kept = next(file.parent.glob("*.unread-1.toml"))  # the other's "a" has no place beside ours
    assert "one" in kept.read_text()
    two.release()


def test_save_as_takes_the_lock_along(file: Path) -> None:
    one, two = second(file)
    other = file.with_name("other.toml")
    two.save_as(other)
    assert not two.read_only
    assert files(file.parent) == {"bus.toml", ".bus.toml.lock", "other.toml", ".other.toml.lock"}
    change(two, "two")
    two.save()
    with pytest.raises(ProjectError, match=r"other\.toml.*has it open"):
        one.save_as(other, over=True)
    assert one.path == file
    assert not one.read_only
    one.save_as(file.with_name("third.toml"))
    assert files(file.parent) >= {".third.toml.lock", ".other.toml.lock"}
    assert ".bus.toml.lock" not in files(file.parent)
    one.release()
    two.release()
    assert files(file.parent) == {"bus.toml", "other.toml", "third.toml"}


def test_a_save_as_that_fails_keeps_the_old_lock(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    one = open_file(file)
    assert one.claim()
    monkeypatch.setattr("budget.project.store.os.replace", lambda *_: (_ for _ in ()).throw(OSError(28, "full")))
    with pytest.raises(ProjectError):
        one.save_as(file.with_name("other.toml"))
    assert files(file.parent) == {"bus.toml", ".bus.toml.lock"}
    assert one.path == file
    one.release()


def test_a_project_without_a_file_takes_a_lock_with_its_first_save(file: Path) -> None:
    session = open_demo()
    assert session.claim()
    session.save_as(file.with_name("demo.toml"))
    assert ".demo.toml.lock" in files(file.parent)
    assert not open_file(file.with_name("demo.toml")).claim()
    session.release()


def test_who_only_reads_takes_no_lock(file: Path, capsys: pytest.CaptureFixture[str]) -> None:
    from budget.cli import run

    one = open_file(file)
    assert one.claim()
    one.release()
    before = file.parent.stat().st_mtime_ns
    run(["check", str(file)])
    open_file(file)
    assert file.parent.stat().st_mtime_ns == before


# -- at the keys


def begun(file: Path) -> tuple[Desk, list[int]]:
    desk, left = Desk(open_file(file), ascii_only=True), []
    desk.leave = lambda: left.append(1)
    sharing.begin(desk, Keeper(desk))
    return desk, left


def test_the_question_names_the_holder_and_fits_the_screen(file: Path) -> None:
    first, _ = begun(file)
    assert first.mode is None
    desk, _ = begun(file)
    assert isinstance(desk.mode, Ask)
    screen = shown(desk)
    assert f"bus.toml: {places.me().user} on {places.host_name()}" in screen
    assert f"(process {os.getpid()})" in " ".join(screen.split())
    for key, word in (("r", "read-only"), ("c", "copy"), ("q", "quit")):
        assert f"{key} " in screen.splitlines()[-1]
        assert word in screen.splitlines()[-1]
    assert "read-only" in screen.splitlines()[0]
    first.session.release()


@pytest.mark.parametrize("key", ["r", "escape"])
def test_read_only_at_the_keys(file: Path, key: str) -> None:
    first, _ = begun(file)
    desk, left = begun(file)
    press(desk, key)
    assert desk.mode is None
    assert "read-only" in desk.message
    press(desk, "enter")
    typed(desk, "tried")
    press(desk, "enter")
    assert desk.session.document.data["bus"]["name"] == "tried"
    press(desk, "w")
    assert isinstance(desk.mode, Ask)
    assert set(desk.mode.options) == {"W"}
    assert "is read-only here" in shown(desk)
    file.write_text(EMPTY + 'name = "theirs"\n', encoding="utf-8")
    press(desk, "escape w")
    assert set(desk.mode.options) == {"W", "r"}
    press(desk, "W ctrl+u")
    typed(desk, str(file.with_name("mine.toml")))
    press(desk, "enter")
    assert desk.session.name == "mine.toml"
    assert not desk.session.read_only
    assert "read-only" not in shown(desk).splitlines()[0]
    assert "tried" in file.with_name("mine.toml").read_text()
    assert "theirs" in file.read_text()
    press(desk, "q")
    assert left == [1]
    for one in (first, desk):
        one.session.release()


def test_reading_anew_what_the_other_has_saved(file: Path) -> None:
    first, _ = begun(file)
    desk, _ = begun(file)
    press(desk, "r")
    press(first, "enter")
    typed(first, "theirs")
    press(first, "enter w")
    press(desk, "w r")
    assert desk.session.document.data["bus"]["name"] == "theirs"
    assert not desk.session.dirty
    assert desk.session.read_only
    first.session.release()
    press(desk, "enter")
    typed(desk, " and mine")
    press(desk, "enter w")
    assert desk.mode is None
    assert "theirs and mine" in file.read_text()
    desk.session.release()


def test_quitting_read_only_with_trials_asks_where_to_save(file: Path) -> None:
    first, _ = begun(file)
    desk, left = begun(file)
    press(desk, "r enter")
    typed(desk, "x")
    press(desk, "enter q s W ctrl+u")
    typed(desk, str(file.with_name("kept.toml")))
    press(desk, "enter")
    assert left == [1]
    assert "x" in file.with_name("kept.toml").read_text()
    for one in (first, desk):
        one.session.release()


def test_a_copy_beside(file: Path) -> None:
    first, _ = begun(file)
    desk, _ = begun(file)
    press(desk, "c")
    assert desk.session.name == "bus.copy-1.toml"
    assert not desk.session.read_only
    assert "copy" in desk.message
    press(desk, "enter")
    typed(desk, "x")
    press(desk, "enter w")
    assert "x" in file.with_name("bus.copy-1.toml").read_text()
    assert file.read_text() == EMPTY
    third, _ = begun(file)
    press(third, "c")
    assert third.session.name == "bus.copy-2.toml"
    for one in (first, desk, third):
        one.session.release()


def test_a_copy_in_the_state_folder_where_the_folder_cannot_be_written_to(
    file: Path, state: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from budget.project import store

    first, _ = begun(file)
    desk, _ = begun(file)
    make = store.tempfile.mkstemp

    def refuse(*_: Any, **options: Any) -> Any:
        if Path(options["dir"]) == file.parent or refused_everywhere:
            raise PermissionError(errno.EACCES, "Permission denied")
        return make(**options)

    monkeypatch.setattr(store.tempfile, "mkstemp", refuse)
    refused_everywhere = True
    press(desk, "c")
    assert "permission denied" in desk.message
    assert desk.session.read_only
    refused_everywhere = False
    other, _ = begun(file)
    press(other, "c")
    assert other.session.path == state / "bus.copy-1.toml"
    assert "this is a copy" in other.message
    for one in (first, desk, other):
        one.session.release()


def test_quitting_at_the_question_leaves_everything_as_it_was(file: Path) -> None:
    first, _ = begun(file)
    before = files(file.parent)
    desk, left = begun(file)
    press(desk, "q")
    assert left == [1]
    assert files(file.parent) == before
    first.session.release()


def test_a_folder_that_cannot_be_written_to_is_said_at_the_start(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sharing.os, "access", lambda *_: False)
    desk, _ = begun(file)
    assert "cannot be written to: W saves it elsewhere" in desk.message
    desk.session.release()
