"""A proposal of which converter goes behind which filter, in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from budget.report import words

if TYPE_CHECKING:
    from budget.engine.candidates import Allocation, Candidate
    from budget.engine.model import Project
    from budget.engine.relax import Relaxation, Shortfall

_WHY = {"stopped": "stopped", "time over": "the time was over", "too many": "too many to try all"}


def headline(found: Allocation) -> str:
    """What was sought and what is proved about it."""
    if not found.candidates:
        said = "no allocation is admissible, proved" if found.proved else "no admissible allocation was found"
        return f"goal {found.goal}: {said}"
    if found.proved:
        text = f"goal {found.goal}: proved, no admissible allocation is better"
    elif "searching" in found.note:
        text = f"goal {found.goal}: searching, this is the best so far; {gap(found)}"
    else:
        why = [_WHY[code] for code in found.note if code in _WHY]
        told = f" ({', '.join(why)})" if why else ""
        text = f"goal {found.goal}: the best found, not proved{told}; {gap(found)}"
    return text + ("; no limit set is chosen, so the headroom decided" if "no limit set" in found.note else "")


def gap(found: Allocation) -> str:
    """How much better an allocation that was not found could be; a number is never rounded down."""
    if found.gap is None:
        return "how much better another could be is not known"
    if found.gap_unit == "filters":
        needed = (found.best.filters_used if found.best else 0) - math.ceil(found.gap)
        return f"at least {needed} filter{' is' if needed == 1 else 's are'} needed"
    return f"none can be better by more than {_up(found.gap * 100)} % headroom"


def _up(value: float) -> str:
    """Two digits of a number, rounded up."""
    if value <= 0.0:
        return "0"
    step = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{math.ceil(value / step * (1.0 - 1e-12)) * step:.2g}"


def facts(candidate: Candidate) -> str:
    """One candidate in a line."""
    parts = [f"{candidate.filters_used} filter{'' if candidate.filters_used == 1 else 's'}"]
    if candidate.headroom is not None:
        parts.append(f"headroom {candidate.headroom * 100:.1f} %")
    if candidate.emission_margin is not None:
        parts.append(f"emission margin {candidate.emission_margin:.1f} dB")
    parts.append(f"{candidate.moves} move{'' if candidate.moves == 1 else 's'}")
    return f"{', '.join(parts)}: {verdict(candidate)}"


def verdict(candidate: Candidate) -> str:
    """What the checks of a candidate say, and which of them were not made."""
    if not candidate.status:
        return "not checked"
    worst = f", {candidate.worst[0]} of {candidate.worst[1]}" if candidate.worst else ""
    *some, last = candidate.unchecked or ("",)
    left = f"; {', '.join(some)}{' and ' if some else ''}{last} not checked" if last else ""
    state = candidate.status.upper() if candidate.status == "fail" else candidate.status
    return words.clean(f"{state}{worst}{left}")


def moves(candidate: Candidate, project: Project) -> list[str]:
    """What moves, as 'CV11: FL2 -> FL3'."""
    now = {c.id: c.filter for c in project.converters}
    return [
        words.clean(f"{unit}: {now.get(unit) or 'none'} -> {home}")
        for unit, home in candidate.allocation
        if now.get(unit, "") != home
    ]


def why_none(found: Allocation) -> list[str]:
    """Why nothing is admissible, and the smallest change of each kind that would make something so."""
    lines = [words.clean(_shortfall(found.shortfall, found.proved))] if found.shortfall is not None else []
    return lines + [words.clean(_relaxation(r)) for r in found.relaxations]


def _shortfall(short: Shortfall, proved: bool) -> str:
    if short.code == "filter current":
        value, limit = words.show(short.value, "A"), words.show(short.limit, "A")
        case = f" (case {short.case})" if short.case else ""
        least = "at best" if proved else "in the best allocation found"
        over = ""
        if short.value is not None and short.limit is not None:
            over = f", {words.show(short.value - short.limit, 'A')} too much"
        return f"filter {short.subject} would carry {value} {least}, where {limit} are wanted{over}{case}"
    if short.code == "operating point":
        share = f"; it carries at most {_up(short.value * 100)} % of its powers" if short.value is not None else ""
        return f"the bus cannot carry case {short.case}, however the converters are placed{share}"
    texts = {
        "contradiction": "these cannot be together: " + ", ".join(wish(c) for c in short.constraints),
        "constraints": "what is asked for leaves no allocation at all",
        "no filters": "there is no filter that may carry anything",
        "not found": "none was found before the search ended",
    }
    return texts.get(short.code, short.code)


def _relaxation(change: Relaxation) -> str:
    least = "at least " if change.smallest else ""
    if change.code == "rating":
        now, needed = words.show(change.present, "A"), words.show(change.needed, "A")
        return f"it would do with a rated current of {least}{needed} for filter {change.subject}, now {now}"
    if change.code == "load":
        share = (change.needed or 0.0) * 100
        return f"it would do with converter {change.subject} at {share:.0f} % of its present loads"
    return f"it would do without: {wish(change.constraint)}"


def wish(name: tuple[str, ...]) -> str:
    """A constraint, by its name tuple, in words."""
    code, *ids = name
    words_of = {
        "keep": "{} stays",
        "banned": "{} not behind {}",
        "no rating": "{} has no rating",
        "rating zero": "{} has no rating left",
        "not allocated": "{} is behind no filter",
        "converters": "there are {} converters",
    }
    if code in ("apart", "together"):
        return f"{' and '.join(ids)} {code}"
    if code == "most":
        where, number = ids
        return f"at most {number} converter{'' if number == '1' else 's'} behind {where or 'each filter'}"
    return words_of[code].format(*ids) if code in words_of else " ".join(name)


def as_text(found: Allocation, project: Project) -> str:
    """The whole proposal for a terminal or a pipe."""
    lines = [headline(found), *([""] if found.candidates else [])]
    for k, candidate in enumerate(found.candidates):
        lines.append(f"{k + 1}. {facts(candidate)}")
        lines += [f"   {move}" for move in moves(candidate, project)] or ["   nothing moves"]
    if found.unrated:
        lines.append(words.clean(f"filters without a rating take nothing new: {', '.join(found.unrated)}"))
    lines += ["", *words.CAUTION]
    return "\n".join(lines) + "\n"
