"""What the program does to the machine around it, by the interpreter's own audit events (PEP 578).

While ``watching`` a folder, every file that is opened, renamed, made or removed, every process started, every
connection and every piece of code compiled is looked at. What nobody asked for is kept as a fault and raised at the
end: an exception inside the program could be swallowed there.
"""

from __future__ import annotations

import atexit
import os
import shutil
import sys
import sysconfig
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
# Where the program's own code and data are, which may be read at any time.
_OWN = tuple(
    {
        os.path.realpath(p) + os.sep
        for p in (
            sys.prefix,
            sys.base_prefix,
            sysconfig.get_path("stdlib"),
            sysconfig.get_path("purelib"),
            ROOT / "budget",
            ROOT / "projects",
            ROOT / "tests",
        )
    }
)
_WRITE = os.O_WRONLY | os.O_RDWR | os.O_CREAT | os.O_TRUNC | os.O_APPEND
_PATHS = {
    "os.rename": 2,
    "os.remove": 1,
    "os.unlink": 1,
    "os.mkdir": 1,
    "os.rmdir": 1,
    "os.link": 2,
    "os.symlink": 2,
    "os.chmod": 1,
    "os.chown": 1,
    "os.truncate": 1,
    "os.utime": 1,
    "shutil.rmtree": 1,
}
_NEVER = (
    "subprocess.Popen",
    "os.system",
    "os.exec",
    "os.posix_spawn",
    "os.spawn",
    "os.startfile",
    "os.fork",
    "os.forkpty",
    "os.putenv",
    "socket.connect",
    "socket.bind",
    "socket.sendto",
    "ftplib.connect",
    "smtplib.connect",
    "urllib.Request",
    "webbrowser.open",
    "pty.spawn",
    "ctypes.dlopen",
    "code.__new__",
    "pickle.find_class",
    "marshal.loads",
)

_folder = ""  # what may be read and written; "" while nobody watches
_asked: frozenset[str] = frozenset()  # files that the user himself named
_faults: list[str] = []
_hooked = False


class ReachedError(AssertionError):
    """Something was done that no file and no text may bring about."""


@contextmanager
def watching(folder: Path, asked: frozenset[str] = frozenset()) -> Iterator[None]:
    """Raise ReachedError at the end if anything outside ``folder`` was touched; files ``asked`` for may be read."""
    global _folder, _asked, _hooked
    if not _hooked:
        sys.addaudithook(_hook)
        _hooked = True
    _faults.clear()
    _folder, _asked = os.path.realpath(folder), asked
    try:
        yield
    finally:
        _folder = ""
    if _faults:
        raise ReachedError("; ".join(_faults[:5]))


def _hook(event: str, arguments: tuple[Any, ...]) -> None:
    if not _folder:
        return
    if event == "open":
        _opened(*arguments[:3])
    elif event in _PATHS:
        for name in arguments[: _PATHS[event]]:
            _inside(event, name)
    elif event in ("compile", "exec"):
        _code(event, arguments)
    elif event in _NEVER and not (event == "marshal.loads" and _importing()):
        _faults.append(f"{event} {str(arguments)[:200]}")


def _opened(name: Any, mode: Any, flags: Any) -> None:
    if isinstance(name, int):  # a file that is open already
        return
    place = _real(name)
    writes = isinstance(flags, int) and flags & _WRITE
    if _below(place):
        return
    if writes or not (place.startswith(_OWN) or place in _asked or place in ("/dev/null", "/dev/urandom")):
        _faults.append(f"open {place!r} for {'writing' if writes else 'reading'}")


def _inside(event: str, name: Any) -> None:
    if isinstance(name, str | bytes | os.PathLike) and not _below(_real(name)):
        _faults.append(f"{event} {name!r}")


def _real(name: Any) -> str:
    try:
        return os.path.realpath(os.fsdecode(name))
    except (ValueError, TypeError):
        return repr(name)


def _below(place: str) -> bool:
    return place == _folder or place.startswith(_folder + os.sep)


def _code(event: str, arguments: tuple[Any, ...]) -> None:
    """Code of a module that is imported late is the program's own; any other is somebody else's."""
    code = arguments[0] if event == "exec" else arguments[1]
    name = getattr(code, "co_filename", code)
    if (isinstance(name, str) and (name.startswith(_OWN) or name.startswith("<frozen "))) or _importing():
        return
    _faults.append(f"{event} of {name!r}")


def _importing() -> bool:
    """Whether some module is being imported just now: dataclasses and the like make code of their own then."""
    frame = sys._getframe(2)
    while frame is not None:
        if frame.f_code.co_filename.startswith("<frozen importlib"):
            return True
        frame = frame.f_back  # type: ignore[assignment]
    return False


def scratch() -> Path:
    """A folder for one process, with what a hostile file might like to read beside and below it."""
    base = Path(tempfile.mkdtemp(prefix="budget-fuzz-"))
    atexit.register(shutil.rmtree, base, ignore_errors=True)
    (base / "secret.toml").write_text("[shelf.filter.secret]\nrated_current = 1\n")
    folder = base / "project"
    folder.mkdir()
    (folder / "sub").mkdir()
    (folder / "folder").mkdir()
    (folder / "link.toml").symlink_to("../secret.toml")
    (folder / "out").symlink_to("..")
    (folder / "ring.toml").write_text('shelf_files = ["ring.toml", "sub/ring.toml"]\n')
    (folder / "sub" / "ring.toml").write_text('shelf_files = ["../ring.toml"]\n')
    os.mkfifo(folder / "pipe")
    return folder
