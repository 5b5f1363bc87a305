"""The log of faults of this program: tracebacks go there, never over the sheet; it never grows beyond a bound."""

from __future__ import annotations

import contextlib
import os
import platform
import time
import traceback
from pathlib import Path as FilePath

from budget import __version__
from budget.keeping.places import short, state_folder
from budget.project.problems import printable

MOST = 200_000  # bytes; beyond, the older half goes
_LONGEST = 20_000  # bytes of one entry
_recorded = ""


def place() -> FilePath:
    """Where the log is."""
    return state_folder() / "budget.log"


def record(error: BaseException) -> str:
    """Write down an error with its traceback; the place for the user to read it, "" where it cannot be written."""
    lines = traceback.format_exception(error)
    stamp = time.strftime("%Y-%m-%d %H:%M:%S")
    head = f"-- {stamp}, budget {__version__}, Python {platform.python_version()}, process {os.getpid()}\n"
    body = "".join(lines).encode("ascii", "backslashreplace")
    entry = head.encode() + (body if len(body) <= _LONGEST else body[:5000] + b"\n...\n" + body[-_LONGEST + 5000 :])
    path = place()
    try:
        path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
        _shorten(path, MOST - len(entry))
        handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_APPEND | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
        try:
            os.write(handle, entry + b"\n")
        finally:
            os.close(handle)
    except OSError:
        return ""
    global _recorded
    _recorded = short(path)
    return _recorded


def told(error: BaseException) -> str:
    """What follows the words for a fault: where it is written down, and what it is called."""
    kind = f"{type(error).__name__}: {printable(str(error), 80)}" if str(error) else type(error).__name__
    where = record(error)
    return f": see {where} ({kind})" if where else f" ({kind})"


def recorded() -> str:
    """Where this process has written down a fault; "" where it has met none."""
    return _recorded


def _shorten(path: FilePath, room: int) -> None:
    """Keep the newer half of a log that has no room left, from the start of an entry on."""
    with contextlib.suppress(FileNotFoundError):
        if path.stat().st_size <= room:
            return
        kept = path.read_bytes()[-MOST // 2 :]
        at = kept.find(b"\n-- ")
        temporary = path.with_name(f"{path.name}.{os.getpid()}")
        handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
        with open(handle, "wb") as out:
            out.write(kept[at + 1 :] if at >= 0 else b"")
        os.replace(temporary, path)
