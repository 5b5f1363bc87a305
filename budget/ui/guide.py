"""The next step, in one line: what a new user should look at and which key leads there."""

from __future__ import annotations

from typing import TYPE_CHECKING

from budget.project.document import get
from budget.report import words

if TYPE_CHECKING:
    from budget.engine.checks import CheckRow
    from budget.session import Session

# By the first words of a check: what helps, and the key to it.
_STEPS: dict[str, str] = {
    "allocation": "> on its row puts it behind a filter",
    "operating point": "l shows the loads; f on the bus row, its resistance",
    "bus current": "l shows the loads of each case",
    "filter current": "> on a converter moves it on, G finds the best",
    "filter voltage": "f on its row shows its limits",
    "converter load": "l shows the loads of each case",
    "input low": "f on its row shows its limits",
    "input high": "f on its row shows its limits",
    "inrush": "J shows it over time, and there H what helps",
    "bus inrush": "J shows it over time, and there H what helps",
    "breaker": "J shows it over time, and there H what helps",
    "overshoot": "J shows it over time, and there H what helps",
    "start": "J shows it over time, and there H what helps",
    "emission": "a shows every line, y which clocks meet",
    "stability": "Y shows why, and there H what helps",
    "impedance": "Y shows why, and there H what helps",
}


def beginning(session: Session) -> str:
    """What a project needs first: voltages of the bus, a filter, a converter; "" where it has them."""
    document = session.document
    missing = [key for key in ("low", "nominal", "high") if get(document, ("bus", key)) is None]
    if missing:
        return f"first the bus: f on its row, then type {', '.join(missing)}, such as 28 V"
    if not get(document, ("filter",)):
        return "next a filter: N adds one"
    if not get(document, ("converter",)):
        return "next a converter: n on the filter's row adds one behind it"
    return ""


def next_step(session: Session) -> tuple[str, str]:
    """A sentence for the message line and its tone: what is missing or wrong first, and the key that goes on."""
    first = beginning(session)
    if first:
        return first, ""
    if session.outcome is not None and session.outcome.built.errors:
        return "cells marked ! cannot be read: b lists them, Enter there goes to each", "thin"
    result = session.result
    if result is None:
        return "", ""
    ranked = words.by_severity(result.checks)
    worst = next((row for row in ranked if row.status != "no data"), None)
    if worst is None or worst.status == "ok":
        return "every check is within its limit; K holds this as reference before you try a change", "ok"
    return f"{_found(worst)}. {_step(worst)}", worst.status


def _found(row: CheckRow) -> str:
    left = words.margin(row)
    state = "FAIL" if row.status == "fail" else row.status
    return f"{state}: {words.clean(row.subject)} {words.short(row.check)}" + (f" {left}" if left else "")


def _step(row: CheckRow) -> str:
    name = next((key for key in _STEPS if row.check.startswith(key)), "")
    return _STEPS.get(name, "k lists all checks")
