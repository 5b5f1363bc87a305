"""The spectrum of one corner against a limit line: a picture, and its lines from worst to best."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from budget import quantity
from budget.engine.model import LINES
from budget.report import words
from budget.report.numbers import corner_index
from budget.ui.plot import SYMBOLS, Plot, Trace
from budget.ui.sheet import BOTH, CM, DM, Context, stale, words_only
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.emission import Emission
    from budget.engine.evaluate import Result
    from budget.engine.lines import Lines

MOST = 1000  # lines of the table; the picture has all
FAINT = -100.0  # dB; less is what rounding left of nothing, and no number to show
COLUMNS = (
    Column("line", 9, most=14),
    Column("at", 10, RIGHT),
    Column("margin", 7, RIGHT, sense=1),
    Column("level", 6, RIGHT, sense=-1),
    Column("DM", 6, RIGHT, sense=-1),
    Column("CM", 6, RIGHT, sense=-1),
    Column("limit", 6, RIGHT),
    Column("from", 12, most=30),
)


def shown(context: Context) -> tuple[Result, Lines, tuple[int, int]] | None:
    """The result, limit set and corner that the emission views are about; None where there are none."""
    result = context.session.latest("emissions")
    if result is None or result.emissions is None or not result.emissions.spectra:
        return None
    lines = result.emissions.spectra[context.options.limit % len(result.emissions.spectra)]
    at = corner_index(result, context.corner)
    if at is None:
        worst = worst_row(result, lines.limit.name)
        at = corner_index(result, (worst.case, worst.line)) if worst else (0, 0)
    assert at is not None
    return result, lines, at


def worst_row(result: Result, name: str) -> Emission | None:
    """The row of a limit set with the smallest margin; one without a margin only where there is nothing else."""
    assert result.emissions is not None
    rows = [row for row in result.emissions.rows if row.limit == name and row.solved]
    with_margin = [row for row in rows if row.margin is not None]
    return min(with_margin, key=lambda row: row.margin or 0.0, default=rows[0] if rows else None)


def waiting(context: Context) -> str:
    """Why a view has no result yet, or will have none."""
    return "no results: see the bad cells (b)" if context.session.complete else "~ calculating"


def nothing(context: Context) -> str:
    """Why there is no spectrum, and what to do."""
    result = context.session.latest("emissions")
    if result is None or result.emissions is None:
        return waiting(context)
    return "no limit set is chosen: name one in the rules (r), emissions, such as CE102"


def decibels(values: Any) -> list[float]:
    """Levels [V or A] in dB over a micro-unit; -inf for zero."""
    import numpy as np

    with np.errstate(divide="ignore"):
        found: list[float] = (20.0 * np.log10(np.asarray(values) / 1e-6)).tolist()
    return found


def table(context: Context) -> list[dict[str, Any]]:
    """Every line of the shown corner, worst first: the numbers of the view and of its CSV."""
    found = shown(context)
    if found is None or not found[0].operating.solved[found[2]]:
        return []
    import numpy as np

    from budget.engine.emission import levels
    from budget.engine.inspection import bare_levels
    from budget.engine.receiver import limit_at

    result, lines, at = found
    level = levels(result.project, result.operating, lines, [at])
    mode = context.options.mode
    total = {BOTH: level.level, DM: level.dm, CM: level.cm}[mode][0]
    limit = limit_at(lines.limit, np.clip(lines.frequency, lines.limit.points[0][0], lines.limit.points[-1][0]))
    both, dm, cm = decibels(total), decibels(level.dm[0]), decibels(level.cm[0])
    bare = (
        decibels(bare_levels(result.project, result.operating, lines, at))
        if context.options.bare
        else [None] * len(both)
    )
    names = [clock.name for clock in lines.clocks]
    members = [", ".join(result.project.converters[m].id for m in clock.members) for clock in lines.clocks]
    rows = [
        {
            "clock": names[c],
            "converters": members[c],
            "symbol": SYMBOLS[c % len(SYMBOLS)],
            "order": n,
            "frequency": f,
            "low": low,
            "high": high,
            "level": both[k],
            "dm": dm[k],
            "cm": cm[k],
            "bare": bare[k],
            "limit": lim,
            "margin": lim - both[k],
        }
        for k, (c, n, f, low, high, lim) in enumerate(
            zip(
                lines.clock.tolist(),
                lines.order.tolist(),
                lines.frequency.tolist(),
                lines.low.tolist(),
                lines.high.tolist(),
                limit.tolist(),
                strict=True,
            )
        )
        if both[k] > -400.0
    ]
    return sorted(rows, key=lambda row: round(row["margin"], 6))


def spectrum(context: Context) -> View:
    """The view: all lines against the limit, the cursor walking from the worst line to the best."""
    found = shown(context)
    if found is None:
        row = Row(("none",), (Cell(nothing(context)),))
        return View("spectrum", "emissions", (Section((Column("emissions", 60, most=100),), (row,)),))
    result, lines, at = found
    entries = table(context)
    case, line = result.project.cases[at[0]].id, LINES[at[1]]
    unit = lines.limit.unit
    title = f"{lines.limit.name} in {case}, {line} line" + (" DM only" if context.options.mode == DM else "")
    title += " CM only" if context.options.mode == CM else ""
    rows = [_row(entry, k, unit, context.options.bare) for k, entry in enumerate(entries[:MOST])]
    summary = _summary(result, lines.limit.name, case, line)
    if not rows:
        rows = [Row(("none",), (Cell("no line in the band", info=summary),))]
    columns = COLUMNS if not context.options.bare else (*COLUMNS[:6], Column("bare", 6, RIGHT), *COLUMNS[6:])
    picture = _picture(entries, lines, context)
    return View("spectrum", stale(context, result) + title, (Section(columns, tuple(rows)),), picture, summary)


def _summary(result: Result, limit: str, case: str, line: str) -> str:
    """The reading of the receiver at its worst tuning, which is what the check compares."""
    assert result.emissions is not None
    row = next((r for r in result.emissions.rows if (r.limit, r.case, r.line) == (limit, case, line)), None)
    if row is None or row.margin is None:
        if row is not None and row.failures:
            return "FAIL: " + "; ".join(f"{who}: {what}" for what, who in row.failures)
        return "no line is seen in the band, or there is no operating point"
    rss, peak = row.margin_rss or 0.0, row.margin_arithmetic or 0.0
    clocks = ", ".join(
        f"{c.clock}{f' n={c.harmonic}' if c.harmonic else ''} {c.level:.1f}" for c in row.contributors[:3]
    )
    basis = f" ({words.BASIS.get(row.basis, row.basis)})" if row.basis == "memory" else ""
    return (
        f"receiver at {words.frequency(row.frequency)}: {row.level:.1f} of {row.limit_level:.1f} {row.unit}{basis}, "
        f"margin {peak:.1f} dB if peaks align, {rss:.1f} dB root-sum-square; most from {clocks}"
    )


def _number(value: float | None) -> str:
    return "" if value is None or value < FAINT else f"{value:.1f}"


def _row(entry: dict[str, Any], k: int, unit: str, bare: bool) -> Row:
    name = f"{entry['symbol']} {words_only(entry['clock'])}" + (f" n={entry['order']}" if entry["order"] else "")
    tone = "fail" if entry["margin"] < 0 else ""
    spread = ""
    if entry["high"] > entry["low"]:
        kind = quantity.KINDS["frequency"]
        spread = f", anywhere from {quantity.show(entry['low'], kind)} to {quantity.show(entry['high'], kind)}"
    info = f"{name}: {_number(entry['level'])} {unit} against {_number(entry['limit'])}{spread}"
    if bare:
        info += f"; unfiltered {_number(entry['bare'])}"
    texts = [
        name,
        words.frequency(entry["frequency"]),
        _number(entry["margin"]),
        _number(entry["level"]),
        _number(entry["dm"]),
        _number(entry["cm"]),
        *([_number(entry["bare"])] if bare else []),
        _number(entry["limit"]),
        words_only(entry["converters"]),
    ]
    last = len(texts) - 1
    cells = tuple(
        Cell(text, None, RIGHT if 0 < i < last else "left", tone if i == 2 else "", "", info, calculated=True)
        for i, text in enumerate(texts)
    )
    return Row(
        ("line", entry["clock"], entry["order"], entry["frequency"]), cells, mark=(entry["frequency"], entry["level"])
    )


def _picture(entries: list[dict[str, Any]], lines: Lines, context: Context) -> Plot:
    points = lines.limit.points
    top = max([y for _, y in points] + [e["level"] for e in entries] + [e["bare"] or -400.0 for e in entries])
    top = 10.0 * (int(top / 10.0) + 1)
    floor = min(y for _, y in points) - 40.0
    dash = "-" if context.ascii_only else "\u2500"
    traces = [Trace(lines.limit.name, dash, [x for x, _ in points], [y for _, y in points], "step", "limit")]
    if context.options.bare:
        known = [e for e in entries if e["bare"] is not None]
        traces.append(Trace("bare", "'", [e["frequency"] for e in known], [e["bare"] for e in known], "dots", "pale"))
    by_clock: dict[str, list[dict[str, Any]]] = {}
    for entry in entries:
        by_clock.setdefault(entry["symbol"], []).append(entry)
    for k, (symbol, group) in enumerate(sorted(by_clock.items(), reverse=True)):
        tone = f"trace{k % 6}"
        traces.append(
            Trace(symbol, symbol, [e["frequency"] for e in group], [e["level"] for e in group], "stems", tone)
        )
    return Plot(
        tuple(traces),
        y_label=lines.limit.unit,
        x_range=(points[0][0], points[-1][0]),
        y_range=(floor, top),
    )


def csv_lines(context: Context) -> str:
    """The table as CSV with plain numbers: Hz and dB."""
    import csv
    import io

    out = io.StringIO()
    head = ("clock", "converters", "order", "frequency", "low", "high", "level", "dm", "cm", "bare", "limit", "margin")
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(head)
    for entry in table(context):
        row = ("" if entry[k] is None or entry[k] == float("-inf") else entry[k] for k in head)
        writer.writerow(words.cells(row))
    return out.getvalue()
