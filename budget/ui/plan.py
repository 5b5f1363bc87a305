"""The frequency plan: which clocks can meet in one receiver bandwidth, which beats fall low, and one clock moved."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from budget.report import words
from budget.ui.plot import Plot, Trace
from budget.ui.sheet import Context, stale, words_only
from budget.ui.spectrum import nothing, shown
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.lines import Lines
    from budget.engine.plan import Meeting

MOST = 300  # rows of each table
_MEET = (
    Column("meet in one bandwidth", 21, most=26),
    Column("orders", 8),
    Column("from", 11, RIGHT),
    Column("to", 11, RIGHT),
    Column("pairs of lines", 14, RIGHT, sense=-1),
)
_BEAT = (
    Column("beat, |n f1 - m f2|", 21, most=26),
    Column("n, m", 8),
    Column("from", 11, RIGHT),
    Column("to", 11, RIGHT),
    Column("", 14, RIGHT),
)


def _meetings(lines: Lines) -> tuple[Meeting, ...]:
    """All meetings; if there are too many to be shown, those with the most pairs of lines first."""
    from budget.engine.plan import meetings

    found = meetings(lines)
    return found if len(found) <= MOST else tuple(sorted(found, key=lambda m: -m.count))


def plan(context: Context) -> View:
    """Meetings of lines by pair of clocks, then beats; above them the scan of one clock once that was asked for."""
    found, result = shown(context), context.session.latest("emissions")
    if result is None or result.emissions is None:
        row = Row(("none",), (Cell(nothing(context)),))
        return View("plan", "frequency plan", (Section((Column("", 60, most=100),), (row,)),))
    meet: list[Row] = []
    if found is not None:
        known = context.fetch("meetings", (found[1],), lambda: _meetings(found[1]))
        for m in (known or ())[:MOST]:
            pair = words_only(" and ".join(m.clocks))
            info = (
                f"{pair}: {m.count} pairs of lines can stand in one receiver bandwidth and add up; the lowest is shown"
            )
            meet.append(_row(("meet", *m.clocks), pair, m.orders, m.low, m.high, str(m.count), info))
    beats: list[Row] = []
    for b in result.emissions.beats[:MOST]:
        pair = words_only(" and ".join(b.clocks))
        info = f"{pair}: a notice, not a level; a linear sum has no line there, a control loop may answer to it"
        beats.append(_row(("beat", *b.clocks, *b.orders), pair, b.orders, b.low, b.high, "", info))
        if known is None:
            meet = [Row(("meet",), (Cell("~ calculating"),))]
        elif len(known) > MOST:
            text = f"and {len(known) - MOST} more pairs of clocks with fewer lines that can meet"
            meet.append(Row(("more",), (Cell(text, info=text),)))
    if not meet:
        meet = [Row(("meet",), (Cell("none" if found else nothing(context)),))]
    if len(result.emissions.beats) > MOST:
        text = f"and {len(result.emissions.beats) - MOST} more beats"
        beats.append(Row(("more beats",), (Cell(text, info=text),)))
    if not beats:
        beats = [Row(("beat",), (Cell("none falls below 20 kHz or a control bandwidth"),))]
    scan = context.options.scan
    summary = "M moves one clock over a range and draws the worst margin"
    if scan is not None:
        summary = scan_words(scan)
    sections = (Section(_MEET, tuple(meet)), Section(_BEAT, tuple(beats)))
    title = stale(context, result) + "frequency plan" + (f", {found[1].limit.name}" if found is not None else "")
    return View("plan", title, sections, _picture(scan) if scan is not None else None, summary)


def _row(
    key: tuple[Any, ...], pair: str, orders: tuple[int, int], low: float, high: float, count: str, info: str
) -> Row:
    texts = (pair, f"{orders[0]}, {orders[1]}", words.frequency(low) if low else "0 Hz", words.frequency(high), count)
    cells = tuple(
        Cell(text, None, RIGHT if i > 1 else "left", "", "", info, calculated=True) for i, text in enumerate(texts)
    )
    return Row(key, cells)


def scan_words(scan: Any) -> str:
    """What the scan of a clock found."""
    if scan.best is None:
        return f"{scan.clock}: no line is seen at any of these frequencies"
    now = next((m for f, m in zip(scan.frequency, scan.margin, strict=True) if f == scan.present), None)
    here = f"; now {words.frequency(scan.present)}" + (f" with {now:.1f} dB" if now is not None and now == now else "")
    return f"{scan.clock}: best at {words.frequency(scan.best)} with a margin of {scan.best_margin:.1f} dB{here}"


def _picture(scan: Any) -> Plot:
    """The worst margin over the frequency of the clock; the present one is marked."""
    known = [(f, m) for f, m in zip(scan.frequency, scan.margin, strict=True) if m == m]
    marks = [Trace("now", "o", [f], [m], "dots", "head") for f, m in known if f == scan.present]
    best = [Trace("best", "X", [f], [m], "dots", "ok") for f, m in known if f == scan.best]
    curve = Trace(scan.clock, "*", [f for f, _ in known], [m for _, m in known])
    return Plot((curve, *marks, *best), y_label="dB", x_range=(scan.frequency[0], scan.frequency[-1]))
