"""Trials: states of a project held by name to compare with and to go back to, and the file that keeps them.

The file stands beside the project, ``bus.trials.toml`` for ``bus.toml``, and holds each trial as the text that a save
would have written, so that any of them can be opened by itself. Results are not kept; they follow from the text.
"""

from __future__ import annotations

import time
import tomllib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path as FilePath
from typing import TYPE_CHECKING, Any

from budget.project import store
from budget.project.build import Shelf
from budget.project.document import Document
from budget.project.problems import Problem, ProjectError, found, printable

if TYPE_CHECKING:
    from budget.session import Outcome

REFERENCE = "reference"  # its name until the user gives it one
LONGEST = 24  # characters of a name
MOST = 20  # trials of one project
MOST_BYTES = 4 * store.MAX_BYTES  # of their file
FORMAT = 1
_HEAD = """\
# Trials of {name}, kept by budget: whole projects as text, with the name each was held by.
# The program writes this file anew; what is added by hand here is lost.

"""


@dataclass(frozen=True, slots=True, eq=False)
class Trial:
    """A state of the project under a name; ``outcome`` are its results as far as they are known."""

    name: str
    document: Document
    shelves: tuple[Shelf, ...] = ()
    problems: tuple[Problem, ...] = ()
    when: str = ""
    outcome: Outcome | None = None

    @property
    def complete(self) -> bool:
        """Whether all its results are there."""
        return self.outcome is not None and self.outcome.complete


@dataclass(frozen=True, slots=True)
class Shelved:
    """What a trials file holds: the trials by name, and the reference if one is held."""

    trials: tuple[Trial, ...] = ()
    reference: Trial | None = None


def now() -> str:
    """The time as it is noted with a trial."""
    return time.strftime("%Y-%m-%d %H:%M")


def checked(name: str) -> str:
    """A name for a trial; raises ProjectError, a sentence, for text that is none."""
    name = " ".join(name.split())
    if not name or not name.isprintable() or len(name) > LONGEST:
        raise ProjectError(f"{found(name)} is no name for a trial; 1 to {LONGEST} characters were expected.")
    return name


def file_of(path: FilePath) -> FilePath:
    """Where the trials of the project at ``path`` are kept."""
    return path.with_name(f"{path.stem}.trials.toml")


def write(path: FilePath, held: Shelved) -> None:
    """Write the trials of the project at ``path`` in one step; without any, the file goes.

    Raises ProjectError, a sentence, where that cannot be done.
    """
    target = file_of(path)
    rows = [_row(trial, False) for trial in held.trials]
    if held.reference is not None:
        known = next((k for k, t in enumerate(held.trials) if t.document is held.reference.document), None)
        if known is not None and held.trials[known].name == held.reference.name:
            rows[known]["reference"] = True
        else:
            rows.insert(0, _row(held.reference, True))
    if not rows:
        try:
            target.unlink(missing_ok=True)
        except OSError as error:
            raise ProjectError(f"{printable(target.name, 80)} cannot be removed: {error.strerror}.") from error
        return
    import tomli_w

    tree = {"format": FORMAT, "trial": rows}
    text = tomli_w.dumps(tree, multiline_strings=True)
    if tomllib.loads(text) != tree:  # a line end of another system inside a text
        text = tomli_w.dumps(tree)
    text = _HEAD.format(name=printable(path.name, 80)) + text
    if len(text.encode("utf-8")) > MOST_BYTES:  # it would not be read again
        raise ProjectError(f"the trials would take more than {MOST_BYTES / 1e6:.0f} MB; remove one.")
    store.write_text(target, text)


def _row(trial: Trial, reference: bool) -> dict[str, Any]:
    row = {"name": trial.name, "held": trial.when, "text": store.render(trial.document).text}
    return {**row, "reference": True} if reference else row


def read(path: FilePath) -> Shelved:
    """The trials of the project at ``path``; none where there is no file.

    Raises ProjectError, a sentence, where the file cannot be read; it is left as it is.
    """
    source = file_of(path)
    try:
        loaded = store.load(source, MOST_BYTES)
    except store.NoFileError:
        return Shelved()
    data = loaded.document.data
    rows = data.get("trial")
    if data.get("format") != FORMAT or not isinstance(rows, list):
        raise ProjectError(f"{printable(source.name, 80)} is no file of trials of this version; it is left as it is.")
    trials: list[Trial] = []
    reference = None
    for row in rows[: MOST + 1]:
        trial = _trial(row, path, source)
        if row.get("reference") is True:
            reference = trial
        if row.get("reference") is not True or trial.name != REFERENCE:
            trials.append(trial)
    return Shelved(tuple(trials), reference)


def _trial(row: Any, path: FilePath, source: FilePath) -> Trial:
    if not isinstance(row, dict) or not all(isinstance(row.get(key), str) for key in ("name", "text")):
        raise ProjectError(f"{printable(source.name, 80)}: a trial without name and text; it is left as it is.")
    name = checked(row["name"])
    parsed = store.parse(row["text"], path.parent, path.name)
    return Trial(name, parsed.document, parsed.shelves, parsed.problems, str(row.get("held", "")))


def joined(ours: Sequence[Trial], theirs: Sequence[Trial]) -> tuple[tuple[Trial, ...], bool]:
    """Our trials and behind them those of another session; False where one of theirs has no place beside ours."""
    known = {trial.name: trial.document.data for trial in ours}
    more = [trial for trial in theirs if trial.name not in known][: max(0, MOST - len(ours))]
    kept = {**known, **{trial.name: trial.document.data for trial in more}}
    return (*ours, *more), all(kept.get(trial.name) == trial.document.data for trial in theirs)


def put_aside(path: FilePath) -> None:
    """Rename a file of trials that could not be read, so that a new one does not replace it."""
    source = file_of(path)
    try:
        source.rename(store.free_name(source, "unread"))
    except FileNotFoundError:
        return
    except OSError as error:
        raise ProjectError(f"{printable(source.name, 80)} cannot be put aside: {error.strerror}.") from error


def named(trials: Sequence[Trial], name: str) -> Trial | None:
    """The trial called ``name``, None where there is none."""
    return next((trial for trial in trials if trial.name == name), None)
