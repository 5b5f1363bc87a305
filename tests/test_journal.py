"""The journal: a difference gives the document back to the last bit, a replay the session, whatever cut it off."""

from __future__ import annotations

import contextlib
import copy
import errno
import hashlib
import json
import math
import os
import stat
import struct
import subprocess
import sys
import tempfile
import threading
from collections.abc import Callable, Iterator
from contextlib import closing
from datetime import UTC, date, datetime, time, timedelta, timezone
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import budget.session
from budget.keeping import find, journal, lines, log, places, recover
from budget.keeping.find import Found, read, search
from budget.keeping.journal import Journal
from budget.keeping.patch import PatchError, applied, difference, pack, unpack
from budget.keeping.replay import Work
from budget.project import document as doc
from budget.project import store
from budget.project.document import Document, from_data
from budget.project.problems import ProjectError
from budget.session import Session, open_demo, open_file
from budget.trials import Trial

# -- what a document can hold

scalars = st.one_of(
    st.text(st.characters(codec="utf-8"), max_size=8),
    st.booleans(),
    st.integers(),
    st.integers(-(2**80), 2**80).map(lambda n: n << 15000),  # more digits than Python writes in decimal
    st.floats(),
    st.dates(),
    st.times(),
    st.datetimes(),
    st.datetimes(timezones=st.sampled_from([UTC, timezone(timedelta(hours=-3, minutes=-30))])),
)
keys = st.one_of(st.sampled_from("abcd"), st.text(st.sampled_from("~\u0000\u0430int x"), max_size=6))
values = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=4), st.dictionaries(keys, inner, max_size=4)),
    max_leaves=8,
)
tables = st.dictionaries(keys, values, max_size=5)


def exact(a: Any, b: Any) -> bool:
    """Whether two values are one to the last bit, with the order of keys."""
    if type(a) is not type(b):
        return False
    if isinstance(a, dict):
        return list(a) == list(b) and all(exact(a[key], b[key]) for key in a)
    if isinstance(a, list | tuple):
        return len(a) == len(b) and all(exact(x, y) for x, y in zip(a, b, strict=True))
    if isinstance(a, float):
        return struct.pack(">d", a) == struct.pack(">d", b)
    if isinstance(a, datetime | time):
        return a == b and a.isoformat() == b.isoformat()
    return bool(a == b)


def same(a: Document, b: Document) -> bool:
    return exact(a.data, b.data) and a.text == b.text and dict(a.origin) == dict(b.origin)


def through_json(value: Any) -> Any:
    return json.loads(json.dumps(value, allow_nan=False))


@given(values)
def test_values_survive(value: Any) -> None:
    assert exact(unpack(through_json(pack(value))), value)


def test_tuples_of_cursor_positions_survive() -> None:
    spot = ["fields", ("converter", 1), (("load", "C1"), None, 1.5), -1, 0]
    assert exact(unpack(through_json(pack(spot))), spot)
    with pytest.raises(TypeError):
        pack(object())
    with pytest.raises(TypeError):
        pack({1: 2})


@given(tables, tables, st.text(max_size=5), st.text(max_size=5))
def test_a_difference_of_any_two_documents_gives_the_second(a: Any, b: Any, one: str, two: str) -> None:
    old, new = from_data(a, one), from_data(b, two)
    assert same(applied(old, through_json(difference(old, new))), new)


@st.composite
def edits(draw: st.DrawFn) -> Callable[[Document], Document]:
    """Edits as the program makes them: they copy along their path and share the rest."""
    key, at, to = draw(st.sampled_from(("filter", "case"))), draw(st.integers(0, 4)), draw(st.integers(-1, 5))
    value = draw(values)
    name = draw(keys)
    return draw(
        st.sampled_from(
            (
                lambda d: doc.put(d, (name,), value),
                lambda d: doc.put(d, (key, at, name), value) if isinstance(doc.get(d, (key, at)), dict) else d,
                lambda d: doc.put(d, (key, at, "dm", 0, "L"), value) if doc.get(d, (key, at, "dm", 0)) else d,
                lambda d: doc.drop(d, (key, at, "dm")),
                lambda d: doc.drop(d, (name,)),
                lambda d: doc.insert(d, (key, min(at, len(doc.get(d, (key,), [])))), {"id": f"new{to}"}),
                lambda d: doc.insert(d, (key, 0), copy.deepcopy(doc.get(d, (key, at), {"id": "x"}))),
                lambda d: doc.remove(d, (key, at)),
                lambda d: doc.move(d, (key, at), to),
                lambda d: doc.move(d, (key, at, "dm", 0), to),
                lambda d: from_data({**copy.deepcopy(d.data), name: value}, d.text + "# again"),
            )
        )
    )


ROWS = """\
format = 1
[[filter]]
id = "a"
dm = [{ L = 1 }, { C = 2.0 }]
[[filter]]
id = "b"
dm = [{ L = 1 }, { C = 2.0 }]
[[case]]
id = "c"
when = 2020-01-01
[[case]]
id = "d"
when = 2020-01-01T00:00:00+00:00
"""


@given(st.lists(edits(), max_size=8))
def test_differences_of_edits_share_what_the_edit_shared(sequence: list[Callable[[Document], Document]]) -> None:
    was = now = lines.parsed(ROWS)
    mirror = now  # follows by patches alone
    for edit in sequence:
        was, now = now, edit(now)
        before, mirror = mirror, applied(mirror, through_json(difference(was, now)))
        assert same(mirror, now)
        for key in ("filter", "case"):
            rows, older = now.data.get(key), was.data.get(key)
            if isinstance(rows, list) and rows is older:
                assert mirror.data[key] is before.data[key]


def test_a_moved_row_is_told_by_its_place_not_written_again() -> None:
    old = lines.parsed(ROWS)
    patch = difference(old, doc.move(old, ("filter", 1), 0))
    assert patch == {"data": {"d": {"filter": {"l": [[1, 1], [0, 1]]}}}, "origin": {"filter": [1, 0]}}
    assert difference(old, doc.put(old, ("case", 1, "id"), "e")) == {
        "data": {"d": {"case": {"l": [[0, 1], [1, {"d": {"id": {"v": "e"}}}]]}}}
    }
    assert difference(old, old) == {}


words = st.sampled_from(["data", "d", "l", "v", "x", "o", "origin", "text", "stemless", "~int", "~tuple", "a"])
patches = st.recursive(
    st.none() | st.integers() | st.text(max_size=3), lambda inner: st.lists(inner) | st.dictionaries(words, inner)
)


@given(tables, patches)
def test_any_other_json_is_refused_or_gives_a_document(data: Any, patch: Any) -> None:
    with contextlib.suppress(PatchError):
        assert isinstance(applied(from_data(data), patch), Document)


# -- sessions


class Twin:
    """A session with a journal, driven at random; what it does is repeatable."""

    def __init__(self, path: Path | None, folder: Path) -> None:
        self.folder = folder
        self.session = open_file(path) if path is not None else open_demo()
        self.journal = Journal(self.session)
        self.session.tell = self.journal.note
        self.count = 0

    def close(self) -> None:
        assert self.journal.close(remove=True, seconds=20)

    def do(self, what: str, number: int) -> None:
        session = self.session
        self.count += 1
        if what == "edit":
            session.apply(f"edit {self.count}", doc.put(session.document, ("bus", "low"), self.count), self.count)
        elif what == "row":
            row = {"id": f"new{self.count}", "x": [math.nan, 1]}
            session.apply("row", doc.insert(session.document, ("converter", number % 2), row), ("a", (1, None)))
        elif what == "move":
            session.apply("move", doc.move(session.document, ("converter", 0), 1), None)
        elif what == "remove":
            session.apply("remove", doc.remove(session.document, ("converter", number % 3)), [1])
        elif what == "undo":
            session.undo(None)
        elif what == "redo":
            session.redo(None)
        elif what == "save" and session.path is not None:
            session.save()
        elif what == "save as":
            session.save_as(self.folder / f"as{number}.toml", over=True)
        elif what == "reload" and session.path is not None:
            session.path.write_text(session.path.read_text() + f"# {self.count}\n")
            session.reload(0)
        elif what == "hold":
            session.hold()
        elif what == "hold as":
            session.hold_as(f"t{number}")
        elif what == "keep":
            session.keep()
        else:
            self.trial(what, number)

    def trial(self, what: str, number: int) -> None:
        session = self.session
        if what == "drop" and session.reference is not None:
            session.drop(None)
        elif session.trials:
            name = session.trials[number % len(session.trials)].name
            if what == "switch":
                session.switch(name, None)
            elif what == "refer":
                session.refer_to(name)
            elif what == "forget":
                session.forget(name)


WHAT = (
    *("edit", "edit", "edit", "row", "move", "remove", "undo", "undo", "redo", "save", "save as", "reload"),
    *("hold", "hold as", "keep", "drop", "switch", "refer", "forget"),
)
doings = st.lists(st.tuples(st.sampled_from(WHAT), st.integers(0, 3)), max_size=25)


def like(work: Work, session: Session) -> None:
    """The replayed work is the session, with the same documents in the same places."""
    assert same(work.document, session.document)
    for mine, theirs in ((work.done, session.done), (work.undone, session.undone)):
        assert [(s.label, s.spot) for s in mine] == [(s.label, s.spot) for s in theirs]
        assert all(same(a.document, b.document) for a, b in zip(mine, theirs, strict=True))
    assert work.unsaved == session.dirty
    assert work.digest == (session.fingerprint.digest if session.fingerprint else None)
    if work.trials is not None:
        assert [(t.name, t.when) for t in work.trials] == [(t.name, t.when) for t in session.trials]
        assert all(same(a.document, b.document) for a, b in zip(work.trials, session.trials, strict=True))
        assert (work.reference is None) == (session.reference is None)
        if work.reference is not None and session.reference is not None:
            assert same(work.reference.document, session.reference.document)
    # what was one document is one document
    theirs_all = documents(session.done, session.undone, session.document, session.saved)
    mine_all = documents(work.done, work.undone, work.document, work.saved)
    theirs_one = [[a is b for b in theirs_all] for a in theirs_all]
    assert [[a is b for b in mine_all] for a in mine_all] == theirs_one


def documents(done: Any, undone: Any, present: Document, saved: Document | None) -> list[Document | None]:
    return [*(step.document for step in done), *(step.document for step in undone), present, saved]


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "project" / "bus.toml"
    path.parent.mkdir()
    path.write_text(TEXT)
    return path


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


def fresh(folder: Path) -> Path:
    """A folder of its own for each example, with the project in it."""
    number = len(list(folder.iterdir()))
    path = folder / str(number) / "bus.toml"
    path.parent.mkdir()
    path.write_text(TEXT)
    return path


def crashed(twin: Twin) -> list[Found]:
    """What the next start finds, as if the session had been killed now: its journal copied from under its lock."""
    assert twin.journal.flush(20)
    name = twin.journal.name
    if name is None:
        return []
    copied = name.with_name(f"copy-{name.name}")
    copied.write_bytes(name.read_bytes())
    found = read(copied)
    copied.unlink()
    return [found] if found is not None else []


@settings(max_examples=60, deadline=None)
@given(doings, st.booleans())
def test_a_replay_gives_the_session(tmp_path_factory: pytest.TempPathFactory, what: Any, with_file: bool) -> None:
    path = fresh(tmp_path_factory.getbasetemp()) if with_file else None
    folder = path.parent if path else fresh(tmp_path_factory.getbasetemp()).parent
    with closing(Twin(path, folder)) as twin:
        for name, number in what:
            twin.do(name, number)
        for found in crashed(twin):
            assert not found.work.damage
            like(found.work, twin.session)
    assert not [p for p in folder.iterdir() if ".journal" in p.name]
    assert not [*places.state_folder().glob("*.journal*")]


DEEDS = (
    *("edit", "hold", "edit", "save", "edit", "edit", "hold_as", "edit", "drop", "edit", "undo", "switch", "undo"),
    *("edit", "hold_as", "edit", "edit", "switch", "edit", "edit", "reload", "edit"),
)


def test_a_long_history_loses_its_oldest_steps_in_a_replay_too(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(budget.session, "HISTORY", 3)
    with closing(Twin(file, file.parent)) as twin:
        for what in DEEDS:
            twin.do(what.replace("_", " "), 0)
            (found,) = crashed(twin)
            assert not found.work.damage
            like(found.work, twin.session)
            assert len(found.work.done) <= 3


@settings(max_examples=40, deadline=None)
@given(doings.filter(len), st.floats(0.0, 1.0), st.sampled_from([b"", b"\0" * 9, b"\n"]))
def test_a_journal_cut_anywhere_gives_what_was_done_before(
    tmp_path_factory: pytest.TempPathFactory, what: Any, share: float, garbage: bytes
) -> None:
    path = fresh(tmp_path_factory.getbasetemp())
    states: list[tuple[int, Document, int]] = []
    with closing(Twin(path, path.parent)) as twin:
        for name, number in what:
            twin.do(name, number)
            assert twin.journal.flush(20)
            if name == "save as":
                states.clear()  # the journal is written anew then, with a longer or shorter name in it
            if twin.journal.name is not None:
                states.append((twin.journal.name.stat().st_size, twin.session.document, len(twin.session.done)))
        if not states or twin.journal.name is None:
            return
        whole = twin.journal.name.read_bytes()
    cut = states[0][0] + round(share * (len(whole) - states[0][0]))  # behind the first state, anywhere
    torn = path.parent / "torn"
    torn.write_bytes(whole[:cut] + (garbage if cut < len(whole) else b""))
    found = read(torn)
    assert found is not None
    end_of_line = garbage == b"\n" and whole[cut : cut + 1] == b"\n"  # the garbage is what was cut off
    assert found.length <= cut + end_of_line
    assert found.work.damage == ""
    size, document, count = [state for state in states if state[0] <= cut + end_of_line][-1]
    if found.length == size:
        assert same(found.work.document, document)
        assert len(found.work.done) == count
    else:  # cut between two events that one deed made
        assert found.length > size


def edit(session: Session, number: int) -> None:
    assert session.apply(f"edit {number}", doc.put(session.document, ("bus", "low"), number), number)


def begun(path: Path | None, count: int = 3) -> tuple[Session, Journal]:
    session = open_file(path) if path is not None else open_demo()
    kept = Journal(session)
    session.tell = kept.note
    for number in range(count):
        edit(session, number)
    assert kept.flush(20)
    return session, kept


def end(kept: Journal) -> None:
    """As a kill would: the file stays, the lock goes."""
    kept.close(remove=False, seconds=20)


def test_nothing_is_written_before_there_is_something_to_keep(file: Path) -> None:
    session = open_file(file)
    kept = Journal(session)
    session.tell = kept.note
    session.save()
    kept.note_cursor("here")
    assert kept.close(remove=True)
    assert os.listdir(file.parent) == ["bus.toml"]


def test_it_stands_beside_the_project_and_goes_when_the_session_is_left(file: Path) -> None:
    file.chmod(0o640)
    _, kept = begun(file)
    name = file.parent / ".bus.toml.journal"
    assert kept.name == name
    assert stat.S_IMODE(name.stat().st_mode) == 0o640 & ~_umask()
    assert b"22 V" not in name.read_bytes().split(b"\n")[1]
    assert search(file) == find.Search((), ())  # its session runs
    kept.close(remove=True)
    assert os.listdir(file.parent) == ["bus.toml"]


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def test_a_line_is_small(file: Path) -> None:
    _, kept = begun(file, 1)
    assert kept.name is not None
    assert len(kept.name.read_bytes().split(b"\n")[1]) < 160
    kept.close(remove=True)


def test_a_project_without_a_file_is_kept_in_the_state_folder(state_of_the_tests: Path) -> None:
    session, kept = begun(None)
    session.hold_as("mine")
    assert kept.flush(20)
    assert kept.name is not None
    assert kept.name.parent == state_of_the_tests / "budget"
    assert stat.S_IMODE(kept.name.stat().st_mode) == 0o600
    end(kept)
    (found,) = search(None).found
    again = open_demo()
    assert not recover.settled(found, again)
    more = Journal(again)
    recover.take_back(again, more, found)
    assert same(again.document, session.document)
    assert [t.name for t in again.trials] == ["mine"]
    assert again.trials[0].document is again.document
    assert again.dirty
    more.close(remove=True)
    assert search(None).found == ()


def test_the_state_folder_is_where_the_standard_puts_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("XDG_STATE_HOME")
    monkeypatch.setenv("HOME", "/home/one")
    assert str(places.state_folder()) == "/home/one/.local/state/budget"
    assert places.short(places.state_folder() / "x") == "~/.local/state/budget/x"
    monkeypatch.setenv("XDG_STATE_HOME", "not/absolute")
    assert str(places.state_folder()) == "/home/one/.local/state/budget"
    monkeypatch.setenv("XDG_STATE_HOME", "/else")
    assert str(places.state_folder()) == "/else/budget"
    assert str(places.candidates(Path("/p/a b.toml"))[0]) == "/p/.a b.toml.journal"
    assert places.candidates(Path("/p/a.toml"))[1] != places.candidates(Path("/q/a.toml"))[1]


@pytest.fixture
def no_room(monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[[str], None]]:
    """A way to make every write below a folder fail as a full disk does, and "" to end that."""
    full = [""]
    real = os.pwrite

    def write(handle: int, data: Any, at: int) -> int:
        name = os.readlink(f"/proc/self/fd/{handle}")
        if full[0] and name.startswith(full[0]):
            if len(data) > 10:
                return real(handle, bytes(data)[:10], at)  # it takes a little, as a disk does that is nearly full
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return real(handle, data, at)

    monkeypatch.setattr(os, "pwrite", write)
    monkeypatch.setattr(journal, "RETRY", 0.01)
    yield lambda folder: full.__setitem__(0, folder)
    full[0] = ""


def test_a_full_disk_sends_it_to_the_state_folder(file: Path, no_room: Callable[[str], None]) -> None:
    session, kept = begun(file)
    no_room(str(file.parent))
    edit(session, 7)
    assert kept.flush(20)
    assert kept.trouble == ""
    assert kept.name is not None
    assert kept.name.parent == places.state_folder()
    assert os.listdir(file.parent) == ["bus.toml"]
    end(kept)
    (found,) = search(file).found
    like(found.work, session)
    found.name.unlink()


def test_where_no_disk_has_room_it_is_said_and_tried_again(file: Path, no_room: Callable[[str], None]) -> None:
    session, kept = begun(file)
    size = kept.name.stat().st_size if kept.name else 0
    no_room("/")
    edit(session, 7)
    assert not kept.flush(20)
    assert kept.trouble == "the journal cannot be written (no space left on device): save soon"
    edit(session, 8)
    assert not kept.flush(20)
    assert kept.name is not None
    assert kept.name.stat().st_size == size  # what was written in part is taken back
    no_room("")
    edit(session, 9)
    assert kept.flush(20)
    assert kept.trouble == ""
    end(kept)
    (found,) = search(file).found
    like(found.work, session)
    found.name.unlink()


def test_without_any_new_edit_it_tries_again_by_itself(file: Path, no_room: Callable[[str], None]) -> None:
    session = open_file(file)
    kept = Journal(session)
    session.tell = kept.note
    no_room("/")
    edit(session, 1)
    assert not kept.flush(20)
    assert kept.trouble
    no_room("")
    pause = threading.Event()
    for _ in range(4000):  # until the thread has tried again by itself
        if kept.name is not None and not kept.trouble:
            break
        pause.wait(0.005)
    assert read_copy(kept).work.events == 1
    kept.close(remove=True)


def read_copy(kept: Journal) -> Found:
    assert kept.name is not None
    copied = kept.name.with_name("copied")
    copied.write_bytes(kept.name.read_bytes())
    found = read(copied)
    copied.unlink()
    assert found is not None
    return found


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="the system has no full device")
def test_a_device_that_is_full_is_a_full_disk(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    real = os.open

    def opened(name: Any, flags: int, *more: Any, **other: Any) -> int:
        return real("/dev/full", os.O_RDWR) if ".journal" in str(name) else real(name, flags, *more, **other)

    monkeypatch.setattr(os, "open", opened)
    session = open_file(file)
    kept = Journal(session)
    session.tell = kept.note
    edit(session, 1)
    assert not kept.flush(20)
    assert kept.trouble == "the journal cannot be written (no space left on device): save soon"
    assert not kept.close(remove=False)


_AS_NOBODY = """\
import codecs, os, pwd, sys
from pathlib import Path
from budget.project import document as doc
from budget.keeping.journal import Journal
from budget.session import open_file
codecs.lookup("ascii")
if os.getuid() == 0:  # the interpreter may be out of reach for others; it is loaded now
    os.setgid(65534), os.setuid(65534)
session = open_file(Path(sys.argv[1]))
kept = Journal(session)
session.tell = kept.note
session.apply("one", doc.put(session.document, ("bus", "low"), 5), None)
print(kept.flush(20), kept.name, kept.trouble)
kept.close(remove=False)
"""


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """A folder that every user may enter."""
    with tempfile.TemporaryDirectory() as name:
        os.chmod(name, 0o755)
        yield Path(name)


def test_a_folder_that_is_read_only_sends_it_to_the_state_folder(open_folder: Path) -> None:
    """As a user who may not write beside the project; a second place that is closed too is said."""
    folder, state = open_folder / "shared", open_folder / "state"
    for path in (folder, state):
        path.mkdir()
        path.chmod(0o777)
    file = folder / "bus.toml"
    file.write_text(TEXT)
    file.chmod(0o644)
    folder.chmod(0o555)

    def run() -> str:
        done = subprocess.run(
            [sys.executable, "-c", _AS_NOBODY, str(file)],
            cwd=Path(__file__).parents[1],
            env={**os.environ, "XDG_STATE_HOME": str(state), "PYTHONDONTWRITEBYTECODE": "1"},
            capture_output=True,
            text=True,
            check=False,
            timeout=60,
        )
        assert done.returncode == 0, done.stderr
        return done.stdout.strip()

    told = run()
    assert told.startswith(f"True {state}/budget/bus.toml-")
    for path in (state / "budget").iterdir():
        path.unlink()
    (state / "budget").chmod(0o555)
    assert run() == "False None the journal cannot be written (permission denied): save soon"
    folder.chmod(0o755)


# -- what can happen to the file


def test_a_damaged_line_stops_the_replay_there_and_says_so(file: Path) -> None:
    _, kept = begun(file, 4)
    end(kept)
    name = file.parent / ".bus.toml.journal"
    told = name.read_bytes().split(b"\n")
    told[3] = told[3].replace(b'"edit', b'"edut')
    name.write_bytes(b"\n".join(told))
    (found,) = search(file).found
    assert found.work.damage == "line 4 of it is damaged"
    assert len(found.work.done) == 2
    assert not recover.settled(found, open_file(file))
    session = open_file(file)
    more = Journal(session)
    session.tell = more.note
    recover.take_back(session, more, found)
    edit(session, 50)
    assert more.flush(20)
    assert [step.label for step in session.done] == ["edit 0", "edit 1", "edit 50"]
    end(more)
    left = {path.name for path in file.parent.iterdir()}
    assert left == {"bus.toml", ".bus.toml.journal2", ".bus.toml.journal-old"}  # the damaged one is kept once
    (again,) = search(file).found
    assert (again.work.damage, len(again.work.done)) == ("", 3)


def test_lines_that_do_not_follow_each_other_are_damage(file: Path) -> None:
    _, kept = begun(file, 4)
    end(kept)
    name = file.parent / ".bus.toml.journal"
    told = name.read_bytes().splitlines(keepends=True)
    name.write_bytes(b"".join([*told[:2], *told[3:]]))
    (found,) = search(file).found
    assert found.work.damage == "line 3 of it: an event is missing"
    head = lines.decode(told[0])
    assert head is not None
    for strange in ({"journal": 9}, {"text": "x"}, {"patch": {"data": 3}}, {"text": None}):
        name.write_bytes(lines.encode({**head, **strange}) + told[1])
        seen = search(file)
        assert seen.found == ()
        assert len(seen.notes) == 1
        assert seen.notes[0].startswith("the journal ")
        assert seen.notes[0].isascii()
    for record in ({"n": 1, "e": "?"}, {"n": 1, "e": "edit"}, {"n": 1, "e": "undo"}, {"n": 1}, {"n": 1, "e": []}):
        name.write_bytes(told[0] + lines.encode(record) + told[1])
        (found,) = search(file).found
        assert found.work.damage.startswith("line 2 of it")
    name.unlink()


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=200))
def test_any_bytes_are_no_journal_and_no_error(tmp_path_factory: pytest.TempPathFactory, data: bytes) -> None:
    name = tmp_path_factory.getbasetemp() / "any"
    name.write_bytes(data)
    with contextlib.suppress(lines.JournalError):
        assert read(name) is None


def test_a_first_line_that_swells_is_refused(file: Path) -> None:
    import base64
    import zlib

    _, kept = begun(file, 1)
    end(kept)
    name = file.parent / ".bus.toml.journal"
    first, second, _ = name.read_bytes().split(b"\n")
    head = lines.decode(first + b"\n")
    assert head is not None
    bomb = base64.b64encode(zlib.compress(b"#" * 50_000_000)).decode()
    name.write_bytes(lines.encode({**head, "text": bomb}) + second + b"\n")
    assert "too large" in search(file).notes[0]


def test_what_is_no_file_is_left_alone(file: Path) -> None:
    name = file.parent / ".bus.toml.journal"
    os.mkfifo(name)
    seen = search(file)
    assert seen.found == ()
    assert "no ordinary file" in seen.notes[0]
    session, kept = begun(file)
    assert kept.name == name.with_name(name.name + "2")
    kept.close(remove=True)
    name.unlink()
    name.symlink_to(file)
    assert search(file).found == ()
    _, kept = begun(file)
    assert file.read_text() == TEXT
    assert kept.name == name.with_name(name.name + "2")
    kept.close(remove=True)
    assert session.path == file


def test_it_is_written_anew_when_it_was_removed_under_the_program(file: Path) -> None:
    session, kept = begun(file)
    name = file.parent / ".bus.toml.journal"
    name.unlink()
    edit(session, 10)
    assert kept.flush(20)
    assert kept.name == name
    like(read_copy(kept).work, session)
    name.unlink()
    name.write_text("of someone else")
    edit(session, 11)
    assert kept.flush(20)
    like(read_copy(kept).work, session)
    assert kept.close(remove=True)
    assert name.read_text() == "of someone else"


def test_a_second_session_has_a_journal_of_its_own(file: Path) -> None:
    one, first = begun(file, 1)
    two, second = begun(file, 2)
    assert first.name is not None
    assert second.name == first.name.with_name(first.name.name + "2")
    assert search(file).found == ()
    end(first)
    (found,) = search(file).found
    like(found.work, one)
    end(second)
    found_two = search(file).found
    assert [f.name for f in found_two] == [second.name, first.name]  # the latest first
    like(found_two[0].work, two)


def test_where_locks_do_not_work_the_process_number_tells(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(places, "lock", lambda _: None)
    _, kept = begun(file, 1)
    assert search(file).found == ()
    end(kept)
    assert search(file).found == ()  # this process runs still
    name = file.parent / ".bus.toml.journal"
    first, second, _ = name.read_bytes().split(b"\n")
    head = lines.decode(first + b"\n")
    assert head is not None
    assert head["locked"] is False
    gone = subprocess.Popen([sys.executable, "-c", ""])
    gone.wait()
    for change in ({"pid": gone.pid}, {"born": "another start"}, {"host": "elsewhere"}, {"pid": -1}):
        name.write_bytes(lines.encode({**head, **change}) + second + b"\n")
        assert len(search(file).found) == 1, change


def test_an_empty_journal_is_nothing_and_goes_in_time(file: Path) -> None:
    name = file.parent / ".bus.toml.journal"
    name.write_bytes(b"12345678 {")
    assert search(file) == find.Search((), ())
    assert name.exists()  # it may be one that is just being made
    os.utime(name, (1, 1))
    assert search(file) == find.Search((), ())
    assert not name.exists()


# -- taking back


def test_work_is_taken_back_as_it_was(file: Path) -> None:
    session, kept = begun(file)
    session.undo(None)
    session.save()
    edit(session, 30)
    session.hold_as("held")
    session.hold()
    edit(session, 31)
    edit(session, 32)
    session.undo(None)
    assert kept.flush(20)
    end(kept)
    (found,) = search(file).found
    assert (found.work.changes, found.work.last) == (4, "undone: edit 32")
    again = open_file(file)
    assert not recover.settled(found, again)
    more = Journal(again)
    again.tell = more.note
    recover.take_back(again, more, found)
    like(found.work, again)
    assert same(again.document, session.document)
    assert again.dirty
    assert again.undo(None) is not None
    assert again.reference is not None
    assert again.reference.document is again.document
    assert again.trials[0].document is again.document
    assert again.undo(None) is not None
    assert not again.dirty  # what was saved is what was saved
    again.redo(None)
    again.save()
    assert more.flush(20)
    like(read_copy(more).work, again)
    more.close(remove=True)
    left = [path.name for path in file.parent.iterdir()]
    assert sorted(left) == ["bus.toml", "bus.trials.toml"]


@pytest.mark.parametrize("told", [True, False], ids=["told", "killed before it was told"])
def test_work_that_was_saved_is_settled(file: Path, told: bool) -> None:
    session, kept = begun(file)
    if not told:
        session.tell = lambda _: None
    session.save()
    assert kept.flush(20)
    end(kept)
    (found,) = search(file).found
    again = open_file(file)
    assert recover.settled(found, again)
    more = Journal(again)
    recover.take_back(again, more, found)
    assert not again.dirty
    assert not again.changed_on_disk()
    again.tell = more.note
    again.undo(None)
    assert again.dirty
    assert more.flush(20)
    end(more)  # killed once more: now it is known which state was saved
    (found,) = search(file).found
    again = open_file(file)
    more = Journal(again)
    recover.take_back(again, more, found)
    assert again.dirty
    assert not again.changed_on_disk()
    more.close(remove=True)


def test_a_file_that_someone_changed_meanwhile_is_asked_about_when_it_is_saved(file: Path) -> None:
    session, kept = begun(file)
    end(kept)
    file.write_text(TEXT + "# theirs\n")
    (found,) = search(file).found
    again = open_file(file)
    assert not recover.settled(found, again)
    more = Journal(again)
    recover.take_back(again, more, found)
    assert again.changed_on_disk()
    with pytest.raises(store.ChangedOnDiskError):
        again.save()
    assert file.read_text() == TEXT + "# theirs\n"
    again.reload(None)
    assert again.document.text.endswith("# theirs\n")
    assert again.undo(None) is not None
    assert same(again.document, session.document)
    more.close(remove=True)


@pytest.mark.parametrize("state", ["gone", "not TOML", "a folder"])
def test_work_on_a_file_that_is_gone_is_found(file: Path, state: str) -> None:
    session, kept = begun(file)
    end(kept)
    file.unlink()
    if state == "not TOML":
        file.write_text("[[[")
    elif state == "a folder":
        file.mkdir()
    with pytest.raises(ProjectError):
        open_file(file)
    again = recover.without_file(file)
    assert again is not None
    assert again.document.text == TEXT
    (found,) = search(file).found
    assert not recover.settled(found, again)
    more = Journal(again)
    recover.take_back(again, more, found)
    assert same(again.document, session.document)
    with pytest.raises(store.ChangedOnDiskError):
        again.save()
    more.close(remove=True)
    assert recover.without_file(file) is None


def test_taken_back_later_it_is_one_step(file: Path) -> None:
    session, kept = begun(file)
    session.hold_as("theirs")
    assert kept.flush(20)
    end(kept)
    again, more = begun(file, 1)
    (found,) = search(file).found
    present = again.document
    assert recover.take_as_step(again, found, "taken back", None)
    assert same(again.document, session.document)
    assert [t.name for t in again.trials] == ["theirs"]
    assert again.undo(None) is not None
    assert again.document is present
    assert more.flush(20)
    like(read_copy(more).work, again)
    more.close(remove=True)


def test_two_cannot_take_the_same_work(file: Path) -> None:
    _, kept = begun(file)
    end(kept)
    (found,) = search(file).found
    one, two = open_file(file), open_file(file)
    first, second = Journal(one), Journal(two)
    recover.take_back(one, first, found)
    with pytest.raises(ProjectError, match="another session has taken"):
        recover.take_back(two, second, found)
    assert not two.dirty
    assert not recover.put_aside(found)
    assert first.flush(20)
    end(first)  # it ended, and has written a line since the other looked
    with pytest.raises(ProjectError, match="another session has taken"):
        recover.take_back(two, second, found)
    assert not recover.put_aside(found)
    (latest,) = search(file).found
    recover.take_back(two, second, latest)
    second.close(remove=True)


def test_what_is_discarded_stays_once_more(file: Path) -> None:
    session, kept = begun(file)
    end(kept)
    (found,) = search(file).found
    assert recover.put_aside(found)
    assert search(file).found == ()
    (old,) = recover.aside(file)
    like(old.work, session)
    recover.forget_aside(file, frozenset())
    assert len(recover.aside(file)) == 1
    recover.forget_aside(file, recover.states_aside(file))
    assert recover.aside(file) == ()


def test_saving_under_another_name_takes_the_journal_along(file: Path, tmp_path: Path) -> None:
    session, kept = begun(file)
    other = tmp_path / "else" / "new.toml"
    other.parent.mkdir()
    session.save_as(other)
    edit(session, 5)
    assert kept.flush(20)
    assert kept.name == other.parent / ".new.toml.journal"
    assert os.listdir(file.parent) == ["bus.toml"]
    end(kept)
    assert search(file).found == ()
    (found,) = search(other).found
    like(found.work, session)
    assert found.work.path == str(other)
    demo, kept = begun(None)
    third = tmp_path / "else" / "third.toml"
    demo.save_as(third)
    assert kept.flush(20)
    end(kept)
    assert search(None).found == ()
    assert recover.settled(search(third).found[0], open_file(third))


def test_what_a_killed_save_left_goes_in_time(file: Path) -> None:
    digest = hashlib.sha256(b"").hexdigest()
    left = [file.parent / f".bus.toml.{name}" for name in ("abcdef12.new", "abcdefgh.new", "keep.new", "journal-old")]
    for path in left:
        path.write_text(digest)
    os.utime(left[0], (1, 1))
    os.utime(left[2], (1, 1))
    places.sweep(file)
    assert [path.exists() for path in left] == [False, True, True, True]


# -- the log


def test_faults_are_written_down_within_a_bound(state_of_the_tests: Path) -> None:
    def fail(text: str) -> str:
        try:
            raise ValueError(text)
        except ValueError as error:
            return log.told(error)

    told = fail("one\x1b[31m")
    path = state_of_the_tests / "budget" / "budget.log"
    assert told == f": see {places.short(path)} (ValueError: one?[31m)"
    assert log.recorded() == places.short(path)
    assert "in fail" in path.read_text()
    assert "Traceback" in path.read_text()
    for n in range(60):
        fail(f"{n} " + "x" * 30_000)
        assert path.stat().st_size <= log.MOST
    text = path.read_text()
    assert text.startswith("-- ")
    assert "59 x" in text
    assert stat.S_IMODE(path.stat().st_mode) == 0o600


def test_a_log_that_cannot_be_written_keeps_the_sentence(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    (tmp_path / "budget").write_text("a file in the way")
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path))
    assert log.told(KeyError("x")) == " (KeyError: 'x')"


def test_a_fault_in_the_journal_is_said_and_ends_only_the_journal(file: Path) -> None:
    session, kept = begun(file)
    session.apply("strange", doc.put(session.document, ("bus", "odd"), object()), None)
    assert not kept.flush(20)
    assert "save soon" in kept.trouble
    assert "TypeError" in kept.trouble
    edit(session, 5)
    assert not kept.flush(20)
    assert "save soon" in kept.trouble
    end(kept)
    (found,) = search(file).found
    assert len(found.work.done) == 3


def test_dates_are_told_from_times() -> None:
    for value in (date(2020, 1, 1), datetime(2020, 1, 1), time(1, 2, 3, 4)):
        assert exact(unpack(through_json(pack(value))), value)


def test_the_times_of_work(monkeypatch: pytest.MonkeyPatch) -> None:
    work = Work(from_data({}), None, None, None, places.Owner("there", "anna", 1, ""))
    import time as clock

    work.when = clock.time()
    assert recover.when(work) == clock.strftime("%H:%M", clock.localtime(work.when))
    work.when = 0.0
    assert recover.when(work).startswith("19")
    work.when = math.inf
    assert recover.when(work) == "an unknown time"
    assert recover.whose(work) == "by anna on there"
    assert isinstance(Trial("t", from_data({})), Trial)
