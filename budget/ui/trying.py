"""Trials on the desk: the reference that every view shows its change against, and states held by name, side by side."""

from __future__ import annotations

from typing import TYPE_CHECKING

from budget.project.problems import ProjectError
from budget.report import change, words
from budget.trials import LONGEST, REFERENCE, Trial
from budget.ui.changes import BETTER, LEGEND, WORSE
from budget.ui.sheet import PENDING, Context, rank, words_only
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:  # studies load numpy, and the sheet is painted before that
    from budget.engine.checks import CheckRow
    from budget.session import Outcome
    from budget.study.beside import Beside, Line
    from budget.study.compare import Variant
    from budget.ui.desk import Desk

PRESENT = "present"
_LABEL = Column("", 19, most=30)


def columns(context: Context) -> list[Trial]:
    """What stands side by side: the present, the reference, and the trials; one document once under each name."""
    session = context.session
    held = [t for t in session.held() if t is not session.reference or t.name == REFERENCE]
    return [session.present(PRESENT), *held]


def trials_view(context: Context) -> View:
    """The present, the reference and all trials, a column each."""
    session = context.session
    if not session.held():
        texts = ("nothing is held yet", "K holds the present as the reference", "n holds it as a trial with a name")
        rows = tuple(Row(("none", k), (Cell(text),)) for k, text in enumerate(texts))
        return View("trials", "trials side by side", (Section((Column("", 60, most=100),), rows),))
    shown = columns(context)
    made_of = (*(t.outcome for t in shown), *(t.document for t in shown))
    from budget.study.beside import beside

    found: Beside = context.once("beside", made_of, lambda: beside([_variant(t) for t in shown]))
    heads = (_LABEL, *(Column(words_only(_title(context, t)), 10, RIGHT, most=16) for t in shown))
    base = next((k for k, t in enumerate(shown) if t is session.reference), 0)
    results = [_held(shown), *_results(found, shown, base)]
    inputs = [
        Row(("input", path), (Cell(words_only(path), info=words_only(path)), *_texts(path, texts, base)))
        for path, texts in found.inputs
    ]
    sections = [Section(heads, tuple(results))]
    title = Column("inputs that differ", _LABEL.width, most=_LABEL.most)
    none = (Row(("same",), (Cell("none"),)),)
    sections.append(Section((title, *heads[1:]), tuple(inputs) or none))
    against = words_only(shown[base].name)
    return View("trials", f"trials; {LEGEND} than {against}", tuple(sections))


def _title(context: Context, trial: Trial) -> str:
    same = trial.document is context.session.document and trial.name != PRESENT
    return f"= {trial.name}" if same else trial.name


def _variant(trial: Trial) -> Variant:
    from budget.study.compare import Variant

    result = trial.outcome.result if trial.outcome else None
    return Variant(trial.name, trial.document, trial.shelves, result)


def _held(shown: list[Trial]) -> Row:
    return Row(("held",), (Cell("held"), *(Cell(t.when.partition(" ")[2], align=RIGHT, info=t.when) for t in shown)))


def _results(found: Beside, shown: list[Trial], base: int) -> list[Row]:
    rows = []
    for label, counts in (("checks that fail", found.failing), ("checks that are thin", found.thin)):
        cells = [_number(n, counts[base], f"{n}", -1) for n in counts]
        rows.append(Row(("count", label), (Cell(label), *cells)))
    heat = [_number(h, found.heat[base], words.show(h, "W"), -1) for h in found.heat]
    rows.append(Row(("heat",), (Cell("heat, worst corner"), *heat)))
    for line in found.filters:
        rows.append(
            Row(("filter", line.label), (Cell(words_only(f"{line.label} current")), *_checks(line, base, shown)))
        )
    for line in found.kinds:
        if line.label != "filter current":
            rows.append(Row(("kind", line.label), (Cell(words_only(line.label)), *_checks(line, base, shown))))
    return rows


def _number(value: float | None, base: float | None, text: str, sense: int) -> Cell:
    if value is None:
        return Cell(PENDING, align=RIGHT)
    mark = ""
    if base is not None and abs(value - base) > 1e-9 * max(abs(value), abs(base)):
        mark = BETTER if (value - base) * sense > 0 else WORSE
    return Cell(text + mark, align=RIGHT, tone={WORSE: "fail", BETTER: "ok"}.get(mark, ""))


def _checks(line: Line, base: int, shown: list[Trial]) -> list[Cell]:
    cells = []
    reference = line.rows[base]
    for row, trial in zip(line.rows, shown, strict=True):
        if row is None:
            cells.append(Cell("-" if trial.complete else PENDING, align=RIGHT))
            continue
        mark = ""
        if reference is not None and abs(rank(row) - rank(reference)) > 1e-9:
            mark = BETTER if rank(row) > rank(reference) else WORSE
        info = f"{words_only(trial.name)}: {words.sentence(row)}"
        cells.append(Cell(_verdict(row) + mark, align=RIGHT, tone=row.status, info=info))
    return cells


def _verdict(row: CheckRow) -> str:
    """A check in ten characters: '12% left', 'FAIL 3%', '4.1dB left', 'ok'."""
    if row.status == "no data" or row.margin is None:
        return "FAIL" if row.status == "fail" else row.status
    number = f"{abs(row.margin):.1f}dB" if row.margin_unit == "dB" else words.percent(row.margin).replace(" ", "")
    if row.status == "fail":
        return f"FAIL {number}"
    return f"{'thin ' if row.status == 'thin' else ''}{number}" + ("" if row.status == "thin" else " left")


def _texts(path: str, texts: tuple[str, ...], base: int) -> list[Cell]:
    return [
        Cell(words_only(text) or "-", align=RIGHT, tone="" if text == texts[base] else "head", info=f"{path}: {text}")
        for text in texts
    ]


# -- commands


def hold(desk: Desk) -> None:
    """Hold the present as the reference; with one held, ask what becomes of it."""
    session = desk.session
    chosen = _chosen(desk)
    if chosen is not None and chosen.name not in (PRESENT, REFERENCE):
        note = session.refer_to(chosen.name)
        desk.say(note or f"{chosen.name} is the reference now: changes show below each row, {LEGEND}")
        return
    if session.reference is None:
        note = session.hold()
        desk.say(note or f"held as the reference: changes show below each row, {LEGEND}; K again ends it")
        return
    name = session.reference.name

    def keep() -> None:
        note = session.keep()
        desk.say(note or f"kept the present; {name} is let go")

    def drop() -> None:
        before = session.outcome
        note = session.drop(desk.spot())
        _moved(desk, f"back to {name}", before)
        if note:
            desk.say(note, "thin")

    def again() -> None:
        note = session.hold()
        desk.say(note or "the present is the reference now")

    when = session.reference.when.partition(" ")[2]
    desk.ask(
        f"All is shown against {name}" + (f", held {when}." if when else "."),
        {
            "k": ("keep the present", keep),
            "d": ("drop it: back", drop),
            "h": ("hold anew", again),
            "t": ("name it", lambda: hold_as(desk)),
        },
    )


def hold_as(desk: Desk) -> None:
    """Hold the present under a name."""
    session = desk.session

    def accept(text: str) -> None:
        known = any(t.name == " ".join(text.split()) for t in session.trials)
        note = session.hold_as(text)
        desk.say(note or f"trial {' '.join(text.split())} {'replaced' if known else 'held'}; T shows all side by side")

    n = len(session.trials) + 1
    while any(t.name == f"trial {n}" for t in session.trials):
        n += 1
    desk.prompt(f"hold the present under a name (up to {LONGEST} characters)", f"trial {n}", accept)


def switch(desk: Desk) -> None:
    """Make the trial under the cursor the present."""
    trial = _chosen(desk)
    if trial is None or trial.name == PRESENT:
        raise ProjectError("the cursor is not on a trial; right and left go to one.")
    if trial.document is desk.session.document:
        raise ProjectError(f"{trial.name} is the present already.")
    before = desk.session.outcome
    desk.session.switch(trial.name, desk.spot())
    _moved(desk, f"{trial.name} is the present", before)


def _moved(desk: Desk, label: str, before: Outcome | None) -> None:
    """Tell what another state brings; its results are mostly there already."""
    session = desk.session
    if not session.complete:
        desk.changed(label)
        return
    desk.pending, desk.label = False, ""
    told = change.describe(before.result if before else None, session.result)
    desk.say(f"{label}: {told}" if told else label)


def forget(desk: Desk) -> None:
    """Remove the trial under the cursor."""
    trial = _chosen(desk)
    if trial is None or trial.name in (PRESENT, REFERENCE):
        raise ProjectError("the cursor is not on a trial with a name; K lets go of the reference.")
    name = trial.name

    def gone() -> None:
        note = desk.session.forget(name)
        desk.cursor.column = max(0, desk.cursor.column - 1)
        desk.say(note or f"trial {name} removed")

    desk.ask(f"Remove trial {name}? This cannot be undone.", {"y": ("remove", gone)})


def _chosen(desk: Desk) -> Trial | None:
    """The trial whose column the cursor is in, among the trials."""
    if desk.view_name != "trials":
        return None
    shown = columns(desk.context())
    k = desk.cursor.column - 1
    return shown[k] if desk.session.held() and 0 <= k < len(shown) else None
