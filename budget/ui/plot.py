"""Pictures of curves and spectra in characters: a pure raster, the same with and without colour.

One character cell is one pixel. Every curve has a letter or sign of its own, so that curves are told apart without
colour, and a column shows everything that falls into it from its lowest to its highest value: no peak is lost to
thinning, however many points a curve has. The highest cell of a curve is not covered by the body of another, and where
curves lie upon each other their letters take turns.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from budget import quantity

Span = tuple[str, str]
Line = list[Span]

LEAST = (24, 5)  # characters and lines of the smallest picture
LEFT = 8  # columns of the axis numbers and the axis
JOINED = ("curve", "step")
LARGEST = 1e100  # what is larger, or on a logarithmic axis smaller than its inverse, is no value to draw
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
    canvas = _canvas(plot, width - LEFT, height - 2, ascii_only) if width >= LEAST[0] and height >= LEAST[1] else None
    if canvas is None:
        text = plot.empty if width >= LEAST[0] and height >= LEAST[1] else "no room for the picture"
        return [[(f"{text if k == 0 else ''}".ljust(width)[:width], "pale")] for k in range(height)]
    left, rows = LEFT, height - 2
    if plot.cursor is not None:
        canvas.cursor(*plot.cursor)
    labels = dict(_ticks(canvas.y, rows, max(2, rows // 3), plot.y_kind, left - 1))
    lines: list[Line] = []
    bar = "|" if ascii_only else "\u2502"
    for k in range(rows):
        text = labels.get(rows - 1 - k, "")
        lines.append([(f"{text:>{left - 1}}{bar}", "pale"), *canvas.line(k)])
    lines.append([(_axis(canvas.x, width, left, plot.x_kind, ascii_only), "pale")])
    lines.append([(_x_labels(canvas.x, width, left, plot.x_kind, plot.y_label), "pale")])
    return lines


# The last picture without its cursor: while the cursor walks, the curves stay.
_last: list[tuple[Plot, tuple[int, int, bool], _Canvas | None]] = []


def _canvas(plot: Plot, width: int, height: int, ascii_only: bool) -> _Canvas | None:
    """The curves of a plot; None where there is nothing to draw."""
    plot, size = replace(plot, cursor=None), (width, height, ascii_only)
    if not _last or _last[0][1] != size or _last[0][0].traces is not plot.traces or _last[0][0] != plot:
        _last[:] = [(plot, size, _curves(plot, *size))]
    canvas = _last[0][2]
    return canvas.copy() if canvas else None


def _curves(plot: Plot, width: int, height: int, ascii_only: bool) -> _Canvas | None:
    points = [
        (x, y)
        for t in plot.traces
        for x, y in zip(t.x, t.y, strict=True)
        if _usable(x, plot.log_x) and _usable(y, plot.log_y)
    ]
    if not points:
        return None
    x_low, x_high = _range(plot.x_range, [x for x, _ in points], plot.log_x)
    y_low, y_high = _range(plot.y_range, [y for _, y in points], plot.log_y)
    canvas = _Canvas(width, height, _scale(x_low, x_high, plot.log_x), _scale(y_low, y_high, plot.log_y))
    for trace in plot.traces:
        if trace.kind in JOINED:
            canvas.curve(trace)
    canvas.crown()
    for trace in plot.traces:
        if trace.kind not in JOINED:
            canvas.points(trace, ascii_only)
    return canvas


def _usable(value: float, log: bool) -> bool:
    return abs(value) <= LARGEST and (value >= 1.0 / LARGEST or not log)  # False for nan too


def _range(wanted: tuple[float, float] | None, values: list[float], log: bool) -> tuple[float, float]:
    """The range asked for where it is one, else that of the values."""
    if wanted is not None and all(_usable(v, log) for v in wanted) and wanted[0] < wanted[1]:
        return wanted
    low, high = min(values), max(values)
    if log:
        return (low / 1.2, high * 1.2) if high / low < 1.5 else (low, high)
    pad = (high - low) * 0.05
    return low - pad, high + pad


@dataclass(frozen=True, slots=True)
class _Scale:
    low: float
    high: float
    log: bool

    def place(self, value: float, cells: int) -> int | None:
        """The cell of a value, None where it lies outside."""
        if not _usable(value, self.log):
            return None
        if self.log:
            share = math.log(value / self.low) / math.log(self.high / self.low)
        else:
            share = (value - self.low) / (self.high - self.low)
        if not -1e-9 <= share <= 1 + 1e-9:
            return None
        return min(cells - 1, max(0, int(share * cells + 1e-9)))

    def clip(self, value: float, cells: int) -> int:
        """The cell of a value, at the edge where it lies outside."""
        found = self.place(value, cells)
        if found is not None:
            return found
        return 0 if value < self.low else cells - 1


def _scale(low: float, high: float, log: bool) -> _Scale:
    size = max(abs(low), abs(high))
    if log and high / low < 1.0 + 1e-9:
        high = low * 1.1
    elif not log and high - low <= max(1e-9 * size, 1.0 / LARGEST):
        pad = 0.1 * size if size > 1.0 / LARGEST else 1.0
        low, high = low - pad, high + pad
    return _Scale(low, high, log)


class _Canvas:
    """A grid of characters with a tone each; what is drawn later covers what is there, but for the tops of curves."""

    def __init__(self, width: int, height: int, x: _Scale, y: _Scale) -> None:
        self.width, self.height, self.x, self.y = width, height, x, y
        self.cells: list[list[Span]] = [[(" ", "")] * width for _ in range(height)]
        self.tops: dict[tuple[int, int], list[Span]] = {}  # by column and level: the curves that are highest there

    def copy(self) -> _Canvas:
        other = _Canvas(0, 0, self.x, self.y)
        other.width, other.height, other.tops = self.width, self.height, self.tops
        other.cells = [list(line) for line in self.cells]
        return other

    def put(self, column: int, level: int, text: str, tone: str) -> None:
        self.cells[self.height - 1 - level][column] = (text, tone)

    def curve(self, trace: Trace) -> None:
        """Every column from the lowest to the highest value that the curve has in it."""
        extent: dict[int, tuple[int, int]] = {}
        before: tuple[int, int] | None = None
        for at in self._places(trace):
            if at is None:
                before = None
                continue
            if before is not None and before[0] != at[0]:
                reach = _between(before, at)
            elif before is not None:
                reach = ((at[0], min(before[1], at[1]), max(before[1], at[1])),)
            else:
                reach = ((at[0], at[1], at[1]),)
            for c, low, high in reach:
                a, b = extent.get(c, (low, high))
                extent[c] = (min(a, low), max(b, high))
            before = at
        for column, (low, high) in extent.items():
            for level in range(low, high + 1):
                self.put(column, level, trace.symbol, trace.tone)
            if trace.tone != "pale":  # what is faint never covers the others
                self.tops.setdefault((column, high), []).append((trace.symbol, trace.tone))

    def _places(self, trace: Trace) -> Iterator[tuple[int, int] | None]:
        """Column and level of each point of a curve, at the edge where it lies outside; None where it has none.

        Points that follow each other in one cell are given once; a waveform has some thousand points for each column.
        """
        last: tuple[int, int] | None = None
        for x, y in zip(trace.x, trace.y, strict=True):
            if not (_usable(x, self.x.log) and math.isfinite(y)):
                last = None
                yield None
                continue
            at = (self.x.clip(x, self.width), self.y.clip(y, self.height))
            if at != last:
                yield at
            last = at

    def crown(self) -> None:
        """The highest cell of every curve over the bodies of the others; where several meet, they take turns."""
        for (column, level), curves in self.tops.items():
            self.put(column, level, *curves[column % len(curves)])

    def points(self, trace: Trace, ascii_only: bool) -> None:
        highest: dict[int, int] = {}
        for x, y in zip(trace.x, trace.y, strict=True):
            if not (_usable(x, self.x.log) and math.isfinite(y)):
                continue
            column = self.x.place(x, self.width)
            if column is None or (self.y.place(y, self.height) is None and y < self.y.low):
                continue
            highest[column] = max(highest.get(column, 0), self.y.clip(y, self.height))
        stem = "." if ascii_only else "\u00b7"
        for column, high in highest.items():
            for level in range(high if trace.kind == "stems" else 0):
                if self.cells[self.height - 1 - level][column][0] == " ":
                    self.put(column, level, stem, "pale")
            self.put(column, high, trace.symbol, trace.tone)

    def cursor(self, x: float, y: float) -> None:
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
                self.put(column, level, ":", "head")

    def line(self, k: int) -> Line:
        spans: Line = []
        for text, tone in self.cells[k]:
            if spans and spans[-1][1] == tone:
                spans[-1] = (spans[-1][0] + text, tone)
            else:
                spans.append((text, tone))
        return spans


def _between(one: tuple[int, int], two: tuple[int, int]) -> Sequence[tuple[int, int, int]]:
    """The columns from one cell to another, each with the range of levels the straight line passes in it."""
    (c0, l0), (c1, l1) = one, two
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


def _ticks(scale: _Scale, cells: int, count: int, kind: str, room: int = 12) -> list[tuple[int, str]]:
    """Cells and numbers of the ticks of an axis."""
    if scale.log:
        values = _decades(scale.low, scale.high, math.log10(scale.high / scale.low) < 2.5)
        if len(values) < 2:
            values = _nice(scale.low, scale.high, count)
    else:
        values = _nice(scale.low, scale.high, count)
    placed = [(cell, v) for v in values if (cell := scale.place(v, cells)) is not None]
    return list(zip((c for c, _ in placed), _numbers([v for _, v in placed], kind, room), strict=True))


def _numbers(values: list[float], kind: str, room: int) -> list[str]:
    """The numbers of an axis: with as many digits as tell them apart, as far as there is room."""
    first = 3 if kind else 4
    fitting: list[str] = []
    for digits in (*range(first, 8), *range(first - 1, 0, -1)):
        texts = [number(v, kind, digits) for v in values]
        if max(map(len, texts), default=0) <= room:
            if len(set(texts)) == len(texts):
                return texts
            fitting = fitting or texts
    return fitting or [text[:room] for text in (number(v, kind, 1) for v in values)]


def number(value: float, kind: str, digits: int = 4) -> str:
    """An axis number: with its prefix and unit where it has a kind, plain otherwise."""
    if kind:
        text, unit = quantity.show_parts(value, quantity.KINDS[kind], digits)
        own = quantity.KINDS[kind].unit
        return text + (unit.removesuffix(own) if own else unit)
    return f"{value:.{digits}g}"


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
