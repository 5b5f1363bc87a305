"""Journals that ended sessions have left, read as far as they are good."""

from __future__ import annotations

import contextlib
import os
import stat
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path as FilePath
from typing import BinaryIO

from budget.keeping import lines, places, replay
from budget.keeping.lines import JournalError, Record
from budget.keeping.places import PUT_ASIDE, short
from budget.keeping.replay import Work
from budget.project.problems import printable

_YOUNG = 60.0  # seconds within which an empty journal may be one that is just being made


@dataclass(frozen=True, slots=True)
class Found:
    """The journal of an ended session: its header, what it comes to, and the ``length`` of its good part in bytes."""

    name: FilePath
    head: Record
    work: Work
    length: int
    size: int
    own: bool  # whether it is this user's, so that it may be removed


@dataclass(frozen=True, slots=True)
class Search:
    """What was found of a project: ended sessions, the latest first, and sentences about journals of no use."""

    found: tuple[Found, ...]
    notes: tuple[str, ...]


def search(project: FilePath | None, *, aside: bool = False) -> Search:
    """The journals of ``project`` (None: of projects without a file); those of running sessions are left alone.

    With ``aside`` those whose work was discarded instead.
    """
    found: list[Found] = []
    notes: list[str] = []
    for name in _names(project, PUT_ASIDE if aside else ""):
        try:
            one = read(name)
        except JournalError as error:
            notes.append(f"the journal {printable(short(name), 100)} cannot be used: {error}.")
            continue
        except FileNotFoundError:
            continue
        except OSError as error:
            why = (error.strerror or str(error)).lower()
            notes.append(f"the journal {printable(short(name), 100)} cannot be read: {why}.")
            continue
        if one is not None:
            found.append(one)
    found.sort(key=lambda one: one.work.when, reverse=True)
    return Search(tuple(found), tuple(notes))


def _names(project: FilePath | None, tail: str) -> Iterator[FilePath]:
    for first in places.candidates(project):
        try:
            there = {entry.name for entry in os.scandir(first.parent) if entry.name.startswith(first.name)}
        except OSError:
            continue
        named = (name.with_name(name.name + tail) for name in places.numbered(first))
        yield from (name for name in named if name.name in there)


def read(name: FilePath) -> Found | None:
    """One journal; None where its session still runs, or where no event in it is whole.

    Raises OSError where it cannot be read, JournalError, words for the user, where it is damaged from the start.
    """
    handle = os.open(name, os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)
    with open(handle, "rb") as file:
        state = os.fstat(handle)
        if not stat.S_ISREG(state.st_mode):
            raise JournalError("it is no ordinary file")
        free = places.lock(handle)  # let go again as the file is closed
        if free is False:
            return None
        first = file.readline(lines.LONGEST + 1)
        head = lines.decode(first)
        if head is None:
            if file.read(1):
                raise JournalError("its first line is damaged")
            _remove_empty(name, state)
            return None
        work = replay.begin(head)
        length = len(first) + _events(file, work)
    owner = work.owner
    if (free is None or not owner.locked) and owner.alive:
        return None
    return Found(name, head, work, length, state.st_size, state.st_uid == os.getuid())


def _events(file: BinaryIO, work: Work) -> int:
    """Replay the events as far as they are good; returns their length in bytes."""
    length = 0
    while line := file.readline(lines.LONGEST + 1):
        record = lines.decode(line)
        number = work.events + 2
        if record is None:
            if file.read(1):  # at the very end it is only torn, and was never accepted
                work.damage = f"line {number} of it is damaged"
            break
        try:
            replay.step(work, record)
        except JournalError as error:
            work.damage = f"line {number} of it: {error}"
            break
        length += len(line)
    return length


def _remove_empty(name: FilePath, state: os.stat_result) -> None:
    """Remove a journal in which nothing was ever accepted."""
    if time.time() - state.st_mtime > _YOUNG and state.st_uid == os.getuid():
        with contextlib.suppress(OSError):
            os.unlink(name)
