"""Pictures of curves and spectra in characters: a pure raster, the same with and without colour.

One character cell is one pixel. Every curve has a letter or sign of its own, so that curves are told apart without
colour, and a column shows everything that falls into it from its lowest to its highest value: no peak is lost to
thinning, however many points a curve has.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from budget import quantity

Span = tuple[str, str]
Line = list[Span]

SYMBOLS = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"


@dataclass(frozen=True, slots=True)
class Trace:
    """One curve: "curve" and "step" join their points, "stems" stand each on the floor, "dots" only mark them."""

    name: str
    symbol: str
    x: Sequence[float]
    y: Sequence[float]
    kind: str = "curve"
    tone: str = ""


@dataclass(frozen=True, slots=True)
class Plot:
    """What a picture shows; ``unit_x`` and ``unit_y`` are kinds of ``quantity`` or "" for plain numbers."""

    traces: tuple[Trace, ...]
    x_kind: str = "frequency"
    y_label: str = ""
    log_x: bool = True
    log_y: bool = False
    x_range: tuple[float, float] | None = None
    y_range: tuple[float, float] | None = None
    y_kind: str = ""
    cursor: tuple[float, float] | None = None
    empty: str = "nothing to draw"


def draw(plot: Plot, width: int, height: int, *, ascii_only: bool = False) -> list[Line]:
    """The picture as ``height`` lines of ``width`` characters: axis numbers at the left, the x axis below."""
    points = [
        (x, y)
        for t in plot.traces
        for x, y in zip(t.x, t.y, strict=True)
        if _usable(x, plot.log_x) and _usable(y, plot.log_y)
    ]
    if not points or width < 24 or height < 5:
        return [[(f"{plot.empty if k == 0 else ''}".ljust(width)[:width], "pale")] for k in range(height)]
    x_low, x_high = plot.x_range or _span([x for x, _ in points], plot.log_x)
    y_low, y_high = plot.y_range or _span([y for _, y in points], plot.log_y)
    left, rows = 8, height - 2
    canvas = _Canvas(width - left, rows, _scale(x_low, x_high, plot.log_x), _scale(y_low, y_high, plot.log_y))
    for trace in plot.traces:
        canvas.trace(trace, ascii_only)
    if plot.cursor is not None:
        canvas.cursor(*plot.cursor, ascii_only)
    labels = dict(_ticks(canvas.y, rows, max(2, rows // 3), plot.y_kind))
    lines: list[Line] = []
    bar = "|" if ascii_only else "\u2502"
    for k in range(rows):
        text = labels.get(rows - 1 - k, "")
        lines.append([(f"{text:>{left - 1}}{bar}", "pale"), *canvas.line(k)])
    lines.append([(_axis(canvas.x, width, left, plot.x_kind, ascii_only), "pale")])
    lines.append([(f"{plot.y_label:<{left}}"[: max(left, width)].ljust(width)[:width], "pale")])
    lines[-1] = [(_x_labels(canvas.x, width, left, plot.x_kind, plot.y_label), "pale")]
    return lines


def _usable(value: float, log: bool) -> bool:
    return math.isfinite(value) and (value > 0 or not log)


def _span(values: list[float], log: bool) -> tuple[float, float]:
    low, high = min(values), max(values)
    if log:
        return (low / 1.2, high * 1.2) if high / low < 1.5 else (low, high)
    if high - low < 1e-12 * max(abs(high), abs(low), 1e-300):
        pad = abs(high) * 0.1 or 1.0
        return low - pad, high + pad
    pad = (high - low) * 0.05
    return low - pad, high + pad


@dataclass(frozen=True, slots=True)
class _Scale:
    low: float
    high: float
    log: bool

    def place(self, value: float, cells: int) -> int | None:
        """The cell of a value, None where it lies outside."""
        v = math.log10(value) if self.log else value
        low, high = (math.log10(self.low), math.log10(self.high)) if self.log else (self.low, self.high)
        share = (v - low) / (high - low)
        if not -1e-9 <= share <= 1 + 1e-9:
            return None
        return min(cells - 1, max(0, int(share * cells)))

    def clip(self, value: float, cells: int) -> int:
        """The cell of a value, at the edge where it lies outside."""
        if self.log and value <= 0:
            return 0
        found = self.place(value, cells)
        if found is not None:
            return found
        return 0 if value < self.low else cells - 1


def _scale(low: float, high: float, log: bool) -> _Scale:
    if log and low <= 0:
        low = high / 1e6 if high > 0 else 1e-6
    if not low < high:
        high = low * 1.1 if log else low + 1.0
    return _Scale(low, high, log)


class _Canvas:
    """A grid of characters with a tone each; later traces draw over earlier ones."""

    def __init__(self, width: int, height: int, x: _Scale, y: _Scale) -> None:
        self.width, self.height, self.x, self.y = width, height, x, y
        self.cells: list[list[Span]] = [[(" ", "")] * width for _ in range(height)]

    def put(self, column: int, level: int, text: str, tone: str) -> None:
        self.cells[self.height - 1 - level][column] = (text, tone)

    def trace(self, trace: Trace, ascii_only: bool) -> None:
        extent: dict[int, tuple[int, int]] = {}
        before: tuple[int, int] | None = None
        joined = trace.kind in ("curve", "step")
        for x, y in zip(trace.x, trace.y, strict=True):
            if not (_usable(x, self.x.log) and math.isfinite(y)):
                before = None
                continue
            column = self.x.place(x, self.width)
            if column is None and not joined:
                continue
            at = (self.x.clip(x, self.width), self.y.clip(y, self.height))
            if not joined and self.y.place(y, self.height) is None and y < self.y.low:
                continue
            for c, low, high in _between(before, at) if joined and before else ((at[0], at[1], at[1]),):
                a, b = extent.get(c, (low, high))
                extent[c] = (min(a, low), max(b, high))
            before = at
        for column, (low, high) in extent.items():
            if trace.kind == "stems":
                stem = "." if ascii_only else "\u00b7"
                for level in range(high):
                    if self.cells[self.height - 1 - level][column][0] == " ":
                        self.put(column, level, stem, "pale")
                self.put(column, high, trace.symbol, trace.tone)
            elif trace.kind == "dots":
                self.put(column, high, trace.symbol, trace.tone)
            else:
                for level in range(low, high + 1):
                    self.put(column, level, trace.symbol, trace.tone)

    def cursor(self, x: float, y: float, ascii_only: bool) -> None:
        """A line down at ``x``, with the cell at ``y`` turned over."""
        if not _usable(x, self.x.log):
            return
        column = self.x.place(x, self.width)
        if column is None:
            return
        at = self.y.clip(y, self.height) if math.isfinite(y) else 0
        for level in range(self.height):
            text, _ = self.cells[self.height - 1 - level][column]
            if level == at:
                self.put(column, level, text if text != " " else "+", "cursor")
            elif text in " .\u00b7":
                self.put(column, level, ":" if ascii_only else "\u2506", "head")

    def line(self, k: int) -> Line:
        spans: Line = []
        for text, tone in self.cells[k]:
            if spans and spans[-1][1] == tone:
                spans[-1] = (spans[-1][0] + text, tone)
            else:
                spans.append((text, tone))
        return spans


def _between(one: tuple[int, int], two: tuple[int, int]) -> list[tuple[int, int, int]]:
    """The columns from one cell to the next, each with the range of levels the straight line passes in it."""
    (c0, l0), (c1, l1) = one, two
    if c1 == c0:
        return [(c0, min(l0, l1), max(l0, l1))]
    step = 1 if c1 > c0 else -1
    out = []
    for c in range(c0, c1 + step, step):
        a = l0 + (l1 - l0) * max(0.0, (abs(c - c0) - 0.5)) / abs(c1 - c0)
        b = l0 + (l1 - l0) * min(float(abs(c1 - c0)), abs(c - c0) + 0.5) / abs(c1 - c0)
        out.append((c, round(min(a, b)), round(max(a, b))))
    return out


def _nice(low: float, high: float, count: int) -> list[float]:
    """Round numbers between low and high, about ``count`` of them."""
    raw = (high - low) / max(1, count)
    base = 10.0 ** math.floor(math.log10(raw))
    step = next(base * m for m in (1, 2, 5, 10) if base * m >= raw * 0.999)
    first = math.ceil(low / step - 1e-9)
    return [k * step for k in range(first, math.floor(high / step + 1e-9) + 1)]


def _decades(low: float, high: float, dense: bool) -> list[float]:
    steps = (1, 2, 5) if dense else (1,)
    values = [m * 10.0**d for d in range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1) for m in steps]
    return [v for v in values if low * 0.9999 <= v <= high * 1.0001]


def _ticks(scale: _Scale, cells: int, count: int, kind: str) -> list[tuple[int, str]]:
    if scale.log:
        values = _decades(scale.low, scale.high, math.log10(scale.high / scale.low) < 2.5)
        if len(values) < 2:
            values = _nice(scale.low, scale.high, count)
    else:
        values = _nice(scale.low, scale.high, count)
    placed = ((scale.place(v, cells), v) for v in values)
    return [(cell, number(v, kind)) for cell, v in placed if cell is not None]


def number(value: float, kind: str) -> str:
    """An axis number: with its prefix and unit where it has a kind, plain otherwise."""
    if kind:
        text, unit = quantity.show_parts(value, quantity.KINDS[kind], 3)
        own = quantity.KINDS[kind].unit
        return text + (unit.removesuffix(own) if own else unit)
    return f"{value:.4g}"


def _axis(scale: _Scale, width: int, left: int, kind: str, ascii_only: bool) -> str:
    dash, tick = ("-", "+") if ascii_only else ("\u2500", "\u253c")
    cells = [dash] * (width - left)
    for cell, _ in _ticks(scale, width - left, 8, kind):
        cells[cell] = tick
    return " " * (left - 1) + ("+" if ascii_only else "\u2514") + "".join(cells)


def _x_labels(scale: _Scale, width: int, left: int, kind: str, y_label: str) -> str:
    cells = [" "] * width
    for cell, text in _ticks(scale, width - left, 8, kind):
        at = left + cell - len(text) // 2
        at = max(left, min(at, width - len(text)))
        if all(c == " " for c in cells[max(0, at - 1) : at + len(text) + 1]):
            cells[at : at + len(text)] = text
    unit = quantity.KINDS[kind].unit if kind else ""
    if unit and all(c == " " for c in cells[width - len(unit) - 1 :]):
        cells[width - len(unit) :] = unit
    head = y_label[: left - 1]
    cells[: len(head)] = head
    return "".join(cells)[:width]
