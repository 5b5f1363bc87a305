"""The capacitance that keeps a converter running while the bus is gone.

A capacitor that feeds the constant power P for the time t falls from V1 to V2 with C (V1^2 - V2^2)/2 = P t: stored
energy (e.g. Nilsson & Riedel, Electric Circuits, section 6.2).
"""

from __future__ import annotations

from dataclasses import dataclass

from budget.engine.model import LINES, Project
from budget.engine.operating import Operating


@dataclass(frozen=True, slots=True)
class HoldUp:
    """What one converter needs in one case [F]; None where it does not run or starts at or below the final voltage."""

    id: str
    case: str
    capacitance: float | None


def hold_up_capacitance(power: float, time: float, start: float, end: float) -> float | None:
    """C = 2 P t/(V1^2 - V2^2) [F] for ``power`` [W], ``time`` [s], ``start`` and ``end`` [V]; None if V2 >= V1."""
    room = (start - end) * (start + end)
    return 2.0 * power * time / room if room > 0.0 else None


def hold_up(project: Project, operating: Operating) -> tuple[HoldUp, ...]:
    """One row for each converter with ``hold_up`` and ``hold_up_to`` and each case, from its terminals at low line."""
    low = LINES.index("low")
    rows = []
    for k, converter in enumerate(project.converters):
        time, end = getattr(converter, "hold_up", None), getattr(converter, "hold_up_to", None)
        if time is None or end is None:
            continue
        for c, case in enumerate(project.cases):
            needed = None
            if operating.running[c, k] and operating.solved[c, low]:
                power, start = float(operating.input_power[c, k]), float(operating.voltage[c, low, k])
                needed = hold_up_capacitance(power, time, start, end)
            rows.append(HoldUp(converter.id, case.id, needed))
    return tuple(rows)
