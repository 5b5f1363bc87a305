"""Stability of one corner: its modes and who takes part in them, and a filter's impedance against its converters'."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.report import words
from budget.report.numbers import corner_index
from budget.ui.plot import Plot, Trace
from budget.ui.sheet import Context, stale, words_only
from budget.ui.spectrum import waiting
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.evaluate import Result

MODES = 24
_MODES = (
    Column("mode at", 12, RIGHT),
    Column("damping", 9, RIGHT, sense=1),
    Column("who takes part most", 40, most=90),
)
_FILTERS = (
    Column("filter", 14, most=26),
    Column("source peak", 12, RIGHT),
    Column("at", 11, RIGHT),
    Column("loads", 11, RIGHT),
    Column("apart", 12, RIGHT, sense=1),
)


def shown_corner(context: Context, result: Result) -> tuple[int, int]:
    """The chosen corner, else the one with the smallest margin."""
    at = corner_index(result, context.corner)
    if at is not None or result.stability is None:
        return at or (0, 0)
    import numpy as np

    margins = np.where(result.stability.solved, result.stability.margin_db, np.inf)
    place = np.unravel_index(int(margins.argmin()), margins.shape)
    return int(place[0]), int(place[1])


def stable(context: Context) -> View:
    """The view: impedances over frequency, the filters' closest approach, and the modes from the least damped on."""
    result = context.session.latest("stability")
    if result is None or result.stability is None:
        row = Row(("none",), (Cell(waiting(context)),))
        return View("stable", "stability", (Section((Column("", 60),), (row,)),))
    from budget.engine.model import LINES

    c, k = shown_corner(context, result)
    found = result.stability
    case, line = result.project.cases[c].id, LINES[k]
    title = f"stability in {case}, {line} line"
    if not found.solved[c, k]:
        return View("stable", title, (Section((Column("", 60),), (Row(("none",), (Cell("no operating point"),)),)),))
    sections = (Section(_FILTERS, _filter_rows(result, c, k)), Section(_MODES, _mode_rows(context, result, c, k)))
    picture = _picture(context, result, c, k)
    return View("stable", stale(context, result) + title, sections, picture, _summary(result, c, k))


def _summary(result: Result, c: int, k: int) -> str:
    found = result.stability
    assert found is not None
    state = "stable" if found.stable[c, k] else "UNSTABLE"
    damping, frequency = float(found.damping[c, k]), float(found.frequency[c, k])
    least = "" if math.isnan(damping) else f", least damping {damping:.3g} at {words.frequency(frequency)}"
    return (
        f"{state}, margin {words.stability_margin(float(found.margin_db[c, k]))}{least}; "
        "s |Z source|, L |Z load| in dB over 1 ohm; j next filter, H what would help"
    )


def _filter_rows(result: Result, c: int, k: int) -> tuple[Row, ...]:
    found = result.stability
    assert found is not None
    ohm = quantity.KINDS["resistance"]
    rows = []
    for f, part in enumerate(result.project.filters):
        peak, at, apart = float(found.peak[f]), float(found.peak_frequency[f]), float(found.impedance_db[c, k, f])
        thin = math.isfinite(apart) and apart < result.project.rules.stability_margin
        load = _load(result, c, k, f)
        known = math.isfinite(peak)
        texts = (
            words_only(f"{part.id} {part.name}".strip()),
            quantity.show(peak, ohm) if known else "table" if part.attenuation else "undamped",
            words.frequency(at) if known and math.isfinite(at) else "",
            quantity.show(load, ohm) if load else "none runs",
            (f"thin {apart:.1f} dB" if thin else f"{apart:.1f} dB") if math.isfinite(apart) else "",
        )
        info = f"{part.id}: largest source impedance against its loads; apart is a customary rule"
        cells = [Cell(t, align="left" if n == 0 else RIGHT, info=info, calculated=True) for n, t in enumerate(texts)]
        if math.isfinite(apart):
            cells[4] = replace(cells[4], tone="thin" if thin else "", value=apart, kind="dB")
        mark = (at, 20 * math.log10(peak)) if known and peak > 0 and math.isfinite(at) else None
        rows.append(Row(("filter", part.id), tuple(cells), mark=mark))
    return tuple(rows)


def _load(result: Result, c: int, k: int, f: int) -> float | None:
    """|Z_load| of a filter: v^2 over the power of its running converters; None where none runs."""
    op = result.operating
    running = op.running[c] & (op.home == f)
    power = float(op.input_power[c][running].sum())
    volts = float(op.filter_voltage[c, k, f])
    return volts**2 / power if power > 0 and math.isfinite(volts) else None


def _mode_rows(context: Context, result: Result, c: int, k: int) -> tuple[Row, ...]:
    from budget.engine.cure import mode_table

    modes: Any = context.once(
        f"modes {c} {k}", (result,), lambda: mode_table(result.project, result.operating, c, k, MODES)
    )
    rows = []
    for n, mode in enumerate(modes):
        owners = ", ".join(f"{' '.join(x for x in owner if x)} {share:.0%}" for owner, share in mode.owners[:4])
        info = f"take part: {owners}; damp there"
        tone = "fail" if mode.damping < 0 else ""
        cells = (
            Cell(words.frequency(mode.frequency), align=RIGHT, info=info, calculated=True),
            Cell(f"{mode.damping:.3g}", align=RIGHT, tone=tone, mark="!" if tone else "", info=info, calculated=True),
            Cell(words_only(owners), info=info, calculated=True),
        )
        rows.append(Row(("mode", n), cells))
    return tuple(rows) or (Row(("mode",), (Cell("no modes: there is nothing that stores energy"),)),)


def _picture(context: Context, result: Result, c: int, k: int) -> Plot | None:
    filters = [f for f, part in enumerate(result.project.filters) if not part.attenuation]
    if not filters:
        return None
    import numpy as np

    from budget.engine.stability import source_impedances

    f = filters[context.options.filter % len(filters)]
    part = result.project.filters[f]
    grid = np.geomspace(10.0, 1e6, 900)
    z = np.abs(source_impedances(result.project, 2.0 * np.pi * grid, f)[0])
    source = 20.0 * np.log10(np.maximum(np.nan_to_num(z, nan=1e-6, posinf=1e6), 1e-6))
    traces = [Trace(f"{part.id} source", "s", grid.tolist(), source.tolist(), tone="trace0")]
    load = _load(result, c, k, f)
    if load:
        level = 20.0 * math.log10(load)
        traces.append(Trace(f"{part.id} load", "L", [10.0, 1e6], [level, level], "step", "trace1"))
    return Plot(tuple(traces), y_label=f"dB {part.id}"[:7], x_range=(10.0, 1e6))


def csv_stability(context: Context) -> str:
    """The modes of the shown corner as CSV, then the source impedance of every filter: plain SI numbers."""
    import csv
    import io

    result = context.session.latest("stability")
    if result is None or result.stability is None:
        return ""
    import numpy as np

    from budget.engine.cure import mode_table
    from budget.engine.stability import source_impedances

    c, k = shown_corner(context, result)
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(("mode frequency", "damping", "owner", "share"))
    for mode in mode_table(result.project, result.operating, c, k):
        for owner, share in mode.owners[:4]:
            row = (mode.frequency, mode.damping, " ".join(x for x in owner if x), share)
            writer.writerow(words.cells(row))
    parts = [f for f, part in enumerate(result.project.filters) if not part.attenuation]
    grid = np.geomspace(10.0, 1e6, 900)
    z = np.abs(source_impedances(result.project, 2.0 * np.pi * grid))
    writer.writerow([])
    writer.writerow(words.cells(("frequency", *(f"{result.project.filters[f].id} source impedance" for f in parts))))
    for n, f in enumerate(grid.tolist()):
        writer.writerow((f, *(float(z[p, n]) for p in parts)))
    return out.getvalue()
