"""Questions put to cells: how far one can go, what two of them do together; and values of the answers put in."""

from __future__ import annotations

import contextlib
import math
import re
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.project import document as doc
from budget.project.document import Document, Path
from budget.project.problems import ProjectError, printable
from budget.report import words
from budget.study import paths
from budget.study.paths import Cell as Number
from budget.ui.desk import Desk, Work
from budget.ui.reach import Asked, parts_in_words, value_of
from budget.ui.sweepmap import Axis, Swept, point_of

if TYPE_CHECKING:
    from budget.study.sweep import Sweep

HOW_FAR, SWEEP = "how far", "sweep"  # as the calculations are called while they run
STEPS = (11, 9)  # of the first and the second cell of a sweep, where nobody says
SHOWN = 6  # digits of values that are offered or put in
PARTS = (("dc",), ("dc", "emissions"), ("dc", "stability"), ("dc", "emissions", "stability", "inrush"))
# A range where half to double says nothing: kinds with a zero of their own, and cells that hold zero.
_AROUND = {"temperature": 20.0, "angle": 45.0, "level": 6.0, "level_line": 6.0, "level_uA": 6.0, "level_uV": 6.0}
_FROM_ZERO = {"resistance": 0.1, "inductance": 1e-5, "capacitance": 1e-5, "time": 1e-2, "ratio": 0.5, "frequency": 1e6}

Cancelled = Callable[[], bool]
Progress = Callable[[float], None]


def _here(desk: Desk) -> Number:
    """The number under the cursor; where the row names only one cell, that one. Raises ProjectError."""
    row, cell = desk.here()
    path = cell.path
    if path is None and row is not None and not cell.calculated:
        found = [c.path for c in row.cells if c.path is not None]
        path = found[0] if len(found) == 1 else None
    if path is None:
        what = "this cell is calculated" if cell.calculated else "there is no number here"
        raise ProjectError(f"{what}; the cursor was expected on a number that was entered.")
    return _number(desk, path)


def _number(desk: Desk, path: Path) -> Number:
    number = paths.cell_at(desk.session.document, desk.session.shelves, path)
    if number.value is None:
        raise ProjectError(f"{number.text} is not entered; a number to start from was expected.")
    return number


def _again(desk: Desk, number: Number) -> Number:
    """The cell of an earlier question in the present document, by its name: rows may have moved."""
    session = desk.session
    path = paths.resolve(session.document, session.shelves, number.text)
    now = _number(desk, path)
    if now.spec.kind != number.spec.kind:
        raise ProjectError(f"{number.text} holds another kind of number than when it was asked about; ask again.")
    return now


def _start(desk: Desk, begin: Callable[[], None]) -> None:
    """Begin a calculation; one that runs is not ended for it without a word, unless it is soon asked again."""
    job = desk.job
    if job is None or job.stop or job.label == HOW_FAR:
        begin()
        return
    desk.ask(f"{job.label} is at {job.fraction:.0%} and would be stopped.", {"s": ("stop it, begin this", begin)})


def _show(desk: Desk, view: str) -> None:
    if desk.view_name != view:
        desk.back.append(desk.spot())
        desk.view_name = view


# -- how far


def ask_reach(desk: Desk) -> None:
    """How far the cell under the cursor can go; in the view of an answer, the same cell as it is now."""
    asked: Asked | None = desk.options.reach
    if desk.view_name == "reach":
        if asked is None:
            raise ProjectError("nothing was asked yet; the cursor was expected on a number that was entered.")
        _reach(desk, _again(desk, asked.cell), asked.thin)
    else:
        _reach(desk, _here(desk), thin=False)


def other_turn(desk: Desk) -> None:
    """The same cell, up to where a check turns thin in place of where one fails, or back."""
    asked: Asked | None = desk.options.reach
    if asked is None:
        raise ProjectError("nothing was asked yet; Q on a number asks.")
    _reach(desk, _again(desk, asked.cell), not asked.thin)


def _reach(desk: Desk, cell: Number, thin: bool) -> None:
    document = desk.session.document
    stages = _stages(document)
    asked = Asked(cell, document, thin, waits=stages[-1])
    _start(desk, lambda: _begin_reach(desk, asked, stages))


def _stages(document: Document) -> list[tuple[str, ...]]:
    """What is counted in one after the other; the last has all but the switch-on, which takes too long for this."""
    emits = bool(doc.get(document, ("rules", "emissions")))
    return [("dc",), *([("dc", "emissions")] if emits else []), ("dc", *(["emissions"] if emits else []), "stability")]


def _begin_reach(desk: Desk, asked: Asked, stages: list[tuple[str, ...]]) -> None:
    _show(desk, "reach")
    desk.options = replace(desk.options, reach=asked)
    shelves = desk.session.shelves

    def run(cancelled: Cancelled, progress: Progress) -> bool:
        from budget.engine.transient import CancelledError
        from budget.study.reach import reach

        for k, parts in enumerate(stages):
            try:
                found = reach(
                    asked.document,
                    shelves,
                    asked.cell.path,
                    parts=parts,
                    thin=asked.thin,
                    cancelled=cancelled,
                    progress=_share(progress, k, len(stages)),
                )
            except CancelledError:
                return False
            except ProjectError as error:
                _tell(desk, asked, fault=str(error))
                break
            except BaseException:  # it will be told
                _tell(desk, asked, waits=())
                raise
            waits = tuple(part for part in stages[-1] if part not in parts)
            _tell(desk, asked, found=found, waits=waits)
        return True

    def done(whole: bool) -> None:
        _take(desk, asked, {"waits": ()})
        if not whole and desk.job is None:
            desk.say(f"stopped: {HOW_FAR}; what is shown stays")

    desk.start_job(Work(HOW_FAR, run, done, keeps=True))


def _share(progress: Progress, k: int, count: int) -> Progress:
    """Progress of one of several stages, told now and then: each word costs the terminal bytes."""
    told = [-1]

    def tell(share: float) -> None:
        percent = int(50.0 * (k + share) / count)
        if percent != told[0]:
            told[0] = percent
            progress((k + share) / count)

    return tell


def _tell(desk: Desk, asked: Asked, **what: Any) -> None:
    """From the thread of the calculation to that of the screen."""
    desk.later(lambda: _take(desk, asked, what))


def _take(desk: Desk, asked: Asked, what: dict[str, Any]) -> None:
    """Take what is known of a question, unless a newer one took its place."""
    now: Asked | None = desk.options.reach
    if now is not None and now.token is asked.token:
        desk.options = replace(desk.options, reach=replace(now, **what))


def take_reach(desk: Desk) -> None:
    """Put the value of the row under the cursor into the cell that was asked about, as one edit."""
    asked: Asked | None = desk.options.reach
    row, _ = desk.here()
    value = value_of(asked.found, row.key) if asked and asked.found and row else None
    if asked is None or asked.found is None or value is None:
        raise ProjectError("this row has no value to put in; Enter puts in a limit or a value of the table.")
    now = _again(desk, asked.cell)
    if value == now.value:
        raise ProjectError(f"{now.text} holds {now.show(value)} already.")
    _put(desk, [(now, _towards(now, value, asked.found.value))])


def _towards(cell: Number, value: float, present: float) -> str:
    """A value to type, rounded, but never beyond it as seen from ``present``: what lies beyond a limit fails."""
    kind = quantity.KINDS[cell.spec.kind]
    last = 10.0 ** (math.floor(math.log10(abs(value))) + 1 - SHOWN) if value else 0.0
    for half in (0.0, 0.5):
        text = quantity.show(value + math.copysign(half * last, present - value), kind, SHOWN)
        with contextlib.suppress(ProjectError):
            if min(value, present) <= paths.number(cell, text) <= max(value, present):
                return text
    return cell.typed(value)


def _put(desk: Desk, values: list[tuple[Number, str]]) -> None:
    """Type values into cells, as one edit."""
    from budget.project import edits

    document = desk.session.document
    for cell, text in values:
        document = edits.enter(document, desk.session.shelves, cell.path, text)
    desk.change(words.clean(", ".join(f"{cell.text} = {text}" for cell, text in values)), document)


# -- sweeps


def ask_sweep(desk: Desk) -> None:
    """The first cell of a sweep, then the second; in the view of a map, the same sweep of the present project."""
    swept: Swept | None = desk.options.sweep
    if desk.view_name == "map" and swept is not None:
        axes = [Axis(_again(desk, axis.cell), axis.values) for axis in (swept.a, swept.b)]
        _sweep(desk, axes[0], axes[1], swept.parts, swept.aside)
        return
    first: Axis | None = desk.options.first
    cell = _here(desk)
    if first is not None and cell.text == first.cell.text:
        desk.options = replace(desk.options, first=None)
        desk.say(words.clean(f"{printable(cell.text, 40)} is no longer the first cell of a sweep"))
        return
    if first is None:
        _ask_range(desk, cell, STEPS[0], lambda axis: _hold(desk, axis))
        return
    one = first
    _ask_range(desk, cell, STEPS[1], lambda axis: _ask_parts(desk, one, axis))


def _ask_range(desk: Desk, cell: Number, count: int, then: Callable[[Axis], None]) -> None:
    low, high = usual_range(cell)
    kind = quantity.KINDS[cell.spec.kind]
    text = f"{quantity.show(low, kind, SHOWN)} to {quantity.show(high, kind, SHOWN)} in {count}"
    name = printable(cell.text, 30)
    desk.prompt(f"sweep {name} over", text, lambda typed: then(Axis(cell, read_range(cell, typed, count))))


def usual_range(cell: Number) -> tuple[float, float]:
    """Half to double of what the cell holds, within what it takes."""
    value, spec = cell.value or 0.0, cell.spec
    if spec.kind in _AROUND:
        low, high = value - _AROUND[spec.kind], value + _AROUND[spec.kind]
    elif value:
        low, high = min(value / 2.0, value * 2.0), max(value / 2.0, value * 2.0)
    else:
        low, high = 0.0, _FROM_ZERO.get(spec.kind, 1.0)
    if spec.low is not None and low <= spec.low:
        low = spec.low + (value - spec.low) * 0.01 if spec.above else spec.low
    if spec.high is not None and high >= spec.high:
        high = spec.high - (spec.high - value) * 0.01 if spec.below else spec.high
    return low, high


def read_range(cell: Number, text: str, count: int) -> tuple[float, ...]:
    """The values of '1 A to 6 A in 11'; ``count`` where no number of steps is said. Raises ProjectError."""
    from budget.study.sweep import steps

    match = re.fullmatch(r"\s*(.+?)\s+to\s+(.+?)(?:\s+in\s+([0-9]{1,6}))?\s*", text)
    if match is None:
        value = cell.show(cell.value or 0.0)
        raise ProjectError(f"a range with a number of steps was expected, such as {value} to {value} in {count}.")
    low, high, number = match.groups()
    return steps(cell, paths.number(cell, low), paths.number(cell, high), int(number) if number else count)


def _hold(desk: Desk, axis: Axis) -> None:
    desk.options = replace(desk.options, first=axis)
    text = f"{printable(axis.cell.text, 30)} first; now P on the second cell; P here again forgets it"
    desk.say(words.clean(text))


def _ask_parts(desk: Desk, first: Axis, second: Axis) -> None:
    points = len(first.values) * len(second.values)
    result = desk.session.result
    fails = result is not None and any(row.status == "fail" for row in result.checks)
    items = []
    for parts in PARTS:
        text = f"{parts_in_words(parts)}{': slow' if 'inrush' in parts else ''}"
        items.append((text, (parts, False)))
        if fails:
            items.append((f"{text}; what fails already left aside", (parts, True)))

    def start(choice: tuple[tuple[str, ...], bool]) -> None:
        _sweep(desk, Axis(_again(desk, first.cell), first.values), second, *choice)

    desk.pick(f"what counts at each of the {points} points?", items, start)


def _sweep(desk: Desk, first: Axis, second: Axis, parts: tuple[str, ...], aside: bool) -> None:
    swept = Swept(first, second, parts, aside, desk.session.document)
    _start(desk, lambda: _begin_sweep(desk, swept))


def _begin_sweep(desk: Desk, swept: Swept) -> None:
    _show(desk, "map")
    desk.options = replace(desk.options, sweep=swept, first=None)
    desk.cursor.column = max(1, desk.cursor.column)
    shelves = desk.session.shelves

    def run(cancelled: Cancelled, progress: Progress) -> Sweep | str:
        from budget.engine.transient import CancelledError
        from budget.study.sweep import sweep

        a, b = swept.a, swept.b
        try:
            return sweep(
                swept.document,
                shelves,
                a.cell.path,
                a.values,
                b.cell.path,
                b.values,
                parts=swept.parts,
                aside=swept.aside,
                cancelled=cancelled,
                progress=_share(progress, 0, 1),
            )
        except CancelledError:
            return "the sweep was stopped; P begins it again"
        except ProjectError as error:
            return str(error)
        except BaseException:  # it will be told
            desk.later(lambda: done("the sweep failed; P begins it again"))
            raise

    def done(found: Sweep | str) -> None:
        now: Swept | None = desk.options.sweep
        if now is None or now.token is not swept.token:
            return
        new = replace(now, state=found) if isinstance(found, str) else replace(now, found=found)
        desk.options = replace(desk.options, sweep=new)
        if isinstance(found, str):
            desk.say(found, "thin")
        elif desk.view_name != "map":
            desk.say("the sweep is done; F shows its map")

    desk.start_job(Work(SWEEP, run, done, keeps=True))


def view_map(desk: Desk) -> None:
    """The map of the last sweep."""
    _show(desk, "map")


def map_or_table(desk: Desk) -> None:
    desk.options = replace(desk.options, as_table=not desk.options.as_table)


def take_point(desk: Desk) -> None:
    """Put both values of the point under the cursor into their cells, as one edit."""
    swept: Swept | None = desk.options.sweep
    row, _ = desk.here()
    point = point_of(swept.found, row.key, desk.cursor.column) if swept and swept.found and row else None
    if swept is None or point is None:
        raise ProjectError("the cursor is not on a point of a map.")
    cells = [_again(desk, axis.cell) for axis in (swept.a, swept.b)]
    _put(desk, [(cell, cell.show(value)) for cell, value in zip(cells, point, strict=True)])


ACTIONS: dict[str, Callable[[Desk], None]] = {
    "ask_reach": ask_reach,
    "ask_sweep": ask_sweep,
    "view_map": view_map,
}
OF_VIEW: dict[tuple[str, str], Callable[[Desk], None]] = {
    ("reach", "edit"): take_reach,
    ("reach", "next_mode"): other_turn,
    ("map", "edit"): take_point,
    ("map", "next_mode"): map_or_table,
}
