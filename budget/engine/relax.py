"""Where no allocation is admissible: what is short, and the smallest change of one number that would help.

Each question "would this rating (this load) do?" is an allocation search of its own that stops at the first admissible
allocation; between yes and no the number is halved. A rating that does is taken down to the current that it then
carries, so that the answer is a number with an allocation behind it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from budget.engine.bounds import fit
from budget.engine.feed import filter_currents
from budget.engine.model import Project
from budget.engine.operating import derating
from budget.engine.placing import Constraints, Name, Task, task_of
from budget.engine.pool import SAME, Found, StoppedError, Watch, spread
from budget.engine.search import decide

_FINE = 1e-4  # relative; how closely a number is looked for


@dataclass(frozen=True, slots=True)
class Shortfall:
    """Why nothing is admissible.

    ``code``: "filter current" (the allocation with the smallest overload puts ``value`` [A] on filter ``subject``
    where ``limit`` [A] is wanted), "operating point" (the bus cannot carry the case; it could carry the share
    ``value`` of all its powers, unless None), "contradiction" (``constraints`` name what cannot be together),
    "constraints" (they leave no allocation at all), "no filters", "not found" (stopped before there was anything).
    """

    code: str
    subject: str = ""
    case: str | None = None
    value: float | None = None
    limit: float | None = None
    constraints: tuple[Name, ...] = ()


@dataclass(frozen=True, slots=True)
class Relaxation:
    """One change that would make some allocation admissible.

    ``code``: "rating" (``rated_current`` of filter ``subject`` from ``present`` to ``needed`` [A]), "load" (all powers
    of converter ``subject`` down to the share ``needed`` of now; 0 is off), "constraint" (without ``constraint``).
    ``smallest``: whether it is proved, within 1e-4, that less of this change would not do.
    """

    code: str
    subject: str = ""
    present: float | None = None
    needed: float | None = None
    constraint: Name = ()
    smallest: bool = False


def shortfall(project: Project, task: Task, best: Found | None) -> Shortfall:
    """What the allocation ``best`` with the smallest share has too much of."""
    if task.items and fit(replace(task, wanted=np.full_like(task.wanted, np.inf)), 1.0) is None:
        return _carries(project, task)
    if best is None:
        return Shortfall("constraints" if task.items else "not found")
    current = filter_currents(task.feed, np.array([best.home], dtype=np.intp))[0]  # (C, F)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(current > 0.0, current / task.wanted, 0.0)
    case, f = np.unravel_index(int(share.argmax()), share.shape)
    where = project.cases[task.cases[int(case)]].id
    return Shortfall(
        "filter current", project.filters[int(f)].id, where, float(current[case, f]), float(task.wanted[f])
    )


def _carries(project: Project, task: Task) -> Shortfall:
    """The case that the bus cannot carry however it is allocated, and the share of it that it could at most."""
    free = replace(task, wanted=np.full_like(task.wanted, np.inf))
    worst, at = math.inf, 0
    for c in range(task.feed.power.shape[0]):
        low, high = 0.0, 1.0
        power = task.feed.power[c : c + 1]
        if fit(replace(free, feed=replace(task.feed, power=power)), 1.0) is not None:
            continue
        for _ in range(40):
            middle = 0.5 * (low + high)
            feed = replace(task.feed, power=power * middle)
            low, high = (middle, high) if fit(replace(free, feed=feed), 1.0) is not None else (low, middle)
        if high < worst:
            worst, at = high, c
    value = worst if math.isfinite(worst) else None
    return Shortfall("operating point", "bus", project.cases[task.cases[at]].id, value)


def relaxations(
    project: Project, constraints: Constraints, task: Task, best: Found | None, watch: Watch
) -> tuple[Relaxation, ...]:
    """The smallest growth of one rating, the smallest cut of one load, and constraints that alone are in the way.

    Each at most once for ratings and loads: the one with the smallest relative change. What time does not allow is
    left out.
    """
    found: list[Relaxation] = []
    for search in (_constraint, _rating, _load):
        try:
            found += search(project, constraints, task, best, watch.until(watch.left() / 2))
        except StoppedError:
            if watch.left() <= 0.0 or watch.cancelled():
                break
    return tuple(found)


def _rating(
    project: Project, constraints: Constraints, task: Task, best: Found | None, watch: Watch
) -> list[Relaxation]:
    del constraints, best
    share = project.rules.filter_load
    least: tuple[float, Relaxation] | None = None
    usable = [f for f, part in enumerate(project.filters)
              if part.rated_current and np.isfinite(task.wanted[f]) and task.wanted[f] > 0.0]  # fmt: skip
    each = watch.left() / max(1, len(usable)) / 8.0
    for f in usable:
        watch.check()
        now = float(task.wanted[f])
        top = 1e6 if least is None else least[0]  # growth that is not worth looking at any more
        low, high, proved = 1.0, math.inf, True
        answer, sure = decide(_with(task, f, now * top), watch.until(each))
        if answer is None:
            continue
        while True:
            current = float(filter_currents(task.feed, spread(task, np.array([answer.items])))[0][:, f].max())
            high = min(high, max(current / now, 1.0 + SAME)) if answer is not None else high
            if high - low <= _FINE * high:
                break
            middle = 0.5 * (low + high)
            found, sure = decide(_with(task, f, now * middle), watch.until(each))
            if found is None:
                low = middle
                proved &= sure
            else:
                answer, high = found, middle
        part = project.filters[f]
        factor = derating(project.bus.temperature, part.derate_from, part.derate_to) * share
        if least is None or high < least[0]:
            needed = now * high / factor
            least = (high, Relaxation("rating", part.id, part.rated_current, needed, smallest=proved))
    return [least[1]] if least else []


def _with(task: Task, f: int, wanted: float) -> Task:
    changed = task.wanted.copy()
    changed[f] = wanted
    return replace(task, wanted=changed)


def _load(project: Project, constraints: Constraints, task: Task, best: Found | None, watch: Watch) -> list[Relaxation]:
    del constraints, best
    peak = task.feed.power.max(axis=0, initial=0.0)
    order = np.argsort(-peak, kind="stable").tolist()
    least: tuple[float, Relaxation] | None = None
    each = watch.left() / max(1, len(order)) / 4.0

    def scaled(k: int, share: float) -> Task:
        power = task.feed.power.copy()
        power[:, k] *= share
        return replace(task, feed=replace(task.feed, power=power))

    for k in order:
        try:
            watch.check()
        except StoppedError:
            break
        low = 0.0 if least is None else least[0]  # a share that does; a larger one is wanted
        answer, _ = decide(scaled(k, low), watch.until(each))
        if answer is None:
            continue
        high, proved = 1.0, True
        while high - low > _FINE:
            middle = 0.5 * (low + high)
            answer, sure = decide(scaled(k, middle), watch.until(each))
            if answer is None:
                high = middle
                proved &= sure
            else:
                low = middle
        if least is None or low > least[0]:
            least = (low, Relaxation("load", project.converters[k].id, 1.0, low, smallest=proved))
    return [least[1]] if least else []


def _constraint(
    project: Project, constraints: Constraints, task: Task, best: Found | None, watch: Watch
) -> list[Relaxation]:
    """Constraints without any one of which there is an admissible allocation."""
    del task, best
    found = []
    for name, without in _without_one(constraints):
        watch.check()
        other = task_of(project, without)
        if isinstance(other, Task) and decide(other, watch.until(watch.left() / 4))[0] is not None:
            found.append(Relaxation("constraint", constraint=name))
    return found


def _without_one(given: Constraints) -> list[tuple[Name, Constraints]]:
    found: list[tuple[Name, Constraints]] = []

    def drop(items: tuple, k: int) -> tuple:  # type: ignore[type-arg]
        return items[:k] + items[k + 1 :]

    for k, who in enumerate(given.keep):
        found.append((("keep", who), replace(given, keep=drop(given.keep, k))))
    for k, pair in enumerate(given.apart):
        found.append((("apart", *pair), replace(given, apart=drop(given.apart, k))))
    for k, pair in enumerate(given.together):
        found.append((("together", *pair), replace(given, together=drop(given.together, k))))
    for k, pair in enumerate(given.banned):
        found.append((("banned", *pair), replace(given, banned=drop(given.banned, k))))
    counts = given.counts()
    for k, (where, number) in enumerate(counts):
        found.append((("most", where, str(number)), replace(given, most=drop(counts, k))))
    return found
