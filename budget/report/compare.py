"""A comparison of two projects for people and programs: text, markdown, JSON."""

from __future__ import annotations

from typing import Any

from budget.report import tables, words
from budget.report.text import columns, escape
from budget.study.compare import BETTER, GONE, NEW, OTHER, WORSE, Change, Comparison

FORMAT = 1
_TURNED = "Checks that got worse"
_TITLES = {
    WORSE: "Less margin, the status as before",
    NEW: "New checks",
    OTHER: "Other values",
    BETTER: "Better",
    GONE: "Checks that are gone",
}
_INPUT_HEAD = ("cell", "", "before", "after")
_CHECK_HEAD = ("check", "subject", "status", "was", "now", "margin was", "margin now", "corner")
_ENERGY_HEAD = ("case", "was", "now")

_Section = tuple[str, tuple[str, ...], list[tuple[str, ...]]]


def as_text(found: Comparison) -> str:
    """The comparison as text."""
    lines = [words.clean(f"{found.before} -> {found.after}: {verdict(found)}"), ""]
    for title, head, rows in _sections(found):
        lines += [title, *columns(head, rows, False), ""]
    lines += words.CAUTION
    return "\n".join(lines) + "\n"


def as_markdown(found: Comparison) -> str:
    """The comparison as markdown."""
    lines = [f"# {escape(found.before)} -> {escape(found.after)}", "", f"{escape(verdict(found))}", ""]
    for title, head, rows in _sections(found):
        lines += [f"## {title}", "", "| " + " | ".join(head) + " |", "|" + "---|" * len(head)]
        lines += ["| " + " | ".join(escape(cell) for cell in row) + " |" for row in rows]
        lines.append("")
    lines += ["> " + line for line in words.CAUTION]
    return "\n".join(lines) + "\n"


def as_json(found: Comparison) -> dict[str, Any]:
    """The comparison as plain data; check rows have the shape of ``tables.check_row``."""
    return {
        "format": FORMAT,
        "before": {"name": found.before, "status": found.status[0]},
        "after": {"name": found.after, "status": found.status[1]},
        "worse": found.worse,
        "inputs": [{"path": i.path, "kind": i.kind, "before": i.before, "after": i.after} for i in found.inputs],
        "checks": [
            {
                "verdict": c.verdict,
                "turned_worse": c.turned_worse,
                "check": c.row.check,
                "subject": c.row.subject,
                "before": tables.check_row(c.before) if c.before else None,
                "after": tables.check_row(c.after) if c.after else None,
            }
            for c in found.checks
        ],
        "energy": [{"case": e.case, "before": e.before, "after": e.after} for e in found.energy],
    }


def verdict(found: Comparison) -> str:
    """The comparison in one sentence without its stop."""
    worse = sum(change.turned_worse for change in found.checks)
    better = sum(change.verdict == BETTER for change in found.checks)
    less = sum(change.verdict == WORSE and not change.turned_worse for change in found.checks)
    told = [f"{_count(worse, 'check')} got worse"] if worse else []
    told += [f"{_count(less, 'check')} with less margin"] if less else []
    told += [f"{better} better"] if better else []
    inputs = _count(len(found.inputs), "input")
    differ = "differs" if len(found.inputs) == 1 else "differ"
    return f"{inputs} {differ}; " + (
        ", ".join(told) or ("no check changed" if not found.checks else "no check is worse")
    )


def _count(number: int, what: str) -> str:
    return f"{number or 'no'} {what}" + ("" if number == 1 else "s")


def _sections(found: Comparison) -> list[_Section]:
    inputs: list[tuple[str, ...]] = [
        tuple(words.clean(t) for t in (i.path, i.kind, i.before, i.after)) for i in found.inputs
    ]
    sections: list[_Section] = [("Inputs", _INPUT_HEAD, inputs)]
    turned = [change for change in found.checks if change.turned_worse]
    sections.append((_TURNED, _CHECK_HEAD, [_check(change) for change in turned]))
    for kind, title in _TITLES.items():
        rows = [_check(change) for change in found.checks if change.verdict == kind and not change.turned_worse]
        sections.append((title, _CHECK_HEAD, rows))
    energy: list[tuple[str, ...]] = [(words.clean(e.case), _energy(e.before), _energy(e.after)) for e in found.energy]
    sections.append(("Energy at the nominal line", _ENERGY_HEAD, energy))
    return [section for section in sections if section[2]]


def _energy(value: float | None) -> str:
    return "none" if value is None else words.amount(value, "Wh")


def _check(change: Change) -> tuple[str, ...]:
    one, two, row = change.before, change.after, change.row
    status = row.status if not one or not two or one.status == two.status else f"{one.status} -> {two.status}"
    return (
        words.clean(row.check),
        words.clean(row.subject),
        status,
        words.show(one.value, one.unit) if one else "",
        words.show(two.value, two.unit) if two else "",
        words.margin(one) if one else "",
        words.margin(two) if two else "",
        words.clean(words.corner(row)),
    )
