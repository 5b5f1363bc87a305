"""Project files on disk: read with everything they include, written so that a crash leaves the old one or the new one.

Reading refuses what cannot be a project (a folder, a device, a file of many megabytes) with a sentence. Writing goes
through a temporary file in the same folder that is parsed back and compared before it takes the old one's place.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import stat
import tempfile
from dataclasses import dataclass
from pathlib import Path as FilePath

from budget.project import permit, toml_load, toml_text
from budget.project.build import Shelf
from budget.project.document import Document, Tree, from_data
from budget.project.problems import Problem, ProjectError, found, printable

MAX_BYTES = 1_000_000  # of a project with all its shelf files; one of 200 converters has a quarter of this
MAX_SHELVES = 50
MAX_NAMES = 200  # of shelf files, those that are named twice or do not exist included


class ChangedOnDiskError(ProjectError):
    """The file is no longer the one that was read or written last."""


@dataclass(frozen=True, slots=True)
class Fingerprint:
    """What tells one state of a file from another; the digest decides, the rest saves reading it."""

    mtime_ns: int
    size: int
    inode: int
    digest: str


@dataclass(frozen=True, slots=True)
class Loaded:
    document: Document
    shelves: tuple[Shelf, ...]
    problems: tuple[Problem, ...]
    fingerprint: Fingerprint | None


@dataclass(frozen=True, slots=True)
class Saved:
    fingerprint: Fingerprint
    notes: tuple[str, ...]


def load(path: FilePath, most: int = MAX_BYTES) -> Loaded:
    """Read a project of at most ``most`` bytes and the shelf files it names.

    Raises ProjectError, a sentence, where the file itself is unusable; what is wrong with an included file is a
    problem of the result, so that the project still opens.
    """
    raw, mark = _read_bytes(path, most)
    return parse(_decode(raw, path.name), path.parent, path.name, mark, most)


def parse(
    text: str, folder: FilePath | None, name: str, mark: Fingerprint | None = None, most: int = MAX_BYTES
) -> Loaded:
    """A document from ``text``; ``folder`` is where its shelf files are looked for (None: nowhere)."""
    if len(text) > most:
        raise ProjectError(_too_large(name, len(text), most))
    data = toml_load.load(text, _shown(name))
    problems: list[Problem] = []
    shelves = _shelves(data, folder, name, len(text), problems) if folder is not None else ()
    return Loaded(from_data(data, text), shelves, tuple(problems), mark)


def read_shelves(data: Tree, path: FilePath) -> tuple[tuple[Shelf, ...], tuple[Problem, ...]]:
    """The shelf files that ``data``, the project at ``path``, names now, and what is wrong with them."""
    problems: list[Problem] = []
    try:
        size = os.path.getsize(path)
    except (OSError, ValueError):  # it has no file at present
        size = 0
    return _shelves(data, path.parent, path.name, size, problems), tuple(problems)


def fingerprint(path: FilePath) -> Fingerprint | None:
    """The present state of a file, None where there is none; raises ProjectError if it cannot be read."""
    try:
        return _read_bytes(path)[1]
    except NoFileError:
        return None


def changed(path: FilePath, known: Fingerprint) -> bool:
    """Whether the file differs from the state ``known``; reads it only where its times or size differ."""
    try:
        now = os.stat(path)
    except (OSError, ValueError):
        return True
    if (now.st_mtime_ns, now.st_size, now.st_ino) == (known.mtime_ns, known.size, known.inode):
        return False
    try:
        state = fingerprint(path)
    except ProjectError:
        return True
    return state is None or state.digest != known.digest


def save(document: Document, path: FilePath, known: Fingerprint | None, *, over: bool = False) -> Saved:
    """Write the document to ``path`` atomically; mode and symbolic link are kept.

    ``known`` is the state of the file when it was read or written last (None: it must not exist yet). Raises
    ChangedOnDiskError where it is in another state and ``over`` does not say to write all the same; ProjectError where
    it cannot be written. Nothing on disk has changed when it raises.
    """
    if not over:
        if known is None and os.path.lexists(path):
            raise ChangedOnDiskError(f"{_shown(path)} exists already; nothing was written.")
        if known is not None and not os.path.exists(path):
            raise ChangedOnDiskError(
                f"{_shown(path)} has been removed or renamed since it was read; nothing was written."
            )
        if known is not None and changed(path, known):
            raise ChangedOnDiskError(
                f"{_shown(path)} was changed by someone else since it was read; nothing was written."
            )
    rendered = render(document)
    return Saved(write_text(path, rendered.text), rendered.notes)


def render(document: Document) -> toml_text.Rendered:
    """The document as text, proven to read back as the same values; raises ProjectError if it would not."""
    try:
        if document.text:
            rendered = toml_text.render(document.text, document.data, document.origin)
        else:
            rendered = toml_text.Rendered(toml_text.dump(document.data), ())
        same = toml_text.same(toml_load.loads(rendered.text.removeprefix("\ufeff")), document.data)
    except (ValueError, RecursionError) as error:  # a number of thousands of digits, brackets nested too deep
        raise ProjectError(f"the text to be saved would not read back ({error}); nothing was written.") from error
    if not same:
        raise ProjectError("the text to be saved would read back with other values; nothing was written.")
    return rendered


def write_text(path: FilePath, text: str) -> Fingerprint:
    """Replace a file by ``text`` in one step; its mode, its owner where allowed, and a link to it are kept."""
    data = text.encode("utf-8")
    temporary = ""
    try:
        target = FilePath(os.path.realpath(path))
        old = os.stat(target) if target.exists() else None
        if old is not None and not stat.S_ISREG(old.st_mode):
            raise NotWrittenError(f"{_shown(path)} is not an ordinary file; nothing was written.")
        handle, temporary = tempfile.mkstemp(prefix=f".{target.name}.", suffix=".new", dir=target.parent)
        with os.fdopen(handle, "wb") as out:
            out.write(data)
            out.flush()
            if old is not None:
                os.fchmod(out.fileno(), stat.S_IMODE(old.st_mode))
                with contextlib.suppress(OSError):
                    os.fchown(out.fileno(), old.st_uid, old.st_gid)
            else:
                umask = os.umask(0)
                os.umask(umask)
                os.fchmod(out.fileno(), 0o666 & ~umask)
            os.fsync(out.fileno())
            written = os.fstat(out.fileno())  # now: behind the new name another file may stand a moment later
        os.replace(temporary, target)
        temporary = ""
        _sync_folder(target.parent)
    except (OSError, ValueError) as error:
        why = f"{_shown(path)} could not be written: {_reason(error)}. Nothing was changed."
        raise NotWrittenError(why) from error
    finally:
        if temporary:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
    return Fingerprint(written.st_mtime_ns, written.st_size, written.st_ino, hashlib.sha256(data).hexdigest())


def same_place(one: FilePath, two: FilePath) -> bool:
    """Whether two paths lead to the same place, links followed; False where that cannot be told."""
    try:
        return os.path.realpath(one) == os.path.realpath(two)
    except (OSError, ValueError):  # the folder that a relative path starts from is gone
        return False


def free_name(path: FilePath, word: str) -> FilePath:
    """A name beside ``path`` that is not taken: bus.toml -> bus.mine-1.toml."""
    number = 1
    while os.path.lexists(new := path.with_name(f"{path.stem}.{word}-{number}{path.suffix}")):
        number += 1
    return new


def put_copy(source: FilePath, target: FilePath) -> None:
    """Put the present content of a file, whatever it is, under a new name; raises ProjectError, a sentence."""
    raw, _ = _read_bytes(source)
    begun = False
    try:
        handle = os.open(target, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o666)
        begun = True
        with os.fdopen(handle, "wb") as out:
            out.write(raw)
            out.flush()
            os.fsync(out.fileno())
    except OSError as error:
        if begun:
            with contextlib.suppress(OSError):
                os.unlink(target)
        raise NotWrittenError(f"{_shown(target)} could not be written: {_reason(error)}.") from error


def copy_shelves(names: list[str], source: FilePath, target: FilePath) -> None:
    """Bring the shelf files of a project along when it is saved into another folder.

    ``names`` are those of ``Shelf.name``. Raises ProjectError where a different file of such a name stands there
    already, before anything has been written.
    """
    wanted: list[tuple[FilePath, str]] = []
    into = FilePath(os.path.realpath(target))
    for name in names:
        old, new = source / name, target / name
        if not os.path.exists(old):
            continue
        if os.path.realpath(old) == os.path.realpath(new):  # an absolute name; it means the same file from anywhere
            continue
        if not is_below(name) or not FilePath(os.path.realpath(new)).is_relative_to(into):
            raise ProjectError(
                f"the shelf file {_shown(name)} cannot be brought along: it would be written outside "
                f"{_shown(target)}. Copy it yourself and name it in shelf_files; nothing was written."
            )
        raw = _read_bytes(old)[0]
        if not os.path.lexists(new):
            wanted.append((new, _decode(raw, name)))
        elif _read_bytes(new)[0] != raw:
            raise ProjectError(f"another {_shown(name)} stands in {_shown(target)} already; nothing was written.")
    for new, text in wanted:
        try:
            new.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise ProjectError(f"{_shown(new)} could not be written: {_reason(error)}.") from error
        write_text(new, text)


class NotWrittenError(ProjectError):
    """The system did not let the file be written."""


class NoFileError(ProjectError):
    """There is no such file."""


def _read_bytes(path: FilePath, most: int = MAX_BYTES) -> tuple[bytes, Fingerprint]:
    try:
        if not stat.S_ISREG((now := os.stat(path)).st_mode) and not stat.S_ISDIR(now.st_mode):
            raise ProjectError(f"{_shown(path)} is not an ordinary file; a project file was expected.")  # never opened
        with open(path, "rb", opener=_open_without_waiting) as handle:
            info = os.fstat(handle.fileno())
            if not stat.S_ISREG(info.st_mode):
                raise ProjectError(f"{_shown(path)} is not an ordinary file; a project file was expected.")
            if info.st_size > most:
                raise ProjectError(_too_large(path, info.st_size, most))
            raw = handle.read(most + 1) or b""  # None where the system has files that wait for what is not there yet
    except FileNotFoundError as error:
        name = _shown(path)
        raise NoFileError(
            f"{name} does not exist; an existing project file was expected ('budget new {name}' writes one)."
        ) from error
    except IsADirectoryError as error:
        raise ProjectError(f"{_shown(path)} is a folder; a project file was expected.") from error
    except (OSError, ValueError) as error:
        raise ProjectError(f"{_shown(path)} could not be read: {_reason(error)}.") from error
    if len(raw) > most:
        raise ProjectError(_too_large(path, len(raw), most))
    return raw, Fingerprint(info.st_mtime_ns, info.st_size, info.st_ino, hashlib.sha256(raw).hexdigest())


def _open_without_waiting(name: str, flags: int) -> int:
    return os.open(name, flags | os.O_NONBLOCK | os.O_CLOEXEC)  # a pipe without a writer must not hang the program


def _shown(path: FilePath | str) -> str:
    return printable(str(path), 200)


def _too_large(path: FilePath | str, size: int, most: int) -> str:
    found = f"{_shown(path)} has {size / 1e6:.1f} MB"
    if most > MAX_BYTES:
        return f"{found}; at most {most / 1e6:.0f} MB were expected."
    return f"{found}; a project file has at most {MAX_BYTES / 1e6:.0f} MB, with all its shelf files together."


def _reason(error: BaseException) -> str:
    return (error.strerror or str(error)).lower() if isinstance(error, OSError) else str(error)


def _decode(raw: bytes, name: str) -> str:
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise ProjectError(
            f"{_shown(name)}: line {line}: a byte that is not UTF-8 was found; UTF-8 text was expected."
        ) from error


def _shelves(data: Tree, folder: FilePath, own: str, size: int, problems: list[Problem]) -> tuple[Shelf, ...]:
    """Every shelf file that the project ``own`` of ``size`` bytes names, and those these name.

    Faults become problems of ``shelf_files``.
    """
    root = FilePath(os.path.realpath(folder))
    shelves: dict[FilePath, Shelf] = {}
    named = 0  # names looked at, of all files: each costs a look at the disk
    left = MAX_BYTES - size

    def take(names: object, base: str, chain: tuple[FilePath, ...], source: str) -> None:
        nonlocal named
        if not isinstance(names, list):
            return
        for name in names:
            if not isinstance(name, str):
                continue
            named += 1
            fault = f"there are more than {MAX_NAMES} names of shelf files; the others are not read."
            for line in (take_one(name, base, chain) if named <= MAX_NAMES else fault).splitlines():
                problems.append(Problem(("shelf_files",), line, source=source, place="shelf_files"))
            if named > MAX_NAMES:
                return

    def take_one(name: str, base: str, chain: tuple[FilePath, ...]) -> str:
        nonlocal left
        shown = os.path.normpath(os.path.join(base, name))
        try:
            path = FilePath(os.path.realpath(root / base / name))
        except (OSError, ValueError):
            return f"{found(name)} is not a file name."
        inside = is_below(shown) and path.is_relative_to(root)
        if not inside and not permit.allowed(path):
            return (
                f"{found(name)} lies outside the project's folder, and only shelf files below it are read; "
                "'--shelf-from FOLDER' on the command line allows those below another folder."
            )
        if path in chain:
            return f"{found(name)} includes itself, round in a circle; each shelf file may be named once on the way."
        if path in shelves:
            return ""
        if len(shelves) >= MAX_SHELVES:
            return f"{found(name)} is one too many; at most {MAX_SHELVES} shelf files are read."
        try:
            raw, _ = _read_bytes(path, left)
            inner = toml_load.load(_decode(raw, shown), _shown(shown))
        except NoFileError:
            return f"{found(name)} does not exist; a file of shelf parts was expected."
        except ProjectError as error:
            return str(error)
        left -= len(raw)
        shelves[path] = Shelf(shown, inner)
        for key in inner:
            if key not in ("format", "shelf", "shelf_files", "note"):
                text = "is an unknown key in a shelf file; it is not used."
                problems.append(Problem(("shelf_files",), text, False, shown, printable(key)))
        take(inner.get("shelf_files"), os.path.dirname(shown), (*chain, path), shown)
        return ""

    take(data.get("shelf_files"), "", (FilePath(os.path.realpath(root / own)),), "")
    return tuple(shelves.values())


def is_below(name: str) -> bool:
    """Whether the name of a shelf file leads from the project's folder down, as far as the name tells."""
    return not os.path.isabs(name) and os.path.normpath(name).split(os.sep)[0] != os.pardir


def _sync_folder(folder: FilePath) -> None:
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
