"""What a search for an allocation gives: candidates, the checks of each, and their rank.

The checks of a candidate may come in stages, the fast ones first: ``unchecked`` tells which are still to be made, and
what is said of a candidate holds for the others.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace

from budget.engine.checks import CheckRow
from budget.engine.evaluate import Result, evaluate_dc, with_emissions, with_inrush, with_stability
from budget.engine.model import Project
from budget.engine.relax import Relaxation, Shortfall
from budget.engine.transient import CancelledError

Places = tuple[tuple[str, str], ...]  # (converter id, filter id), in project order

STAGES = ("operating points", "emissions", "stability", "switch-on")


@dataclass(frozen=True, slots=True)
class Candidate:
    """One admissible allocation. ``headroom`` is a ratio, None if no filter in use has a rating; margins in dB.

    ``status`` and ``worst`` (check, subject) come from the checks made so far, all but those of the stages
    ``unchecked``; "" and None where none was made. ``place``: by the goal and the moves alone, 0 is the best.
    """

    allocation: Places
    filters_used: int
    headroom: float | None
    emission_margin: float | None
    moves: int
    status: str = ""
    worst: tuple[str, str] | None = None
    unchecked: tuple[str, ...] = STAGES
    place: int = 0


@dataclass(frozen=True, slots=True)
class Allocation:
    """What was found. ``candidates`` are ranked with their checks.

    ``gap``: by how much an allocation that was not found could be better at most, in ``gap_unit``: "headroom" (a
    ratio) or "filters"; None if nothing is known. 0 when ``proved``. ``unrated``: filters without a rating, which take
    nothing new. ``note`` codes: "no limit set" (``quiet`` has nothing to go by, the headroom decides instead),
    "stopped" (by the user), "time over", "too many" (no complete search was tried), "searching" (it goes on).
    """

    goal: str
    proved: bool
    candidates: tuple[Candidate, ...]
    gap: float | None
    gap_unit: str
    visited: int = 0  # allocations worked out exactly
    seconds: float = 0.0
    shortfall: Shortfall | None = None
    relaxations: tuple[Relaxation, ...] = ()
    unrated: tuple[str, ...] = ()
    note: tuple[str, ...] = ()

    @property
    def best(self) -> Candidate | None:
        """The best candidate by the goal alone."""
        return min(self.candidates, key=lambda c: c.place, default=None)


def so_far(goal: str, best: Candidate, bound: float | None) -> Allocation:
    """What is known while a search goes on, from what it tells: see ``progress`` of ``allocate``."""
    unit = "filters" if goal == "fewest" else "dB" if goal == "quiet" and bound is None else "headroom"
    gap: float | None = None
    if bound is not None and unit == "filters":
        gap = max(best.filters_used - bound, 0.0)
    elif bound is not None and unit == "headroom" and best.headroom is not None:
        gap = max(bound - best.headroom, 0.0)
    return Allocation(goal, False, (best,), gap, unit, note=("searching",))


def with_checks(found: Allocation, allocation: Places, result: Result) -> Allocation:
    """The proposal with one candidate judged by the checks that ``result``, that of the moved project, has so far."""
    done = tuple(judged(c, result) if c.allocation == allocation else c for c in found.candidates)
    return replace(found, candidates=ranked(done))


def judged(candidate: Candidate, result: Result) -> Candidate:
    """The candidate with its status, its worst check and its emission margin from a result of the moved project."""
    parts = (result, result.emissions, result.stability, result.inrush)
    return replace(
        candidate,
        emission_margin=_margin_of(result) if result.emissions is not None else candidate.emission_margin,
        status=result.status,
        worst=_worst(result),
        unchecked=tuple(stage for stage, part in zip(STAGES, parts, strict=True) if part is None),
    )


def ranked(candidates: tuple[Candidate, ...]) -> tuple[Candidate, ...]:
    """No failed check first, then by the goal, then by moves; as they stand while the same stages are not made of all.

    Else one whose failure is known would come behind others of which nobody knows yet.
    """
    if len({c.unchecked for c in candidates}) > 1:
        return candidates
    return tuple(sorted(candidates, key=lambda c: (c.status == "fail", c.place)))


def all_checks(seconds: float = math.inf, cancelled: Callable[[], bool] = lambda: False) -> Callable[[Project], Result]:
    """What makes the checks of one candidate after the other, all in so many seconds [s], or until ``cancelled``.

    Those of the operating points are always made; what is left out then is said to be unchecked. Switch-on and surge
    take most of the time, with many converters some ten seconds each.
    """
    end: list[float] = []

    def over() -> bool:
        return cancelled() or time.monotonic() >= end[0]

    def finish(project: Project) -> Result:
        end.append(time.monotonic() + seconds)
        result = evaluate_dc(project)
        try:
            for stage in (with_emissions, with_stability, lambda found: with_inrush(found, over)):
                if over():
                    break
                result = stage(result)
        except CancelledError:
            pass
        return result

    return finish


def moved(project: Project, allocation: Places) -> Project:
    """The project with its converters behind these filters."""
    home = dict(allocation)
    return replace(project, converters=tuple(replace(c, filter=home.get(c.id, c.filter)) for c in project.converters))


def as_json(found: Allocation) -> dict[str, object]:
    """The result as plain data for a JSON file."""
    return {
        "format": 1,
        "goal": found.goal,
        "proved": found.proved,
        "gap": found.gap,
        "gap_unit": found.gap_unit,
        "candidates": [
            {
                "allocation": dict(c.allocation),
                "filters_used": c.filters_used,
                "headroom": c.headroom,
                "emission_margin": c.emission_margin,
                "moves": c.moves,
                "status": c.status or None,
                "worst": None if c.worst is None else {"check": c.worst[0], "subject": c.worst[1]},
                "unchecked": list(c.unchecked),
            }
            for c in found.candidates
        ],
    }


def _margin_of(result: Result) -> float | None:
    rows = result.emissions.rows if result.emissions else ()
    return min((row.margin for row in rows if row.margin is not None), default=None)


def _worst(result: Result) -> tuple[str, str] | None:
    """The worst row: by status, and then by margin, 20 dB counting as much as a ratio of 1."""
    rank = {"fail": 0, "thin": 1, "ok": 2}

    def key(row: CheckRow) -> tuple[int, float]:
        if row.margin is None:
            return rank[row.status], -math.inf if row.status == "fail" else math.inf
        return rank[row.status], row.margin / (20.0 if row.margin_unit == "dB" else 1.0)

    rows = [row for row in result.checks if row.status in rank]
    if not rows:
        return None
    row = min(rows, key=key)
    return row.check, row.subject
