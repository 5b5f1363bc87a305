"""Where journals and the log are: beside the project, else in the user's state folder; and who is at work.

A journal is a hidden file beside the project file, so that everybody who opens the project finds it, from any machine
that sees the folder. Where the folder cannot be written to, and for a project without a file, it is in the state
folder under a name made from the project's path.
"""

from __future__ import annotations

import contextlib
import fcntl
import getpass
import hashlib
import os
import re
import socket
import time
from dataclasses import dataclass
from pathlib import Path as FilePath

SUFFIX = ".journal"
PUT_ASIDE = "-old"  # behind the name of a journal whose work was discarded
MOST = 100  # journals of one project, of sessions that ran at once or were never answered for
_STALE = 3600.0  # seconds after which a temporary file of a save is one that a crash has left


def state_folder() -> FilePath:
    """The user's folder for what programs remember; it need not exist yet."""
    named = os.environ.get("XDG_STATE_HOME", "")
    if os.path.isabs(named):
        return FilePath(named) / "budget"
    try:
        return FilePath.home() / ".local" / "state" / "budget"
    except RuntimeError:  # no home
        return FilePath("/nonexistent")


def short(path: FilePath) -> str:
    """A path for the user, with ``~`` for his home."""
    text = str(path)
    with contextlib.suppress(RuntimeError):
        home = str(FilePath.home())
        if len(home) > 1 and text.startswith(home + os.sep):
            return "~" + text[len(home) :]
    return text


def candidates(project: FilePath | None) -> list[FilePath]:
    """The names a journal of ``project`` may have (None: a project without a file), the best first."""
    if project is None:
        return [state_folder() / f"unsaved{SUFFIX}"]
    real = FilePath(os.path.realpath(project))
    digest = hashlib.sha256(os.fsencode(str(real))).hexdigest()[:16]
    name = re.sub(r"[^A-Za-z0-9_.-]", "_", real.name)[:60]
    return [real.with_name(f".{real.name}{SUFFIX}"), state_folder() / f"{name}-{digest}{SUFFIX}"]


def numbered(first: FilePath) -> list[FilePath]:
    """The name and its further ones, for when another session has the first."""
    return [first, *(first.with_name(f"{first.name}{n}") for n in range(2, MOST + 1))]


def put_aside(journal: FilePath) -> FilePath:
    """The name of a journal whose work was discarded."""
    return journal.with_name(journal.name + PUT_ASIDE)


def make_folder(journal: FilePath) -> None:
    """Make the state folder, for this user alone; the folder of a project is never made. Raises OSError."""
    if journal.parent == state_folder():
        journal.parent.mkdir(mode=0o700, parents=True, exist_ok=True)


def sync_folder(folder: FilePath) -> None:
    """See to it that names in ``folder`` outlive a crash, where the file system can."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY | os.O_CLOEXEC)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def sweep(project: FilePath) -> None:
    """Remove temporary files that a save left beside the project when it was killed, long ago."""
    real = FilePath(os.path.realpath(project))
    pattern = re.compile(re.escape(f".{real.name}.") + r"\w{8}\.new")
    with contextlib.suppress(OSError):
        for entry in os.scandir(real.parent):
            if pattern.fullmatch(entry.name) and entry.is_file(follow_symlinks=False):
                left = entry.stat(follow_symlinks=False)
                if left.st_uid == os.getuid() and time.time() - left.st_mtime > _STALE:
                    os.unlink(entry.path)


# -- who is at work


@dataclass(frozen=True, slots=True)
class Owner:
    """A running program: ``born`` tells it from a later one that got the same number; "" where that is not known."""

    host: str
    user: str
    pid: int
    born: str
    locked: bool = False  # whether it holds a lock on its journal for as long as it lives

    @property
    def here(self) -> bool:
        """Whether it ran on this machine."""
        return self.host == host_name()

    @property
    def alive(self) -> bool:
        """Whether it runs still, as far as this machine can tell."""
        if not self.here or self.pid <= 0:
            return False
        try:
            os.kill(self.pid, 0)
        except ProcessLookupError:
            return False
        except OSError:  # it is another user's
            pass
        return not self.born or born(self.pid) in ("", self.born)


def host_name() -> str:
    return socket.gethostname()


def me() -> Owner:
    """This process."""
    try:
        user = getpass.getuser()
    except (KeyError, OSError):
        user = str(os.getuid())
    return Owner(host_name(), user, os.getpid(), born(os.getpid()))


def born(pid: int) -> str:
    """When a process started, in the kernel's own count and with the boot it belongs to; "" where there is none."""
    try:
        with open(f"/proc/{pid}/stat", "rb") as stat, open("/proc/sys/kernel/random/boot_id", encoding="ascii") as boot:
            return f"{boot.read().strip()[:8]}-{int(stat.read().rpartition(b')')[2].split()[19])}"
    except (OSError, ValueError, IndexError):
        return ""


def lock(handle: int) -> bool | None:
    """Lock an open file for as long as it stays open; False where another has it, None where locks do not work."""
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        return None
    return True
