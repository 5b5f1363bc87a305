"""What happens at an instant: corners of the source's waveform, and converters that start, trip and finish to start.

A converter waits until its terminals reach ``turn_on``, counts ``start_delay`` while they stay there, and runs until
they fall below ``turn_off``. A running converter draws a power that is linear in time between its own instants:
``level + climb * t`` [W], the ramp of soft start with the charging of its output capacitance included.

Where neither ``turn_on`` nor ``min_input`` was entered, ``ASSUMED_ON`` of the bus's low voltage stands for ``turn_on``:
any converter that is to run from this bus starts below its low voltage, and one that draws its power from the first
millivolt on would hold down the very voltage it waits for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Bus, Project
from budget.engine.operating import Loads

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Phases = NDArray[np.int8]
Indices = NDArray[np.intp]

WAITING, COUNTING, RUNNING = range(3)
ASSUMED_ON = 0.8  # of bus.low, where no turn_on was entered
TURN_OFF = 0.9  # of turn_on, the contract's default
AFTER_SURGE = 2e-3  # s, from the end of a surge to the end of the window
HYSTERESIS = 1e-9  # relative; what a threshold that was just reached may be missed by through rounding


@dataclass(frozen=True, slots=True)
class Logic:
    """Thresholds [V] and times [s] of N converters, and what they draw [W] in each of C cases."""

    turn_on: Floats  # (N,)
    turn_off: Floats  # (N,)
    floor: Floats  # (N,) the voltage under the power is not taken below it
    delay: Floats  # (N,)
    soft: Floats  # (N,)
    power: Floats  # (C, N) once running
    charging: Floats  # (C, N) on top of it at the end of soft start
    enabled: Bools  # (C, N) not switched off by the case
    assumed: Bools  # (N,) no turn_on was entered


def make_logic(project: Project, asked: Loads, converters: Indices) -> Logic:
    """The logic of the ``converters`` (N,), indices of the project; voltages and powers as :class:`Logic` says."""
    chosen = [project.converters[k] for k in converters.tolist()]
    low = project.bus.low
    on = np.array([ASSUMED_ON * low if c.turn_on is None else c.turn_on for c in chosen], dtype=np.float64)
    off = np.array(
        [TURN_OFF * o if c.turn_off is None else c.turn_off for c, o in zip(chosen, on.tolist(), strict=True)],
        dtype=np.float64,
    )
    soft = np.array([c.soft_start for c in chosen], dtype=np.float64)
    stored = np.array(
        [(c.output_capacitance or 0.0) * (c.output[0].voltage ** 2 if c.output else 0.0) for c in chosen],
        dtype=np.float64,
    )
    power, out = asked.input_power[:, converters], asked.output_power[:, converters]
    charges = (soft > 0.0) & (out > 0.0)
    rate = stored / np.where(soft > 0.0, soft, 1.0)
    charging = np.where(charges, rate * power / np.where(out > 0.0, out, 1.0), 0.0)
    return Logic(
        turn_on=on,
        turn_off=off,
        floor=0.5 * off,
        delay=np.array([c.start_delay for c in chosen], dtype=np.float64),
        soft=soft,
        power=power,
        charging=charging,
        enabled=asked.running[:, converters],
        assumed=np.array([c.turn_on is None for c in chosen], dtype=np.bool_),
    )


@dataclass(frozen=True, slots=True)
class Segment:
    """The source from ``start`` to ``end`` [s]: ``voltage`` [V] at the start, rising by ``slope`` [V/s]."""

    start: float
    end: float
    voltage: float
    slope: float


def waveform(bus: Bus, event: str, window: float) -> tuple[Segment, ...]:
    """The source of "on-low", "on-high" (``window`` [s] long) or "surge"; segments without length are left out."""
    if event == "surge":
        surge, rise, hold = bus.surge or bus.nominal, bus.surge_rise or 0.0, bus.surge_time or 0.0
        times = [0.0, rise, rise + hold, 2.0 * rise + hold, 2.0 * rise + hold + AFTER_SURGE]
        volts = [bus.nominal, surge, surge, bus.nominal, bus.nominal]
    else:
        to = bus.low if event == "on-low" else bus.high
        times, volts = [0.0, bus.rise, max(window, bus.rise)], [0.0, to, to]
    found = [
        Segment(a, min(b, window) if event != "surge" else b, u, (v - u) / (b - a))
        for a, b, u, v in zip(times, times[1:], volts, volts[1:], strict=False)
        if b > a and (event == "surge" or a < window)
    ]
    return tuple(found)


@dataclass(slots=True)
class Phase:
    """Where each converter stands; shapes (member m, converter N), times in s, powers in W."""

    phase: Phases  # (m, N)
    timer: Floats  # (m, N) when the count or the soft start is over; inf without
    level: Floats  # (m, N)
    climb: Floats  # (m, N)
    upper: Floats  # (m, N) V: an event when the terminals reach it; inf without
    lower: Floats  # (m, N) V: an event when they fall below it; -inf without
    runs_at: Floats  # (m, N) last start; nan without
    tripped: Bools  # (m, N) has stopped running at least once

    def set_waiting(self, i: int, j: int, logic: Logic) -> None:
        """Stand still until the terminals of converter ``j`` of member ``i`` reach turn_on."""
        self.phase[i, j], self.timer[i, j] = WAITING, np.inf
        self.level[i, j] = self.climb[i, j] = 0.0
        self.upper[i, j], self.lower[i, j] = logic.turn_on[j], -np.inf

    def set_counting(self, i: int, j: int, logic: Logic, case: int, now: float) -> None:
        """Count from ``now`` [s]; without a delay, run at once."""
        if logic.delay[j] <= 0.0:
            self.set_running(i, j, logic, case, now)
            return
        self.phase[i, j], self.timer[i, j] = COUNTING, now + logic.delay[j]
        self.upper[i, j], self.lower[i, j] = np.inf, logic.turn_on[j] * (1.0 - HYSTERESIS)

    def set_running(self, i: int, j: int, logic: Logic, case: int, now: float) -> None:
        """Run from ``now`` [s], through soft start if there is one."""
        self.phase[i, j] = RUNNING
        self.runs_at[i, j] = now
        self.upper[i, j], self.lower[i, j] = np.inf, logic.turn_off[j] * (1.0 - HYSTERESIS)
        soft = logic.soft[j]
        if soft <= 0.0:
            self.set_steady(i, j, logic, case)
            return
        self.timer[i, j] = now + soft
        self.climb[i, j] = (logic.power[case, j] + logic.charging[case, j]) / soft
        self.level[i, j] = -self.climb[i, j] * now

    def set_steady(self, i: int, j: int, logic: Logic, case: int) -> None:
        """Soft start is over."""
        self.phase[i, j], self.timer[i, j] = RUNNING, np.inf
        self.level[i, j], self.climb[i, j] = logic.power[case, j], 0.0
        self.upper[i, j], self.lower[i, j] = np.inf, logic.turn_off[j] * (1.0 - HYSTERESIS)

    def cross(self, i: int, j: int, logic: Logic, case: int, now: float) -> None:
        """The terminals have met the threshold that counts in this phase."""
        if self.phase[i, j] == WAITING:
            self.set_counting(i, j, logic, case, now)
            return
        if self.phase[i, j] == RUNNING:
            self.tripped[i, j] = True
        self.set_waiting(i, j, logic)

    def expire(self, i: int, j: int, logic: Logic, case: int, now: float) -> None:
        """The timer has run out: the count, or the soft start."""
        if self.phase[i, j] == COUNTING:
            self.set_running(i, j, logic, case, now)
        else:
            self.set_steady(i, j, logic, case)


def initial(logic: Logic, cases: Indices, running: Bools) -> Phase:
    """Phases at the start of members with the ``cases`` (m,), an index each; ``running`` (m,): whether they run."""
    shape = (cases.size, logic.turn_on.size)
    enabled = logic.enabled[cases]
    runs = running[:, None] & enabled
    waits = ~runs & enabled
    return Phase(
        phase=np.where(runs, RUNNING, WAITING).astype(np.int8),
        timer=np.full(shape, np.inf),
        level=np.where(runs, logic.power[cases], 0.0),
        climb=np.zeros(shape),
        upper=np.where(waits, logic.turn_on, np.inf),
        lower=np.where(runs, logic.turn_off * (1.0 - HYSTERESIS), -np.inf),
        runs_at=np.full(shape, np.nan),
        tripped=np.zeros(shape, dtype=np.bool_),
    )
