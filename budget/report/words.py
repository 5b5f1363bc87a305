"""Results in words: the one place where codes, margins and missing fields become sentences."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import TYPE_CHECKING

from budget import quantity

if TYPE_CHECKING:  # the sheet words results before numpy is loaded
    from budget.engine.checks import CheckRow

CAUTION = (
    "These numbers are estimates from the values entered; they replace neither measurement nor an accredited test.",
    "Capacitors hold their charge after switch-off, 270 V DC kills, filters and converters get hot, and fuses arc:",
    "work on the hardware only as local codes and licensed practice require.",
)

RANK = {"fail": 0, "no data": 2, "thin": 1, "ok": 3}
REMARKS = {
    "not allocated": "it has no filter",
    "no operating point": "no operating point",
    "unsolved corners left out": "corners without an operating point left out",
    "never runs": "off in every case",
    "beyond data": "efficiency beyond its last point",
    "no room for the edges": "the duty leaves no room for the edges",
    "without a noise description": "without a noise description",
    "no noise source": "no converter behind a filter has a noise description",
    "no line in the band": "no line in the band",
    "table held beyond its ends": "attenuation held beyond the ends of the table",
    "limit from memory": "limit from memory; enter the points from your own copy",
    "no receiver bandwidth": "the limit line has no receiver bandwidth, so lines are taken one by one",
    "too many lines": "more lines in the band than can be added up",
    "infinite current": "a step of the source meets a capacitor with no resistance between",
    "filter is a table": "the filter is a table, which has no impedance",
    "known by a table only": "the filter is a table, which has no impedance",
    "table filters left out": "filters given as tables left out",
    "not finished": "the calculation was given up before the window ended",
    "never turned on": "its terminals never reach turn_on",
    "still counting": "its start delay is not over when the window ends",
    "still soft starting": "its soft start is not over when the window ends",
    "tripped": "its terminals fall below turn_off, and it does not come back",
    "near turn_on": "comes within 1 % of turn_on without clearly crossing it: a coin toss",
    "near turn_off": "comes within 1 % of turn_off without clearly crossing it: a coin toss",
    "no input capacitor": "its load is fed by inductors alone",
    "unstable for any load": "unstable for any load",
    "no converter runs behind it": "no converter runs behind it",
    "undamped resonance": "an undamped resonance",
    "no source impedance": "no source impedance",
}
LEVELS = ("dBuV", "dBuA")
BASIS = {"read": "read in the standard", "memory": "from memory", "own": "entered here"}
_KINDS = {"A": "current", "V": "voltage", "W": "power", "A^2 s": "i2t"}


def clean(text: str) -> str:
    """Text of the user's as one line without control characters: what a terminal would obey is shown as ``?``."""
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() else " " if c.isspace() else "?" for c in text)


_FORMULA = ("=", "+", "-", "@", "\uff1d", "\uff0b", "\uff0d", "\uff20")


def cells(row: Iterable[object]) -> list[object]:
    """A row for a CSV file: every text on one line and clean, numbers as they are.

    A text that a spreadsheet would take for a formula, such as an id of "=1+1" or "-12V", gets a quote before it.
    """
    texts = (clean(x) if isinstance(x, str) else x for x in row)
    return [f"'{x}" if isinstance(x, str) and x.startswith(_FORMULA) else x for x in texts]


def show(value: float | None, unit: str) -> str:
    """A value of a check row as text, in its unit; empty where there is none."""
    if unit == "dB" and value is not None:
        return f"{value:.1f} dB" if math.isfinite(value) else ""
    if unit in LEVELS and value is not None:
        return f"{value:.1f} {unit}" if math.isfinite(value) else "too large"
    if unit not in _KINDS or value is None:
        return ""
    return quantity.show(value, quantity.KINDS[_KINDS[unit]]) if math.isfinite(value) else "too large"


def seconds(value: float | None) -> str:
    """A time as text; empty where there is none."""
    return "" if value is None else quantity.show(value, quantity.KINDS["time"])


def farads(value: float | None) -> str:
    """A capacitance as text; empty where there is none."""
    return "" if value is None else quantity.show(value, quantity.KINDS["capacitance"])


def stability_margin(margin: float) -> str:
    """How many times larger all converters' conductances may get, in dB, before the bus oscillates."""
    if math.isinf(margin):
        return "stable whatever the loads" if margin > 0 else "unstable for any load"
    return f"{margin:.1f} dB"


def frequency(value: float | None) -> str:
    """A frequency as text; empty where there is none."""
    return "" if value is None else quantity.show(value, quantity.KINDS["frequency"])


def percent(ratio: float) -> str:
    """A margin as a percentage: two significant digits are enough near the limit, whole numbers elsewhere."""
    number = abs(ratio) * 100
    if number >= 1e6:
        return "over a million %"
    if 0 < number < 0.01:
        return "under 0.01 %"
    return f"{number:.2g} %" if number < 9.95 else f"{number:.0f} %"


def share(ratio: float) -> str:
    """How much of a limit is used, in whole percent."""
    return f"{ratio * 100:.0f} %" if ratio < 1e4 else "over a million %"


def duration(seconds: float) -> str:
    """A time as people say it: '20 ms', '6 min', '2.5 h'."""
    if seconds < 60:
        return quantity.show(seconds, quantity.KINDS["time"])
    return amount(seconds / 60, "min") if seconds < 3600 else amount(seconds / 3600, "h")


def amount(value: float, unit: str) -> str:
    """A number in a unit that has no kind of its own, to four digits and without an exponent while that is short."""
    if not math.isfinite(value):
        return "too large"
    text = quantity.show_in(value, quantity.KINDS["time"])
    return f"{text} {unit}"


def margin(row: CheckRow) -> str:
    """The margin of a row: '3 % over', '12 % left', '1 % below'; empty where it has none."""
    if row.margin is None:
        return "over" if row.status == "fail" and row.limit is not None else ""
    if row.margin_unit == "dB":
        return f"{abs(row.margin):.1f} dB {'left' if row.margin >= 0 else 'over'}"
    if row.margin >= 0:
        return f"{percent(row.margin)} left"
    return f"{percent(row.margin)} {'below' if row.check == 'input low' else 'over'}"


def corner(row: CheckRow) -> str:
    """The corner of a row: 'climb, low line'; empty for a row that has none."""
    words = [row.case] if row.case else []
    if row.line:
        words.append(row.line if row.line in ("on-low", "on-high", "surge") else f"{row.line} line")
    return ", ".join(words)


def note(row: CheckRow) -> str:
    """What the row has to add: missing fields and remarks, as a sentence without its stop."""
    words = []
    if row.missing:
        words.append("not entered: " + ", ".join(name.replace(".", " ") for name in row.missing))
    for remark in row.remarks:
        code, colon, ids = remark.partition(": ")
        words.append(REMARKS.get(code, code) + colon + clean(ids))
    return "; ".join(words)


def verdict(row: CheckRow) -> str:
    """A row in a few words for a narrow column: 'FAIL current 3 % over'."""
    name = short(row.check)
    if row.status == "no data":
        return f"no data {name}"
    status = "FAIL" if row.status == "fail" else row.status
    return " ".join(w for w in (status, name, margin(row)) if w)


_SHORT = {
    "filter current": "current",
    "bus current": "current",
    "filter voltage": "voltage",
    "converter load": "load",
    "input low": "low V",
    "input high": "high V",
}


def short(check: str) -> str:
    """A check's name for a narrow column."""
    return "emission" if check.startswith("emission ") else _SHORT.get(check, check)


def brief(row: CheckRow) -> str:
    """A row in 16 characters: 'FAIL current', 'ok 24% left'."""
    if row.status == "ok" and row.margin is not None and row.margin_unit == "ratio":
        return f"ok {row.margin * 100:.0f}% left"
    name = short(row.check)
    if row.check == "operating point":
        name = "no solution" if row.status == "fail" else "solved"
    return f"{'FAIL' if row.status == 'fail' else row.status} {name}"


def sentence(row: CheckRow) -> str:
    """A row in full: 'FL2 filter current 8.2 A, limit 8 A, wanted 6.4 A: 3 % over (climb, low line)'."""
    words = f"{row.subject} {row.check}"
    if row.value is not None:
        words += f" {show(row.value, row.unit)}"
    if row.limit is not None:
        words += f", limit {show(row.limit, row.unit)}"
    if row.wanted is not None and row.wanted != row.limit:
        words += f", wanted {show(row.wanted, row.unit)}"
    state = row.status if row.status != "fail" else "FAIL"
    left = margin(row)
    words += f": {state}" + (f", {left}" if left else "")
    where = corner(row)
    more = note(row)
    return words + (f" ({where})" if where else "") + (f"; {more}" if more else "")


def by_severity(rows: Iterable[CheckRow]) -> list[CheckRow]:
    """Rows from worst to best: fail, thin, no data, ok; within one by their margin.

    Those of equal margin stay in their order, whatever rounding leaves between them on one machine or another.
    """

    def key(row: CheckRow) -> tuple[int, float]:
        lacking = -9.9 if row.status == "fail" else 9.9
        return RANK[row.status], round(row.margin, 7) if row.margin is not None else lacking

    return sorted(rows, key=key)


def counts(rows: Iterable[CheckRow]) -> dict[str, int]:
    """How many rows there are of each status."""
    found = {"fail": 0, "thin": 0, "no data": 0, "ok": 0}
    for row in rows:
        found[row.status] += 1
    return found


def summary(rows: Iterable[CheckRow]) -> str:
    """The counts in words: '1 fail, 2 thin, 30 ok'; what is zero is left out."""
    return ", ".join(f"{n} {status}" for status, n in counts(rows).items() if n) or "nothing to check"


def engine_warning(code: tuple[str, ...]) -> str:
    """A warning of the engine as a sentence."""
    if code[0] == "beyond data":
        return f"converter {code[1]}, case {code[2]}: the load lies beyond the last efficiency point; that was held."
    if code[0] in ("near turn_on", "near turn_off"):
        return f"converter {code[1]}, case {code[2]}, {code[3]}: {REMARKS[code[0]]}."
    if code[0] == "not finished":
        return f"case {code[2]}, {code[3]}: the calculation was given up before its window ended; it has no numbers."
    return " ".join(code)
