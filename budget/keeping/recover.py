"""What becomes of the work of an ended session: taken back, or put aside; nothing here asks.

Taken back by a session that has done nothing yet, it is that session again: history, trials, cursor, and the file as it
knew it. So if someone has changed the file meanwhile, saving asks, as it would have asked then. Taken back later it is
one step of history.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import time
from dataclasses import replace
from pathlib import Path as FilePath

from budget.keeping import places
from budget.keeping.find import Found, search
from budget.keeping.journal import Journal
from budget.keeping.replay import Work
from budget.project import store
from budget.project.document import Document
from budget.project.problems import ProjectError, printable
from budget.session import Session
from budget.trials import Trial


def settled(found: Found, session: Session) -> bool:
    """Whether nothing would be lost without it: the file holds the work, only its history does not stand there."""
    work = found.work
    if work.damage:
        return False
    if session.path is None:
        return not work.unsaved and not work.trials and work.reference is None
    return session.fingerprint is not None and _saved_in(session.fingerprint, work) is work.document


def _saved_in(now: store.Fingerprint, work: Work) -> Document | None:
    """The document of ``work`` that the file in the state ``now`` holds; None where it holds none that it should.

    A session that was killed just after the file was written could not take that down any more; so the present is tried
    too.
    """
    if now.digest == work.digest:
        return work.saved
    with contextlib.suppress(ProjectError):
        if hashlib.sha256(store.render(work.document).text.encode("utf-8")).hexdigest() == now.digest:
            return work.document
    return None


def take_back(session: Session, journal: Journal, found: Found) -> None:
    """Go on with the work where it stood; ``session`` has done nothing yet.

    Raises ProjectError, a sentence, where another session has taken it meanwhile.
    """
    work = found.work
    found = _called_back(found)
    if not journal.adopt(found):
        raise ProjectError("another session has taken that work meanwhile, or its journal is gone.")
    now, saved, held = session.fingerprint, work.saved, None
    if session.path is not None:
        held = _saved_in(now, work) if now is not None else None
        if held is not None:
            saved = held
        elif work.digest is not None:
            now = store.Fingerprint(0, 0, 0, work.digest)  # the state that session knew: saving finds it changed, asks
    session.resume(work.document, list(work.done), list(work.undone), saved, now)
    if held is not None and now is not None and now.digest != work.digest:
        journal.note("saved")  # the journal was cut off before it could be told
    if work.trials is not None:
        names = {trial.name for trial in work.trials}
        others = tuple(trial for trial in session.trials if trial.name not in names)  # held by somebody meanwhile
        session.trials = (*_with_shelves(session, work.trials), *others)
        session.reference = _with_shelves(session, (work.reference,))[0] if work.reference is not None else None
    if journal.flush() and journal.name != found.name:  # it goes on in a copy, which is whole by now
        _rename(found)


def take_as_step(session: Session, found: Found, label: str, spot: object) -> bool:
    """Make the work the present as one step of history; trials come beside those there are. False: nothing changed."""
    names = {trial.name for trial in session.trials}
    more = tuple(trial for trial in found.work.trials or () if trial.name not in names)
    changed = session.apply(label, found.work.document, spot)
    if more:
        session.trials = (*session.trials, *_with_shelves(session, more))
        session.tell("trials")
    put_aside(found)
    return changed


def _with_shelves(session: Session, trials: tuple[Trial, ...]) -> tuple[Trial, ...]:
    """Trials with the shelf files that their projects name."""
    path = session.path
    if path is None:
        return trials
    return tuple(
        Trial(trial.name, trial.document, *store.read_shelves(trial.document.data, path), trial.when)
        for trial in trials
    )


def put_aside(found: Found) -> bool:
    """Let the work go; its journal stays once more under another name. False where it cannot be renamed, or goes on."""
    with contextlib.suppress(OSError):
        handle = os.open(found.name, os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK)
        try:
            if places.lock(handle) is False or os.fstat(handle).st_size != found.size:
                return False
            return _rename(found)
        finally:
            os.close(handle)
    return False


def _rename(found: Found) -> bool:
    if not found.own:  # another user's work is his to let go
        return False
    try:
        os.replace(found.name, places.put_aside(found.name))
    except OSError:
        return False
    return True


def _called_back(found: Found) -> Found:
    """A journal that was put aside under the name of one that is in use; any other as it is."""
    if not found.name.name.endswith(places.PUT_ASIDE):
        return found
    for name in places.numbered(found.name.with_name(found.name.name.partition(places.SUFFIX)[0] + places.SUFFIX)):
        if not os.path.lexists(name):
            with contextlib.suppress(OSError):
                os.rename(found.name, name)
                return replace(found, name=name)
            break
    return found


def aside(project: FilePath | None) -> tuple[Found, ...]:
    """Work that was put aside and is still there."""
    return search(project, aside=True).found


def states_aside(project: FilePath | None) -> frozenset[tuple[FilePath, int, int]]:
    """What is put aside now: name, number and time of each file, to tell it from what is put aside later."""
    found: set[tuple[FilePath, int, int]] = set()
    for first in places.candidates(project):
        for name in map(places.put_aside, places.numbered(first)):
            with contextlib.suppress(OSError):
                state = os.lstat(name)
                if state.st_uid == os.getuid():
                    found.add((name, state.st_ino, state.st_mtime_ns))
    return frozenset(found)


def forget_aside(project: FilePath | None, before: frozenset[tuple[FilePath, int, int]]) -> None:
    """Remove what was put aside ``before`` this session began: it too has ended well."""
    for name, *_ in before & states_aside(project):
        with contextlib.suppress(OSError):
            os.unlink(name)


def without_file(project: FilePath) -> Session | None:
    """A session on a project whose file is gone or cannot be read, from the latest journal; None without one.

    It stands where the file stood when it was last known, and the journal is still to be taken back.
    """
    found = search(project).found
    if not found:
        return None
    work = found[0].work
    document = work.saved or (work.done[0].document if work.done else work.document)
    mark = store.Fingerprint(0, 0, 0, work.digest) if work.digest is not None else None
    session = Session(document, project, fingerprint=mark, saved=document)
    session.shelves, session.file_problems = store.read_shelves(document.data, project)
    return session


def when(work: Work) -> str:
    """The time of the last event: hours and minutes, with the day where it is not today."""
    try:
        then, now = time.localtime(work.when), time.localtime()
    except (OverflowError, ValueError, OSError):
        return "an unknown time"
    today = (then.tm_year, then.tm_yday) == (now.tm_year, now.tm_yday)
    return time.strftime("%H:%M" if today else "%Y-%m-%d %H:%M", then)


def whose(work: Work) -> str:
    """Who did it where, if it was not this user on this machine; "" else."""
    me, owner = places.me(), work.owner
    parts = [f"by {printable(owner.user, 20)}"] if owner.user != me.user else []
    parts += [f"on {printable(owner.host, 20)}"] if owner.host != me.host else []
    return " ".join(parts)
