"""The built-in limit sets: data files with their sources, read when a project first asks for one."""

from __future__ import annotations

from collections.abc import Iterable
from functools import cache
from typing import Any

from budget.engine.model import LimitLine


@cache
def builtin() -> dict[str, dict[str, Any]]:
    """Every built-in set by name, as its file says it."""
    import tomllib  # here: most of a start-up passes before anybody asks for a limit
    from importlib import resources

    found = {}
    for file in sorted(resources.files("budget").joinpath("standards").iterdir(), key=lambda f: f.name):
        if file.name.endswith(".toml"):
            data = tomllib.loads(file.read_text(encoding="utf-8"))
            found[data["name"]] = data
    return found


def resolve(name: str, own: Iterable[LimitLine], nominal: float) -> LimitLine | None:
    """The limit line of a name, relaxed for a bus of ``nominal`` [V]; None where the name is unknown."""
    data = builtin().get(name)
    if data is None:
        return next((line for line in own if line.name == name), None)
    added = relaxation(data, nominal)
    return LimitLine(
        name=name,
        unit=data["unit"],
        setup=data["setup"],
        points=tuple((float(f), float(level) + added) for f, level in data["points"]),
        bandwidth=tuple((float(a), float(b), float(width)) for a, b, width in data["bandwidth"]),
        basis=data["basis"],
        source=data["source"],
    )


def relaxation(data: dict[str, Any], nominal: float) -> float:
    """What a set allows on top of its points [dB] at a nominal voltage [V]: the last row that the voltage reaches."""
    voltage = data.get("voltage", {"rule": "at least", "rows": []})
    added = 0.0
    for volts, more in voltage["rows"]:
        if nominal > volts or (nominal == volts and voltage["rule"] == "at least"):
            added = float(more)
    return added
