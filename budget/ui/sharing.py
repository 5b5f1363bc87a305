"""A project that another session has open: the question at the start, and where work goes that cannot be saved here.

A session that gives way may edit and try as it likes; only the project file and its trials file are not written to.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import TYPE_CHECKING

from budget.keeping import places
from budget.project.problems import ProjectError, printable
from budget.project.store import free_name

if TYPE_CHECKING:
    from budget.ui.desk import Desk
    from budget.ui.recovery import Keeper

TRYING = "read-only: change and try as you like, W saves it under another name"


def begin(desk: Desk, keeper: Keeper) -> None:
    """Take the lock of the file and begin; where another session has it, ask first what to do."""
    session = desk.session
    session.tell, desk.keeper = keeper.journal.note, keeper  # the answer may save a copy, which the journal must know
    if session.claim():
        keeper.begin()
        warn(desk)
        return
    options: dict[str, tuple[str, Callable[[], None]]] = {
        "r": ("open it read-only", lambda: desk.say(TRYING)),
        "c": ("open a copy", lambda: _copy(desk, keeper)),
        "q": ("quit", lambda: desk.leave()),
    }
    desk.ask(f"{printable(session.name, 24)}: {session.read_only}.", options, TRYING)


def warn(desk: Desk) -> None:
    """Say where another session may go unnoticed, or nothing can be saved; behind what was said at the start."""
    lock, path = desk.session.lock, desk.session.path
    told = [lock.trouble] if lock is not None and lock.trouble else []
    if path is not None and not os.access(os.path.dirname(os.path.realpath(path)), os.W_OK):
        told.append(f"the folder of {printable(path.name, 24)} cannot be written to: W saves it elsewhere")
    if told:
        desk.say("; ".join(part for part in (desk.message, *told) if part), "thin")


def _copy(desk: Desk, keeper: Keeper) -> None:
    """Go on with a copy beside the file, or in the state folder where nothing can be written there."""
    session, path = desk.session, desk.session.path
    assert path is not None
    problem = ""
    for place in (path, places.state_folder() / path.name):
        target = free_name(place, "copy")
        try:
            places.make_folder(target)
            session.save_as(target)
        except (ProjectError, OSError) as error:
            problem = problem or str(error)
            continue
        keeper.begin()
        desk.say(f"this is a copy now: {printable(places.short(target), 60)}")
        warn(desk)
        return
    raise ProjectError(problem)


def ask_where(desk: Desk, save_as: Callable[[], None], reload: Callable[[], None]) -> None:
    """After a save that was refused: where the work may go instead, and the file anew if that has changed."""
    session = desk.session
    options = {"W": ("save under another name", save_as)}
    if session.changed_on_disk():
        options["r"] = ("reload theirs", reload)
    desk.ask(f"{printable(session.name, 24)} is read-only here: {session.read_only}.", options, TRYING)
