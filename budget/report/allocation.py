"""A proposal of which converter goes behind which filter, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

from budget.report import words

if TYPE_CHECKING:
    from budget.engine.allocate import Allocation, Candidate
    from budget.engine.model import Project
    from budget.engine.relax import Relaxation


def headline(found: Allocation) -> str:
    """What was sought and what is proved about it."""
    if not found.candidates:
        return f"goal {found.goal}: no admissible allocation"
    if found.proved:
        return f"goal {found.goal}: proved, no admissible allocation is better"
    gap = ""
    if found.gap is not None:
        gap = f"; none can be better by more than {found.gap:.3g} {found.gap_unit}"
    note = "; no limit set is chosen, so the headroom decided" if "no limit set" in found.note else ""
    return f"goal {found.goal}: the best found, not proved{gap}{note}"


def facts(candidate: Candidate) -> str:
    """One candidate in a line."""
    parts = [f"{candidate.filters_used} filters"]
    if candidate.headroom is not None:
        parts.append(f"headroom {candidate.headroom * 100:.1f} %")
    if candidate.emission_margin is not None:
        parts.append(f"emission margin {candidate.emission_margin:.1f} dB")
    parts.append(f"{candidate.moves} move{'' if candidate.moves == 1 else 's'}")
    worst = f", {candidate.worst[0]} of {candidate.worst[1]}" if candidate.worst else ""
    state = candidate.status.upper() if candidate.status == "fail" else candidate.status or "not checked"
    return ", ".join(parts) + f": {state}{words.clean(worst)}"


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
    lines = []
    short = found.shortfall
    if short is not None:
        value, limit = words.show(short.value, "A"), words.show(short.limit, "A")
        texts = {
            "filter current": f"filter {short.subject} would carry {value} at best, {limit} are wanted"
            + (f" (case {short.case})" if short.case else ""),
            "operating point": f"the bus cannot carry case {short.case}, however the converters are placed",
            "contradiction": "these cannot be together: " + ", ".join(_wish(c) for c in short.constraints),
            "constraints": "the constraints leave no allocation at all",
            "no filters": "there is no filter that may carry anything",
            "not found": "none was found before the time was over",
        }
        lines.append(words.clean(texts.get(short.code, short.code)))
    lines += [words.clean(_relaxation(r)) for r in found.relaxations]
    return lines


def _relaxation(change: Relaxation) -> str:
    least = "at least " if change.smallest else ""
    if change.code == "rating":
        now, needed = words.show(change.present, "A"), words.show(change.needed, "A")
        return f"it would do with a rated current of {least}{needed} for filter {change.subject}, now {now}"
    if change.code == "load":
        share = (change.needed or 0.0) * 100
        return f"it would do with converter {change.subject} at {share:.0f} % of its present loads"
    return f"it would do without: {_wish(change.constraint)}"


def _wish(name: tuple[str, ...]) -> str:
    """A constraint, by its name tuple, in words."""
    code, *ids = name
    words_of = {
        "keep": "{} stays",
        "banned": "{} not behind {}",
        "apart": "{} and {} apart",
        "together": "{} and {} together",
        "no rating": "{} has no rating",
        "rating zero": "{} has no rating left",
        "converters": "{} converters",
    }
    if code == "most":
        return f"the most converters behind {ids[0]}" if ids and ids[0] else "the most converters behind each filter"
    return words_of[code].format(*ids) if code in words_of else " ".join(name)


def as_text(found: Allocation, project: Project) -> str:
    """The whole proposal for a terminal or a pipe."""
    lines = [headline(found), ""]
    for k, candidate in enumerate(found.candidates):
        lines.append(f"{k + 1}. {facts(candidate)}")
        lines += [f"   {move}" for move in moves(candidate, project)] or ["   nothing moves"]
    if found.unrated:
        lines.append(words.clean(f"filters without a rating take nothing new: {', '.join(found.unrated)}"))
    lines += ["", *words.CAUTION]
    return "\n".join(lines) + "\n"
