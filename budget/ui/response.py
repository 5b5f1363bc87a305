"""One filter over frequency: insertion loss, output impedance, resonances, and how well it is damped."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.project import document as doc
from budget.report import words
from budget.ui.plot import Plot, Trace
from budget.ui.sheet import Context, words_only
from budget.ui.spectrum import shown, waiting
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.evaluate import Result
    from budget.engine.model import Filter

_PEAKS = (
    Column("resonance of", 24, most=30),
    Column("at", 11, RIGHT),
    Column("value", 11, RIGHT),
    Column("above its surroundings", 22, RIGHT, sense=-1),
)
_DAMPING = (
    Column("damping", 24, most=30),
    Column("entered", 11, RIGHT),
    Column("best", 11, RIGHT),
    Column("peak now", 11, RIGHT, sense=-1),
    Column("peak best", 11, RIGHT),
    Column("how found", 12, most=70),
)


def response(context: Context) -> View:
    """The filter of the subject: a filter's own row, or the filter a converter is behind."""
    result = context.session.result
    part = _filter(context, result)
    if result is None or part is None:
        return _only(
            "no filter here: on the sheet (s) go to a filter or a converter behind one, then z"
            if result
            else waiting(context)
        )
    if part.attenuation:
        return _table_filter(part, context)
    import numpy as np

    from budget.engine.damping import best_damping, damping_branches
    from budget.engine.response import Feed, insertion_loss, output_impedance, peaks, setup_loss

    mode = "common mode" if context.options.common else "differential mode"
    ladder = part.cm if context.options.common else part.dm
    title = f"{part.id} {part.name}, {mode}"
    f = np.geomspace(1e3, 100e6, 1200)
    w = 2.0 * np.pi * f
    loss = insertion_loss(ladder, f)
    line, behind = _surroundings(result, part, context, w)
    real = setup_loss(ladder, f, line, behind)
    feed = Feed(result.project.bus.resistance, result.project.bus.inductance)
    z = np.abs(output_impedance(ladder, f, feed)) if not context.options.common else None
    traces = [
        Trace("in 50 ohm", "5", f.tolist(), loss.tolist(), tone="trace0"),
        Trace("in the set-up", "s", f.tolist(), real.tolist(), tone="trace1"),
    ]
    rows: list[Row] = []
    for name, values in (("loss in 50 ohm", -loss), ("loss in the set-up", -real)):
        for peak in peaks(f, 10.0 ** (values / 20.0))[:3]:
            rows.append(_peak(name, peak, f"{-20 * np.log10(peak.value):.1f} dB", -20 * float(np.log10(peak.value))))
    damping: list[Row] = []
    if z is not None:
        decibel = 20.0 * np.log10(np.maximum(z, 1e-12))
        traces.append(Trace("output impedance", "z", f.tolist(), decibel.tolist(), tone="trace2"))

        def exact(x: Any) -> Any:
            return np.abs(output_impedance(ladder, x, feed))

        for peak in peaks(f, z, exact)[:4]:
            shown_value = quantity.show(peak.value, quantity.KINDS["resistance"])
            rows.append(_peak("output impedance", peak, shown_value, 20 * float(np.log10(peak.value))))
        for damper in damping_branches(ladder):
            damping.append(_damping(part, damper, best_damping(ladder, damper.index, feed)))
    sections = [Section(_PEAKS, tuple(rows) or (Row(("none",), (Cell("no resonance"),)),))]
    if not context.options.common:
        none = Row(("none", 2), (Cell("no damping branch"),))
        sections.append(Section(_DAMPING, tuple(damping) or (none,)))
    plot = Plot(tuple(traces), y_label="dB", x_range=(1e3, 100e6))
    legend = "5 loss in 50 ohm, s loss in the set-up" + ("" if z is None else ", z output impedance in dB over 1 ohm")
    return View("response", words_only(title), tuple(sections), plot, legend + "; A changes the mode")


def _only(text: str) -> View:
    return View("response", "filter", (Section((Column("", 60, most=100),), (Row(("none",), (Cell(text),)),)),))


def _filter(context: Context, result: Result | None) -> Filter | None:
    if result is None:
        return None
    row = doc.get(context.session.document, context.subject)
    row = row if isinstance(row, dict) else {}
    ident = row.get("id") if context.subject[0] == "filter" else row.get("filter")
    return next((f for f in result.project.filters if f.id == ident), None)


def _surroundings(result: Result, part: Filter, context: Context, w: Any) -> tuple[Any, Any]:
    """The set-up on the bus side and what hangs on the other side, for the mode shown."""
    import numpy as np

    from budget.engine.ladder import seen, seen_through
    from budget.engine.receiver import line_impedance

    found = shown(context)
    line = line_impedance(found[1].limit.setup if found else "lisn-50uH", w)
    behind = np.zeros(w.shape, dtype=np.complex128)
    for unit in result.project.converters:
        if unit.filter != part.id:
            continue
        if context.options.common:
            behind = behind + 1j * w * (unit.cm.capacitance + unit.cm.shunt if unit.cm else 0.0)
        else:
            inner = seen(unit.input, w, np.zeros(w.shape, dtype=np.complex128))
            behind = behind + seen_through(unit.lead, w, inner)
    return (line / 2.0 if context.options.common else 2.0 * line), behind


def _peak(name: str, peak: Any, value: str, level: float) -> Row:
    height = f"{peak.height:.1f} dB"
    cells = (
        Cell(name),
        Cell(words.frequency(peak.frequency), align=RIGHT),
        Cell(value, align=RIGHT),
        Cell(height, align=RIGHT),
    )
    return Row(("peak", name, peak.frequency), cells, mark=(peak.frequency, level))


def _damping(part: Filter, damper: Any, best: Any) -> Row:
    ohm = quantity.KINDS["resistance"]

    def show(value: float | None) -> str:
        return "none" if value is None else quantity.show(value, ohm)

    name = f"element {damper.index + 1}, {damper.kind}"
    info = f"{name}: {show(best.entered)} entered, {show(best.resistance)} gives the lowest peak ({best.method})"
    texts = (name, show(best.entered), show(best.resistance), show(best.entered_peak), show(best.peak), best.method)
    cells = tuple(Cell(t, align=RIGHT if 0 < i < 5 else "left", info=info) for i, t in enumerate(texts))
    mark = (best.frequency, 20 * math.log10(best.peak)) if best.frequency and best.peak else None
    return Row(("damping", damper.index), cells, mark=mark)


def _table_filter(part: Filter, context: Context) -> View:
    """A filter given as an insertion-loss table: the table is all there is to draw."""
    f = [row[0] for row in part.attenuation]
    traces = (
        Trace("DM", "d", f, [row[1] for row in part.attenuation], tone="trace0"),
        Trace("CM", "c", f, [row[2] for row in part.attenuation], tone="trace1"),
    )
    rows = tuple(
        Row(
            ("row", k),
            (Cell(words.frequency(x)), Cell(f"{d:.1f} dB", align=RIGHT), Cell(f"{c:.1f} dB", align=RIGHT)),
            mark=(x, d),
        )
        for k, (x, d, c) in enumerate(part.attenuation)
    )
    columns = (Column("entered table", 16), Column("DM", 10, RIGHT), Column("CM", 10, RIGHT))
    title = words_only(f"{part.id} {part.name}, table")
    legend = "d DM, c CM insertion loss in 50 ohm as entered; a table has no impedance"
    return View("response", title, (Section(columns, rows),), Plot(traces, y_label="dB"), legend)
