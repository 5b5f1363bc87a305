"""Switch-on and surge over time: currents or voltages of one case and event, with limits, starts, peaks and i2t."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.report import words
from budget.ui.plot import SYMBOLS, Plot, Trace
from budget.ui.sheet import Context, stale, words_only
from budget.ui.spectrum import waiting
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.evaluate import Result
    from budget.engine.transient import Run

COLUMNS = (
    Column("", 11, most=26),
    Column("peak A", 8, RIGHT, sense=-1),
    Column("limit", 8, RIGHT),
    Column("i2t", 13, RIGHT, sense=-1),
    Column("limit", 10, RIGHT),
    Column("peak V", 8, RIGHT, sense=-1),
    Column("limit", 8, RIGHT),
    Column("starts", 9, RIGHT),
    Column("at the end", 10, most=16),
)


NEAR = 1.5  # times the highest point of the curves: limits above are left out of the picture
MOST_LETTERS = 12  # on one limit line


def shown_run(context: Context) -> tuple[Result, Run] | None:
    """The case and event shown: the chosen one, else the one of the worst check."""
    result = context.session.latest("inrush")
    if result is None or result.inrush is None or not result.inrush.runs:
        return None
    runs = result.inrush.runs
    if context.options.run is not None:
        return result, runs[context.options.run % len(runs)]
    names = ("inrush peak", "bus inrush", "overshoot", "inrush i2t", "breaker i2t", "start")
    rows = [row for row in result.checks if row.check in names and row.case]
    failed = [row for row in rows if row.status == "fail"]
    ranked = words.by_severity(failed or [row for row in rows if row.check in ("inrush peak", "bus inrush")])
    at = (ranked[0].case, ranked[0].line) if ranked else None
    return result, next((run for run in runs if (run.case, run.event) == at), runs[0])


def symbol(k: int) -> str:
    """The letter of a curve; after all of them they begin again."""
    return SYMBOLS[k % len(SYMBOLS)]


def switch_on(context: Context) -> View:
    """The view: a picture over time, and bus, filters and converters with their peaks against the limits."""
    found = shown_run(context)
    if found is None:
        result = context.session.latest("inrush")
        text = waiting(context) if result is None or result.inrush is None else "nothing to calculate: there is no case"
        return View("switchon", "switch-on", (Section((Column("", 60),), (Row(("none",), (Cell(text),)),)),))
    result, run = found
    title = f"{run.event} in {run.case}"
    rows = _rows(result, run)
    summary = _summary(run)
    return View(
        "switchon",
        stale(context, result) + title,
        (Section(COLUMNS, tuple(rows)),),
        _picture(context, result, run),
        summary,
    )


def _amps(value: float | None) -> str:
    return "" if value is None else words.show(value, "A")


def _volts(value: float | None) -> str:
    return "" if value is None else words.show(value, "V")


def _i2t(value: float | None) -> str:
    return "" if value is None else quantity.show(value, quantity.KINDS["i2t"])


def _seconds(value: float | None) -> str:
    return "" if value is None else quantity.show(value, quantity.KINDS["time"])


def _over(value: float | None, limit: float | None) -> str:
    return "fail" if value is not None and limit is not None and value > limit else ""


def _rows(result: Result, run: Run) -> list[Row]:
    project = result.project
    bus = project.bus
    rows = [
        _row(
            ("bus",),
            f"{SYMBOLS[0]} bus",
            (run.bus_peak, bus.inrush_peak, run.bus_i2t, bus.breaker_i2t, None, None, None),
            "",
            (_over(run.bus_peak, bus.inrush_peak), _over(run.bus_i2t, bus.breaker_i2t), ""),
            "current from the source",
        )
    ]
    filters = {f.id: (k, f) for k, f in enumerate(project.filters)}
    for entry in run.filters:
        k, part = filters[entry.id]
        surge = entry.peak_voltage, part.max_surge
        values: tuple[float | None, ...] = (entry.peak, part.inrush_peak, entry.i2t, part.inrush_i2t, *surge, None)
        tones = (
            _over(entry.peak, part.inrush_peak),
            _over(entry.i2t, part.inrush_i2t),
            _over(entry.peak_voltage, part.max_surge),
        )
        name = f"{symbol(1 + k)} {entry.id} {part.name}"
        rows.append(_row(("filter", entry.id), name, values, "", tones, "current into it, voltage at its output"))
    units = {c.id: (k, c) for k, c in enumerate(project.converters)}
    for unit in run.converters:
        k, converter = units[unit.id]
        name = f"{symbol(k)} {unit.id} {converter.name}"
        limit = converter.max_surge
        values = (None, None, None, None, unit.peak_voltage, limit, unit.runs_at)
        tones = ("", "", _over(unit.peak_voltage, limit))
        near = [code for code, who in run.remarks if who == unit.id]
        info = "voltage at its terminals, and when it starts to run" + ("; " + ", ".join(near) if near else "")
        rows.append(_row(("converter", unit.id), name, values, unit.state, tones, info))
    return rows


_SHOWN = (
    (_amps, "current"),
    (_amps, "current"),
    (_i2t, "i2t"),
    (_i2t, "i2t"),
    (_volts, "voltage"),
    (_volts, "voltage"),
    (_seconds, "time"),
)


def _row(
    key: tuple[Any, ...],
    name: str,
    values: tuple[float | None, ...],
    state: str,
    tones: tuple[str, str, str],
    info: str,
) -> Row:
    info = words_only(f"{name[2:]}: {info}")
    by_column = {0: tones[0], 2: tones[1], 4: tones[2]}
    cells = [Cell(words_only(name), tone="head", info=info)]
    for k, (value, (show, kind)) in enumerate(zip(values, _SHOWN, strict=True)):
        tone = by_column.get(k, "")
        mark = "!" if tone == "fail" else ""
        cells.append(Cell(show(value), None, RIGHT, tone, mark, info, calculated=True, value=value, kind=kind))
    bad = state in ("waiting", "tripped")
    cells.append(Cell(state, None, "left", "fail" if bad else "", "!" if bad else "", info, calculated=True))
    return Row(key, tuple(cells))


def _summary(run: Run) -> str:
    remarks = [f"{who}: {code}" if who else code for code, who in run.remarks]
    told = "; ".join(remarks[:4]) + ("; and more" if len(remarks) > 4 else "")
    keys = "A currents or voltages, j next event, L time axis, H what would help"
    return keys + (f"; {told}" if told else "")


def _picture(context: Context, result: Result, run: Run) -> Plot | None:
    wave = run.wave
    if wave is None or len(wave.time) < 2:
        return None
    log = context.options.log_time
    time = wave.time.tolist()
    first = max(1e-7, next((t for t in time if t > 0), 1e-7))
    traces: list[Trace] = []
    dash = "-" if context.ascii_only else "\u2500"
    if context.options.voltages:
        units = {c.id: k for k, c in enumerate(result.project.converters)}
        for column, entry in enumerate(run.converters):
            k = units[entry.id]
            y = wave.terminals[:, column].tolist()
            traces.append(Trace(entry.id, symbol(k), time, y, tone=f"trace{k % 6}"))
            if entry.runs_at is not None:
                near = min(range(len(time)), key=lambda n, at=entry.runs_at: abs(time[n] - at))  # type: ignore[misc]
                traces.append(Trace("starts", "^", [entry.runs_at], [y[near]], "dots", "head"))
        limits = {c.id: (symbol(k), c.max_surge) for k, c in enumerate(result.project.converters)}
    else:
        traces.append(Trace("bus", SYMBOLS[0], time, wave.bus.tolist(), tone="trace0"))
        filters = {f.id: k for k, f in enumerate(result.project.filters)}
        for column, part in enumerate(run.filters):
            k = filters[part.id]
            y = wave.filters[:, column].tolist()
            traces.append(Trace(part.id, symbol(1 + k), time, y, tone=f"trace{(k + 1) % 6}"))
        limits = {f.id: (symbol(1 + k), f.inrush_peak) for k, f in enumerate(result.project.filters)}
        limits["bus"] = (SYMBOLS[0], result.project.bus.inrush_peak)
    span = (first if log else time[0], time[-1])
    drawn = [trace for trace in traces if trace.kind == "curve"]
    traces += _limits(limits, max((max(t.y) for t in drawn), default=0.0), span, log, dash)
    label = "V" if context.options.voltages else "A"
    return Plot(tuple(traces), "time", label, log_x=log, x_range=span)


def _limits(
    limits: dict[str, tuple[str, float | None]], top: float, span: tuple[float, float], log: bool, dash: str
) -> list[Trace]:
    """A line for each limit near the curves, the lowest in any case, with the letters it is for at its right end."""
    by_value: dict[float, list[tuple[str, str]]] = {}
    for name, (letter, value) in limits.items():
        if value is not None:
            by_value.setdefault(value, []).append((name, letter))
    lines: list[Trace] = []
    letters: list[Trace] = []
    for value in sorted(by_value):
        if lines and value > NEAR * top:
            break
        lines.append(Trace(f"limit {value:g}", dash, list(span), [value, value], "step", "limit"))
        for n, (name, letter) in enumerate(reversed(by_value[value][:MOST_LETTERS])):
            share = 0.985 - 0.03 * n
            x = span[0] * (span[1] / span[0]) ** share if log else span[0] + (span[1] - span[0]) * share
            letters.append(Trace(f"limit of {name}", letter, [x], [value], "dots", "limit"))
    return [*reversed(lines), *letters]


def csv_waves(context: Context) -> str:
    """The waveforms shown as CSV: seconds, amperes, volts."""
    import csv
    import io

    found = shown_run(context)
    if found is None or found[1].wave is None:
        return ""
    run = found[1]
    wave = run.wave
    assert wave is not None
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    head = ["time", "bus current", *(f"{f.id} current" for f in run.filters)]
    head += [f"{f.id} voltage" for f in run.filters] + [f"{c.id} voltage" for c in run.converters]
    writer.writerow(words.cells(head))
    columns = [wave.time[:, None], wave.bus[:, None], wave.filters, wave.outputs, wave.terminals]
    import numpy as np

    for row in np.hstack(columns).tolist():
        writer.writerow(["" if value != value else value for value in row])
    return out.getvalue()
