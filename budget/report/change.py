"""What an edit changed, in one line: the checks whose state changed first, then the currents that moved most."""

from __future__ import annotations

from typing import TYPE_CHECKING

from budget.report import words

if TYPE_CHECKING:
    from budget.engine.checks import CheckRow
    from budget.engine.evaluate import Result

_LEVEL = {"fail": 3, "thin": 2, "no data": 1, "ok": 0}
_NOW = {
    "fail": "now over its limit",
    "thin": "now thin",
    "ok": "now within its limit",
    "no data": "now without data",
}
_FAILS = {
    "filter current": "now over its allowance",
    "bus current": "now over the rating",
    "input low": "now too low",
    "input high": "now too high",
    "allocation": "now not allocated",
    "operating point": "the bus cannot carry it now",
}
_EACH = ("allocation", "filter current")  # every converter has a row of the first, every filter one of the second
_OKAYS = {"allocation": "now allocated", "operating point": "the bus carries it now"}


def describe(old: Result | None, new: Result | None, limit: int = 3) -> str:
    """What differs between two results, at most ``limit`` findings; empty where there was nothing to compare."""
    if new is None:
        return "the bus cannot be read, so nothing is calculated" if old is not None else ""
    if old is None:
        return ""
    before = {(row.check, row.subject): row for row in old.checks}
    after = {(row.check, row.subject): row for row in new.checks}
    changed = [(before[key], row) for key, row in after.items() if key in before and before[key].status != row.status]
    changed.sort(key=lambda pair: -max(_LEVEL[pair[0].status], _LEVEL[pair[1].status]))
    told = [_state(one, two) for one, two in changed]
    same = {(two.check, two.subject) for _, two in changed}
    moved = [
        (abs(two.value - one.value) / max(abs(one.value), 1e-12), one, two)
        for key, two in after.items()
        if key not in same and (one := before.get(key)) and one.value is not None and two.value is not None
    ]
    moved = [entry for entry in moved if _values(entry[1], entry[2])]
    order = {"filter current": 0, "bus current": 1}
    moved.sort(key=lambda entry: (order.get(entry[2].check, 2), -entry[0]))
    told += [_values(one, two) for _, one, two in moved]
    told += [f"{subject} is new" for check, subject in after if check in _EACH and (check, subject) not in before]
    told += [f"{subject} is gone" for check, subject in before if check in _EACH and (check, subject) not in after]
    return "; ".join(told[:limit]) if told else "no result changed"


def _name(row: CheckRow) -> str:
    name = words.short(row.check)
    return name if name.startswith(f"{row.subject} ") else f"{row.subject} {name}"


def _values(one: CheckRow, two: CheckRow) -> str:
    """'FL2 current 7.4 A -> 8.1 A', else what became of its limit; empty where the numbers shown are the same."""
    a, b = words.show(one.value, one.unit), words.show(two.value, two.unit)
    if a and b and a != b:
        return f"{_name(two)} {a} -> {b}"
    for what, old, new in (("limit", one.limit, two.limit), ("wanted", one.wanted, two.wanted)):
        before, after = words.show(old, one.unit), words.show(new, two.unit)
        if before != after:
            return f"{_name(two)} {what} {before or 'none'} -> {after or 'none'}"
    return ""


def _state(one: CheckRow, two: CheckRow) -> str:
    text = _values(one, two) or _name(two)
    if two.status == "fail":
        return f"{text}, {_FAILS.get(two.check, _NOW['fail'])}"
    if two.status == "ok" and one.status == "thin":
        return f"{text}, now with the wanted margin"
    if two.status == "ok":
        return f"{text}, {_OKAYS.get(two.check, _NOW['ok'])}"
    if one.status == "fail" and two.status == "thin":
        return f"{text}, now within its limit, but thin"
    return f"{text}, {_NOW[two.status]}"
