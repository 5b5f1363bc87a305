"""The desk: what is on the screen and what a key does to it, without a screen.

Every key of the program arrives at ``Desk.key``, one after the other, whatever is open: the grid, the editor in a cell,
a list to choose from, a question. So a burst of keys always lands where the user meant it. The desk draws nothing
(``paint`` does) and calculates nothing (a worker does); it is tested by typing.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

from budget.engine.model import LINES
from budget.keeping import log
from budget.project import edits, schema
from budget.project.build import Built
from budget.project.document import Document, Path
from budget.project.problems import ProjectError, printable
from budget.report import change
from budget.report.numbers import Corner
from budget.session import Outcome, Session
from budget.trials import Trial
from budget.ui import (
    allocation,
    changes,
    commands,
    fields,
    guide,
    layout,
    lists,
    plan,
    reach,
    recovery,
    response,
    sheet,
    spectrum,
    stable,
    sweepmap,
    switchon,
    trying,
)
from budget.ui.commands import COMMANDS, SHEET
from budget.ui.sheet import Cells, Context, Memo, Options
from budget.ui.view import Cell, Row, Section, View

VIEWS: dict[str, Callable[[Context], View]] = {
    "sheet": sheet.sheet,
    "fields": fields.fields,
    "rules": fields.rules,
    "loads": lists.loads,
    "checks": lists.checks,
    "limits": fields.limits,
    "shelf": fields.shelf,
    "project": fields.project,
    "faults": lists.faults,
    "spectrum": spectrum.spectrum,
    "plan": plan.plan,
    "response": response.response,
    "switchon": switchon.switch_on,
    "stable": stable.stable,
    "allocation": allocation.allocation,
    "trials": trying.trials_view,
    "recovered": recovery.recovered,
    "reach": reach.reach,
    "map": sweepmap.sweep_map,
    "help": lists.help_view,
}
FORMS = frozenset({"fields", "rules", "limits", "project", "loads", "trials"})  # the first column only names the others
NOT_COMPARED = frozenset({"help", "allocation", "trials", "reach", "map", "faults", "recovered"})
TYPED = frozenset({"sheet", "fields", "rules", "loads", "limits", "project", "shelf"})  # views with cells of all sorts
OF_ONE = frozenset({"fields", "response"})  # views of one row, the subject
LONGEST = 2000  # characters of one cell; more is cut when pasted
REFUSED = (ProjectError, OSError)  # what a command cannot do, and what the system does not let it do


@dataclass(slots=True)
class Cursor:
    """Where the cursor stands in one view; the row is found again by its key, else by its number."""

    key: tuple[Any, ...] = ()
    index: int = 0
    column: int = 0
    top: int = 0
    left: int = 0


@dataclass(frozen=True, slots=True)
class Spot:
    """A place of the cursor as the history remembers it."""

    view: str
    subject: Path
    key: tuple[Any, ...]
    index: int
    column: int


@dataclass(slots=True)
class Edit:
    """Text being typed, in a cell (``path``) or as the answer to a question (``label``)."""

    text: str
    caret: int
    accept: Callable[[str], None]  # raises ProjectError where the text cannot be taken
    label: str = ""
    path: Path | None = None
    error: str = ""
    refused: str = ""  # why nothing can be typed here; the keys are swallowed all the same


@dataclass(slots=True)
class Pick:
    """A list to choose from; typing narrows it."""

    title: str
    items: list[tuple[str, Any]]
    accept: Callable[[Any], None]
    query: str = ""
    index: int = 0
    text: bool = False  # the items are the lines of a text to be read

    def shown(self) -> list[tuple[str, Any]]:
        words = self.query.lower().split()
        return [item for item in self.items if all(w in item[0].lower() for w in words)]


@dataclass(slots=True)
class Ask:
    """A question answered by one key."""

    question: str
    options: dict[str, tuple[str, Callable[[], None]]]
    later: str = ""  # what is said where it is left without an answer


@dataclass(frozen=True, slots=True)
class Work:
    """A longer calculation for another thread: ``run(cancelled, progress)``, and what to do with what it gives.

    ``cancelled`` says that the user stopped it or that a newer one took its place. What it gives then is let go, unless
    it ``keeps`` what it has found so far: then ``done`` gets that in any case.
    """

    label: str
    run: Callable[[Callable[[], bool], Callable[[float], None]], Any]
    done: Callable[[Any], None]
    keeps: bool = False


@dataclass(slots=True)
class Job:
    label: str
    fraction: float = 0.0
    stop: bool = False  # it was asked to end


@dataclass(slots=True)
class Then:
    """The reference as a session of its own, and the views made of it."""

    session: Session
    views: dict[Any, View]
    cells: Cells
    memo: Memo
    made: dict[str, changes.Made] = field(default_factory=dict)


def was(trial: Trial) -> Session:
    """A held state as a session, for views to be made of."""
    outcome = trial.outcome
    full = outcome.result if outcome else None
    return Session(
        trial.document,
        None,
        trial.shelves,
        trial.problems,
        generation=outcome.generation if outcome else 0,
        outcome=outcome,
        full=full,
        reference=trial,
    )


def bad_cells(outcome: Outcome | None) -> frozenset[Path]:
    """The cells that cannot be read."""
    return frozenset(edits.cell_of(p.path) for p in outcome.built.errors) if outcome else frozenset()


@dataclass(slots=True)
class Desk:
    session: Session
    ascii_only: bool = False
    width: int = 80
    height: int = 24
    grid_height: int = 19  # lines the grid has on the screen
    grid_width: int = 80
    view_name: str = SHEET
    subject: Path = ("bus",)
    cursors: dict[tuple[str, Path], Cursor] = field(default_factory=dict)
    mode: Edit | Pick | Ask | None = None
    message: str = ""
    tone: str = ""
    corner: Corner | None = None
    pending: bool = True  # results are late enough to look stale
    cell_clip: str = ""
    row_clip: tuple[str, Any, dict[str, Any]] | None = None  # its shape, the row, and a converter's loads by case
    back: list[Spot] = field(default_factory=list)  # where cells led from
    calculate: Callable[[], None] = lambda: None
    leave: Callable[[], None] = lambda: None
    clip: Callable[[str], None] = lambda _: None
    actions: dict[str, Callable[[Desk], None]] = field(default_factory=dict)
    of_view: dict[tuple[str, str], Callable[[Desk], None]] = field(default_factory=dict)  # instead, in one view
    label: str = ""  # of the last edit, told with what it changed
    told: str = ""  # what was told of it so far; later stages of the results may tell more
    options: Options = field(default_factory=Options)
    failed: int = 0  # the generation whose results could not be calculated, by a fault of ours
    share: float = 0.0  # how far the longest stage of the results has come
    job: Job | None = None  # a longer calculation that was asked for, and its progress
    start_job: Callable[[Work], None] = lambda _: None
    later: Callable[[Callable[[], None]], None] = lambda do: do()  # from a job's thread: do it in that of the screen
    keeper: Any = None  # of the journal, and of work that earlier sessions left; see ``recovery``
    before: Any = None  # the result before it
    built_before: Built | None = None
    cells: Cells = field(default_factory=dict)
    memo: Memo = field(default_factory=dict)
    _stamp: Any = None
    _views: dict[tuple[str, Path], View] = field(default_factory=dict)
    aside: Callable[[Callable[[], Any], Callable[[Any], None]], None] = lambda make, done: done(make())
    _ordered: dict[tuple[int, str], tuple[Any, ...]] = field(default_factory=dict)
    greeting: str = ""  # what is wrong and where to go, said once at the start
    greeted: bool = False
    _bad_of: tuple[Outcome | None, frozenset[Path]] = (None, frozenset())
    _then: Then | None = None  # the views of the reference
    _flat_of: View | None = None
    _lines: list[tuple[Section, Row | None]] = field(default_factory=list)

    def __post_init__(self) -> None:
        from budget.ui.actions import ACTIONS, OF_VIEW

        self.actions, self.of_view = ACTIONS, OF_VIEW
        held = self.session.reference
        notes = [*self.session.notes, *([f"{held.name}, held {held.when}, is still the reference"] if held else [])]
        self.say(" ".join(notes), "thin" if self.session.notes else "")

    # -- what is shown

    @property
    def cursor(self) -> Cursor:
        where = (self.view_name, self.subject if self.view_name in OF_ONE else ())
        if where not in self.cursors:
            self.cursors[where] = Cursor(column=1 if self.view_name in FORMS else 0)
        return self.cursors[where]

    def context(self, subject: Path | None = None) -> Context:
        return Context(
            self.session,
            self.corner,
            self._bad(),
            subject or self.subject,
            self.ascii_only,
            self.options,
            self.cells,
            self.memo,
            self._order,
        )

    def _bad(self) -> frozenset[Path]:
        outcome = self.session.outcome
        if self._bad_of[0] is not outcome:
            self._bad_of = (outcome, bad_cells(outcome))
        return self._bad_of[1]

    def _order(self, memo: Memo, name: str, made_of: tuple[Any, ...], make: Callable[[], Any]) -> None:
        """Have something calculated aside that a view waits for, once; see ``Context.fetch``."""
        ordered = self._ordered.get((id(memo), name))
        if ordered is not None and all(a is b for a, b in zip(ordered, made_of, strict=True)):
            return
        self._ordered[id(memo), name] = made_of

        def done(found: Any) -> None:
            memo[name] = (made_of, found)
            self._ordered.pop((id(memo), name), None)
            self._stamp = None  # the views that wait for it are made anew

        self.aside(make, done)

    def view(self) -> View:
        """The present view, made anew only when something it shows has changed."""
        view = self.make(self.view_name, self.subject)
        if view is not self._flat_of:
            self._flat_of, self._lines = view, view.flat()
        return view

    def make(self, name: str, subject: Path) -> View:
        """A view by its name, from the cache unless something it shows has changed."""
        reference = self.session.reference
        stamp = (
            self.session.generation,
            id(self.session.outcome),
            self.corner,
            self.options,
            id(reference),
            id(self.session.recovered),
        )
        if self._stamp != stamp:
            self._stamp = stamp
            self._views.clear()
        key = (name, subject if name in OF_ONE else ())
        if key not in self._views:
            self._views[key] = self._compared(name, subject, VIEWS[name](self.context(subject)))
        return self._views[key]

    def _compared(self, name: str, subject: Path, view: View) -> View:
        """The view with its changes against the reference, if one is held and the view shows the project."""
        reference = self.session.reference
        if reference is None or name in NOT_COMPARED or reference.document is self.session.document:
            return view
        then = self._then
        if then is None or then.session.reference is not reference:
            then = self._then = Then(was(reference), {}, {}, {})
        there = changes.same_row(subject, self.session.document, reference.document)
        if there is None:
            return view
        key = (name, there, self.corner, self.options)
        if key not in then.views:
            context = self.context(there)
            bad = bad_cells(reference.outcome)
            own = replace(context, session=then.session, bad=bad, cells=then.cells, memo=then.memo)
            then.views[key] = VIEWS[name](own)
        made = then.made.setdefault(name, {})
        return changes.against(view, then.views[key], self.session.document, reference.document, made)

    def lines(self) -> list[tuple[Section, Row | None]]:
        self.view()
        return self._lines

    def row_index(self) -> int:
        """The line the cursor is on: where its row is now, or the nearest row to where it was."""
        lines, cursor = self.lines(), self.cursor
        at = cursor.index
        if not (0 <= at < len(lines) and (row := lines[at][1]) is not None and row.key == cursor.key):
            found = [i for i, (_, row) in enumerate(lines) if row is not None and row.key == cursor.key]
            rows = [i for i, (_, row) in enumerate(lines) if row is not None]
            at = found[0] if found else min(rows, key=lambda i: abs(i - at), default=0)
        self._stand(at)
        return at

    def _stand(self, at: int) -> None:
        cursor, lines = self.cursor, self.lines()
        row = lines[at][1] if 0 <= at < len(lines) else None
        cursor.index, cursor.key = at, row.key if row else ()

    def here(self) -> tuple[Row | None, Cell]:
        """The row and the cell under the cursor."""
        lines = self.lines()
        if not lines:
            return None, Cell()
        row = lines[self.row_index()][1]
        if row is None:
            return None, Cell()
        return row, row.cells[min(self.cursor.column, len(row.cells) - 1)]

    def item(self) -> Path | None:
        """The thing that row commands act on."""
        row, cell = self.here()
        return cell.item or (row.item if row else None)

    def spot(self) -> Spot:
        cursor = self.cursor
        self.row_index()
        return Spot(self.view_name, self.subject, cursor.key, cursor.index, cursor.column)

    def stand_at(self, spot: Spot) -> None:
        self.view_name, self.subject = spot.view, spot.subject
        cursor = self.cursor
        cursor.key, cursor.index, cursor.column = spot.key, spot.index, spot.column

    # -- what happens

    def let_go(self) -> str:
        """Close the editor or list in which a fault of ours was met; words for where the text that was typed is now."""
        mode = self.mode
        if not isinstance(mode, Edit | Pick):
            return ""
        self.mode = None
        if isinstance(mode, Pick) or not mode.text:
            return ""
        self.cell_clip = mode.text
        return "; v pastes what was typed"

    def say(self, text: str, tone: str = "") -> None:
        self.message, self.tone = text, tone

    def key(self, name: str, character: str | None = None) -> None:
        """One key, as textual names it, with the character it types if it types one."""
        if name.startswith("alt+"):  # Escape and a key right behind it arrive as one
            self.key("escape")
            name = name.removeprefix("alt+")
            if name.startswith("shift+") and len(name) == 7:
                name = name[6].upper()
            character = name if len(name) == 1 else character
        if isinstance(self.mode, Edit):
            self._edit_key(self.mode, name, character)
        elif isinstance(self.mode, Pick):
            self._pick_key(self.mode, name, character)
        elif isinstance(self.mode, Ask):
            self._ask_key(self.mode, name)
        else:
            self._browse_key(name, character)

    def paste(self, text: str) -> None:
        """Text pasted by the terminal: into the editor, or as a new text of the cell."""
        line = next((part for part in text[: 4 * LONGEST].replace("\r", "\n").split("\n") if part.strip()), "")
        clean = "".join(c if c.isprintable() else " " for c in line).strip()[:LONGEST]
        if not clean:
            return
        if self.mode is None:
            self.start_edit("")
        if isinstance(self.mode, Edit) and not self.mode.refused:
            edit = self.mode
            edit.text = (edit.text[: edit.caret] + clean + edit.text[edit.caret :])[:LONGEST]
            edit.caret = min(edit.caret + len(clean), len(edit.text))
        elif isinstance(self.mode, Pick) and not self.mode.text:
            self.mode.query, self.mode.index = (self.mode.query + clean)[:40], 0

    def accept(self, outcome: Outcome) -> bool:
        """Take results; tell what the last edit changed."""
        if not self.session.accept(outcome):
            return False
        if outcome.complete:
            self.pending = False
        if self.label:
            told = "; ".join(
                part for part in (self._left_out(outcome), change.describe(self.before, outcome.result)) if part
            )
            if self.message in ("", f"{self.label}: calculating", self.told):  # what was said since, "saved", stays
                self.told = f"{self.label}: {told}" if told else self.label
                self.say(self.told)
        if outcome.complete:
            self.label = self.told = ""
        if not self.greeted:
            if self.message in ("", self.greeting):
                self.greeting, tone = guide.next_step(self.session)
                self.say(self.greeting, tone)
            self.greeted = outcome.complete
        return True

    def _left_out(self, outcome: Outcome) -> str:
        """What the calculation had to leave out since the edit, and cells that cannot be read since."""
        old, new = self.built_before, outcome.built
        gone = [ident for ident in new.left_out if old is None or ident not in old.left_out]
        more = len(new.errors) - (len(old.errors) if old else 0)
        told = [f"{', '.join(gone)} left out: a cell cannot be read"] if gone else []
        if more > 0 and not gone:
            told.append(f"{more} more bad cell{'s' if more > 1 else ''}, see b")
        return "; ".join(told)

    def change(self, label: str, document: Document, spot: Spot | None = None) -> bool:
        """Make an edit: one step of history, and a new calculation."""
        if not self.session.apply(label, document, spot or self.spot()):
            self.say("nothing changed")
            return False
        self.changed(label)
        return True

    def stop_job(self) -> bool:
        """Ask the calculation that runs to end; False if none runs, or it was asked already."""
        if self.job is None or self.job.stop:
            return False
        self.job.stop = True
        self.say(f"stopping: {self.job.label}")
        return True

    def changed(self, label: str) -> None:
        self.label, self.told = label, ""
        outcome = self.session.outcome  # still that of before the edit, as far as it has come
        self.before = outcome.result if outcome else None
        self.built_before = outcome.built if outcome else None
        self.say(f"{label}: calculating")
        self.calculate()

    # -- keys by mode

    def _browse_key(self, name: str, character: str | None) -> None:
        if character is not None and character in commands.STARTS_NUMBER:
            self.start_edit(character)
            return
        command = commands.BY_KEY.get(name) or commands.BY_KEY.get(character or "")
        if command is None:
            self.say(f"no command on the key {character or name}; ? shows all keys" if character else "")
            return
        if commands.ALL not in command.where and self.view_name not in command.where:
            self.say(f"{commands.key_text(command.keys[0])} is for the view: {', '.join(command.where)}")
            return
        if command.group != "move" and command.name != "read":  # which shows the message too
            self.say("")
        self.run(command.name)

    def run(self, name: str) -> None:
        """Carry out a command; what it cannot do is said on the message line."""
        try:
            self.of_view.get((self.view_name, name), self.actions[name])(self)
        except REFUSED as error:
            self.say(refusal(error), "fail")

    def start_edit(self, text: str | None = None) -> None:
        """Open the editor in the cell: with ``text`` in place of its value, or (None) with what was typed before."""
        _, cell = self.here()
        path = cell.path
        if path is None:
            why = "this cell is calculated" if cell.calculated else "this cell cannot be typed into"
            if text is not None:
                hint = "; Esc, then Enter, goes to what it follows from" if cell.leads else ""
                self.mode = Edit("", 0, _nothing, refused=why + hint)
            return
        if text is None:
            value, _ = edits.value_at(self.session.document, self.session.shelves, path)
            text = edits.typed(value)
        self.mode = Edit(text, len(text), lambda typed: self._enter(path, typed), path=path)

    def _enter(self, path: Path, text: str) -> None:
        spot = self.spot()
        if self.session.enter(path, text, spot):
            self.changed(self.session.done[-1].label)
        else:
            self.say("nothing changed")

    def prompt(self, label: str, text: str, accept: Callable[[str], None]) -> None:
        self.mode = Edit(text, len(text), accept, label)

    def _edit_key(self, edit: Edit, name: str, character: str | None) -> None:
        if name == "escape":
            self.mode = None
            self.say("")
        elif name in ("enter", "tab", "shift+tab", "up", "down"):
            self._commit(edit, name)
        elif edit.refused:
            return
        elif name == "left":
            edit.caret = max(0, edit.caret - 1)
        elif name == "right":
            edit.caret = min(len(edit.text), edit.caret + 1)
        elif name == "home":
            edit.caret = 0
        elif name == "end":
            edit.caret = len(edit.text)
        elif name in ("backspace", "ctrl+h") and edit.caret:
            edit.text = edit.text[: edit.caret - 1] + edit.text[edit.caret :]
            edit.caret -= 1
        elif name == "delete":
            edit.text = edit.text[: edit.caret] + edit.text[edit.caret + 1 :]
        elif name == "ctrl+u":
            edit.text, edit.caret = edit.text[edit.caret :], 0
        elif name == "ctrl+v":
            self.paste(self.cell_clip)
        elif character and character.isprintable() and len(edit.text) < LONGEST:
            edit.text = edit.text[: edit.caret] + character + edit.text[edit.caret :]
            edit.caret += 1
        if not edit.refused and name not in ("enter", "tab", "shift+tab", "up", "down"):
            edit.error = ""

    def _commit(self, edit: Edit, name: str) -> None:
        if edit.refused:
            self.mode = None
            return
        try:
            edit.accept(edit.text)
        except REFUSED as error:
            edit.error = refusal(error)
            return
        if self.mode is edit:
            self.mode = None
        if edit.path is not None:
            self.move({"enter": "down", "tab": "right", "shift+tab": "left"}.get(name, name))

    def pick(self, title: str, items: list[tuple[str, Any]], accept: Callable[[Any], None], at: int = 0) -> None:
        if not items:
            raise ProjectError(f"{title}: there is nothing to choose from.")
        self.mode = Pick(title, items, accept, index=at)

    def _pick_key(self, pick: Pick, name: str, character: str | None) -> None:
        shown = pick.shown()
        if name == "escape":
            self.mode = None
        elif name in ("down", "tab"):
            pick.index = min(pick.index + 1, max(0, len(shown) - 1))
        elif name in ("up", "shift+tab"):
            pick.index = max(0, pick.index - 1)
        elif name in ("pagedown", "end"):
            pick.index = max(0, len(shown) - 1) if name == "end" else min(pick.index + 10, max(0, len(shown) - 1))
        elif name in ("pageup", "home"):
            pick.index = 0 if name == "home" else max(0, pick.index - 10)
        elif name == "enter":
            if not shown:
                return
            self.mode = None
            try:
                pick.accept(shown[min(pick.index, len(shown) - 1)][1])
            except REFUSED as error:
                self.say(refusal(error), "fail")
        elif name in ("backspace", "ctrl+h"):
            pick.query, pick.index = pick.query[:-1], 0
        elif character and character.isprintable() and len(pick.query) < 40 and not pick.text:
            pick.query, pick.index = pick.query + character, 0

    def ask(self, question: str, options: dict[str, tuple[str, Callable[[], None]]], later: str = "") -> None:
        self.mode = Ask(question, options, later)

    def _ask_key(self, ask: Ask, name: str) -> None:
        if name == "escape":
            self.mode = None
            self.say(ask.later)
        elif name in ask.options:
            self.mode = None
            try:
                ask.options[name][1]()
            except REFUSED as error:
                self.say(refusal(error), "fail")

    # -- moving

    def move(self, where: str) -> None:
        lines, cursor = self.lines(), self.cursor
        at = self.row_index()
        rows = [i for i, (_, row) in enumerate(lines) if row is not None and not row.rides]
        if not rows:
            return
        row = lines[at][1]
        last = len(row.cells) - 1 if row else 0
        n = rows.index(at) if at in rows else 0
        column = min(cursor.column, last)
        page = max(1, self.grid_height - 2)
        steps = {"up": -1, "down": 1, "page_up": -page, "page_down": page}
        if where in steps:
            self._stand(rows[max(0, min(len(rows) - 1, n + steps[where]))])
            return  # the column stays as it was, also past the end of a short row
        if where == "left":
            cursor.column = max(0, column - 1)
        elif where == "right":
            cursor.column = min(last, column + 1)
        elif where == "first":
            cursor.column = 0
        elif where == "last":
            cursor.column = last

    def scroll(self, width: int, height: int) -> None:
        """Bring the cursor into sight of ``height`` lines of the grid; headings above its row stay in sight with it."""
        lines, cursor = self.lines(), self.cursor
        self.grid_height, self.grid_width = height, width
        at = self.row_index()
        one = len(self.view().sections) == 1  # a single heading is pinned and takes a line of its own
        top = cursor.top
        room = height - 1 if one else height
        first = at - 1 if at and lines[at - 1][1] is None else at
        if one:
            first = at
        low = 1 if one else 0
        top = max(low, min(top, first))
        if at - top + 1 > room:
            top = at - room + 1
        cursor.top = max(low, min(top, max(low, len(lines) - room)))
        section = lines[at][0] if lines else None
        if section:
            cursor.left = layout.scroll_to(section, width, cursor.left, cursor.column)

    def go_to(self, path: Path) -> None:
        """Show the cell at ``path`` in the view where it can be changed."""
        base = edits.owner(path)
        head = str(path[0]) if path else "bus"
        if head == "case" and len(path) > 1:
            self.view_name = "loads"
            self.cursor.key = (
                ("load", path[3]) if len(path) > 3 else ("case-field", path[2] if len(path) > 2 else "name")
            )
            self.cursor.column = int(path[1]) + 1
            return
        views = {"rules": "rules", "project": "project", "shelf_files": "project", "limit": "limits"}
        self.view_name = views.get(head, "fields")
        if self.view_name == "fields":
            self.subject = base if head in ("bus", "filter", "converter", "shelf") else ("bus",)
        keys = {row.key for _, row in self.lines() if row is not None}
        n = len(path)
        while n > 0 and path[:n] not in keys:
            n -= 1
        cursor = self.cursor
        if n:
            cursor.key = path[:n]
        cursor.column = 1
        row, _ = self.here()
        for column, cell in enumerate(row.cells if row else ()):
            if cell.path == path:
                cursor.column = column

    def corner_title(self) -> str:
        if self.corner is not None:
            return f"{self.corner[0]}, {self.corner[1]} line"
        result = self.session.result
        count = len(result.project.cases) * len(LINES) if result else 0
        return f"worst of {count} corners" if count else "worst of all corners"

    def hint_pairs(self) -> list[tuple[str, str]]:
        """(key, word) of what can be done now."""
        if isinstance(self.mode, Edit):
            if self.mode.refused:
                return [("Esc", "go back")]
            keys = [("Enter", "accept"), ("Esc", "cancel"), ("Left/Right", "move"), ("Backspace", "delete")]
            return [*keys, ("Ctrl+U", "clear")]
        if isinstance(self.mode, Pick) and self.mode.text:
            return [("Up/Down", "read on"), ("Enter", "close"), ("Esc", "close")]
        if isinstance(self.mode, Pick):
            return [("Up/Down", "choose"), ("Enter", "take"), ("type", "to narrow"), ("Esc", "cancel")]
        if isinstance(self.mode, Ask):
            return [(commands.key_text(k), label) for k, (label, _) in self.mode.options.items()] + [("Esc", "go back")]
        pairs = [(key, word) for key, word in self._own_words(commands.hints(self.view_name)) if word]
        if self.job is not None and not self.job.stop:
            return [("Esc", "stop"), *pairs]
        if self.session.reference is not None and self.view_name != "trials":
            pairs = [("K", "keep or drop"), *pairs]
        if self.options.first is not None:
            pairs = [("P", "second cell"), *pairs]
        return pairs if self.view_name == SHEET else [("Esc", "back"), *pairs]

    def _own_words(self, pairs: list[tuple[str, str]]) -> list[tuple[str, str]]:
        """The words of the hints as they are for the cell under the cursor; "" where a key does nothing here."""
        _, cell = self.here()
        spec = edits.spec_at(cell.path) if cell.path is not None else None
        if spec is None:
            word = "go there" if cell.leads is not None else ""
        elif spec.kind in (schema.CHOICE, schema.FILTER, schema.PART):
            word = "choose"
        else:  # where letters are typed, Enter comes first: until then they are commands
            word = "type text" if spec.kind in schema.PLAIN else "edit"
        own = {"edit": word, "undo": "undo" if self.session.done else ""}
        if self.view_name in TYPED:  # as wide as the longest, so that the words behind it stay where they are
            own["edit"] = word.ljust(len("type text"))
        told = [(key, own.get(text, text)) for key, text in pairs]
        return [(key if word.strip() else " " * len(key), word) for key, word in told]


def _nothing(_: str) -> None:
    return


def refusal(error: Exception) -> str:
    """Why a command could not be carried out, as a sentence."""
    if isinstance(error, OSError):  # a folder that is gone, a name that cannot be looked up: no fault of ours
        log.record(error)
        return f"the system refused that: {printable((error.strerror or str(error)).lower(), 80)}."
    return str(error)


def command_items() -> list[tuple[str, str]]:
    """All commands for the list of commands."""
    items = []
    for command in COMMANDS:
        key, *others = map(commands.key_text, command.keys)
        items.append((f"{key:<9} {command.label}" + (f" (or {', '.join(others)})" if others else ""), command.name))
    return items
