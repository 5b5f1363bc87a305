"""From the events of a journal to the session they came from: document, history, trials, all as they were.

Replaying does what the session did, step by step, so that what was one document then is one document now: an undo leads
back to the very state that was saved, and a trial held of the present is the present.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from budget.keeping import lines
from budget.keeping.lines import JournalError, Record
from budget.keeping.patch import PatchError, applied, unpack
from budget.keeping.places import Owner
from budget.project.document import Document
from budget.session import Step, shorten
from budget.trials import Trial


@dataclass(slots=True)
class Work:
    """A session as it stood. ``digest`` is that of the file as this session knew it last, ``saved`` what stood in it.

    ``trials`` is None where the session never changed any. ``changes`` counts what was done since ``saved`` was, and
    ``last`` names the last of it. ``damage`` says where the journal could not be read on.
    """

    document: Document
    path: str | None
    digest: str | None
    saved: Document | None
    owner: Owner
    done: list[Step] = field(default_factory=list)
    undone: list[Step] = field(default_factory=list)
    trials: tuple[Trial, ...] | None = None
    reference: Trial | None = None
    held: tuple[Document, ...] = ()  # of the trials told last, and the reference's behind them
    spot: Any = None
    changes: int = 0
    last: str = ""
    when: float = 0.0
    events: int = 0
    damage: str = ""

    @property
    def unsaved(self) -> bool:
        """Whether there is work that the file, as this session knew it, does not have."""
        return self.document is not self.saved


def begin(head: Record) -> Work:
    """The work of a journal before its first event. Raises JournalError."""
    document = lines.base(head)
    path, digest = head.get("path"), head.get("digest")
    when = head.get("when")
    return Work(
        document,
        path if isinstance(path, str) else None,
        digest if isinstance(digest, str) else None,
        document if head.get("clean") is True else None,
        lines.owner_of(head),
        when=float(when) if isinstance(when, int | float) else 0.0,
    )


def step(work: Work, record: Record) -> None:
    """Do to ``work`` what an event did. Raises JournalError, and has then changed nothing."""
    if record.get("n") != work.events + 1:
        raise JournalError("an event is missing")
    try:
        event = _EVENTS[record["e"]]
    except (KeyError, TypeError) as error:
        raise JournalError(f"an unknown event ({str(record.get('e'))[:20]})") from error
    try:
        event(work, record)
    except (AttributeError, IndexError, KeyError, TypeError, ValueError, PatchError, RecursionError) as error:
        raise JournalError(f"an event that does not fit ({record['e']})") from error
    work.events += 1
    if isinstance(record.get("t"), int | float) and record["e"] not in ("at", "resumed"):
        work.when = float(record["t"])


def _edit(work: Work, record: Record) -> None:
    label, spot = _text(record["label"]), unpack(record["spot"])
    done = [*work.done, Step(label, work.document, spot)] if "of" in record else work.done
    if "of" in record:  # it is told as the history stood with this step in it
        shorten(done)
        document = _document(replace(work, done=done), record["of"])
    else:
        document = applied(work.document, record["patch"])
        done.append(Step(label, work.document, spot))
        shorten(done)
    work.done = done
    work.undone.clear()
    _present(work, document, spot, label)


def _undo(work: Work, record: Record) -> None:
    _back(work, work.done, work.undone, "undone: ")


def _redo(work: Work, record: Record) -> None:
    _back(work, work.undone, work.done, "done again: ")


def _back(work: Work, source: list[Step], target: list[Step], word: str) -> None:
    last = source.pop()
    target.append(Step(last.label, work.document, last.spot))
    _present(work, last.document, last.spot, word + last.label)


def _present(work: Work, document: Document, spot: Any, label: str) -> None:
    work.document, work.spot, work.last = document, spot, label
    work.changes += 1


def _reload(work: Work, record: Record) -> None:
    digest = _text(record["digest"])
    _edit(work, record)
    _as_saved(work, digest)


def _saved(work: Work, record: Record) -> None:
    _as_saved(work, _text(record["digest"]))


def _moved(work: Work, record: Record) -> None:
    path, digest = _text(record["path"]), _text(record["digest"])
    work.path = path
    _as_saved(work, digest)


def _as_saved(work: Work, digest: str) -> None:
    work.digest, work.saved, work.changes, work.last = digest, work.document, 0, ""


def _at(work: Work, record: Record) -> None:
    work.spot = unpack(record["spot"])


def _resumed(work: Work, record: Record) -> None:
    work.owner = lines.owner_of(record)


def _trials(work: Work, record: Record) -> None:
    held: list[Trial] = []
    for row in record["trials"]:
        held.append(Trial(_text(row["name"]), _document(work, row["of"], held), when=_text(row["when"])))
    work.held = tuple(trial.document for trial in held)
    work.reference = held.pop() if record["reference"] is True else None
    work.trials = tuple(held)


def _document(work: Work, of: Any, held: Sequence[Trial] = ()) -> Document:
    """The document that is told by where it stands: the present, one that is known already, or a patch to the present.

    ``held`` are the trials that the same event told before.
    """
    if of == "present":
        return work.document
    if of == "saved" and work.saved is not None:
        return work.saved
    if isinstance(of, dict):
        return applied(work.document, of)
    where, index = of
    known: dict[str, Sequence[Document]] = {
        "held": work.held,
        "row": [trial.document for trial in held],
        "done": [step.document for step in work.done],
        "undone": [step.document for step in work.undone],
    }
    document: Document = known[where][index]
    return document


def _text(value: Any) -> str:
    if not isinstance(value, str):
        raise JournalError("a text was expected")
    return value


_EVENTS: dict[str, Callable[[Work, Record], None]] = {
    "edit": _edit,
    "undo": _undo,
    "redo": _redo,
    "reload": _reload,
    "saved": _saved,
    "moved": _moved,
    "at": _at,
    "resumed": _resumed,
    "trials": _trials,
}
