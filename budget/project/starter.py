"""The text of a new project, and the typical values that a new row starts with.

Values here are placeholders of a plausible size, meant to be typed over; the comments come from the schema.
"""

from __future__ import annotations

from typing import Any

from budget.project import schema, toml_text
from budget.project.read import show_limit
from budget.project.schema import Field, Table

OUTPUT: dict[str, Any] = {"name": "main", "voltage": "12 V", "current": "2 A"}
ELEMENT: dict[str, Any] = {"series": {"L": "4.7 uH", "R": "8 mohm"}}
NESTED: dict[str, dict[str, Any]] = {
    "lead": {"R": "5 mohm", "L": "300 nH"},
    "chop": {"duty": "40 %", "rise": "30 ns", "fall": "30 ns"},
    "ripple": {"pp": "200 mA"},
    "cm": {"capacitance": "60 pF", "swing": "60 V", "rise": "30 ns", "fall": "30 ns"},
}
LISTS: dict[str, list[Any]] = {
    "output": [OUTPUT],
    "dm": [ELEMENT, {"shunt": {"C": "4.7 uF", "R": "6 mohm"}}, {"shunt": {"C": "22 uF", "R": "600 mohm"}}],
    "cm": [{"series": {"L": "1 mH"}}, {"shunt": {"C": "10 nF"}}],
    "input": [{"shunt": {"C": "10 uF", "R": "5 mohm"}}],
    "attenuation": [["100 kHz", 40, 30], ["10 MHz", 60, 50]],
    "spectrum": [["300 kHz", 90]],
    "points": [["10 kHz", 94], ["500 kHz", 60], ["10 MHz", 60]],
    "bandwidth": [["10 kHz", "150 kHz", "1 kHz"], ["150 kHz", "30 MHz", "10 kHz"]],
    "efficiency": [["20 %", "80 %"], ["100 %", "88 %"]],
}
ROWS: dict[str, dict[str, Any]] = {
    "filter": {"id": "FL1", "name": "", "rated_current": "8 A", "dm": LISTS["dm"], "cm": LISTS["cm"]},
    "converter": {
        "id": "CV1",
        "name": "",
        "filter": "",
        "rated_power": "50 W",
        "output": [OUTPUT],
        "efficiency": "88 %",
        "min_input": "16 V",
        "max_input": "40 V",
        "max_surge": "60 V",
    },
    "case": {"id": "case1", "name": ""},
    "limit": {"name": "own", "unit": "dBuV", "setup": "lisn-50uH", "points": LISTS["points"]},
}
_VALUES: dict[str, dict[str, Any]] = {
    "project": {"title": "A new project"},
    "rules": {"filter_load": "80 %"},
    "bus": {"low": "22 V", "nominal": "28 V", "high": "29 V", "rating": "15 A", "resistance": "20 mohm"},
    "filter": ROWS["filter"],
    "converter": {**ROWS["converter"], "filter": "FL1"},
    "case": {"id": "full", "name": "everything on", "load": {"CV1": "100 %"}},
}


def hint(field: Field) -> str:
    """The comment that stands before a field that is not entered."""
    words = [field.help]
    limits = schema.limits_text(field, show_limit) if field.kind not in schema.PLAIN | schema.NESTED else ""
    if field.choices:
        words.append("One of " + ", ".join(field.choices) + ".")
    if limits:
        words.append(limits[0].upper() + limits[1:] + ".")
    if field.otherwise:
        words.append(f"Default: {field.otherwise}.")
    elif isinstance(field.default, float):
        words.append(f"Default: {show_limit(field.default, field.kind)}.")
    elif isinstance(field.default, str) and field.default:
        words.append(f"Default: {field.default}.")
    return " ".join(words)


def starter() -> str:
    """A smallest project that calculates, with every field that may be added named in a comment."""
    lines = [
        "# One DC bus, its filters and the converters behind them.",
        '# A quantity is a text with a unit ("2.2 uH", "4.5 A", "85 %") or a bare number in the unit of its field.',
        "",
        f"format = {schema.FORMAT}",
    ]
    for key in ("project", "rules", "bus", "filter", "converter", "case"):
        table = schema.TABLES_BY_KEY[key]
        lines += ["", f"# {table.help}"]
        data = {key: [_VALUES[key]] if table.many else _VALUES[key]}
        lines += toml_text.dump(data).strip("\n").splitlines()
        lines += _more(table, _VALUES[key])
    return "\n".join(lines) + "\n"


def _more(table: Table, given: dict[str, Any]) -> list[str]:
    return [f"# {f.key}: {hint(f)}" for f in table.fields if f.key not in given]
