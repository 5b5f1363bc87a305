"""What the runs of switch-on and surge mean: check rows, and what would bring a peak within its limit.

Rows are those of ``checks``, with these remarks besides (``id`` where something follows the colon):

- "infinite current": a step of the source meets a capacitor with no resistance between; a failure without a number;
- "filter is a table": only its insertion loss is known, so nothing can be said about it and what is behind it;
- "not finished": a run was given up; the row holds for the time before, and passes no judgement unless that fails;
- "no operating point": a surge has no steady state to start from and is left out;
- "never turned on", "still counting", "still soft starting", "tripped": where a converter stood when the window ended;
- "near turn_on", "near turn_off": its terminals come within 1 % of that voltage without clearly crossing it;
- "no input capacitor": its load is fed by inductors alone and was followed quasi-statically.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace

from budget.engine.checks import NEVER_RUNS, NOT_ALLOCATED, CheckRow
from budget.engine.model import Branch, Filter, Project
from budget.engine.operating import ROUNDING
from budget.engine.transient import (
    ASSUMED,
    INFINITE,
    NEAR_OFF,
    NEAR_ON,
    NO_CAPACITOR,
    NO_POINT,
    NOT_FINISHED,
    ConverterRun,
    Inrush,
    Run,
    inrush,
)

TABLE = "filter is a table"
WHY = {
    "waiting": "never turned on",
    "counting": "still counting",
    "soft start": "still soft starting",
    "tripped": "tripped",
}
_ORDER = {"tripped": 0, "waiting": 1, "counting": 2, "soft start": 3}  # the row tells the worst
_RUNS = 24  # of the engine, at most, in a search
_CLOSE = 0.01  # of the value, where a search ends
_ROUGH = 3e-4  # tolerance of a step while searching


def inrush_checks(project: Project, found: Inrush) -> tuple[CheckRow, ...]:
    """Rows for "inrush peak", "inrush i2t", "bus inrush", "breaker i2t", "overshoot" and "start", in that order."""
    runs, bus = found.runs, project.bus
    rows: list[CheckRow] = []
    fields = (("inrush peak", "peak", "A", "inrush_peak"), ("inrush i2t", "i2t", "A^2 s", "inrush_i2t"))
    for check, key, unit, name in fields:
        for part in project.filters:
            limit = getattr(part, name)
            values = ((run, _of_filter(run, part.id, key)) for run in runs)
            rows.append(_filter_row(check, part, values, unit, limit, f"filter.{name}"))
    peaks = ((run, run.bus_peak) for run in runs)
    rows.append(_worst("bus inrush", "bus", peaks, "A", bus.inrush_peak, "bus.inrush_peak"))
    sums = ((run, run.bus_i2t) for run in runs)
    rows.append(_worst("breaker i2t", "bus", sums, "A^2 s", bus.breaker_i2t, "bus.breaker_i2t"))
    for part in project.filters:
        values = ((run, _of_filter(run, part.id, "peak_voltage")) for run in runs)
        rows.append(_filter_row("overshoot", part, values, "V", part.max_surge, "filter.max_surge"))
    homes = {part.id: part for part in project.filters}
    homes.pop("", None)
    for converter in project.converters:
        home = homes.get(converter.filter)
        if home is None or home.attenuation:
            reason = NOT_ALLOCATED if home is None else TABLE
            rows.append(_blank("overshoot", converter.id, "V", converter.max_surge, reason))
            continue
        volts = ((run, _voltage(run, converter.id)) for run in runs)
        limit = converter.max_surge
        rows.append(_worst("overshoot", converter.id, volts, "V", limit, "converter.max_surge", shown=converter.id))
    for converter in project.converters:
        home = homes.get(converter.filter)
        if home is None or home.attenuation:
            rows.append(_blank("start", converter.id, "", None, NOT_ALLOCATED if home is None else TABLE))
        else:
            rows.append(_start(converter.id, runs))
    return tuple(rows)


def _of_filter(run: Run, name: str, key: str) -> float | None:
    for f in run.filters:
        if f.id == name:
            value: float | None = getattr(f, key)
            return value
    return None


def _of_converter(run: Run, name: str) -> ConverterRun | None:
    return next((c for c in run.converters if c.id == name), None)


def _voltage(run: Run, name: str) -> float | None:
    part = _of_converter(run, name)
    return None if part is None else part.peak_voltage


def _filter_row(
    check: str,
    part: Filter,
    values: Iterable[tuple[Run, float | None]],
    unit: str,
    limit: float | None,
    field: str,
) -> CheckRow:
    if part.attenuation:
        return _blank(check, part.id, unit, limit, TABLE)
    return _worst(check, part.id, values, unit, limit, field)


def _blank(check: str, subject: str, unit: str, limit: float | None, *remarks: str) -> CheckRow:
    return CheckRow(check, subject, None, None, None, limit, None, unit, None, "", "no data", remarks=remarks)


def _worst(
    check: str,
    subject: str,
    values: Iterable[tuple[Run, float | None]],
    unit: str,
    limit: float | None,
    field: str,
    shown: str = "",
) -> CheckRow:
    """The greatest value over the runs, judged; the first run on a tie. ``shown``: a converter whose remarks count."""
    best: tuple[float, Run] | None = None
    infinite: Run | None = None
    unfinished, remarks = False, []
    for run, value in values:
        codes = set(run.remarks)
        if value is None:
            if (INFINITE, subject) in codes and infinite is None:
                infinite = run
            if (NO_POINT, "") in codes and NO_POINT not in remarks:
                remarks.append(NO_POINT)
            continue
        unfinished |= not run.finished
        if shown and (NO_CAPACITOR, shown) in codes and NO_CAPACITOR not in remarks:
            remarks.append(NO_CAPACITOR)
        if best is None or value > best[0]:
            best = value, run
    if unfinished:
        remarks.append(NOT_FINISHED)
    missing = (field,) if limit is None else ()
    if infinite is not None:
        status = "no data" if limit is None else "fail"
        remarks.insert(0, INFINITE)
        where = infinite.case, infinite.event
        return CheckRow(
            check, subject, *where, None, limit, None, unit, None, "", status, missing=missing, remarks=tuple(remarks)
        )
    if best is None:
        row = _blank(check, subject, unit, limit, *(remarks or (NO_POINT,)))
        return replace(row, missing=missing)
    value, run = best
    if limit is None:
        return CheckRow(
            check, subject, run.case, run.event, value, None, None, unit, None, "", "no data", missing, tuple(remarks)
        )
    room = limit - value
    room = 0.0 if abs(room) <= ROUNDING * abs(limit) else room
    status = "fail" if room < 0.0 else "no data" if unfinished else "ok"
    margin = room / limit if limit else None
    margin_unit = "" if margin is None else "ratio"
    return CheckRow(
        check,
        subject,
        run.case,
        run.event,
        value,
        limit,
        None,
        unit,
        margin,
        margin_unit,
        status,
        remarks=tuple(remarks),
    )


def _start(name: str, runs: Iterable[Run]) -> CheckRow:
    """Whether a converter runs, with soft start over, at the end of every switch-on that does not switch it off."""
    worst: tuple[int, Run, str] | None = None
    near: list[tuple[Run, str]] = []
    judged = unfinished = assumed = False
    for run in runs:
        part = _of_converter(run, name)
        if run.event == "surge" or part is None or part.state == "off":
            continue
        judged = True
        assumed |= (ASSUMED, name) in run.remarks
        near += [(run, code) for code in (NEAR_ON, NEAR_OFF) if (code, name) in run.remarks]
        if not run.finished:
            unfinished = True
        elif part.state in _ORDER and (worst is None or _ORDER[part.state] < worst[0]):
            worst = _ORDER[part.state], run, WHY[part.state]
    if not judged:
        return _blank("start", name, "", None, NEVER_RUNS)
    remarks = tuple(dict.fromkeys(code for _, code in near))
    if unfinished:
        remarks = (NOT_FINISHED, *remarks)
    missing = ("converter.min_input",) if assumed else ()
    case: str | None = None
    line: str | None = None
    if worst is not None:
        case, line, status = worst[1].case, worst[1].event, "fail"
        remarks = (worst[2], *remarks)
    else:
        status = "no data" if unfinished or assumed else "ok"
        if near:
            case, line = near[0][0].case, near[0][0].event
    if assumed:
        status = "no data"
    return CheckRow("start", name, case, line, None, None, None, "", None, "", status, missing, remarks)


# --- what would help ------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Remedy:
    """What brings a peak within its limit, or the reason why nothing does.

    ``value`` [ohm to add, or s of rise in all] to within 1 % on the safe side; ``peak`` [A] with it. ``starts``: all
    converters that start now start with it too. ``reason``: "" or one of "no limit" (none was entered), "within" (it
    is met as it stands), "table", "unknown" (no such filter), "no series element", "surge" (the peak is a surge's,
    which no rise of the source changes), "out of reach", "not finished".
    """

    value: float | None
    peak: float | None
    starts: bool
    reason: str


def needed_resistance(
    project: Project, target: str, known: Inrush | None = None, cancelled: Callable[[], bool] | None = None
) -> Remedy:
    """The resistance [ohm] to add in the feed (``target`` "bus") or in the first series element of a filter.

    ``known``: the runs of the project as it stands, if there are any. At most some 30 runs of the engine, on the case
    and event that are worst as things stand; the answer is then put to all. May raise ``CancelledError``.
    """
    limit, reason = _limit(project, target)
    if limit is None:
        return Remedy(None, None, True, reason)

    def changed(extra: float) -> Project:
        if target == "bus":
            return replace(project, bus=replace(project.bus, resistance=project.bus.resistance + extra))
        return replace(project, filters=tuple(_thicker(f, extra) if f.id == target else f for f in project.filters))

    part = next((f for f in project.filters if f.id == target), None)
    if part is not None and not any(b.place == "series" for b in part.dm):
        return Remedy(None, None, True, "no series element")
    top = 2.0 * max(project.bus.high, project.bus.surge or 0.0) / limit
    return _search(project, target, limit, changed, 1e-4 * top, top, known, cancelled)


def needed_rise(
    project: Project, target: str, known: Inrush | None = None, cancelled: Callable[[], bool] | None = None
) -> Remedy:
    """The rise of the source [s], longer than now, within the window, that keeps the peak of ``target`` in its limit.

    As :func:`needed_resistance`. Where the peak does not fall steadily with the rise (it ripples with the period of the
    filter), the answer is one rise that does it, with a rise 1 % shorter that does not.
    """
    limit, reason = _limit(project, target)
    if limit is None:
        return Remedy(None, None, True, reason)
    now, window = project.bus.rise, project.rules.inrush_window

    def changed(extra: float) -> Project:
        return replace(project, bus=replace(project.bus, rise=now + extra))

    if now >= window:
        return Remedy(None, None, True, "out of reach")
    found = _search(project, target, limit, changed, 1e-5 * window, window - now, known, cancelled, only_switch_on=True)
    return found if found.value is None else replace(found, value=now + found.value)


def _limit(project: Project, target: str) -> tuple[float | None, str]:
    if target == "bus":
        return project.bus.inrush_peak, "no limit"
    part = next((f for f in project.filters if f.id == target), None)
    if part is None:
        return None, "unknown"
    if part.attenuation:
        return None, "table"
    return part.inrush_peak, "no limit"


def _thicker(part: Filter, extra: float) -> Filter:
    done = False
    rungs: list[Branch] = []
    for b in part.dm:
        first = b.place == "series" and not done
        done |= first
        rungs.append(replace(b, R=b.R + extra) if first else b)
    return replace(part, dm=tuple(rungs))


def _peaks(found: Inrush, target: str) -> Iterator[tuple[float, int, Run]]:
    """Peak of every run: infinite where it is, or where the run was not finished."""
    for k, run in enumerate(found.runs):
        value = run.bus_peak if target == "bus" else _of_filter(run, target, "peak")
        if (INFINITE, target) in run.remarks:
            yield float("inf"), k, run
        elif value is not None:
            yield value, k, run


def _search(
    project: Project,
    target: str,
    limit: float,
    changed: Callable[[float], Project],
    first: float,
    top: float,
    known: Inrush | None,
    cancelled: Callable[[], bool] | None,
    only_switch_on: bool = False,
) -> Remedy:
    index = {case.id: k for k, case in enumerate(project.cases)}
    before = known or inrush(project, cancelled=cancelled)
    now = max(_peaks(before, target), key=lambda p: p[0], default=None)
    if now is None or now[0] <= limit:
        return Remedy(None, None if now is None else now[0], True, "within" if now else "not finished")
    if only_switch_on and any(p > limit and run.event == "surge" for p, _, run in _peaks(before, target)):
        return Remedy(None, now[0], True, "surge")
    worst = [(index[now[2].case], now[2].event)]

    def peak(extra: float, only: list[tuple[int, str]] | None) -> float:
        found = inrush(changed(extra), only=only, cancelled=cancelled, tolerance=_ROUGH)
        return max((p for p, _, _ in _peaks(found, target)), default=float("inf"))

    low, high, runs = 0.0, first, 1
    over, under = now[0] / limit - 1.0, peak(first, worst) / limit - 1.0
    while under > 0.0:
        if high >= top:
            return Remedy(None, None, True, "out of reach")
        low, over = high, under
        high = min(4.0 * high, top)
        under, runs = peak(high, worst) / limit - 1.0, runs + 1
    while high - low > _CLOSE * high and under < -0.002 and runs < _RUNS:
        # False position, aimed a little to the safe side and kept off the ends, so that both of them move.
        aim = (over + 0.001) / (over - under) if over < 1e300 else 0.5
        middle = low + (high - low) * min(max(aim, 0.02 if runs % 3 else 0.5), 0.98 if runs % 3 else 0.5)
        gap, runs = peak(middle, worst) / limit - 1.0, runs + 1
        low, over, high, under = (low, over, middle, gap) if gap <= 0.0 else (middle, gap, high, under)
    for _ in range(4):  # another case may be the worst by now
        after = inrush(changed(high), cancelled=cancelled)
        most = max((p for p, _, _ in _peaks(after, target)), default=float("inf"))
        if most <= limit:
            return Remedy(high, most, _all_start(before, after), "")
        high = min(1.02 * high * most / limit, top)
    return Remedy(None, None, True, "out of reach")


def _all_start(before: Inrush, after: Inrush) -> bool:
    for a, b in zip(before.runs, after.runs, strict=True):
        for one, other in zip(a.converters, b.converters, strict=True):
            if one.state == "running" and other.state != "running":
                return False
    return True
