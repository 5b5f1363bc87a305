"""Who has a project open: a hidden lock file beside it, from opening to leaving, that names its holder.

The kernel's lock on that file decides, where there is one: it goes with the process that held it, however that ended.
On a network folder it may not work, or not between machines. There the file itself decides: its holder touches it from
time to time, and by the number of a process on this machine, or by how long ago a file of another one was touched, a
dead holder is told from a living one. That time is taken from the clock of the file server on both sides, so that it
does not matter how the clocks of the machines stand.

A lock only warns; what keeps a file from being overwritten unseen is the comparison before each save.
"""

from __future__ import annotations

import contextlib
import errno
import json
import os
import stat
import tempfile
import threading
import time
from dataclasses import dataclass, replace
from pathlib import Path as FilePath

from budget.keeping import places
from budget.keeping.places import Owner
from budget.project.problems import printable

SUFFIX = ".lock"
BEAT = 30.0  # seconds between two touches
STALE = 120.0  # seconds after which a file that nobody touched has no holder any more
_LONGEST = 4096  # bytes of a lock file
_TRIES = 20  # when others take or leave the lock at the same moment
_NOT_OURS = (errno.EACCES, errno.EPERM, errno.EROFS)  # a folder that is not written to needs no lock in it


@dataclass(frozen=True, slots=True)
class Holder:
    """Who has a project open; ``owner`` is None where the lock file does not tell."""

    owner: Owner | None
    since: float  # seconds, by its clock
    stamp: tuple[int, int]  # which file it is, and when it was touched last
    noticed: float  # when this state of the file was first seen here, by a clock that never jumps

    def told(self) -> str:
        """Who, where and since when: "mia on lab3 has it open since 14:02"."""
        if self.owner is None:
            return "another session has it open"
        user, host = printable(self.owner.user, 16) or "somebody", printable(self.owner.host, 20)
        where = "in another session" if self.owner.here else f"on {host}"
        where = f"on {host} (process {self.owner.pid})" if self.owner.here and host else where
        since = _clock(self.since)
        return f"{user} {where} has it open{f' since {since}' if since else ''}"


def _clock(when: float) -> str:
    """A time as hours and minutes, with the date where that is not today; "" where it is none."""
    try:
        then, now = time.localtime(when), time.localtime()
        return time.strftime("%H:%M" if then[:3] == now[:3] else "%Y-%m-%d %H:%M", then) if when > 0 else ""
    except (OverflowError, ValueError, OSError):
        return ""


def names(project: FilePath) -> list[FilePath]:
    """Where the lock of a project may be: beside the real file, else in the user's state folder."""
    return [name.with_suffix(SUFFIX) for name in places.candidates(project)]


def take(project: FilePath, before: Holder | None = None) -> Lock | Holder:
    """Take the lock of a project; who has it, if another session does.

    ``before`` is what an earlier try gave. Never raises: a lock that cannot be made says so in its ``trouble``.
    """
    with contextlib.suppress(OSError):  # a relative path means nothing once the folder it starts from is gone
        project = FilePath(os.path.realpath(project))
    found = _claim(project, before)
    return found if isinstance(found, Holder) else Lock(project, found)


@dataclass(frozen=True, slots=True)
class _Claim:
    """A lock file that is ours; without a ``name`` there is none."""

    name: FilePath | None = None
    handle: int = -1
    trouble: str = ""

    def ours(self) -> bool:
        """Whether the name still leads to our file: another may have taken it over, or somebody removed it."""
        try:
            there, here = os.stat(self.name or "", follow_symlinks=False), os.fstat(self.handle)
        except OSError:
            return False
        return (there.st_dev, there.st_ino) == (here.st_dev, here.st_ino)


class Lock:
    """The lock of one open project, kept alive by a thread of its own: a stalled terminal must not let it go stale."""

    def __init__(self, project: FilePath, claim: _Claim) -> None:
        self._project = project
        self._claim = claim
        self._busy = threading.Lock()
        self._ended = threading.Event()
        self.lost: Holder | None = None  # who has taken it over while this process could not keep it
        if claim.name is not None:
            threading.Thread(target=self._run, name="lock", daemon=True).start()

    @property
    def name(self) -> FilePath | None:
        """The lock file, None where there is none."""
        return self._claim.name

    @property
    def trouble(self) -> str:
        """Why another session may go unnoticed; "" where it will not."""
        return self._claim.trouble

    def check(self) -> Holder | None:
        """Touch the lock file, and make it anew where it was removed; who has taken it over, if another has."""
        with self._busy:
            if self._claim.name is None or self._ended.is_set() or self.lost is not None:
                return self.lost
            if self._claim.ours():
                with contextlib.suppress(OSError):
                    os.utime(self._claim.handle)
                return None
            found = _claim(self._project, None)
            os.close(self._claim.handle)
            if isinstance(found, Holder):
                self.lost, self._claim = found, _Claim()
            else:
                self._claim = found
            return self.lost

    def release(self) -> None:
        """Let it go and remove its file."""
        with self._busy:
            self._ended.set()
            claim, self._claim = self._claim, _Claim()
            if claim.name is None:
                return
            if claim.ours():
                with contextlib.suppress(OSError):
                    os.unlink(claim.name)
            os.close(claim.handle)

    def _run(self) -> None:
        while not self._ended.wait(BEAT):
            self.check()


def _claim(project: FilePath, before: Holder | None) -> _Claim | Holder:
    """Take the lock at the best place that allows it."""
    why = ""
    try:
        choice = names(project)
    except OSError as error:
        choice, why = [], (error.strerror or str(error)).lower()
    for name in choice:
        try:
            found = _claim_at(name, project, before)
        except OSError as error:
            if error.errno not in _NOT_OURS and not why:
                why = (error.strerror or str(error)).lower()
            continue
        if why and isinstance(found, _Claim):
            return replace(found, trouble=f"no lock beside the file ({why}): other users will not notice this session")
        return found
    why = why or "permission denied"
    return _Claim(trouble=f"no lock can be made ({why}): another session on this file will not be noticed")


def _claim_at(name: FilePath, project: FilePath, before: Holder | None) -> _Claim | Holder:
    """Take the lock at one place. Raises OSError where nobody holds it there and it cannot be made."""
    problem: OSError | None = None
    draft = None
    try:
        draft = _Draft(name, project)
    except OSError as error:  # there may be the lock of somebody who may write here
        problem = error
    try:
        for _ in range(_TRIES):
            found = _look(name, draft.now if draft else time.time(), before)
            if found is not None:
                return found
            if draft is None:
                raise problem or OSError(errno.EACCES, "Permission denied")
            if draft.publish(name):
                return draft.claim(name)
        raise OSError(errno.EBUSY, "others take and leave it all the time")
    finally:
        if draft is not None:
            draft.close()


class _Draft:
    """Our lock file under a name of its own, locked and complete before anybody sees it."""

    def __init__(self, name: FilePath, project: FilePath) -> None:
        places.make_folder(name)
        # Named as a save names its temporary file, so that one that a crash leaves is swept away like those.
        self.handle, self.path = tempfile.mkstemp(
            prefix=f"{name.name.removesuffix(SUFFIX)}.", suffix=".new", dir=name.parent
        )
        try:
            self.locked = places.lock(self.handle)
            line = _line(replace(places.me(), locked=self.locked is True))
            os.write(self.handle, line)
            os.fchmod(self.handle, _mode(project))
            os.fsync(self.handle)
            self.now = os.fstat(self.handle).st_mtime  # the present time by the clock of the file server
        except BaseException:
            self.close()
            raise

    def publish(self, name: FilePath) -> bool:
        """Give it its name; False where another was quicker."""
        try:
            os.link(self.path, name, follow_symlinks=False)
        except FileExistsError:
            return False
        except OSError as error:
            if error.errno not in (errno.EPERM, errno.EOPNOTSUPP, errno.ENOSYS):
                raise
            if os.path.lexists(name):
                return False
            os.rename(self.path, name)  # no hard links here: a short gap in which two may take it at once
            self.path = ""
        return True

    def claim(self, name: FilePath) -> _Claim:
        handle, self.handle = self.handle, -1
        trouble = "" if self.locked else "locks do not work in this folder: another session may go unnoticed"
        return _Claim(name, handle, trouble)

    def close(self) -> None:
        if self.path:
            with contextlib.suppress(OSError):
                os.unlink(self.path)
            self.path = ""
        if self.handle >= 0:
            os.close(self.handle)
            self.handle = -1


def _look(name: FilePath, now: float, before: Holder | None) -> Holder | None:
    """Who holds the lock at ``name``; None where nobody does, and a file that a dead holder left is removed."""
    try:
        handle = os.open(name, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)
    except FileNotFoundError:
        return None
    except OSError:  # another user's, on a file system where one may at least ask
        handle = os.open(name, os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)
    try:
        state = os.fstat(handle)
        if not stat.S_ISREG(state.st_mode):
            raise OSError(errno.EEXIST, "what is no lock stands in its place")
        free = places.lock(handle)
        owner, since = _read(os.pread(handle, _LONGEST, 0))
        stamp, noticed = (state.st_ino, state.st_mtime_ns), time.monotonic()
        silent = now - state.st_mtime
        if before is not None and before.stamp == stamp:
            noticed = before.noticed
            silent = max(silent, time.monotonic() - noticed)
        if free is False or (owner is not None and _alive(owner, free is True, silent)):
            return Holder(owner, since, stamp, noticed)
        if _Claim(name, handle).ours():
            os.unlink(name)
        return None
    finally:
        os.close(handle)


def _alive(owner: Owner, free: bool, silent: float) -> bool:
    """Whether the holder lives: its lock is free, or locks do not work; it was silent for so many seconds."""
    if owner.here and free and owner.locked:
        return False
    if owner.here and owner.born.partition("-")[0] == places.born(os.getpid()).partition("-")[0]:
        return owner.alive
    return silent < STALE  # another machine, or this one before it was started anew


def _mode(project: FilePath) -> int:
    """Who may read the lock: whoever may read the project."""
    with contextlib.suppress(OSError):
        return (stat.S_IMODE(os.stat(project).st_mode) & 0o666) | 0o600
    return 0o600


def _line(owner: Owner) -> bytes:
    told = {"host": owner.host, "user": owner.user, "pid": owner.pid, "born": owner.born, "locked": owner.locked}
    return json.dumps({**told, "since": round(time.time(), 3)}).encode() + b"\n"


def _read(line: bytes) -> tuple[Owner | None, float]:
    """The holder in a lock file; anybody may have written anything there."""
    try:
        match json.loads(line):
            case {"host": str(host), "user": str(user), "pid": int(pid), "born": str(born), **more}:
                since = more.get("since")
                when = float(since) if isinstance(since, (int, float)) else 0.0
                return Owner(host, user, min(pid, 2**31 - 1), born, more.get("locked") is True), when
    except (ValueError, OverflowError, RecursionError):
        pass
    return None, 0.0
