"""The journal of a session: every accepted edit on disk at once, written by a thread that depends on nothing else.

The session tells what happened (``Session.tell``); that costs the keys a few microseconds. A thread of our own turns
it into lines, appends them and sees to it that they are on the disk, whatever the screen, the link to it and the event
loop do. Nothing here blocks or raises into the session: where the journal cannot be written it goes to the next place,
else keeps the lines, tries again, and says so in ``trouble``.
"""

from __future__ import annotations

import contextlib
import errno
import os
import queue
import stat
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path as FilePath
from typing import Any

from budget.keeping import lines, log, places
from budget.keeping.find import Found
from budget.keeping.lines import Record
from budget.keeping.patch import difference, pack
from budget.project.document import Document
from budget.session import Session
from budget.trials import Trial

RETRY = 2.0  # seconds after which lines that could not be written are tried again
PATIENCE = 1.0  # seconds that a save and a signal wait for the lines before them

Pack = Callable[[Any], Any]


@dataclass(frozen=True, slots=True)
class _Told:
    """One event as the session told it: immutable things only, turned into a line by the thread."""

    when: float
    record: Record
    before: Document | None = None
    after: Document | None = None
    held: tuple[tuple[Trial, Any], ...] = ()  # trials and the reference, and where their documents are (None: nowhere)
    base: Document | None = None  # the present document, which a trial found nowhere is told against
    move: FilePath | None = None


@dataclass(slots=True)
class _Wait:
    """A place in the queue: set as soon as everything before it is on disk, or could not be brought there."""

    passed: threading.Event
    done: bool = False
    end: bool = False
    remove: bool = False


class Journal:
    """Writes what ``session`` tells; the file is made with the first event.

    ``pack_spot`` turns a cursor position into JSON; the default knows plain values and tuples. ``name`` is that of the
    journal file once there is one; ``trouble`` a sentence as long as lines wait that cannot be written.
    """

    def __init__(self, session: Session, pack_spot: Pack = pack) -> None:
        self._session = session
        self._pack = pack_spot
        self._queue: queue.SimpleQueue[_Told | _Wait] = queue.SimpleQueue()  # its put may be interrupted by a signal
        self._thread: threading.Thread | None = None
        self._closed = False
        self._started = False  # whether anything has been told
        self._start = (session.document, session.path, _digest(session), not session.dirty)
        self._held: tuple[Document, ...] = ()  # of the trials told last, and the reference's behind them
        self._head: Record | None = None
        self._project = session.path
        # What follows belongs to the thread alone once it runs.
        self._handle = -1
        self._length = 0
        self._number = 0
        self._pending: list[bytes] = []
        self._broken = False
        self.name: FilePath | None = None
        self.trouble = ""

    # -- told by the session, in its thread

    def note(self, kind: str) -> None:
        """Take down what the session has just done; see ``Session.tell`` for the kinds."""
        if self._closed:
            return
        if kind == "saving":  # what is saved must be in the journal, or a crash between the two could not be told apart
            self.flush(PATIENCE)
        elif kind in ("saved", "moved") and not self._started:  # nothing has happened yet that could be lost
            session = self._session
            self._project = session.path
            self._start = (session.document, session.path, _digest(session), True)
        else:
            self._put(self._told(kind))

    def note_cursor(self, spot: Any) -> None:
        """Take down where the cursor stands; only where there is a journal already."""
        if self._started and not self._closed:
            self._put(_Told(time.time(), {"e": "at", "spot": self._packed(spot)}))

    def flush(self, seconds: float = PATIENCE) -> bool:
        """Wait until everything told so far is on disk; False where it is not within ``seconds``.

        May be called from a signal handler: it takes no lock that the interrupted code could hold.
        """
        return self._wait(_Wait(threading.Event()), seconds)

    def close(self, *, remove: bool, seconds: float = PATIENCE) -> bool:
        """End the journal; with ``remove`` its file goes, as after a clean leave. False where lines are missing."""
        if self._closed:
            return True
        done = self._wait(_Wait(threading.Event(), end=True, remove=remove), seconds)
        self._closed = True
        return done

    @property
    def begun(self) -> bool:
        """Whether anything has been told, so that there is or will be a file."""
        return self._started

    # -- work of an earlier session goes on

    def adopt(self, found: Found) -> bool:
        """Go on with the journal of an ended session, cut to its good part; before anything is told.

        Where it cannot be written to, or is damaged and not merely torn at its end, the good part is copied to a place
        of our own, and the file stays. False where another session has it now, or it is no longer as it was found.
        """
        assert not self._started
        length = found.length
        try:
            handle, ours = _open_journal(found.name)
        except OSError:
            return False
        try:
            locked = places.lock(handle)
            if locked is False or os.fstat(handle).st_size != found.size:
                os.close(handle)
                return False
            if ours and not found.work.damage:
                os.ftruncate(handle, length)
                self._handle, self._length, self.name = handle, length, found.name
            else:
                self._pending = os.pread(handle, length, 0).splitlines(keepends=True)[1:]
                os.close(handle)
        except OSError:
            os.close(handle)
            return False
        self._head, self._number = found.head, found.work.events
        self._held = found.work.held
        owner = replace(places.me(), locked=bool(locked))
        self._put(_Told(time.time(), lines.signed({"e": "resumed"}, owner)))
        return True

    # -- in the session's thread

    def _told(self, kind: str) -> _Told:
        session, now = self._session, time.time()
        if kind in ("edit", "reload"):
            last = session.done[-1]
            record = {"e": kind, "label": last.label, "spot": self._packed(last.spot)}
            if kind == "reload":
                record["digest"] = _digest(session)
            elif any(trial.document is session.document for trial in session.held()):
                of = self._known().get(id(session.document))  # a state of before is the present again
                if of is not None:
                    return _Told(now, {**record, "of": of})
            return _Told(now, record, last.document, session.document)
        if kind in ("saved", "moved"):
            record = {"e": kind, "digest": _digest(session)}
            if kind == "moved":
                record["path"] = str(session.path.absolute()) if session.path else ""
            return _Told(now, record, move=session.path if kind == "moved" else None)
        if kind == "trials":
            return self._told_trials(now)
        return _Told(now, {"e": kind})

    def _told_trials(self, now: float) -> _Told:
        """All trials as they are now; most are states that the journal knows already."""
        session = self._session
        known = self._known() | {id(session.document): "present"}
        held: list[tuple[Trial, Any]] = []
        for number, trial in enumerate([*session.trials, *([session.reference] if session.reference else [])]):
            held.append((trial, known.get(id(trial.document))))
            known.setdefault(id(trial.document), ["row", number])
        self._held = tuple(trial.document for trial, _ in held)
        record = {"e": "trials", "reference": session.reference is not None}
        return _Told(now, record, held=tuple(held), base=session.document)

    def _known(self) -> dict[int, Any]:
        """Where the replay finds the documents that the journal knows already."""
        session = self._session
        known: dict[int, Any] = {id(document): ["held", k] for k, document in enumerate(self._held)}
        known |= {id(step.document): ["undone", k] for k, step in enumerate(session.undone)}
        known |= {id(step.document): ["done", k] for k, step in enumerate(session.done)}
        return known | ({id(session.saved): "saved"} if session.saved is not None else {})

    def _packed(self, spot: Any) -> Any:
        try:
            return self._pack(spot)
        except TypeError:  # a place of the cursor is not worth an edit
            return None

    def _put(self, told: _Told) -> None:
        self._started = True
        self._queue.put(told)
        if self._thread is None:
            self._thread = threading.Thread(target=self._run, name="journal", daemon=True)
            self._thread.start()

    def _wait(self, wait: _Wait, seconds: float) -> bool:
        if self._thread is None or self._closed:
            return True
        self._queue.put(wait)
        return wait.passed.wait(seconds) and wait.done

    # -- the thread

    def _run(self) -> None:
        end = False
        while not end:
            waits: list[_Wait] = []
            try:
                item = self._queue.get(timeout=RETRY if self._pending else None)
                while True:
                    if isinstance(item, _Wait):
                        waits.append(item)
                    else:
                        self._take(item)
                    item = self._queue.get_nowait()
            except queue.Empty:
                pass
            self._write()
            for wait in waits:
                wait.done = not self._pending and not self._broken
                if wait.end:
                    end = True
                    self._end(wait.remove)
                wait.passed.set()

    def _take(self, told: _Told) -> None:
        """Turn what was told into a line that waits to be written."""
        if self._broken:
            return
        try:
            record = self._record(told)
            line = lines.encode({"n": self._number + 1, "t": round(told.when, 3), **record})
            if told.move is not None:
                self._write()
                self._move(told.move)
        except Exception as error:  # a fault of ours must not end the thread, nor be kept from the user
            self._give_up(error)
            return
        self._number += 1
        self._pending.append(line)

    def _record(self, told: _Told) -> Record:
        record = dict(told.record)
        if told.before is not None and told.after is not None:
            record["patch"] = difference(told.before, told.after)
        if told.base is not None:
            record["trials"] = [
                {
                    "name": trial.name,
                    "when": trial.when,
                    "of": difference(told.base, trial.document) if of is None else of,
                }
                for trial, of in told.held
            ]
        return record

    def _write(self) -> None:
        """Bring the waiting lines to the disk, in this place or the next; else say why they wait."""
        if not self._pending:
            return
        try:
            try:
                if self._handle < 0:
                    self._create(self._places())
                elif not self._at_its_name():
                    self._again(self._places())
                else:
                    self._append(b"".join(self._pending))
            except OSError:
                if self._handle < 0:
                    raise
                here = self.name.parent if self.name is not None else None
                self._again([place for place in self._places() if place.parent != here])
        except OSError as error:
            why = (error.strerror or str(error)).lower()
            self.trouble = f"the journal cannot be written ({why}): save soon"
            return
        except Exception as error:
            self._give_up(error)
        else:
            self.trouble = "" if not self._broken else self.trouble
        self._pending.clear()

    def _give_up(self, error: Exception) -> None:
        """A fault of ours: what is written stays good, but nothing can follow it."""
        self._broken, self.trouble = (
            True,
            f"the journal cannot go on, save soon: a fault of this program{log.told(error)}",
        )

    def _places(self) -> list[FilePath]:
        return places.candidates(self._project)

    def _header(self, locked: bool) -> bytes:
        if self._head is None:
            self._head = lines.header(*self._start, time.time())
        return lines.encode(lines.signed(self._head, replace(places.me(), locked=locked)))

    def _create(self, choice: list[FilePath], middle: bytes = b"") -> None:
        """Make the file at the first place that takes it: header, ``middle``, and the waiting lines."""
        problem: OSError | None = None
        for first in choice:
            try:
                places.make_folder(first)
                self._create_at(first, middle)
            except OSError as error:
                problem = problem or error
            else:
                return
        raise problem or OSError(0, "there is no place for it")

    def _create_at(self, first: FilePath, middle: bytes) -> None:
        for name in places.numbered(first):
            try:
                flags = os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC | os.O_NOFOLLOW
                handle = os.open(name, flags, self._mode())
            except FileExistsError:
                continue
            try:
                data = self._header(places.lock(handle) is True) + middle + b"".join(self._pending)
                _write_all(handle, data)
                os.fsync(handle)
            except BaseException:
                with contextlib.suppress(OSError):
                    os.unlink(name)
                os.close(handle)
                raise
            places.sync_folder(name.parent)
            self._handle, self._length, self.name = handle, len(data), name
            return
        raise OSError(0, "too many journals are there already")

    def _mode(self) -> int:
        """Who may read the journal: whoever may read the project, since it holds the same."""
        with contextlib.suppress(OSError):
            if self._project is not None:
                return (stat.S_IMODE(os.stat(self._project).st_mode) & 0o666) | 0o600
        return 0o600

    def _append(self, data: bytes) -> None:
        try:
            _write_all(self._handle, data, self._length)
            _sync(self._handle)
        except OSError:
            with contextlib.suppress(OSError):
                os.ftruncate(self._handle, self._length)
            raise
        self._length += len(data)

    def _at_its_name(self) -> bool:
        """Whether the name still leads to our file; it may have been removed or replaced under us."""
        try:
            there, ours = os.stat(self.name or ""), os.fstat(self._handle)
        except FileNotFoundError:
            return False
        return (there.st_dev, there.st_ino) == (ours.st_dev, ours.st_ino)

    def _again(self, choice: list[FilePath]) -> None:
        """Write the whole journal anew at one of other places, and let the old file go. Raises OSError."""
        old, old_name, length = self._handle, self.name, self._length
        content = os.pread(old, length, 0)
        at = content.find(b"\n") + 1
        ours = self._at_its_name()
        self._create(choice, content[at:])
        if ours and old_name is not None:
            with contextlib.suppress(OSError):
                os.unlink(old_name)
        os.close(old)

    def _move(self, project: FilePath) -> None:
        """The project has another file now: the journal goes there."""
        self._project = project
        if self._head is not None:
            self._head = {**self._head, "path": str(project.absolute())}
        else:
            document, _, digest, clean = self._start
            self._start = (document, project, digest, clean)
        if self._handle >= 0:
            with contextlib.suppress(OSError):  # else it stays where it is
                self._again(self._places())

    def _end(self, remove: bool) -> None:
        if self._handle < 0:
            return
        if remove:
            with contextlib.suppress(OSError):
                if self._at_its_name():
                    os.unlink(self.name or "")
        os.close(self._handle)
        self._handle = -1


def _digest(session: Session) -> str | None:
    return session.fingerprint.digest if session.fingerprint else None


def _open_journal(name: FilePath) -> tuple[int, bool]:
    """Open an existing journal; whether it can be written to. Raises OSError, also for what is no ordinary file."""
    flags = os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK
    try:
        handle, whole = os.open(name, os.O_RDWR | flags), True
    except PermissionError:
        handle, whole = os.open(name, os.O_RDONLY | flags), False
    except OSError as error:
        if error.errno != errno.EROFS:
            raise
        handle, whole = os.open(name, os.O_RDONLY | flags), False
    if not stat.S_ISREG(os.fstat(handle).st_mode):
        os.close(handle)
        raise OSError(0, "it is no ordinary file")
    return handle, whole


def _write_all(handle: int, data: bytes, at: int = 0) -> None:
    view = memoryview(data)
    while view:
        count = os.pwrite(handle, view, at)
        view, at = view[count:], at + count


def _sync(handle: int) -> None:
    getattr(os, "fdatasync", os.fsync)(handle)
