"""What a field can measure, and how a number of each kind is shown.

Users of it import from ``quantity``, which is the door to both directions.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from decimal import ROUND_HALF_EVEN, Context, Decimal
from functools import lru_cache

from budget.units import PREFIXES


@dataclass(frozen=True, slots=True)
class Kind:
    """What a field measures."""

    name: str
    unit: str
    """Own unit, as shown and as taken by a bare number."""
    label: str
    """Words for errors: "a voltage"."""
    example: str
    """What would work: "28 V"."""
    prefixes: str = ""
    """SI prefixes it is shown with; a kind without any takes no bare prefix either."""
    also: tuple[str, ...] = ()
    """Other units with the same number: a level in dBuA may be typed in dB."""


KINDS: dict[str, Kind] = {
    kind.name: kind
    for kind in (
        Kind("voltage", "V", "a voltage", "28 V", "fpnumkMGT"),
        Kind("current", "A", "a current", "4.5 A", "fpnumkMGT"),
        Kind("power", "W", "a power", "12 W", "fpnumkMGT"),
        Kind("resistance", "ohm", "a resistance", "8 mohm", "fpnumkMGT"),
        Kind("inductance", "H", "an inductance", "4.7 uH", "fpnumkMGT"),
        Kind("capacitance", "F", "a capacitance", "4.7 uF", "fpnumkMGT"),
        Kind("frequency", "Hz", "a frequency", "550 kHz", "fpnumkMGT"),
        Kind("time", "s", "a time", "20 ms", "fpnum"),
        Kind("temperature", "degC", "a temperature", "71 degC"),
        Kind("angle", "deg", "an angle", "90 deg"),
        Kind("level", "dB", "a level in dB", "6 dB"),
        Kind("level_line", "dB", "a level in dBuV or dBuA", "60", also=("dBuV", "dBuA")),
        Kind("level_uA", "dBuA", "a level in dBuA", "54 dBuA", also=("dB",)),
        Kind("level_uV", "dBuV", "a level in dBuV", "60 dBuV", also=("dB",)),
        Kind("ratio", "", "a ratio", "85 %"),
        Kind("i2t", "A^2 s", "an I^2 t value", "0.5 A^2 s"),
        Kind("energy", "J", "an energy", "1.5 J", "fpnumkMGT"),
        Kind("charge", "C", "a charge", "20 mC", "fpnumkMGT"),
    )
}


def show(si: float | None, kind: Kind, digits: int = 4) -> str:
    """``si`` as text that parses back: '4.7 uF', '85 %', '' for None. Raises ValueError for what is not finite."""
    number, unit = show_parts(si, kind, digits)
    return f"{number} {unit}".strip(" ")


@lru_cache(maxsize=16384)
def show_parts(si: float | None, kind: Kind, digits: int = 4) -> tuple[str, str]:
    """The number and the unit of ``show``, for cells that align them apart."""
    if si is None:
        return "", ""
    exact = _rounded(si, digits)
    if not kind.unit:
        return _digits(exact.scaleb(2)), "%"
    if not kind.prefixes or not exact:
        return _digits(exact), kind.unit
    step = exact.adjusted() // 3 * 3
    if step == 0:
        return _digits(exact), kind.unit
    for prefix in kind.prefixes:
        if PREFIXES[prefix] == step:
            return _digits(exact.scaleb(-step)), prefix + kind.unit
    return _digits(exact), kind.unit


def show_in(si: float | None, kind: Kind, prefix: str = "", digits: int = 4) -> str:
    """The number alone, for a column whose heading holds the unit: prefix and own unit, or % for a ratio."""
    if si is None:
        return ""
    exact = _rounded(si, digits)
    power = 2 if not kind.unit else -PREFIXES[prefix] if prefix else 0
    return _digits(exact.scaleb(power))


def _rounded(si: float, digits: int) -> Decimal:
    """``si`` to ``digits`` significant digits: rounded before a prefix is chosen, so that 999.96 Hz is 1 kHz."""
    if not math.isfinite(si):
        raise ValueError(f"{si} cannot be shown as a quantity")
    return Context(prec=max(1, digits), rounding=ROUND_HALF_EVEN).create_decimal(Decimal(si))


def _digits(number: Decimal) -> str:
    """Plain digits without trailing zeros; an exponent where they would be too many."""
    if not number:
        return "0"
    if -5 < number.adjusted() < 7:
        text = f"{number:f}"
        return text.rstrip("0").rstrip(".") if "." in text else text
    mantissa = f"{number.scaleb(-number.adjusted()):f}"
    return (mantissa.rstrip("0").rstrip(".") if "." in mantissa else mantissa) + f"e{number.adjusted()}"
