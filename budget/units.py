"""What a unit name is worth: its factor, its offset and its dimension.

pint is the authority, fed with the few units this program needs, and it sees nothing but a short unit name that has
passed a whitelist: never a number, never raw text. Importing pint takes a good part of a second, so its answers for
every single name are kept in ``unit_table.json`` and pint itself is only asked about compounds such as ``mA^2*s``.
``python -m budget.units`` writes that file anew.
"""

from __future__ import annotations

import json
import math
import re
import threading
from dataclasses import dataclass
from functools import cache, lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pint

PREFIXES = {"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "k": 3, "M": 6, "G": 9, "T": 12}

# The base units are volt, ampere and second, not metre and kilogram: everything here is electrical, so what is left of
# a wrong product can be shown as "V^2 A". The levels are dimensions of their own: a dBuA is no dBuV, and no number.
DEFINITIONS = (
    "V = [voltage]",
    "A = [current]",
    "s = [time]",
    "K = [temperature]",
    "deg = [angle]",
    "dB = [level]",
    "dBuA = [level_uA]",
    "dBuV = [level_uV]",
    "percent = 0.01",
    "W = V * A",
    "ohm = V / A = _ = Ohm",
    "H = V * s / A",
    "F = A * s / V",
    "Hz = 1 / s",
    "C = A * s",
    "J = W * s",
    "min = 60 * s",
    "h = 3600 * s",
    "Wh = 3600 * J",
    "Ah = 3600 * C",
    "degC = K; offset: 273.15",
    "degF = 5 / 9 * K; offset: 233.15 + 200 / 9",
    "rad = 57.29577951308232 * deg",
)
BASES = ("V", "A", "s", "K", "deg", "dB", "dBuA", "dBuV")
PREFIXABLE = ("V", "A", "W", "ohm", "Ohm", "H", "F", "Hz", "s", "C", "J", "Wh", "Ah", "rad")
PLAIN = ("min", "h", "K", "degC", "degF", "deg", "percent", "dB", "dBuA", "dBuV")

COMPOUND = ("A^2*s",)

LONGEST = 24
_WHITELIST = re.compile(r"[A-Za-z]++(?:\^[1-9])?(?:[*/][A-Za-z]++(?:\^[1-9])?)*+")
_TABLE_FILE = Path(__file__).with_name("unit_table.json")
_LOCK = threading.RLock()  # pint fills caches of its own while it parses

Dimension = tuple[int, ...]
"""Exponents of BASES, in that order."""

NUMBER: Dimension = (0,) * len(BASES)


@dataclass(frozen=True, slots=True)
class Unit:
    """One unit: value in base units = factor * value + offset."""

    factor: float
    offset: float
    dimension: Dimension

    @property
    def stands_alone(self) -> bool:
        """Whether it counts from a zero of its own (a temperature, an absolute level): no sums, no products."""
        return any(self.dimension[BASES.index(base)] for base in ("K", "dBuA", "dBuV"))


def everyday() -> list[str]:
    """The rows of the table: every single unit name there is, prefixed ones included, and the common compounds."""
    return [prefix + unit for unit in PREFIXABLE for prefix in ("", *PREFIXES)] + list(PLAIN + COMPOUND)


@cache
def table() -> dict[str, Unit]:
    """What pint answered for the everyday units, from the file beside this module."""
    rows: dict[str, Any] = json.loads(_TABLE_FILE.read_text(encoding="ascii"))
    return {name: Unit(float(row[0]), float(row[1]), tuple(row[2])) for name, row in rows.items()}


def tidy(text: str) -> str:
    """A unit as typed, in the one spelling of the table: 'A² s' -> 'A^2*s', 'kΩ' -> 'kohm', '%' -> 'percent'."""
    text = text.replace("°C", "degC").replace("°F", "degF").replace("°", "deg").replace("%", "percent")
    text = re.sub("[\u03a9\u2126]", "ohm", re.sub("[\u00b5\u03bc]", "u", text)).replace("²", "^2").replace("³", "^3")
    text = re.sub(r"(?<=[A-Za-z])([23])", r"^\1", text)
    text = re.sub(r"(\^[0-9])(?=[A-Za-z])", r"\1*", text)
    return re.sub(r" ?([*/·×]) ?", r"\1", text).replace("·", "*").replace("×", "*").replace(" ", "*")


def names_in(tidied: str) -> list[str]:
    """The single names in a tidied unit."""
    return re.findall(r"[A-Za-z]+", tidied)


@lru_cache(maxsize=1024)
def lookup(tidied: str) -> Unit | None:
    """The unit, or None if it is not one this program knows."""
    known = table()
    if tidied in known:
        return known[tidied]
    if len(tidied) > LONGEST or not _WHITELIST.fullmatch(tidied):
        return None
    # Single names pint would take but nobody should write (plural 'Vs', prefixed 'mdegC') stop here.
    parts = [known.get(name) for name in names_in(tidied)]
    if len(parts) < 2 and "^" not in tidied:
        return None
    if any(part is None or part.stands_alone for part in parts):
        return None
    try:
        unit = ask_pint(tidied)
    except ArithmeticError:  # 'TV^9*TV^9*TV^9' is past the largest float
        return None
    return unit if 0.0 < unit.factor < math.inf else None


def ask_pint(tidied: str) -> Unit:
    """pint's own answer for a whitelisted unit whose every name is known."""
    with _LOCK:
        registry = _registry()
        unit = registry.parse_units(tidied)
        base: Any = registry.Quantity(0.0, unit).to_base_units()
        offset = float(base.magnitude)
        if offset:
            step = registry.parse_units("delta_" + tidied)
            factor = float(registry.Quantity(1.0, step).to_base_units().magnitude)
        else:
            factor = float(registry.Quantity(1.0, unit).to_base_units().magnitude)
        powers = {str(name): power for name, power in base.unit_items()}
    return Unit(factor, offset, tuple(int(powers.get(name, 0)) for name in BASES))


def warm() -> None:
    """Import pint and build the registry, so that no later question waits for it. Safe from any thread."""
    table()
    ask_pint("A^2*s")


@cache
def _build_registry() -> pint.UnitRegistry[Any]:
    import pint  # slow to import, and rarely needed

    registry: pint.UnitRegistry[Any] = pint.UnitRegistry(None)
    registry.load_definitions([f"{name}- = 1e{power}" for name, power in PREFIXES.items()] + list(DEFINITIONS))
    return registry


def _registry() -> pint.UnitRegistry[Any]:
    with _LOCK:
        return _build_registry()


def render_table() -> str:
    """The text of the table file, from pint's live answers: one unit a line."""
    rows = []
    for name in everyday():
        unit = ask_pint(name)
        rows.append(f"{json.dumps(name)}: {json.dumps([unit.factor, unit.offset, list(unit.dimension)])}")
    return "{\n" + ",\n".join(rows) + "\n}\n"


if __name__ == "__main__":
    _TABLE_FILE.write_text(render_table(), encoding="ascii")
