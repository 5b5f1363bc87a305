"""The operating point and its checks once more, in the plainest Python: read the TOML, iterate, compare.

Nothing of the program is used: quantities, shelves, efficiency and network are read and worked out here by other means
(a regular expression, a dictionary merge, linear search, fixed-point iteration of the voltages). Slow, and only for
networks that stay well away from their limit of power, where the iteration contracts. Source of every rule: derived
from the definitions of the quantities; the fixed point is elementary circuit theory.
"""

from __future__ import annotations

import itertools
import re
import tomllib
from pathlib import Path
from typing import Any

PREFIX = {"": 1.0, "f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6}
CHECKS = frozenset(
    [
        "allocation",
        "operating point",
        "bus current",
        "filter current",
        "filter voltage",
        "converter load",
        "input low",
        "input high",
    ]
)
LINES = ("low", "nominal", "high")
ONE = re.compile(r"^([-+]?[0-9.]+(?:e[-+]?[0-9]+)?) *(.*)$")
TIMES = {"min": 60.0, "h": 3600.0}


def si(value: Any) -> float:
    """A quantity of the project file in SI: sums of products of numbers with units."""
    if isinstance(value, int | float):
        return float(value)
    total = 0.0
    for term in value.split(" + "):
        product = 1.0
        for factor in term.split(" * "):
            match = ONE.match(factor.strip())
            assert match, value
            product *= float(match.group(1)) * _unit(match.group(2))
        total += product
    return total


def _unit(name: str) -> float:
    if name == "%":
        return 0.01
    if name in TIMES:
        return TIMES[name]
    for own in ("ohm", "degC", "Hz", "V", "A", "W", "H", "F", "s"):
        if name.endswith(own) and name != own:
            return PREFIX[name.removesuffix(own)]
    return 1.0


def read(path: Path) -> dict[str, Any]:
    """The project with its shelf parts merged into the rows that name them."""
    data = tomllib.loads(path.read_text(encoding="utf-8"))
    shelf: dict[str, dict[str, Any]] = {"filter": {}, "converter": {}}
    for source in [data, *(tomllib.loads((path.parent / n).read_text()) for n in data.get("shelf_files", []))]:
        for key, parts in source.get("shelf", {}).items():
            shelf[key].update(parts)
    for key in ("filter", "converter"):
        data[key] = [{**shelf[key].get(row.get("part"), {}), **row} for row in data.get(key, [])]
    data.setdefault("case", [{"id": "full"}])
    data.setdefault("rules", {})
    return data


def derated(row: dict[str, Any], temperature: float) -> float:
    if "derate_from" not in row:
        return 1.0
    low, high = si(row["derate_from"]), si(row["derate_to"])
    return min(1.0, max(0.0, (high - temperature) / (high - low)))


def loss(row: dict[str, Any], output: float) -> float:
    rated, table = si(row["rated_power"]), row["efficiency"]
    points = [(rated, si(table))] if not isinstance(table, list) else [(si(s) * rated, si(e)) for s, e in table]
    pairs = [(p, p * (1 / e - 1)) for p, e in points]
    if output > points[-1][0]:
        return output * (1 / points[-1][1] - 1)
    if "idle_power" in row:
        pairs.insert(0, (0.0, si(row["idle_power"])))
    elif output < pairs[0][0]:
        return output * (1 / points[0][1] - 1)
    for (p0, l0), (p1, l1) in itertools.pairwise(pairs):
        if p0 <= output <= p1:
            return l0 + (l1 - l0) * (output - p0) / (p1 - p0)
    return pairs[0][1]


def powers(data: dict[str, Any], case: dict[str, Any], row: dict[str, Any]) -> tuple[float, float, bool]:
    """Output and input power [W] of one converter in one case, and whether it runs."""
    if row.get("filter", "") == "":
        return 0.0, 0.0, False
    load = case.get("load", {}).get(row["id"], 1.0)
    if load == "off":
        return 0.0, si(row.get("off_power", 0.0)), False
    growth = 1 + si(row.get("growth", data["rules"].get("growth", 0.0)))
    if isinstance(load, str) and load.endswith("W"):
        output = si(load) * growth
    else:
        output = sum(abs(si(o["voltage"])) * si(o["current"]) for o in row["output"]) * si(load) * growth
    return output, output + loss(row, output), True


def resistance(part: dict[str, Any]) -> float:
    if "attenuation" in part:
        return si(part["resistance"])
    return sum(si(e["series"].get("R", 0.0)) for e in part.get("dm", []) if "series" in e)


def corner(data: dict[str, Any], case: dict[str, Any], line: str) -> dict[str, Any]:
    """One operating point by fixed-point iteration of the terminal voltages."""
    source, feed = si(data["bus"][line]), si(data["bus"].get("resistance", 0.0))
    taken = {row["id"]: powers(data, case, row) for row in data["converter"]}
    lead = {row["id"]: si(row.get("lead", {}).get("R", 0.0)) for row in data["converter"]}
    behind = {
        part["id"]: [r["id"] for r in data["converter"] if r.get("filter") == part["id"]] for part in data["filter"]
    }
    volts = dict.fromkeys(taken, source)
    for _ in range(300):
        amps = {name: taken[name][1] / volts[name] for name in taken}
        through = {part: sum(amps[name] for name in names) for part, names in behind.items()}
        node = source - feed * sum(through.values())
        output = {part["id"]: node - resistance(part) * through[part["id"]] for part in data["filter"]}
        new = {name: output[part] - lead[name] * amps[name] for part, names in behind.items() for name in names}
        moved = max((abs(new[name] - volts[name]) for name in new), default=0.0)
        volts.update(new)
        if moved < 1e-13 * source:
            break
    else:
        raise AssertionError("the fixed point does not settle: this network is too near its limit for this method")
    return {"taken": taken, "volts": volts, "amps": amps, "through": through, "node": node, "output": output}


def corners(data: dict[str, Any]) -> dict[tuple[str, str], dict[str, Any]]:
    return {(case["id"], line): corner(data, case, line) for case in data["case"] for line in LINES}


Row = dict[str, Any]


def checks(data: dict[str, Any], points: dict[tuple[str, str], dict[str, Any]]) -> dict[tuple[str, str], Row]:
    """Every DC check by (check, subject): value, limit, wanted, margin, status and the corners that have the value."""
    rules, bus = data["rules"], data["bus"]
    warm = si(bus.get("temperature", 25.0))
    found: dict[tuple[str, str], Row] = {("operating point", "bus"): plain("ok")}

    def put(
        check: str, subject: str, values: dict[Any, float], limit: Any, share: Any = None, low: bool = False
    ) -> None:
        number = None if limit is None else si(limit)
        found[check, subject] = judged(values, number, None if share is None else si(share), low)

    every = {key: sum(p["through"].values()) for key, p in points.items()}
    put("bus current", "bus", every, bus.get("rating"), rules.get("bus_load", 1.0))
    for part in data["filter"]:
        name, limit = part["id"], part.get("rated_current")
        limit = None if limit is None else si(limit) * derated(part, warm)
        flow = {key: p["through"][name] for key, p in points.items()}
        put("filter current", name, flow, limit, rules.get("filter_load", 1.0))
        put("filter voltage", name, {(None, "high"): si(bus["high"])}, part.get("max_voltage"))
    for row in data["converter"]:
        name, allocated = row["id"], row.get("filter", "") != ""
        found["allocation", name] = plain("ok" if allocated else "fail")
        limit = si(row["rated_power"]) * derated(row, warm)
        load = {(key[0], None): p["taken"][name][0] for key, p in points.items()} if allocated else {}
        volts = {key: p["volts"][name] for key, p in points.items()} if allocated else {}
        running = {key: v for key, v in volts.items() if points[key]["taken"][name][2]}
        put("converter load", name, load, limit, rules.get("converter_load", 1.0))
        put("input low", name, running, row.get("min_input"), low=True)
        put("input high", name, volts, row.get("max_input"))
    return found


def plain(status: str) -> Row:
    return {"value": None, "limit": None, "wanted": None, "margin": None, "status": status, "corners": {(None, None)}}


def judged(values: dict[Any, float], limit: float | None, share: float | None, low: bool) -> Row:
    wanted = None if limit is None or share is None else limit * share
    row: Row = {"value": None, "limit": limit, "wanted": wanted, "margin": None, "status": "no data"}
    if not values:
        return {**row, "corners": {(None, None)}}
    worst = min(values.values()) if low else max(values.values())
    row["value"] = worst
    row["corners"] = {key for key, value in values.items() if abs(value - worst) <= 1e-9 * abs(worst)}
    if limit is None:
        return row
    room = worst - limit if low else limit - worst
    row["margin"] = room / limit
    over = room < -1e-12 * limit
    row["status"] = "fail" if over else "thin" if wanted is not None and worst > wanted * (1 + 1e-12) else "ok"
    return row


def energy(data: dict[str, Any], points: dict[tuple[str, str], dict[str, Any]]) -> list[dict[str, Any]]:
    rows = []
    for case in data["case"]:
        if "duration" in case:
            seconds = si(case["duration"])
            charge = sum(points[case["id"], "nominal"]["through"].values()) * seconds / 3600
            watt_hours = charge * si(data["bus"]["nominal"])
            rows.append({"case": case["id"], "duration": seconds, "energy_wh": watt_hours, "charge_ah": charge})
    return rows
