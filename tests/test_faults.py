"""What may go wrong around the program and inside it: each is told in a sentence, and no work is lost by it."""

from __future__ import annotations

import errno
import os
import shutil
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from textual.events import Key
from textual.pilot import Pilot

from budget import trials
from budget.keeping import log
from budget.project import store
from budget.project.problems import ProjectError
from budget.session import open_file
from budget.trials import REFERENCE
from budget.ui import app as app_module
from budget.ui import paint
from budget.ui.app import BudgetApp, Calculated
from budget.ui.desk import LONGEST, VIEWS, Ask, Desk, Edit, Pick
from budget.ui.paint import frame, plain
from tests.screen.driving import SMALL, press, screen, session_of, shown, small, typed
from tests.screen.test_app import lines, pilot, told, until

ROOT = Path(__file__).parents[1]
FAULT = "made for the test"


@pytest.fixture(autouse=True)
def state(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    return tmp_path / "state" / "budget"


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "one" / "bus.toml"
    path.parent.mkdir()
    path.write_text(SMALL, encoding="utf-8")
    return path


def edited(file: Path, name: str = "mine") -> Desk:
    """A desk on a file, with one edit that is not saved."""
    desk = Desk(open_file(file), ascii_only=True)
    press(desk, "enter ctrl+u")
    typed(desk, name)
    press(desk, "enter")
    assert desk.session.dirty
    return desk


def name_of(desk: Desk) -> object:
    return desk.session.document.data["bus"].get("name")


def said(desk: Desk) -> str:
    """The message as it can be read on a small screen."""
    return " ".join(" ".join(screen(desk)[-4:-1]).split())


def broken(*_: Any, **__: Any) -> Any:
    raise ZeroDivisionError(FAULT)


# -- saving


@pytest.mark.parametrize("call", ["write", "fsync", "replace", "mkstemp"])
@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT, errno.EACCES, errno.EROFS, errno.EIO])
def test_a_save_that_the_system_refuses(file: Path, call: str, number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    desk = edited(file)

    def refuse(*_: Any, **__: Any) -> Any:
        raise OSError(number, os.strerror(number))

    if call == "write":
        opened = os.fdopen

        class Full:
            def __init__(self, handle: Any) -> None:
                self.handle = handle

            def __enter__(self) -> Any:
                return self

            def __exit__(self, *_: Any) -> None:
                self.handle.close()

            write = staticmethod(refuse)

        monkeypatch.setattr(store.os, "fdopen", lambda *arguments: Full(opened(*arguments)))
    elif call == "mkstemp":
        monkeypatch.setattr(store.tempfile, "mkstemp", refuse)
    else:
        monkeypatch.setattr(store.os, call, refuse)
    press(desk, "w")
    assert os.strerror(number).lower() in said(desk)
    assert "Nothing was changed. W saves under another name." in said(desk)
    assert " * " in screen(desk)[0]
    assert file.read_text() == SMALL
    assert os.listdir(file.parent) == ["bus.toml"]
    left: list[int] = []
    desk.leave = lambda: left.append(1)
    press(desk, "q s")
    assert not left
    assert os.strerror(number).lower() in said(desk)
    monkeypatch.undo()
    press(desk, "w")
    assert desk.message == "saved bus.toml"
    assert "mine" in file.read_text()


# Run in a process of its own: a limit, a mount or another user there is of no matter to the tests.
_CHILD = """\
import os, sys
from pathlib import Path
sys.path.insert(0, {root!r})
from budget.keeping.journal import Journal
from budget.session import open_file
from budget.ui import recovery, sharing
from budget.ui.desk import Desk
from budget.ui.recovery import Keeper
from tests.screen.driving import press, screen, typed
file = Path(sys.argv[1])
{before}
desk = Desk(open_file(file), ascii_only=True)
keeper = Keeper(desk)
sharing.begin(desk, keeper)
print("START", desk.message)
press(desk, "enter ctrl+u")
typed(desk, "mine" * 400)
press(desk, "enter")
keeper.journal.flush(10)
press(desk, "w")
print("SAVED", desk.message)
print("STAR", " * " in screen(desk)[0])
{after}
keeper.end(clean=False)
desk.session.release()
"""


def child(file: Path, before: str, after: str = "", wrap: list[str] | None = None) -> dict[str, str]:
    code = _CHILD.format(root=str(ROOT), before=before, after=after)
    run = subprocess.run(
        [*(wrap or []), sys.executable, "-c", code, str(file)],
        capture_output=True,
        text=True,
        cwd=ROOT,
        check=False,
        timeout=120,
    )
    assert run.returncode == 0, run.stdout + run.stderr
    return dict(line.partition(" ")[::2] for line in run.stdout.splitlines())


def test_a_file_that_may_not_grow(file: Path) -> None:
    """The limit of a process on the size of files, which cuts a write short as a full disk does."""
    before = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (1000, resource.RLIM_INFINITY))"
    after = (
        "resource.setrlimit(resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY,) * 2)\n"
        "press(desk, 'w'); print('AGAIN', desk.message)"
    )
    found = child(file, before, after)
    assert "could not be written: file too large. Nothing was changed." in found["SAVED"]
    assert found["STAR"] == "True"
    assert found["AGAIN"] == "saved bus.toml"
    assert "mine" * 400 in file.read_text()
    assert [name for name in os.listdir(file.parent) if name.endswith(".new")] == []


def _can_mount() -> bool:
    tool = shutil.which("unshare")
    if tool is None:
        return False
    probe = [tool, "-rm", "sh", "-c", "mount -t tmpfs -o size=64k none /mnt"]
    return subprocess.run(probe, capture_output=True, check=False).returncode == 0


@pytest.mark.skipif(not _can_mount(), reason="no file system may be mounted here")
def test_a_disk_that_is_really_full(file: Path) -> None:
    """A file system of 64 kB: journal, lock and file have no room; then there is room again."""
    before = (
        "import shutil\n"
        "text = file.read_text()\n"
        "filler = file.with_name('filler')\n"
        "def fill():\n"
        "    out = os.open(filler, os.O_WRONLY | os.O_CREAT)\n"
        "    try:\n"
        "        while True: os.write(out, bytes(512))\n"
        "    except OSError: os.close(out)\n"
        "fill()"
    )
    after = (
        "print('WHOLE', file.read_text() == text)\n"
        "print('LEFT', sorted(name for name in os.listdir(file.parent) if name.endswith('.new')))\n"
        "filler.unlink(); press(desk, 'w'); print('AGAIN', desk.message)\n"
        "print('HOLDS', 'mine' * 400 in file.read_text())"
    )
    copy = file.parent.with_name("copy.toml")
    shutil.copy(file, copy)
    mount = f'mount -t tmpfs -o size=64k none {file.parent} && cp {copy} {file} && exec "$@"'
    found = child(file, before, after, ["unshare", "-rm", "sh", "-c", mount, "sh"])
    assert "no space left on device. Nothing was changed." in found["SAVED"]
    assert found["STAR"] == found["WHOLE"] == found["HOLDS"] == "True"
    assert found["LEFT"] == "[]"
    assert found["AGAIN"].startswith("saved bus.toml")


def test_a_folder_without_the_right_to_write(file: Path, tmp_path: Path) -> None:
    """With the rights of an ordinary user; the tests may be run by one who may do everything."""
    open_to_all = tmp_path / "out"
    open_to_all.mkdir()
    open_to_all.chmod(0o777)
    before = (
        "open_file(file).copy_to(file.with_name('copy.toml'))  # all that is needed is loaded now\n"
        "screen(Desk(open_file(file), ascii_only=True))\n"
        "os.chmod(file.parent, 0o555)\n"
        "if os.getuid() == 0:\n"
        "    os.chdir('/'); os.setgroups([]); os.setresgid(65534, 65534, 65534); os.setresuid(65534, 65534, 65534)\n"
    )
    after = (
        "print('JOURNAL', keeper.journal.trouble)\n"
        f"press(desk, 'W ctrl+u'); typed(desk, {str(open_to_all / 'else.toml')!r}); press(desk, 'enter')\n"
        "print('AGAIN', desk.message)"
    )
    reach = tmp_path
    while reach != reach.parent and reach.stat().st_uid == os.getuid():  # another user must come as far as the file
        reach.chmod(reach.stat().st_mode | 0o055)
        reach = reach.parent
    try:
        found = child(file, before, after)
    finally:
        file.parent.chmod(0o755)
    assert "cannot be written to: W saves it elsewhere" in found["START"]
    assert "permission denied. Nothing was changed. W saves under another name." in found["SAVED"]
    assert found["STAR"] == "True"
    assert found["AGAIN"].startswith("saved ")
    assert "mine" * 400 in (open_to_all / "else.toml").read_text()
    assert file.read_text() == SMALL


# -- the file under the program


def _delete(file: Path) -> None:
    file.unlink()


def _delete_folder(file: Path) -> None:
    shutil.rmtree(file.parent)


def _folder(file: Path) -> None:
    file.unlink()
    file.mkdir()


def _pipe(file: Path) -> None:
    file.unlink()
    os.mkfifo(file)


def _round(file: Path) -> None:
    file.unlink()
    file.symlink_to(file.name)


def _rubbish(file: Path) -> None:
    file.write_bytes(b"\xff\x00[[[")


def _huge(file: Path) -> None:
    file.write_bytes(b"# " + b"x" * 3_000_000)


def _theirs(file: Path) -> None:
    file.write_text(SMALL.replace('name = "bench"', 'name = "theirs"'))


WAYS: dict[str, tuple[Callable[[Path], None], str, set[str]]] = {
    "deleted": (_delete, "was removed or renamed by someone else", {"c", "o"}),
    "folder gone": (_delete_folder, "cannot be found: its folder is gone", {"c", "o"}),
    "folder now": (_folder, "is a folder now", {"c", "o"}),
    "pipe now": (_pipe, "is no ordinary file any more", {"c", "o"}),
    "link to itself": (_round, "was removed or renamed by someone else", {"c", "o"}),
    "rubbish": (_rubbish, "was changed on disk by someone else", {"r", "c", "o"}),
    "huge": (_huge, "was changed on disk by someone else", {"r", "c", "o"}),
    "changed": (_theirs, "was changed on disk by someone else", {"r", "c", "o"}),
}


@pytest.mark.parametrize("way", WAYS)
def test_a_file_that_is_replaced_under_the_program(file: Path, way: str, tmp_path: Path) -> None:
    do, words, options = WAYS[way]
    desk = edited(file)
    do(file)
    for key in sorted(options):
        press(desk, "w")
        assert isinstance(desk.mode, Ask)
        assert words in said(desk)
        assert set(desk.mode.options) == options
        press(desk, key)
        assert desk.mode is None
        assert desk.message
        assert "fault of this program" not in desk.message
        if desk.session.done[-1].label == "reload":
            press(desk, "u")
        assert name_of(desk) == "mine"
        if not desk.session.changed_on_disk():
            assert "mine" in file.read_text()
            break
    press(desk, "W ctrl+u")
    typed(desk, str(tmp_path / "else.toml"))
    press(desk, "enter")
    assert "mine" in (tmp_path / "else.toml").read_text()
    assert not desk.session.dirty


def test_what_stood_there_is_never_lost(file: Path) -> None:
    for way, kept in (("changed", "theirs"), ("rubbish", "[[[")):
        desk = edited(file)
        WAYS[way][0](file)
        press(desk, "w o")
        assert "mine" in file.read_text()
        others = list(file.parent.glob("bus.theirs-*.toml"))
        assert kept in others[0].read_bytes().decode(errors="replace")
        others[0].unlink()
        file.write_text(SMALL)


def test_saving_under_its_own_name_overwrites_no_changes_of_others(file: Path) -> None:
    desk = edited(file)
    _theirs(file)
    press(desk, "W enter")
    assert isinstance(desk.mode, Ask)
    assert "was changed on disk" in said(desk)
    assert "theirs" in file.read_text()


def test_the_folder_in_which_the_program_was_started_is_gone(file: Path, tmp_path: Path) -> None:
    before = "import shutil\nos.chdir(file.parent)\nfile = Path(file.name)"
    after = (
        "folder = os.getcwd()\nshutil.rmtree(folder)\n"
        "press(desk, 'enter'); typed(desk, 'x'); press(desk, 'enter')\n"
        "for keys in ('w', 'c', 'w', 'o', 'W enter', 'escape', 'K', 'escape', 'T', 'escape'):\n"
        "    press(desk, keys)\n"
        "    assert 'fault' not in desk.message, desk.message\n"
        "print('GONE', desk.message)\n"
        f"press(desk, 'escape s W ctrl+u'); typed(desk, {str(tmp_path / 'else.toml')!r}); press(desk, 'enter')\n"
        "print('AGAIN', desk.message, desk.mode)"
    )
    found = child(file, before, after)
    assert found["SAVED"] == "saved bus.toml"
    assert found["AGAIN"].startswith("saved ")
    assert "x" in (tmp_path / "else.toml").read_text()


def test_what_the_system_refuses_in_a_command_is_no_fault_of_ours(
    file: Path, state: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    desk = edited(file)

    def refuse(*_: Any) -> Any:
        raise OSError(errno.ESTALE, os.strerror(errno.ESTALE))

    monkeypatch.setattr("budget.ui.actions.os.path.lexists", refuse)
    press(desk, "W ctrl+u")
    typed(desk, str(file.with_name("else.toml")))
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert "the system refused that: stale file handle." in said(desk)
    press(desk, "escape")
    assert name_of(desk) == "mine"
    assert "OSError" in (state / "budget.log").read_text()


@pytest.mark.parametrize("name", ["~nobody-of-this-name/x.toml", "", "/", "a/b/c.toml", "x" * 300])
def test_names_that_cannot_be_saved_to(file: Path, name: str) -> None:
    desk = edited(file)
    press(desk, "W")
    assert isinstance(desk.mode, Edit)
    desk.mode.text = name
    press(desk, "enter")
    assert isinstance(desk.mode, Edit)
    assert desk.mode.error
    assert "fault" not in desk.mode.error
    assert desk.session.path == file


def test_the_message_about_the_file_comes_once_and_follows_its_fate(file: Path) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        for way in ("changed", "deleted"):
            WAYS[way][0](file)
            app.look_at_file()
            assert f"bus.toml {WAYS[way][1]}; w asks what to do" in app.desk.message
            app.desk.say("")
            app.look_at_file()
            assert app.desk.message == ""
        file.write_text(SMALL)
        app.look_at_file()
        assert app.desk.message == ""

    pilot(check, open_file(file))


# -- clocks


@pytest.mark.parametrize(
    "when", [0, 1, time.time() - 1e6, time.time() + 1e6, 4e9], ids=["0", "1", "past", "future", "far"]
)
def test_the_time_of_a_file_decides_nothing(file: Path, when: float) -> None:
    desk = edited(file)
    os.utime(file, (when, when))
    assert not desk.session.changed_on_disk()
    file.write_text(SMALL.replace("28 V", "27 V"))
    os.utime(file, (when + 1, when + 1))
    assert desk.session.changed_on_disk()
    file.write_text(SMALL)
    os.utime(file, (when, when))
    press(desk, "w")
    assert desk.message == "saved bus.toml"
    os.utime(file, (when, when))
    press(desk, "enter")
    typed(desk, "x")
    press(desk, "enter w")
    assert desk.message == "saved bus.toml"


def test_trials_from_the_future_and_of_no_time(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    desk = edited(file)
    monkeypatch.setattr(trials.time, "strftime", lambda *_: "2222-02-22 22:22")
    desk.session.hold_as("later")
    monkeypatch.setattr(trials.time, "strftime", lambda *_: "1970-01-01 00:00")
    desk.session.hold_as("first")
    desk.session.hold()
    again = Desk(open_file(file), ascii_only=True)
    assert [t.name for t in again.session.trials] == ["later", "first"]
    assert again.session.reference is not None
    assert again.session.reference.name == REFERENCE
    press(again, "T")
    assert "22:22" in shown(again)


# -- the size of the screen


@pytest.mark.parametrize("open_", ["", "enter", "m", "q", "space", "W"])
def test_what_is_open_survives_a_tiny_screen(open_: str) -> None:
    desk = small()
    press(desk, "down down D up right")
    if open_:
        press(desk, open_)
    if isinstance(desk.mode, Edit):
        typed(desk, "typed")
        press(desk, "left")
    if isinstance(desk.mode, Pick):
        press(desk, "down")
    before = screen(desk)
    for width, height in ((20, 5), (1, 1), (60, 12), (59, 12), (60, 11), (300, 90), (80, 2), (2, 60), (80, 24)):
        now = frame(desk, width, height)
        assert len(now) == height
        assert all(len(plain(line)) == width for line in now)
        if width < 60 or height < 12:
            text = "".join(plain(line) for line in now)
            assert text.strip()
            assert "needs 60x12"[: max(1, width * height)] in text or width < 11
    assert screen(desk) == before


def test_cursor_and_editor_are_the_same_after_a_small_terminal() -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("down", "down", "enter", "a", "b", "left")
        before = lines(app)
        assert isinstance(app.desk.mode, Edit)
        for size in ((20, 5), (80, 24)):
            await hand.resize_terminal(*size)
            await until(hand, lambda s=size: app.board.size == s)  # type: ignore[misc]
            await hand.pause()
        assert lines(app) == before
        await hand.press("c", "enter")
        assert app.desk.session.document.data["converter"][0]["name"] == "firstacb"

    pilot(check)


# -- keys faster than they can be painted


@pytest.mark.parametrize("breath", [0.0, 1e6])
def test_a_burst_is_painted_as_often_as_there_is_time(breath: float, monkeypatch: pytest.MonkeyPatch) -> None:
    """No key is left out, the last state is always painted, and what else waits has its turn in between."""
    count = 80
    painted: list[int] = []
    taken: list[int] = []
    between: list[int] = []
    monkeypatch.setattr(app_module, "BREATH", breath)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("l")
        real = app.desk.key

        def key(name: str, character: str | None = None) -> None:
            real(name, character)
            taken.append(1)

        monkeypatch.setattr(type(app.desk), "key", lambda _, *arguments: key(*arguments))
        make = app_module.frame

        def frame(*arguments: Any) -> Any:
            painted.append(len(taken))
            return make(*arguments)

        monkeypatch.setattr(app_module, "frame", frame)
        for k in range(count):
            app.board.post_message(Key(*(("down", None) if k % 2 else ("right", None))))
        app.later(lambda: between.append(len(taken)))
        await until(hand, lambda: len(taken) == count and painted[-1:] == [count])
        await hand.pause()
        assert lines(app) == [plain(line) for line in make(app.desk, 80, 24)]

    pilot(check)
    if breath:
        assert len(painted) <= 4
    else:
        assert len(painted) >= count
        assert 0 < between[0] < count


# -- pasting


MEGABYTES = "7" * 3_000_000


def test_megabytes_are_cut_to_what_a_cell_takes() -> None:
    desk = small()
    desk.paste(MEGABYTES)
    assert isinstance(desk.mode, Edit)
    assert desk.mode.text == "7" * LONGEST
    for _ in range(3):
        desk.paste(MEGABYTES)
    assert len(desk.mode.text) == LONGEST
    assert 0 <= desk.mode.caret <= LONGEST
    screen(desk)
    press(desk, "escape")
    assert desk.mode is None


def test_megabytes_in_a_list_a_question_and_a_calculated_cell() -> None:
    desk = small()
    press(desk, "space")
    for _ in range(3):
        desk.paste(MEGABYTES)
    assert isinstance(desk.mode, Pick)
    assert len(desk.mode.query) <= 40
    assert "nothing fits" in shown(desk)
    press(desk, "escape down D q")
    assert isinstance(desk.mode, Ask)
    desk.paste(MEGABYTES + "d")
    assert isinstance(desk.mode, Ask)
    press(desk, "escape s right")
    desk.paste(MEGABYTES)
    assert isinstance(desk.mode, Edit)
    assert desk.mode.refused
    assert desk.mode.text == ""
    desk.paste(MEGABYTES)
    press(desk, "escape")
    assert desk.mode is None
    for text in ("\n" * 3_000_000, " " * 3_000_000, "\x00" * 3_000_000, "\x1b[201~" * 500_000, ""):
        desk.paste(text)
        assert "\x1b" not in shown(desk)
        press(desk, "escape")


@given(st.text(max_size=60), st.sampled_from(["", "enter", "space", "q", "W"]))
def test_any_text_can_be_pasted_anywhere(text: str, open_: str) -> None:
    desk = _pasting
    press(desk, "escape escape s")
    if open_:
        press(desk, open_)
    desk.paste(text)
    for line in screen(desk):
        assert line.isprintable()
    press(desk, "escape escape")
    assert desk.mode is None


_pasting = Desk(session_of(SMALL), ascii_only=True)


# -- faults of our own


def logged(state: Path) -> str:
    return (state / "budget.log").read_text()


def check_told(app: BudgetApp, state: Path, words: str) -> None:
    """One sentence with the place of the log, no traceback on the screen, and the sheet goes on."""
    assert words in app.desk.message
    assert f"see {log.place()} (ZeroDivisionError: {FAULT})" in app.desk.message
    assert "Traceback" not in "\n".join(lines(app))
    assert FAULT in logged(state)
    assert "Traceback" in logged(state)


AMPS, OHMS = ("converter", 1, "output", 0, "current"), ("bus", "resistance")


def go(path: tuple[str | int, ...]) -> Callable[[Desk], None]:
    return lambda desk: desk.go_to(path)


# What starts each of the longer calculations, and what of it fails.
JOBS: dict[str, tuple[list[str | Callable[[Desk], None]], str]] = {
    "how far": ([go(OHMS), "Q"], "budget.study.reach.reach"),
    "sweep": ([go(AMPS), "P enter", go(OHMS), "P enter enter"], "budget.study.sweep.sweep"),
    "search": (["G enter"], "budget.engine.allocate.allocate"),
    "move a clock": (["y M enter enter"], "budget.engine.plan.scan"),
    "what helps the switch-on": (["J H"], "budget.engine.inrush.needed_resistance"),
    "what helps the stability": (["Y H"], "budget.engine.cure.damping_for"),
}


def test_every_job_is_among_those_that_are_made_to_fail() -> None:
    sources = [path.read_text() for path in (ROOT / "budget" / "ui").glob("*.py") if path.name != "app.py"]
    assert sum(text.count(".start_job(") for text in sources) == len(JOBS)


def test_jobs_that_fail(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        desk = app.desk
        await until(hand, lambda: desk.session.complete)
        for steps, where in JOBS.values():
            with monkeypatch.context() as patch:
                patch.setattr(where, broken)
                for step in steps:
                    if callable(step):
                        step(desk)
                    else:
                        press(desk, step)
                await until(hand, lambda: "fault of this program" in desk.message)
                await hand.pause()
            check_told(app, state, " failed, a fault of this program")
            assert desk.job is None
            await hand.press("escape", "s")
        await goes_on(app, hand)

    pilot(check)


async def goes_on(app: BudgetApp, hand: Pilot[int]) -> None:
    """The sheet takes keys, edits and calculates."""
    desk = app.desk
    await hand.press("escape", "escape", "s", "pageup", "home", "enter", "x", "enter")
    assert str(name_of(desk)).endswith("x")
    await until(hand, lambda: desk.session.complete)
    await hand.pause()
    assert lines(app)[2].startswith("bus ")
    assert "no result changed" in told(app)


STAGES = (
    "budget.session.build",
    "budget.engine.evaluate.evaluate_dc",
    "budget.engine.evaluate.carried",
    "budget.engine.evaluate.with_emissions",
    "budget.engine.evaluate.with_stability",
    "budget.engine.evaluate.with_inrush",
)


def test_stages_that_fail(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    errors = [ZeroDivisionError(FAULT), MemoryError(), RecursionError(FAULT)]

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        desk = app.desk
        for stage, error in zip(STAGES, errors * 2, strict=True):
            await until(hand, lambda: desk.session.complete)

            def fail(*_: Any, error: Exception = error, **__: Any) -> Any:
                raise error

            with monkeypatch.context() as patch:
                patch.setattr(stage, fail)
                await hand.press("down", "D")
                await until(hand, lambda: "fault of this program" in desk.message)
                await hand.pause()
                assert desk.message.startswith("the calculation failed (undo the edit), a fault of this program: see ")
                assert type(error).__name__ in desk.message
                assert type(error).__name__ in logged(state)
                assert "the calculation failed (undo the edit), a fault of this program" in told(app)
                assert "! calculation failed" in lines(app)[0]
                assert "Traceback" not in "\n".join(lines(app))
            await hand.press("u")
        await until(hand, lambda: desk.session.complete)
        await goes_on(app, hand)
        assert "failed" not in lines(app)[0]

    pilot(check)


def test_the_results_of_a_trial_that_fail(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(app_module, "asides", broken)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: "fault of this program" in app.desk.message)
        await hand.pause()
        check_told(app, state, "the results of a trial are missing, a fault of this program")
        assert app.desk.session.complete
        assert "calculation failed" not in lines(app)[0]
        await hand.press("down")
        assert lines(app)[2].startswith("bus ")

    pilot(check)


def test_a_thread_that_met_a_fault_takes_the_next_item(state: Path) -> None:
    came = threading.Event()

    def work(item: str) -> None:
        if item == "bad":
            met.set()
            raise ZeroDivisionError(FAULT)
        came.set()

    met = threading.Event()
    box = app_module.Mailbox("test", work)
    box.put("bad")
    assert met.wait(20)
    box.put("good")
    assert came.wait(20)
    assert FAULT in logged(state)


def test_a_part_of_a_view_that_fails(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("budget.ui.plan._meetings", broken)

    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("y")
        await until(hand, lambda: "fault of this program" in app.desk.message)
        await hand.pause()
        check_told(app, state, "a part of this view failed, a fault of this program")
        await goes_on(app, hand)

    pilot(check)


@pytest.mark.parametrize("view", sorted(set(VIEWS) - {"sheet"}))
def test_a_view_that_fails_gives_way_to_the_sheet(view: str, state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(VIEWS, view, broken)
    app = BudgetApp(small())
    app.desk.view_name = view
    painted = "\n".join(plain(line) for line in app.board.frame(80, 24))
    assert app.desk.view_name == "sheet"
    assert painted.splitlines()[2].startswith("bus ")
    assert "this view failed, a fault of this program: see " in app.desk.message
    assert FAULT in logged(state)


def test_text_that_was_being_typed_when_a_view_failed_can_be_pasted(monkeypatch: pytest.MonkeyPatch) -> None:
    desk = small()
    app = BudgetApp(desk)
    press(desk, "r down down enter ctrl+u")
    typed(desk, "12 %")
    monkeypatch.setitem(VIEWS, "rules", broken)
    desk._views.clear()
    app.board.frame(80, 24)
    assert desk.mode is None
    assert "v pastes what was typed" in desk.message
    assert desk.cell_clip == "12 %"


def test_where_not_even_the_sheet_can_be_painted_there_are_words_and_keys(
    file: Path, state: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        await until(hand, lambda: app.desk.session.complete)
        await hand.press("enter", "m", "i", "n", "e", "enter")
        with monkeypatch.context() as patch:
            patch.setattr(paint, "_title", broken)
            for key in ("down", "f", "s", "up"):
                await hand.press(key)
                await hand.pause()
                text = " ".join("\n".join(lines(app)).split())
                assert "The sheet cannot be painted, a fault of this program: see" in text
                assert "w save" in text
            written = logged(state)
            for _ in range(5):
                await hand.press("down")
            assert logged(state) == written  # the same fault is written down once
            await hand.press("q")
            await hand.pause()
            assert "There is unsaved work." in "\n".join(lines(app))
            assert "s save and quit" in "\n".join(lines(app))
            await hand.press("escape", "w")
            await hand.pause()
            assert "mine" in file.read_text()
            assert "saved bus.toml" in "\n".join(lines(app))
        await hand.press("down")
        await hand.pause()
        assert lines(app)[2].startswith("bus ")

    pilot(check, open_file(file))


def test_bare_words_fit_any_screen() -> None:
    desk = small()
    press(desk, "down D q")
    for width, height in ((1, 1), (20, 5), (80, 24), (300, 90)):
        now = paint.bare(desk, width, height, ": see the log")
        assert [len(plain(line)) for line in now] == [width] * height


def test_a_fault_in_a_key_loses_neither_text_nor_work(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        desk = app.desk
        await until(hand, lambda: desk.session.complete)
        document = desk.session.document
        with monkeypatch.context() as patch:
            patch.setattr("budget.project.edits.enter", broken)
            await hand.press("enter", "a", "b", "enter")
            await hand.pause()
        check_told(app, state, "a fault of this program; v pastes what was typed; the project is as it was: see ")
        assert desk.mode is None
        assert desk.session.document is document
        await hand.press("v")
        assert name_of(desk) == "benchab"
        with monkeypatch.context() as patch:
            patch.setitem(desk.actions, "edit", broken)
            await hand.press("enter")
            assert "the project is as it was" in desk.message
        with monkeypatch.context() as patch:
            patch.setattr(type(desk), "changed", broken)
            await hand.press("down", "D")
            assert "the edit was made, u undoes it" in desk.message
        await until(hand, lambda: desk.session.complete)
        await hand.press("u")
        await goes_on(app, hand)

    pilot(check)


def test_a_fault_in_what_comes_back_leaves_what_is_being_typed(state: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    async def check(app: BudgetApp, hand: Pilot[int]) -> None:
        desk = app.desk
        await until(hand, lambda: desk.session.complete)
        await hand.press("down", "D")
        await until(hand, lambda: desk.session.complete)
        await hand.press("enter", "a", "b")
        assert desk.session.outcome is not None
        with monkeypatch.context() as patch:
            patch.setattr("budget.report.change.describe", broken)
            desk.label = "the last edit"
            app.on_calculated(Calculated(desk.session.outcome))
        await hand.pause()
        check_told(app, state, "a fault of this program")
        assert isinstance(desk.mode, Edit)
        assert desk.mode.text.endswith("ab")
        await hand.press("escape", "u")
        await goes_on(app, hand)

    pilot(check)


def test_a_fault_in_the_program_around_the_desk_closes_it_with_a_sentence(
    file: Path, state: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What is not caught anywhere: the status says so, the words are one line each, the journal stays."""
    monkeypatch.setattr(BudgetApp, "run", lambda *_, **__: (_ for _ in ()).throw(ZeroDivisionError(FAULT)))
    assert app_module.show(open_file(file)) == 1
    told = capsys.readouterr().err
    assert "the sheet was ended by a fault of this program: see " in told
    assert "Traceback" not in told
    assert FAULT in logged(state)
    assert os.listdir(file.parent) == ["bus.toml"]  # nothing was changed, so nothing is kept; the lock is gone


def test_a_log_that_cannot_be_written_is_left_out_of_the_sentence(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "file"))
    app = BudgetApp(small())
    app.board.guard(broken)
    assert app.desk.message == f"a fault of this program; the project is as it was (ZeroDivisionError: {FAULT})"


def test_a_command_line_that_meets_a_fault_tells_it_in_a_sentence(
    file: Path, state: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from budget.cli import run

    monkeypatch.setattr("budget.engine.evaluate.evaluate", broken)
    assert run(["check", str(file)]) == 2
    told = capsys.readouterr()
    assert "a fault of this program: see " in told.err
    assert "Traceback" not in told.err + told.out
    assert "Traceback" in logged(state)


def test_project_errors_are_no_faults() -> None:
    app = BudgetApp(small())

    def refuse(_: Desk) -> None:
        raise ProjectError("it cannot be done.")

    app.desk.actions = {**app.desk.actions, "save": refuse}
    app.board.guard(lambda: app.desk.key("w", "w"), typed=True)
    assert app.desk.message == "it cannot be done."
