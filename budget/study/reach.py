"""How far one cell can go either way before a check turns.

From the present value outward the cell is tried on a grid whose steps grow with the distance; the first point at which
a watched check has turned is bracketed by the one before it, and the turn is closed in on by false position guarded by
bisection, to 1e-4 of the value. The margin need not be monotonic: the first turn that the grid shows is the one found.

What the grid cannot see: a dip of the margin that lies between two neighbouring points, unless its slopes show at the
points around it (then it is searched). The first step is about 2 % of the way on a scale of factors, the last about
14 %. For a clock frequency the points where low harmonics meet those of other clocks are tried too; where high ones
meet, a band as narrow as a receiver's may be missed.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field

from budget.engine.checks import CheckRow
from budget.engine.evaluate import Result
from budget.engine.transient import CancelledError
from budget.project.build import Shelf
from budget.project.document import Document, Path
from budget.project.problems import ProjectError
from budget.study.paths import Cell, cell_at
from budget.study.probe import Key, Probe, room

TOLERANCE = 1e-4  # of the value; how closely a limit is known
_GRID = {"dc": 12, "more": 9}  # points a direction
_GROWTH = 1.6  # of the steps
_FACTOR = {"frequency": 10.0}  # how far the search goes where nobody says: a hundredfold, a clock tenfold
_SPAN = {"temperature": 100.0, "angle": 180.0, "level": 40.0, "level_line": 40.0, "level_uA": 40.0, "level_uV": 40.0}
# Where a cell holds zero there is nothing to multiply: the search starts at a millionth of these.
_SCALE = {"resistance": 1.0, "inductance": 1e-3, "capacitance": 1e-3, "time": 1.0, "ratio": 10.0, "frequency": 10e6}
_MEETINGS = 6  # harmonics of other clocks tried, a direction
_ORDERS = 3
_DIP = 6  # trials that a suspected dip may cost


@dataclass(frozen=True, slots=True)
class Point:
    """The least margin of the watched checks at one value of the cell, as a share of its limit: it turns below 0.

    ``margin`` is infinite where no watched check has a number. ``check`` and ``subject`` say whose it is.
    """

    value: float
    margin: float
    check: str = ""
    subject: str = ""


@dataclass(frozen=True, slots=True)
class Side:
    """One direction. ``limit`` is the last value at which nothing has turned, ``check`` the row just beyond it.

    Without a limit nothing turns up to ``end``; ``stop`` says, in a sentence, why the search could not go on there.
    """

    end: float
    limit: float | None = None
    check: CheckRow | None = None
    stop: str = ""


@dataclass(frozen=True, slots=True)
class Reach:
    """How far ``cell`` can go down and up from ``value`` (SI), and the margin on the way.

    ``failing`` are the checks that have turned already; they are left aside.
    """

    cell: Cell
    value: float
    thin: bool
    parts: tuple[str, ...]
    down: Side
    up: Side
    curve: tuple[Point, ...]
    failing: tuple[CheckRow, ...]
    evaluations: int


@dataclass(frozen=True, slots=True)
class _Sample:
    value: float
    margin: float = math.inf
    row: CheckRow | None = None
    fault: str = ""

    @property
    def bad(self) -> bool:
        return self.margin < 0.0


@dataclass(slots=True)
class _Search:
    probe: Probe
    cell: Cell
    modes: dict[Key, bool]  # watched checks, and whether thin counts as turned
    thin: bool
    left_aside: frozenset[Key]
    cancelled: Callable[[], bool] | None
    progress: Callable[[float], None] | None
    expected: int
    seen: dict[float, _Sample] = field(default_factory=dict)
    tried: int = 0

    def at(self, value: float) -> _Sample:
        if value in self.seen:
            return self.seen[value]
        if self.cancelled is not None and self.cancelled():
            raise CancelledError
        result = self.probe.at((self.cell, value))
        self.tried += 1
        if self.progress is not None:
            self.progress(min(0.99, self.tried / self.expected))
        sample = _Sample(value, fault=result) if isinstance(result, str) else self.judge(value, result)
        self.seen[value] = sample
        return sample

    def judge(self, value: float, result: Result) -> _Sample:
        least, which = math.inf, None
        for row in result.checks:
            key = (row.check, row.subject)
            if key in self.left_aside:
                continue
            left = room(row, self.modes.get(key, self.thin))
            if left < least:
                least, which = left, row
        return _Sample(value, least, which)


def reach(
    document: Document,
    shelves: Iterable[Shelf],
    path: Path,
    *,
    parts: Sequence[str] = ("dc",),
    lines: tuple[int, ...] = (0, 1, 2),
    low: float | None = None,
    high: float | None = None,
    thin: bool = False,
    points: int | None = None,
    cancelled: Callable[[], bool] | None = None,
    progress: Callable[[float], None] | None = None,
) -> Reach:
    """How far the cell at ``path`` can go before a check that does not fail now fails (``thin``: or turns thin).

    ``low`` and ``high`` (SI) are the ends of the search; where given, the curve goes on to them behind a limit.
    ``parts`` are what is calculated, of ``probe.PARTS``; ``lines`` the lines that count; ``points`` those of the grid a
    direction. Raises ProjectError for a cell that holds no number or a range that cannot be,
    ``transient.CancelledError`` when ``cancelled`` says so.
    """
    shelves = tuple(shelves)
    cell = cell_at(document, shelves, path)
    value = cell.value
    if value is None:
        raise ProjectError(f"{cell.text} is not entered; a number to start from was expected.")
    _check_range(cell, value, low, high)
    probe = Probe(document, shelves, parts, lines, cancelled)
    if cancelled is not None and cancelled():
        raise CancelledError
    now = probe.at((cell, value))
    if isinstance(now, str):
        raise ProjectError(f"{cell.text} as it stands cannot be calculated: {now}")
    failing = tuple(row for row in now.checks if row.status == "fail")
    modes = {(row.check, row.subject): thin and row.status != "thin" for row in now.checks if row.status != "fail"}
    count = points or _GRID["dc" if tuple(parts) == ("dc",) else "more"]
    search = _Search(
        probe,
        cell,
        modes,
        thin,
        frozenset((row.check, row.subject) for row in failing),
        cancelled,
        progress,
        expected=2 * count + 16,
    )
    search.seen[value] = search.judge(value, now)
    meetings = _meetings(now, cell) if "emissions" in parts else ()
    down = _side(search, value, _grid(cell, value, low, count, meetings, up=False), low is not None)
    up = _side(search, value, _grid(cell, value, high, count, meetings, up=True), high is not None)
    curve = tuple(
        Point(s.value, s.margin, s.row.check if s.row else "", s.row.subject if s.row else "")
        for s in sorted(search.seen.values(), key=lambda s: s.value)
        if not s.fault
    )
    if progress is not None:
        progress(1.0)
    return Reach(cell, value, thin, tuple(parts), down, up, curve, failing, search.tried + 1)


def _check_range(cell: Cell, value: float, low: float | None, high: float | None) -> None:
    for end in (low, high):
        if end is not None and not math.isfinite(end):
            raise ProjectError(f"{cell.text}: the range has an end that is no number.")
    if low is not None and high is not None and low > high:
        raise ProjectError(
            f"{cell.text}: the range runs from {cell.show(low)} down to {cell.show(high)}; "
            "its ends are exchanged, the lower one was expected first."
        )
    if low is not None and low > value:
        raise ProjectError(
            f"{cell.text}: the range starts at {cell.show(low)}, above the present value {cell.show(value)}, "
            "from which the search goes out."
        )
    if high is not None and high < value:
        raise ProjectError(
            f"{cell.text}: the range ends at {cell.show(high)}, below the present value {cell.show(value)}, "
            "from which the search goes out."
        )


# -- where to look ---------------------------------------------------------------------------------------------------


def _grid(
    cell: Cell, value: float, end: float | None, count: int, meetings: tuple[float, ...], *, up: bool
) -> list[float]:
    """The values to try in one direction, outward; the last is the end of the search."""
    spec = cell.spec
    steps = [(k / count) ** _GROWTH for k in range(1, count + 1)]
    linear = spec.kind in _SPAN
    floor = 0.0 if linear or spec.low is None else spec.low
    factor = _FACTOR.get(spec.kind, 100.0)
    size = value - floor
    far = end
    if far is None:
        if linear:
            far = value + (_SPAN[spec.kind] if up else -_SPAN[spec.kind])
        elif size:
            far = floor + size * (factor if up == (size > 0.0) else 1.0 / factor)
        elif up or spec.low is None:
            far = floor + (1.0 if up else -1.0) * _SCALE.get(spec.kind, 100.0)
        else:
            return []  # it stands at the lower end of what the field takes
        far = _inside(cell, value, far)
    if far == value:
        return []
    if not linear and size and (far - floor) / size > 0.0:
        found = [floor + size * ((far - floor) / size) ** t for t in steps[:-1]]
    elif not linear and size and far == floor:
        found = [floor + size * factor**-t for t in steps]
    elif not linear and not size:
        found = [floor + (far - floor) * 10.0 ** (-6.0 * (1.0 - k / count)) for k in range(1, count)]
    else:
        found = [value + (far - value) * t for t in steps[:-1]]
    found += [f for f in meetings if value < f < far or far < f < value]
    found.append(far)
    # down to the end of the field itself, where that is a value it takes
    if end is None and not up and not linear and size > 0.0 and spec.low is not None and not spec.above:
        found.append(spec.low)
    return sorted({f for f in found if f != value}, key=lambda f: abs(f - value))


def _inside(cell: Cell, value: float, far: float) -> float:
    """The end of the search within what the field takes; a bound that it does not take is kept at a distance."""
    low, high = cell.spec.low, cell.spec.high
    if high is not None and far >= high:
        return high if not cell.spec.below else high - (high - value) * 0.01
    if low is not None and far <= low:
        return low if not cell.spec.above else low + (value - low) * 0.01
    return far


def _meetings(now: Result, cell: Cell) -> tuple[float, ...]:
    """Frequencies at which a low harmonic of this clock meets one of another, the nearest of each direction."""
    value = cell.value
    if cell.path[0] != "converter" or cell.path[-1] != "frequency" or len(cell.path) != 3 or value is None:
        return ()
    others = {c.frequency for c in now.project.converters if c.frequency and c.frequency != value and c.filter}
    orders = range(1, _ORDERS + 1)
    found = {other * n / m for other in others for n in orders for m in orders if math.gcd(n, m) == 1}
    below = sorted(f for f in found if f < value)[-_MEETINGS:]
    above = sorted(f for f in found if f > value)[:_MEETINGS]
    return (*below, *above)


# -- the search ------------------------------------------------------------------------------------------------------


def _side(search: _Search, value: float, grid: list[float], whole: bool) -> Side:
    """Go along the grid until something turns; with ``whole`` go on to its end for the curve."""
    path = [search.seen[value]]
    for k, x in enumerate(grid):
        sample = search.at(x)
        if sample.fault:
            last, sample = _usable(search, path[-1], sample)
            if last.bad:
                return _turn(search, path[-1], last)
            return Side(end=last.value, stop=sample.fault)
        path.append(sample)
        bad = sample if sample.bad else _dip(search, path)
        if bad is not None:
            before = max(
                (s for s in path if not s.bad and abs(s.value - value) < abs(bad.value - value)),
                key=lambda s: abs(s.value - value),
            )
            side = _turn(search, before, bad)
            for rest in grid[k + 1 :] if whole else ():
                search.at(rest)
            return side
    return Side(end=grid[-1] if grid else value)


def _turn(search: _Search, good: _Sample, bad: _Sample) -> Side:
    good, bad = _close_in(search, good, bad)
    return Side(end=bad.value, limit=good.value, check=bad.row)


def _close_in(search: _Search, good: _Sample, bad: _Sample) -> tuple[_Sample, _Sample]:
    """Narrow the bracket of a turn to ``TOLERANCE`` of the value.

    False position with the Illinois weights, each trial pushed a little over the expected turn so that both ends close
    in; every third trial halves the bracket, as do all where a margin has no number. A value at which nothing can be
    calculated counts as turned.
    """
    narrow = 1e-6 * abs(bad.value - good.value)
    weight_good = weight_bad = 1.0
    last_good: bool | None = None
    for k in range(80):
        span = bad.value - good.value
        tolerance = max(0.99 * TOLERANCE * max(abs(good.value), abs(bad.value)), narrow)
        if abs(span) <= tolerance:
            break
        a, b = good.margin * weight_good, bad.margin * weight_bad
        share = 0.5
        if k % 3 != 2 and math.isfinite(a) and math.isfinite(b) and not bad.fault and bad.margin > -1.0:
            share = a / (a - b) if a > b else 0.5
            push = 0.45 * tolerance / abs(span)
            if last_good is not None:
                share += push if last_good else -push
            share = min(1.0 - push, max(push, share))
        x = good.value + span * share
        if x in (good.value, bad.value):
            break
        sample = search.at(x)
        turned_here = sample.bad or bool(sample.fault)
        if turned_here:
            weight_good = weight_good * 0.5 if last_good is False else 1.0
            bad, weight_bad = sample, 1.0
        else:
            weight_bad = weight_bad * 0.5 if last_good is True else 1.0
            good, weight_good = sample, 1.0
        last_good = not turned_here
    return good, bad


def _usable(search: _Search, good: _Sample, bad: _Sample) -> tuple[_Sample, _Sample]:
    """The last value that can be calculated, and the first beyond it that cannot; ends early where a check turns."""
    narrow = 1e-6 * abs(bad.value - good.value)
    while abs(bad.value - good.value) > max(TOLERANCE * max(abs(good.value), abs(bad.value)), narrow):
        x = (good.value + bad.value) / 2
        if x in (good.value, bad.value):
            break
        sample = search.at(x)
        if sample.fault:
            bad = sample
        else:
            good = sample
            if good.bad:
                break
    return good, bad


def _dip(search: _Search, path: list[_Sample]) -> _Sample | None:
    """A value at which a check has turned, between points at none of which one has, if the slopes there suggest one.

    Golden sections around the lowest of the last three points; given up after a few trials.
    """
    if len(path) < 3:
        return None
    a, b, c = path[-3:]
    if not all(math.isfinite(s.margin) for s in (a, b, c)) or not (b.margin < a.margin and b.margin < c.margin):
        return None
    if b.margin > max(a.margin, c.margin) - b.margin:  # falls by less than is left
        return None
    left, middle, right = a, b, c
    for _ in range(_DIP):
        longer = left if abs(middle.value - left.value) > abs(right.value - middle.value) else right
        sample = search.at(middle.value + 0.381966 * (longer.value - middle.value))
        if sample.fault:
            return None
        if sample.bad:
            return sample
        if sample.margin < middle.margin:
            left, right = (left, middle) if longer is left else (middle, right)
            middle = sample
        elif longer is left:
            left = sample
        else:
            right = sample
    return None
