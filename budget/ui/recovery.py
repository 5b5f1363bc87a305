"""Work of sessions that ended without being left: asked about at the start, shown beside the file, taken back or not.

The keeper holds the journal of this session and what is found of earlier ones. Nothing found is ever lost by one key:
to let work go is asked twice, and then its journal stays once more.
"""

from __future__ import annotations

import contextlib
import os
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from budget.keeping import recover
from budget.keeping.find import Found, search
from budget.keeping.journal import Journal
from budget.keeping.patch import pack
from budget.keeping.places import short, sweep
from budget.keeping.replay import Work
from budget.project.problems import ProjectError, printable
from budget.ui.sheet import Context, words_only
from budget.ui.view import Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.ui.desk import Desk, Spot

NOTHING = "no work of an earlier session waits."
LATER = "it waits; I shows it again"
_COLUMNS = (Column("differs", 30, most=46), Column("in the file", 23, most=40), Column("in this work", 23, most=40))


class Keeper:
    """Keeps a journal of what is done on ``desk``, and offers what earlier sessions left."""

    def __init__(self, desk: Desk) -> None:
        self.desk = desk
        self.journal = Journal(desk.session, pack_spot)
        self.waiting: list[Found] = []
        self.before = recover.states_aside(desk.session.path)
        self.told = ""
        self.kept_in = ""
        self.cursor: object = None

    def begin(self) -> None:
        """Look for work that waits, ask about it, and start to take down what is done from now on."""
        desk, session = self.desk, self.desk.session
        session.tell = self.journal.note
        desk.keeper = self
        seen = search(session.path)
        self.waiting = [found for found in seen.found if not recover.settled(found, session)]
        ended = [found for found in seen.found if found not in self.waiting and found.own]
        if ended and not self.waiting and (ended[0].work.done or ended[0].work.undone):
            self._go_on(ended.pop(0))
        for found in ended:
            recover.put_aside(found)
        if session.path is not None:
            sweep(session.path)
        if seen.notes:
            desk.say(" ".join([desk.message, *seen.notes]).strip(), "thin")
        self._show_next()

    def tick(self) -> bool:
        """From time to time: note where the cursor stands; whether there is news for the message line."""
        with contextlib.suppress(Exception):  # of a view that fails; the painter tells of that
            spot = self.desk.spot()
            if spot != self.cursor:
                self.cursor = spot
                self.journal.note_cursor(spot)
        news = self.journal.trouble
        if news == self.told:
            return False
        self.told = news
        self.desk.say(news or "the journal is written again", "fail" if news else "")
        return True

    def end(self, *, clean: bool) -> None:
        """End the journal; after a clean leave nothing of this session has to be kept."""
        name = self.journal.name
        self.journal.close(remove=clean)
        if not clean and self.journal.begun:
            self.kept_in = short(name) if name is not None else "no place"
        if clean and not self.desk.session.read_only:  # what was put aside is another session's to bring back
            recover.forget_aside(self.desk.session.path, self.before)

    def kept(self) -> list[str]:
        """After the end: what to tell of work that is kept in a journal."""
        if not self.kept_in or not (self.desk.session.dirty or self.journal.trouble):
            return []
        if self.journal.trouble:
            return [f"{self.journal.trouble}; what was done last may be missing at the next start."]
        return [f"the work that was not saved is kept in {self.kept_in}; the next start offers it."]

    def _go_on(self, found: Found) -> None:
        """Work that the file holds: only its history is brought back, without a question."""
        try:
            self._take(found)
        except ProjectError:
            return
        steps = f"{len(found.work.done)} step{'s' if len(found.work.done) != 1 else ''}"
        self.desk.say(f"the session of {recover.when(found.work)} was cut off; it is saved, its {steps} can be undone")

    # -- the question

    def _show_next(self) -> None:
        self.desk.session.recovered = self.waiting[0] if self.waiting else None
        if self.waiting:
            self.ask()

    def found(self) -> Found | None:
        """What waits for an answer, else what was put aside; None where there is neither."""
        session = self.desk.session
        if session.recovered is None:
            session.recovered = next(iter(recover.aside(session.path)), None)
        return session.recovered if isinstance(session.recovered, Found) else None

    def ask(self) -> None:
        """Ask what shall become of it."""
        found = self.found()
        if found is None:
            raise ProjectError(NOTHING)
        options = {
            "t": ("take it back", lambda: self.take(found)),
            "d": ("what differs", self.show),
            "x": ("discard it", lambda: self._ask_twice(found)),
        }
        if self.desk.view_name == "recovered":
            del options["d"]
        self.desk.ask(self.question(found), options, LATER)

    def question(self, found: Found) -> str:
        """What was found, in one line; what matters most stands first."""
        session, work = self.desk.session, found.work
        told = f"Work of {recover.when(work)} {recover.whose(work)}".strip()
        told += " was not saved" if session.path is not None else " without a file was not saved"
        amount = [f"{work.changes} change{'s' if work.changes != 1 else ''}"] if work.changes else []
        if work.trials:
            amount.append(f"{len(work.trials)} trial{'s' if len(work.trials) != 1 else ''}")
        told += f": {', '.join(amount) or 'its history'}"
        if session.path is not None and work.digest is not None:
            if session.fingerprint is None or not session.fingerprint.mtime_ns:
                told += "; the file cannot be read" if os.path.lexists(session.path) else "; the file is gone"
            elif session.fingerprint.digest != work.digest:
                told += "; the file was changed since"
        if work.damage:
            told += f"; {work.damage}"
        return f"{told} (last: {printable(work.last, 80)})" if work.last else told

    def show(self) -> None:
        """Show what differs, with the way to the answer."""
        self.desk.view_name = "recovered"
        if self.found() is not None:
            self.desk.say("Enter takes it back or discards it")

    def take(self, found: Found) -> None:
        """Take the work back: where nothing was done yet as it was, else as one step of history."""
        desk, session = self.desk, self.desk.session
        when = recover.when(found.work)
        if self.journal.begun:
            if desk.view_name == "recovered":
                desk.view_name = "sheet"
            label = f"work of {when} taken back"
            if recover.take_as_step(session, found, label, desk.spot()):
                desk.changed(label)
            self._answered(found)
            return
        self._take(found)
        dirty = session.changed_on_disk()
        desk.changed(f"work of {when} is back{'; the file was changed since, w asks what to do' if dirty else ''}")
        self._answered(found)

    def _take(self, found: Found) -> None:
        desk, session = self.desk, self.desk.session
        work = found.work
        work.done = [replace(step, spot=spot_of(step.spot)) for step in work.done]
        work.undone = [replace(step, spot=spot_of(step.spot)) for step in work.undone]
        recover.take_back(session, self.journal, found)
        desk.stand_at(spot_of(work.spot))

    def _ask_twice(self, found: Found) -> None:
        work = found.work
        count = f"{work.changes} change{'s' if work.changes != 1 else ''}"
        self.desk.ask(
            f"Discard {count} of {recover.when(work)}?",
            {"y": ("yes, discard", lambda: self._discard(found)), "t": ("take it back", lambda: self.take(found))},
            LATER,
        )

    def _discard(self, found: Found) -> None:
        if self.desk.view_name == "recovered":
            self.desk.view_name = "sheet"
        if recover.put_aside(found):
            self.desk.say("discarded; until this session is left, I brings it back")
        else:
            self.desk.say(f"{printable(short(found.name), 60)} cannot be removed; it is left as it is", "thin")
        self._answered(found)

    def _answered(self, found: Found) -> None:
        self.waiting = [one for one in self.waiting if one is not found]
        self._show_next()


def decide(desk: Desk) -> None:
    """Ask about the work that is shown."""
    if not isinstance(desk.keeper, Keeper):
        raise ProjectError(NOTHING)
    desk.keeper.ask()


def view_recovered(desk: Desk) -> None:
    """Show the work that waits."""
    desk.view_name = "recovered"
    if isinstance(desk.keeper, Keeper):
        desk.keeper.show()


# -- cursor positions in a journal


def pack_spot(spot: Any) -> Any:
    """A position of the cursor for the journal; raises TypeError for what is none."""
    return pack([spot.view, spot.subject, spot.key, spot.index, spot.column]) if spot is not None else None


def spot_of(packed: Any) -> Spot:
    """The position of the cursor that a journal tells; the top of the sheet where it tells none."""
    from budget.ui.desk import VIEWS, Spot

    match packed:
        case Spot():
            return packed
        case [str(view), tuple(subject), tuple(key), int(index), int(column)] if view in VIEWS:
            return Spot(view, subject, key, max(0, index), max(0, column))
    return Spot("sheet", ("bus",), (), 0, 0)


# -- the view


def recovered(context: Context) -> View:
    """The inputs that differ between the file and the work that waits."""
    found = context.session.recovered
    if not isinstance(found, Found):
        text = Cell(NOTHING.rstrip("."))
        return View("recovered", "work that was not saved", (Section((Column("", 60),), (Row(("none",), (text,)),)),))
    work = found.work
    rows = context.once("recovered", (found, context.session.document), lambda: _rows(context, work))
    title = f"work of {recover.when(work)} {recover.whose(work)}".strip()
    return View("recovered", title, (Section(_COLUMNS, rows),))


def _rows(context: Context, work: Work) -> tuple[Row, ...]:
    from budget.study.compare import Variant, inputs

    session = context.session
    document = session.saved or session.document
    told = inputs(Variant("", document, session.shelves, None), Variant("", work.document, session.shelves, None))
    rows = [
        _row(("input", one.path), words_only(one.path), one.before or "-", one.after or "-", one.kind) for one in told
    ]
    if work.trials:
        rows.append(_row(("trials",), "trials", "", ", ".join(trial.name for trial in work.trials), "held"))
    if work.damage:
        rows.append(_row(("damage",), "the journal", "", work.damage, "what came after it is lost"))
    return tuple(rows) or (_row(("same",), "no input differs", "", "", ""),)


def _row(key: tuple[Any, ...], *texts: str) -> Row:
    *shown, kind = (words_only(text) for text in texts)
    info = f"{shown[0]}: {kind}, {shown[1] or '-'} -> {shown[2] or '-'}" if kind else shown[0]
    return Row(key, tuple(Cell(text, info=info) for text in shown))
