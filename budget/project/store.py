"""Project files on disk: read with everything they include, written so that a crash leaves the old one or the new one.

Reading refuses what cannot be a project (a folder, a device, a file of many megabytes) with a sentence. Writing goes
through a temporary file in the same folder that is parsed back and compared before it takes the old one's place.
"""

from __future__ import annotations

import contextlib
import hashlib
import itertools
import os
import re
import stat
import tempfile
import tomllib
from dataclasses import dataclass
from pathlib import Path as FilePath

from budget.project import toml_text
from budget.project.build import Shelf
from budget.project.document import Document, Tree, from_data
from budget.project.problems import Problem, ProjectError, found, printable

MAX_BYTES = 2_000_000  # a project of 200 converters has a tenth of this
MAX_SHELVES = 50
MAX_FAULTS = 20  # of the TOML syntax, told at once


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


def load(path: FilePath) -> Loaded:
    """Read a project and the shelf files it names.

    Raises ProjectError, a sentence, where the file itself is unusable; what is wrong with an included file is a
    problem of the result, so that the project still opens.
    """
    raw, mark = _read_bytes(path)
    return parse(_decode(raw, path.name), path.parent, path.name, mark)


def parse(text: str, folder: FilePath | None, name: str, mark: Fingerprint | None = None) -> Loaded:
    """A document from ``text``; ``folder`` is where its shelf files are looked for (None: nowhere)."""
    data = _parse_toml(text, name)
    problems: list[Problem] = []
    shelves = _shelves(data, folder, name, problems) if folder is not None else ()
    return Loaded(from_data(data, text), shelves, tuple(problems), mark)


def read_shelves(data: Tree, path: FilePath) -> tuple[tuple[Shelf, ...], tuple[Problem, ...]]:
    """The shelf files that ``data``, the project at ``path``, names now, and what is wrong with them."""
    problems: list[Problem] = []
    return _shelves(data, path.parent, path.name, problems), tuple(problems)


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
        same = toml_text.same(tomllib.loads(rendered.text.removeprefix("\ufeff")), document.data)
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
            raise ProjectError(f"{_shown(path)} is not an ordinary file; nothing was written.")
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
        os.replace(temporary, target)
        temporary = ""
        _sync_folder(target.parent)
        written = os.stat(target)
    except (OSError, ValueError) as error:
        raise ProjectError(f"{_shown(path)} could not be written: {_reason(error)}. Nothing was changed.") from error
    finally:
        if temporary:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
    return Fingerprint(written.st_mtime_ns, written.st_size, written.st_ino, hashlib.sha256(data).hexdigest())


def free_name(path: FilePath, word: str) -> FilePath:
    """A name beside ``path`` that is not taken: bus.toml -> bus.mine-1.toml."""
    number = 1
    while (new := path.with_name(f"{path.stem}.{word}-{number}{path.suffix}")).exists():
        number += 1
    return new


def copy_shelves(names: list[str], source: FilePath, target: FilePath) -> None:
    """Bring the shelf files of a project along when it is saved into another folder.

    ``names`` are those of ``Shelf.name``. Raises ProjectError where a different file of such a name stands there
    already, before anything has been written.
    """
    wanted: list[tuple[FilePath, str]] = []
    for name in names:
        old, new = source / name, target / name
        if not os.path.exists(old):
            continue
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


class NoFileError(ProjectError):
    """There is no such file."""


def _read_bytes(path: FilePath) -> tuple[bytes, Fingerprint]:
    try:
        with open(path, "rb", opener=_open_without_waiting) as handle:
            info = os.fstat(handle.fileno())
            if not stat.S_ISREG(info.st_mode):
                raise ProjectError(f"{_shown(path)} is not an ordinary file; a project file was expected.")
            if info.st_size > MAX_BYTES:
                raise ProjectError(_too_large(path, info.st_size))
            raw = handle.read(MAX_BYTES + 1)
    except FileNotFoundError as error:
        name = _shown(path)
        raise NoFileError(
            f"{name} does not exist; an existing project file was expected ('budget new {name}' writes one)."
        ) from error
    except IsADirectoryError as error:
        raise ProjectError(f"{_shown(path)} is a folder; a project file was expected.") from error
    except (OSError, ValueError) as error:
        raise ProjectError(f"{_shown(path)} could not be read: {_reason(error)}.") from error
    if len(raw) > MAX_BYTES:
        raise ProjectError(_too_large(path, len(raw)))
    return raw, Fingerprint(info.st_mtime_ns, info.st_size, info.st_ino, hashlib.sha256(raw).hexdigest())


def _open_without_waiting(name: str, flags: int) -> int:
    return os.open(name, flags | os.O_NONBLOCK | os.O_CLOEXEC)  # a pipe without a writer must not hang the program


def _shown(path: FilePath | str) -> str:
    return printable(str(path), 200)


def _too_large(path: FilePath, size: int) -> str:
    return f"{_shown(path)} has {size / 1e6:.1f} MB; a project file has at most {MAX_BYTES / 1e6:.0f} MB."


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


def _parse_toml(text: str, name: str) -> dict[str, object]:
    body = text.removeprefix("\ufeff")
    try:
        return tomllib.loads(body)
    except tomllib.TOMLDecodeError as error:
        faults = [str(error), *_further_faults(body, str(error))]
        lines = "\n".join(f"{_shown(name)}: {printable(fault, 200)}." for fault in faults[:MAX_FAULTS])
        raise ProjectError(f"{lines}\n{_shown(name)}: valid TOML was expected.") from error
    except (RecursionError, ValueError) as error:
        raise ProjectError(
            f"{_shown(name)}: brackets nested too deep or a number too long; a project file was expected."
        ) from error


_HEADER = re.compile(r"^\s*\[{1,2}[A-Za-z0-9_.\"' -]+\]{1,2}\s*(#.*)?$")
_AT = re.compile(r"\(at line (\d+), column (\d+)\)|\(at end of document\)")


def _further_faults(text: str, first: str) -> list[str]:
    """Syntax faults after the first one, found by reading each table of the file by itself."""
    lines = text.splitlines(keepends=True)
    starts = [0, *(i for i, line in enumerate(lines) if _HEADER.match(line)), len(lines)]
    told = {m.group(0) for m in _AT.finditer(first)}
    faults: list[str] = []
    for start, end in itertools.pairwise(starts):
        try:
            tomllib.loads("".join(lines[start:end]))
        except tomllib.TOMLDecodeError as error:
            where = _AT.search(str(error))
            at = f"(at line {end}, at the end of its table)"
            if where and where.group(1):
                at = f"(at line {int(where.group(1)) + start}, column {where.group(2)})"
            if at not in told and not (end == len(lines) and "(at end of document)" in told):
                faults.append(_AT.sub(at, str(error)))
        except (RecursionError, ValueError):
            break
        if len(faults) >= MAX_FAULTS:
            break
    return faults


def _shelves(data: dict[str, object], folder: FilePath, own: str, problems: list[Problem]) -> tuple[Shelf, ...]:
    """Every shelf file that the project names, and those these name; faults become problems of ``shelf_files``."""
    root = FilePath(os.path.realpath(folder))
    shelves: dict[FilePath, Shelf] = {}

    def take(names: object, base: str, chain: tuple[FilePath, ...], source: str) -> None:
        if not isinstance(names, list):
            return
        for name in names:
            if not isinstance(name, str):
                continue
            for fault in take_one(name, base, chain).splitlines():
                problems.append(Problem(("shelf_files",), fault, source=source, place="shelf_files"))

    def take_one(name: str, base: str, chain: tuple[FilePath, ...]) -> str:
        shown = os.path.normpath(os.path.join(base, name))
        try:
            path = FilePath(os.path.realpath(root / base / name))
        except (OSError, ValueError):
            return f"{found(name)} is not a file name."
        if os.path.isabs(name) or shown.split(os.sep)[0] == "..":
            return f"{found(name)} lies outside the project's folder; a path from this file down was expected."
        if not path.is_relative_to(root):
            return f"{found(name)} lies outside the project's folder; only files below it may be read."
        if path in chain:
            return f"{found(name)} includes itself, round in a circle; each shelf file may be named once on the way."
        if path in shelves:
            return ""
        if len(shelves) >= MAX_SHELVES:
            return f"{found(name)} is one too many; at most {MAX_SHELVES} shelf files are read."
        try:
            inner = _parse_toml(_decode(_read_bytes(path)[0], shown), shown)
        except NoFileError:
            return f"{found(name)} does not exist; a file of shelf parts was expected."
        except ProjectError as error:
            return str(error)
        shelves[path] = Shelf(shown, inner)
        for key in inner:
            if key not in ("format", "shelf", "shelf_files", "note"):
                text = "is an unknown key in a shelf file; it is not used."
                problems.append(Problem(("shelf_files",), text, False, shown, printable(key)))
        take(inner.get("shelf_files"), os.path.dirname(shown), (*chain, path), shown)
        return ""

    take(data.get("shelf_files"), "", (FilePath(os.path.realpath(root / own)),), "")
    return tuple(shelves.values())


def _sync_folder(folder: FilePath) -> None:
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
