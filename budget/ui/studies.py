"""Commands of the views of results: what they show, CSV, and longer calculations that are asked for."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path as FilePath
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.project import document as doc
from budget.project import edits
from budget.project.build import Shelf
from budget.project.document import Document, Path
from budget.project.problems import ProjectError
from budget.project.store import free_name, write_text
from budget.ui import stable, sweepmap, switchon
from budget.ui.desk import Desk, Work
from budget.ui.sheet import BOTH, CM, DM, rows_of
from budget.ui.spectrum import csv_lines

if TYPE_CHECKING:
    from budget.engine.evaluate import Result


def next_mode(desk: Desk) -> None:
    options = desk.options
    if desk.view_name == "response":
        desk.options = replace(options, common=not options.common)
    elif desk.view_name == "switchon":
        desk.options = replace(options, voltages=not options.voltages)
    else:
        order = (BOTH, DM, CM)
        desk.options = replace(options, mode=order[(order.index(options.mode) + 1) % 3])


def next_one(desk: Desk) -> None:
    """The next limit set, event or filter, whichever the view shows one of."""
    context, options = desk.context(), desk.options
    if desk.view_name == "switchon":
        found = switchon.shown_run(context)
        if found is None or found[0].inrush is None:
            raise ProjectError("there is no switch-on yet.")
        runs = found[0].inrush.runs
        desk.options = replace(options, run=(runs.index(found[1]) + 1) % len(runs))
        return
    if desk.view_name == "stable":
        desk.options = replace(options, filter=options.filter + 1)
        return
    result = context.session.latest("emissions")
    count = len(result.emissions.spectra) if result and result.emissions else 0
    if count < 2:
        raise ProjectError("there is no other limit set; the rules (r) name them under emissions.")
    desk.options = replace(options, limit=(options.limit + 1) % count)


def log_time(desk: Desk) -> None:
    desk.options = replace(desk.options, log_time=not desk.options.log_time)


def toggle_bare(desk: Desk) -> None:
    desk.options = replace(desk.options, bare=not desk.options.bare)


_EXPORTS: dict[str, tuple[Callable[[Any], str], str]] = {
    "spectrum": (csv_lines, "lines"),
    "switchon": (switchon.csv_waves, "switch-on"),
    "stable": (stable.csv_stability, "stability"),
    "map": (sweepmap.csv_map, "sweep"),
}


def export(desk: Desk) -> None:
    """Write what the view draws as CSV beside the project."""
    if desk.view_name not in _EXPORTS:
        raise ProjectError("this view has no numbers to write; those of a, J and Y and the map of a sweep (F) have.")
    make, word = _EXPORTS[desk.view_name]
    text = make(desk.context())
    if text.count("\n") < 2:
        raise ProjectError("there is nothing to write.")
    path = desk.session.path or FilePath("project.toml")

    def accept(name: str) -> None:
        target = FilePath(name.strip()).expanduser()
        if not name.strip() or target.is_dir():
            raise ProjectError("a file name was expected.")
        if target.exists():
            raise ProjectError(f"{target} exists already; another name was expected.")
        write_text(target, text)
        desk.say(f"written: {target}")

    desk.prompt("write as CSV to", str(free_name(path.with_suffix(".csv"), word)), accept)


def what_helps(desk: Desk) -> None:
    """Solve in the background for a change that would help, and offer it as one edit."""
    (_help_switch_on if desk.view_name == "switchon" else _help_stability)(desk)


def _offer(desk: Desk, generation: int, choices: list[tuple[str, Document]], none: str) -> None:
    """Let the user take one of the changes; they belong to the document they were solved for."""
    if generation != desk.session.generation:
        desk.say("the project changed meanwhile; ask again", "thin")
        return
    if not choices:
        desk.say(none, "thin")
        return

    def take(choice: tuple[str, Document]) -> None:
        desk.change(choice[0], choice[1])

    desk.pick("take a change? Esc leaves all as it is", [(c[0], c) for c in choices], take)


def _no_less(value: float, kind: quantity.Kind) -> str:
    """A solved value as it is shown and entered: rounded, but never to less than what was solved for."""
    text = quantity.show(value, kind)
    return text if quantity.parse(text, kind).si >= value else quantity.show(value * 1.001, kind)


def _help_switch_on(desk: Desk) -> None:
    found = switchon.shown_run(desk.context())
    if found is None or found[0] is not desk.session.result:
        raise ProjectError("the switch-on is not calculated yet.")
    result, session = found[0], desk.session
    row, _ = desk.here()
    target = str(row.key[1]) if row is not None and row.key[0] == "filter" else "bus"
    document, shelves, generation = session.document, session.shelves, session.generation

    def run(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> Any:
        from budget.engine.inrush import needed_resistance, needed_rise

        more = needed_resistance(result.project, target, result.inrush, cancelled)
        progress(0.5)
        return more, needed_rise(result.project, target, result.inrush, cancelled)

    def done(answer: Any) -> None:
        more, rise = answer
        choices = []
        ohm, second, ampere = (quantity.KINDS[name] for name in ("resistance", "time", "current"))
        if more.value is not None:
            text = f"add {_no_less(more.value, ohm)} to {target}: peak {quantity.show(more.peak, ampere)}"
            text += "" if more.starts else ", but then not every converter starts"
            changed = _with_resistance(document, shelves, target, more.value, result)
            if changed is not None:
                choices.append((text, changed))
        if rise.value is not None:
            text = f"rise over {_no_less(rise.value, second)}: peak {quantity.show(rise.peak, ampere)}"
            text += "" if rise.starts else ", but then not every converter starts"
            choices.append((text, doc.put(document, ("bus", "rise"), _no_less(rise.value, second))))
        why = {
            "no limit": f"no inrush_peak is entered for {target}",
            "within": f"the peak of {target} is within its limit",
        }
        _offer(desk, generation, choices, why.get(more.reason, f"nothing found: {more.reason or rise.reason}"))

    desk.start_job(Work(f"solving for {target}", run, done))


def _with_resistance(
    document: Document, shelves: tuple[Shelf, ...], target: str, extra: float, result: Result
) -> Document | None:
    """The document with a resistance added in the feed, or in the first series element of a filter."""
    ohm = quantity.KINDS["resistance"]
    if target == "bus":
        return doc.put(document, ("bus", "resistance"), _no_less(result.project.bus.resistance + extra, ohm))
    index = next((i for i, r in rows_of(document, "filter") if r.get("id") == target), None)
    part = next((f for f in result.project.filters if f.id == target), None)
    if index is None or part is None:
        return None
    element = next((k for k, b in enumerate(part.dm) if b.place == "series"), None)
    if element is None:
        return None
    path: Path = ("filter", index, "dm", element, "R")
    return edits.enter(document, shelves, path, _no_less(part.dm[element].R + extra, ohm))


def _help_stability(desk: Desk) -> None:
    result, session = desk.session.result, desk.session
    if result is None or result.stability is None:
        raise ProjectError("the stability is not calculated yet.")
    filters = [f for f in result.project.filters if not f.attenuation]
    row, _ = desk.here()
    chosen = str(row.key[1]) if row is not None and row.key[0] == "filter" and len(row.key) > 1 else ""
    part = next((f for f in filters if f.id == chosen), None)
    if part is None:
        if not filters:
            raise ProjectError("there is no filter with a ladder to damp.")
        part = filters[desk.options.filter % len(filters)]
    project, operating, name = result.project, result.operating, part.id
    wanted = project.rules.stability_margin
    document, shelves, generation = session.document, session.shelves, session.generation

    def run(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> Any:
        from budget.engine.cure import damping_for

        return damping_for(project, operating, name, wanted + 0.02)  # so that a rounded value still reaches it

    def done(found: Any) -> None:
        choices = []
        if found.C is not None and found.R is not None:
            c, r = (
                _no_less(found.C, quantity.KINDS["capacitance"]),
                quantity.show(found.R, quantity.KINDS["resistance"]),
            )
            text = f"add {c} with {r} behind {name}: margin {found.margin_db:.1f} dB"
            choices.append((text, _with_branch(document, shelves, name, {"C": c, "R": r})))
        why = {
            "nothing to damp": f"the wanted {wanted:.1f} dB are there already",
            "out of reach": f"no branch behind {name} reaches {wanted:.1f} dB; the trouble is elsewhere",
        }
        _offer(desk, generation, choices, why.get(found.reason, f"nothing found: {found.reason}"))

    desk.start_job(Work(f"damping {name}", run, done))


def _with_branch(document: Document, shelves: tuple[Shelf, ...], name: str, branch: dict[str, str]) -> Document:
    """The document with one more shunt at the end of a filter's ladder."""
    index = next(i for i, r in rows_of(document, "filter") if r.get("id") == name)
    document = edits.own(document, shelves, ("filter", index, "dm", 0))
    ladder = doc.get(document, ("filter", index, "dm"), [])
    return doc.put(document, ("filter", index, "dm"), [*ladder, {"shunt": branch}])


def scan_clock(desk: Desk) -> None:
    """Ask for a clock and a range, and find the worst margin over it in the background."""
    result = desk.session.latest("emissions")
    if result is None or result.emissions is None or not result.emissions.spectra:
        raise ProjectError("there are no emissions yet; name a limit set in the rules (r), emissions.")
    names = [clock.name for clock in result.emissions.spectra[0].clocks if clock.frequency]

    def choose(name: str) -> None:
        clock = next(c for c in result.emissions.spectra[0].clocks if c.name == name)  # type: ignore[union-attr]
        assert clock.frequency is not None
        kind = quantity.KINDS["frequency"]
        low, high = quantity.show(clock.frequency * 0.75, kind), quantity.show(clock.frequency * 1.25, kind)
        desk.prompt(f"move {name} over, from - to", f"{low} to {high}", lambda text: start(name, text))

    def start(name: str, text: str) -> None:
        low, high = frequency_range(text)
        shown = desk.session.latest("emissions") or result
        assert shown is not None

        def run(cancelled: Callable[[], bool], progress: Callable[[float], None]) -> Any:
            from budget.engine.plan import scan

            return scan(shown.project, shown.operating, name, low, high, 61, cancelled, progress)

        def done(found: Any) -> None:
            if found is not None:
                desk.options = replace(desk.options, scan=found)
                desk.view_name = "plan"

        desk.start_job(Work(f"moving {name}", run, done))

    desk.pick("which clock?", [(name, name) for name in names], choose)


def frequency_range(text: str) -> tuple[float, float]:
    """'250 kHz to 400 kHz' in Hz; raises ProjectError with a sentence."""
    parts = text.split(" to ")
    if len(parts) != 2:
        raise ProjectError("two frequencies were expected, such as 250 kHz to 400 kHz.")
    kind = quantity.KINDS["frequency"]
    try:
        low, high = (quantity.parse(part.strip(), kind).si for part in parts)
    except quantity.QuantityError as error:
        raise ProjectError(str(error)) from error
    if low > high:
        low, high = high, low
    if not 1.0 <= low < high <= 1e9:
        raise ProjectError("a range within 1 Hz to 1 GHz was expected.")
    return low, high


ACTIONS: dict[str, Callable[[Desk], None]] = {
    "next_mode": next_mode,
    "next_one": next_one,
    "log_time": log_time,
    "toggle_bare": toggle_bare,
    "export": export,
    "what_helps": what_helps,
    "scan_clock": scan_clock,
}
