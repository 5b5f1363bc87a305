"""One open project: its document, history, file and latest results; no screen.

The session is the only thing that changes. Everything it holds is immutable, so a worker may calculate on a snapshot
while the user goes on typing; a result carries the generation of the document it belongs to, and an older one is let
go.
"""

from __future__ import annotations

import os
import stat
from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path as FilePath
from typing import TYPE_CHECKING, Any

from budget import trials
from budget.keeping import lock as locks
from budget.project import edits, store
from budget.project.build import Built, Cache, Shelf, build
from budget.project.document import Document, Path, Tree, drop, from_data, get, put
from budget.project.problems import Problem, ProjectError, place, printable
from budget.trials import REFERENCE, Shelved, Trial

if TYPE_CHECKING:
    from budget.engine.evaluate import Result

DEMO = "heron.toml"


@dataclass(frozen=True, slots=True)
class Step:
    """One entry of the history: what was done, the document before it, and where the cursor stood."""

    label: str
    document: Document
    spot: Any


HISTORY = 2000  # steps that can be undone; a long session must not grow for ever


def shorten(done: list[Step]) -> None:
    """Let the oldest steps of a long history go."""
    del done[: max(0, len(done) - HISTORY)]


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a worker needs to calculate one generation; of ``previous`` results it uses again what did not change."""

    generation: int
    document: Document
    shelves: tuple[Shelf, ...]
    problems: tuple[Problem, ...]
    cache: Cache
    previous: Result | None = None
    lacking: tuple[Trial, ...] = ()  # held states whose results are still to be calculated


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a worker gives back; ``result`` is ``None`` where there is nothing to calculate.

    Results come in stages, the fast ones first; ``complete`` says that nothing more will follow.
    """

    generation: int
    built: Built
    result: Result | None
    complete: bool = True


class ReadOnlyError(ProjectError):
    """The file is not written to by this session, which was opened read-only."""


def stages(
    snapshot: Snapshot, cancelled: Callable[[], bool] | None = None, progress: Callable[[float], None] | None = None
) -> Iterator[Outcome]:
    """Read the document of a snapshot and evaluate it, stage by stage.

    Runs in any thread, one at a time (the cache is shared); the consumer may stop between two stages. A long stage asks
    ``cancelled``, and ends the stages if that says so; it tells ``progress`` the share done.
    """
    from budget.engine import evaluate  # numpy is loaded here, after the first paint
    from budget.engine.transient import CancelledError

    built = build(snapshot.document, snapshot.shelves, snapshot.cache)
    built = replace(built, problems=(*snapshot.problems, *built.problems))
    if built.project is None:
        yield Outcome(snapshot.generation, built, None)
        return
    result = evaluate.carried(evaluate.evaluate_dc(built.project), snapshot.previous)
    yield Outcome(snapshot.generation, built, result, complete=False)
    result = evaluate.with_emissions(result, snapshot.previous)
    yield Outcome(snapshot.generation, built, result, complete=False)
    try:
        result = evaluate.with_stability(result, cancelled)
    except CancelledError:
        return
    yield Outcome(snapshot.generation, built, result, complete=False)
    try:
        result = evaluate.with_inrush(result, cancelled, progress)
    except CancelledError:
        return
    yield Outcome(snapshot.generation, built, result)


def calculate(snapshot: Snapshot) -> Outcome:
    """All stages at once."""
    return deque(stages(snapshot), maxlen=1)[0]


def asides(
    snapshot: Snapshot, cancelled: Callable[[], bool] | None = None, progress: Callable[[float], None] | None = None
) -> Iterator[tuple[Document, Outcome]]:
    """The results of held states that have none yet: those read from a file, or left before theirs were there."""
    for trial in snapshot.lacking:
        alone = Snapshot(0, trial.document, trial.shelves, trial.problems, Cache(), snapshot.previous)
        found = deque(stages(alone, cancelled, progress), maxlen=1)
        if found and found[0].complete:
            yield trial.document, found[0]


@dataclass(slots=True)
class Session:
    document: Document
    path: FilePath | None = None
    shelves: tuple[Shelf, ...] = ()
    file_problems: tuple[Problem, ...] = ()
    fingerprint: store.Fingerprint | None = None
    saved: Document | None = None  # the document as it stands in the file
    done: list[Step] = field(default_factory=list)
    undone: list[Step] = field(default_factory=list)
    generation: int = 1
    outcome: Outcome | None = None
    full: Result | None = None  # the last complete result; a later one may be in work
    cache: Cache = field(default_factory=Cache)
    reference: Trial | None = None  # what every view shows its change against
    trials: tuple[Trial, ...] = ()
    notes: tuple[str, ...] = ()  # what was found at the start, for the first message
    strange_trials: bool = False  # the file of trials could not be read; it is put aside before one is written
    read_only: str = ""  # who has the file, where this session must not write to it
    locking: bool = False  # whether a lock says that the file is open here; see ``claim``
    lock: locks.Lock | None = None
    holder: locks.Holder | None = None  # the other session that has the file
    recovered: Any = None  # work of a session that was cut off, while it waits for an answer
    # Told what was just done, for a journal: "edit", "undo", "redo", "reload", "trials", "saved", "moved" (to another
    # file); and "saving" before a file is written.
    tell: Callable[[str], None] = lambda _: None

    @property
    def dirty(self) -> bool:
        """Whether there is work that the file does not have."""
        return self.document is not self.saved

    @property
    def fresh(self) -> bool:
        """Whether the results belong to the present document."""
        return self.outcome is not None and self.outcome.generation == self.generation

    @property
    def complete(self) -> bool:
        """Whether all stages of the present document's results are there."""
        return self.fresh and self.outcome is not None and self.outcome.complete

    @property
    def result(self) -> Result | None:
        return self.outcome.result if self.outcome else None

    def latest(self, part: str) -> Result | None:
        """The latest result with ``part`` ("emissions", "stability", "inrush"): from before while that is in work."""
        result = self.result
        return result if result is not None and getattr(result, part) is not None else self.full

    @property
    def title(self) -> str:
        title = get(self.document, ("project", "title"))
        return title if isinstance(title, str) and title else self.name

    @property
    def name(self) -> str:
        return self.path.name if self.path else "unsaved project"

    def snapshot(self) -> Snapshot:
        lacking = {id(t.document): t for t in self.held() if not t.complete and t.document is not self.document}
        return Snapshot(
            self.generation,
            self.document,
            self.shelves,
            self.file_problems,
            self.cache,
            self.full,
            tuple(lacking.values()),
        )

    def accept(self, outcome: Outcome) -> bool:
        """Take a result if it belongs to the present document; an older one is let go."""
        if outcome.generation != self.generation:
            return False
        self.outcome = outcome
        if outcome.complete:
            self.full = outcome.result
        self.fill(self.document, outcome)
        return True

    def apply(self, label: str, document: Document, spot: Any) -> bool:
        """Make ``document`` the present one, one step of history; False where nothing changed."""
        if document is self.document:
            return False
        self.done.append(Step(label, self.document, spot))
        shorten(self.done)
        self.undone.clear()
        self._show(document)
        self.tell("edit")
        return True

    def undo(self, spot: Any) -> Step | None:
        return self._back("undo", self.done, self.undone)

    def redo(self, spot: Any) -> Step | None:
        return self._back("redo", self.undone, self.done)

    def _back(self, what: str, source: list[Step], target: list[Step]) -> Step | None:
        if not source:
            return None
        step = source.pop()
        target.append(Step(step.label, self.document, step.spot))
        self._show(step.document)
        self.tell(what)
        return step

    def resume(
        self,
        document: Document,
        done: list[Step],
        undone: list[Step],
        saved: Document | None,
        fingerprint: store.Fingerprint | None,
    ) -> None:
        """Go on where an earlier session stood: its document and history, and the file as that session knew it."""
        self.done[:], self.undone[:] = done, undone
        self.document, self.saved, self.fingerprint = document, saved, fingerprint
        self.generation += 1
        self._read_shelves()

    def _show(self, document: Document) -> None:
        names = get(self.document, ("shelf_files",))
        self.document = document
        self.generation += 1
        if get(document, ("shelf_files",)) is not names:
            self._read_shelves()

    def _read_shelves(self) -> None:
        if self.path is not None:
            self.shelves, self.file_problems = store.read_shelves(self.document.data, self.path)

    # -- trials

    def held(self) -> tuple[Trial, ...]:
        """The reference, if there is one, and all trials."""
        return (*([self.reference] if self.reference else ()), *self.trials)

    def fill(self, document: Document, outcome: Outcome) -> bool:
        """Give held states of this document their results; whether there was one that lacked them."""

        def filled(trial: Trial) -> Trial:
            return replace(trial, outcome=outcome) if trial.document is document and not trial.complete else trial

        before = self.held()
        self.reference = filled(self.reference) if self.reference else None
        self.trials = tuple(filled(trial) for trial in self.trials)
        return any(a is not b for a, b in zip(before, self.held(), strict=True))

    def present(self, name: str) -> Trial:
        """The project as it stands, with its results as far as they are there."""
        outcome = self.outcome if self.fresh else None
        return Trial(name, self.document, self.shelves, self.file_problems, trials.now(), outcome)

    def hold(self) -> str:
        """Make the present the reference; returns a note for the user, "" mostly."""
        self.reference = self.present(REFERENCE)
        return self._write_trials()

    def keep(self) -> str:
        """End the comparison: the present stays, the reference is let go."""
        self.reference = None
        return self._write_trials()

    def drop(self, spot: Any) -> str:
        """Go back to the reference exactly, with its results, as one step of history, and let it go."""
        trial = self.reference
        if trial is None:
            raise ProjectError("no reference is held.")
        self._take(f"back to {trial.name}", trial, spot)
        return self.keep()

    def hold_as(self, name: str) -> str:
        """Hold the present as a trial; one of the same name is replaced."""
        name = trials.checked(name)
        if name == REFERENCE:
            raise ProjectError(f"'{REFERENCE}' is what the changes are shown against; another name was expected.")
        others = tuple(t for t in self.trials if t.name != name)
        if len(others) >= trials.MOST:
            raise ProjectError(f"there are {trials.MOST} trials already; remove one first.")
        place = next((k for k, t in enumerate(self.trials) if t.name == name), len(others))
        self.trials = (*others[:place], self.present(name), *others[place:])
        return self._write_trials()

    def switch(self, name: str, spot: Any) -> None:
        """Make a trial the present, as one step of history."""
        self._take(f"trial {name}", self.trial(name), spot)

    def refer_to(self, name: str) -> str:
        """Make a trial the reference."""
        self.reference = self.trial(name)
        return self._write_trials()

    def forget(self, name: str) -> str:
        """Remove a trial."""
        gone = self.trial(name)
        self.trials = tuple(t for t in self.trials if t is not gone)
        return self._write_trials()

    def trial(self, name: str) -> Trial:
        found = trials.named(self.held(), name)
        if found is None:
            raise ProjectError(f"there is no trial '{printable(name, 40)}'.")
        return found

    def _take(self, label: str, trial: Trial, spot: Any) -> None:
        if not self.apply(label, trial.document, spot):
            return
        self.shelves, self.file_problems = trial.shelves, trial.problems
        if trial.outcome is not None:  # nothing has to be calculated again
            self.accept(replace(trial.outcome, generation=self.generation))

    def _write_trials(self) -> str:
        """Write the trials beside the project; a sentence for the user where they live in this session only."""
        self.tell("trials")
        if self.path is None:
            return ""
        if self.read_only:
            return f"{printable(self.name, 30)} is open read-only: the trials live in this session only."
        try:
            if self.strange_trials:
                trials.put_aside(self.path)
                self.strange_trials = False
            trials.write(self.path, Shelved(self.trials, self.reference))
        except ProjectError as error:
            return f"{error} The trials live in this session only."
        return ""

    # -- the file

    def save(self, *, over: bool = False) -> tuple[str, ...]:
        """Write to the session's own file; returns notes for the user. Raises as ``store.save``."""
        if self.path is None:
            raise ProjectError("this project has no file yet; save it under a name.")
        self._may_write()
        self.tell("saving")
        saved = store.save(self.document, self.path, self.fingerprint, over=over)
        self.fingerprint, self.saved = saved.fingerprint, self.document
        self.tell("saved")
        return saved.notes

    def save_as(self, path: FilePath, *, over: bool = False) -> tuple[str, ...]:
        """Write to another file, which becomes the session's own; its shelf files come along."""
        names = [s.name for s in self.shelves]
        if str(FilePath(path.name)) in names:
            raise ProjectError(
                f"{printable(path.name, 60)} is a shelf file of this project; another name was expected."
            )
        if not over and os.path.lexists(path):
            raise store.ChangedOnDiskError(f"{printable(str(path), 200)} exists already; nothing was written.")
        taken = self._lock_of(path)
        try:
            if self.path is not None and not store.same_place(self.path.parent, path.parent):
                store.copy_shelves(names, self.path.parent, path.parent)
            self.tell("saving")
            saved = store.save(self.document, path, None, over=over)
        except BaseException:
            if taken is not None and taken is not self.lock:
                taken.release()
            raise
        if taken is not self.lock:
            self.release()
            self.lock, self.holder, self.read_only = taken, None, ""
        self.path, self.fingerprint, self.saved = path, saved.fingerprint, self.document
        self.tell("moved")
        self._read_shelves()
        if self.held():
            return (*saved.notes, *filter(None, [self._write_trials()]))
        return saved.notes

    # -- who else has it open

    def claim(self) -> bool:
        """Say by a lock that this session has the file; False where another has it: then it is read-only here."""
        self.locking = True
        self.release()
        if self.path is None:
            return True
        found = locks.take(self.path, self.holder)
        if isinstance(found, locks.Holder):
            self._give_way(found)
            return False
        late = bool(self.read_only)
        self.lock, self.holder, self.read_only = found, None, ""
        if late:
            self._join_trials()
        return True

    def release(self) -> None:
        """Let the lock go; at the end of the session."""
        if self.lock is not None:
            self.lock.release()
            self.lock = None

    def lost(self) -> bool:
        """Notice that another session has taken the file over, while this one could not say that it lives."""
        if self.lock is None or self.lock.lost is None:
            return False
        self._give_way(self.lock.lost)
        return True

    def _join_trials(self) -> None:
        """The session that had the file may have written trials: they come beside those held here meanwhile."""
        assert self.path is not None
        try:
            theirs = trials.read(self.path)
        except ProjectError:
            self.strange_trials = True  # it is put aside before ours are written
        else:
            self.trials, complete = trials.joined(self.trials, theirs.trials)
            self.strange_trials = self.strange_trials or not complete
            self.reference = self.reference or theirs.reference
        self._write_trials()

    def _give_way(self, holder: locks.Holder) -> None:
        self.release()
        self.holder, self.read_only = holder, holder.told()

    def _may_write(self) -> None:
        """Raise ReadOnlyError where another session has the file, also if that has changed since it was opened."""
        if self.lock is not None and self.lock.check() is not None:
            self.lost()
        if self.read_only and not self.claim():
            raise ReadOnlyError(f"{self.read_only}; {printable(self.name, 30)} was not saved.")

    def _lock_of(self, path: FilePath) -> locks.Lock | None:
        """The lock for saving to ``path``; raises ProjectError where another session has that file."""
        if not self.locking:
            return None
        if self.path is not None and store.same_place(path, self.path):
            self._may_write()
            return self.lock
        found = locks.take(path)
        if isinstance(found, locks.Holder):
            raise ProjectError(f"{printable(path.name, 30)}: {found.told()}; nothing was written.")
        return found

    def copy_to(self, path: FilePath) -> None:
        """Write a copy beside; the session stays with its own file."""
        store.save(self.document, path, None)

    def changed_on_disk(self) -> bool:
        return self.path is not None and self.fingerprint is not None and store.changed(self.path, self.fingerprint)

    def on_disk(self) -> str:
        """What has become of the file since it was read or written last, as the end of a sentence; "" for nothing."""
        if self.path is None or not self.changed_on_disk():
            return ""
        try:
            mode = os.stat(self.path).st_mode
        except OSError:
            folder = os.path.isdir(self.path.parent)
            return "was removed or renamed by someone else" if folder else "cannot be found: its folder is gone"
        if stat.S_ISDIR(mode):
            return "is a folder now"
        return "was changed on disk by someone else" if stat.S_ISREG(mode) else "is no ordinary file any more"

    def reload(self, spot: Any) -> None:
        """Take what the file holds now, as one step of history that can be undone."""
        assert self.path is not None
        loaded = store.load(self.path)
        self.done.append(Step("reload", self.document, spot))
        shorten(self.done)
        self.undone.clear()
        self.document = loaded.document
        self.generation += 1
        self.shelves, self.file_problems, self.fingerprint = loaded.shelves, loaded.problems, loaded.fingerprint
        self.saved = loaded.document
        self.tell("reload")

    # -- the cells

    def enter(self, path: Path, text: str, spot: Any) -> bool:
        """Type ``text`` into a cell; raises ProjectError with a sentence where the cell cannot take it."""
        _, lent = edits.value_at(self.document, self.shelves, path)
        document = edits.enter(self.document, self.shelves, path, text)
        label = f"{place(self.document, path)} = {printable(text.strip(), 60) or 'empty'}"
        if lent and len(path) > len(edits.owner(path)) + 1:
            label += " (its own from now on, no longer the shelf's)"
        return self.apply(label, document, spot)


def open_file(path: FilePath) -> Session:
    """A session on an existing file; raises ProjectError, a sentence, where it cannot be used at all."""
    loaded = store.load(path)
    session = Session(
        loaded.document,
        path,
        loaded.shelves,
        loaded.problems,
        loaded.fingerprint,
        saved=loaded.document,
    )
    try:
        shelved = trials.read(path)
    except ProjectError as error:
        session.notes, session.strange_trials = (str(error),), True
        return session

    def own(trial: Trial) -> Trial:  # one that is the project as it stands shares its results
        same = trial.document.data == loaded.document.data
        return replace(trial, document=loaded.document, shelves=loaded.shelves) if same else trial

    session.trials = tuple(own(trial) for trial in shelved.trials)
    session.reference = own(shelved.reference) if shelved.reference else None
    return session


def open_demo() -> Session:
    """The demo as an unsaved project, with the shelf parts it uses taken into it, so that it stands alone."""
    folder = demo_folder()
    loaded = store.load(folder / DEMO)
    document = from_data(loaded.document.data, loaded.document.text)
    for shelf in loaded.shelves:
        for key, named in _shelf_section(shelf.data).items():
            for name, part in named.items():
                if get(document, ("shelf", key, name)) is None:
                    document = put(document, ("shelf", key, name), part)
    document = drop(document, ("shelf_files",))
    return Session(document, saved=document)


def _shelf_section(data: Tree) -> Tree:
    section = data.get("shelf")
    return section if isinstance(section, dict) else {}


def demo_folder() -> FilePath:
    """Where the demo projects are: inside the installed package, or beside it in a checkout."""
    here = FilePath(__file__).resolve().parent
    packed = here / "demo"
    return packed if packed.is_dir() else here.parent / "projects"
