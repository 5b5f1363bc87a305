"""What the engine takes: one project as frozen plain data in SI floats.

Temperatures are in degC, angles in degrees, levels in dB, ratios as fractions; everything else is the SI unit of its
dimension. ``None`` means "not entered". The rows mirror the tables of the project file one to one, so that a field is
found here under the key the user typed; defaults have already been filled in by whoever built the project.
"""

from __future__ import annotations

from dataclasses import dataclass

LINES = ("low", "nominal", "high")


@dataclass(frozen=True, slots=True)
class Branch:
    """One element of a ladder: R + (jwL || Rp || 1/jwCp) + 1/jwC; absent parts drop out."""

    place: str  # "series" or "shunt"
    R: float = 0.0
    L: float = 0.0
    C: float | None = None
    Rp: float | None = None
    Cp: float | None = None
    saturation: float | None = None


Ladder = tuple[Branch, ...]


@dataclass(frozen=True, slots=True)
class Rules:
    filter_load: float = 1.0
    bus_load: float = 1.0
    converter_load: float = 1.0
    growth: float = 0.0
    emission_margin: float = 6.0
    stability_margin: float = 6.0
    combine: str = "arithmetic"
    emissions: tuple[str, ...] = ()
    inrush_window: float = 20e-3


@dataclass(frozen=True, slots=True)
class Bus:
    low: float
    nominal: float
    high: float
    name: str = ""
    rating: float | None = None
    resistance: float = 0.0
    inductance: float = 0.0
    temperature: float = 25.0
    rise: float = 0.0
    inrush_peak: float | None = None
    breaker_i2t: float | None = None
    surge: float | None = None
    surge_time: float | None = None
    surge_rise: float | None = None


@dataclass(frozen=True, slots=True)
class Filter:
    """A filter is either a pair of ladders (``dm``, ``cm``) or an insertion-loss ``attenuation`` table."""

    id: str
    name: str = ""
    rated_current: float | None = None
    derate_from: float | None = None
    derate_to: float | None = None
    max_voltage: float | None = None
    max_surge: float | None = None
    inrush_peak: float | None = None
    inrush_i2t: float | None = None
    isolation: float | None = None
    dm: Ladder = ()
    cm: Ladder = ()
    attenuation: tuple[tuple[float, float, float], ...] = ()  # rows of f [Hz], dm [dB], cm [dB]
    resistance: float = 0.0  # of a table filter, loop [ohm]


@dataclass(frozen=True, slots=True)
class Output:
    name: str
    voltage: float
    current: float


@dataclass(frozen=True, slots=True)
class Chop:
    duty: float
    rise: float
    fall: float
    ripple: float = 0.0


@dataclass(frozen=True, slots=True)
class Ripple:
    pp: float
    shape: str = "triangle"
    duty: float = 0.5


@dataclass(frozen=True, slots=True)
class CommonMode:
    capacitance: float
    swing: float
    rise: float
    fall: float
    duty: float = 0.5
    shunt: float = 0.0


@dataclass(frozen=True, slots=True)
class Lead:
    R: float = 0.0
    L: float = 0.0


@dataclass(frozen=True, slots=True)
class Converter:
    id: str
    rated_power: float
    output: tuple[Output, ...]
    efficiency: tuple[tuple[float, float], ...]  # (share of rated_power, efficiency), shares rising
    name: str = ""
    filter: str = ""  # "" = not allocated
    growth: float | None = None
    idle_power: float | None = None
    off_power: float = 0.0
    derate_from: float | None = None
    derate_to: float | None = None
    min_input: float | None = None
    max_input: float | None = None
    max_surge: float | None = None
    turn_on: float | None = None
    turn_off: float | None = None
    start_delay: float = 0.0
    soft_start: float = 0.0
    output_capacitance: float | None = None
    lead: Lead = Lead()
    input: Ladder = ()
    control_bandwidth: float | None = None
    hold_up: float | None = None
    hold_up_to: float | None = None
    frequency: float | None = None
    frequency_tolerance: float = 0.0
    clock: str = ""
    phase: float = 0.0
    chop: Chop | None = None
    ripple: Ripple | None = None
    spectrum: tuple[tuple[float, float], ...] = ()
    duty_law: str = "constant"
    cm: CommonMode | None = None


@dataclass(frozen=True, slots=True)
class Load:
    """What a case asks of one converter: a share of its outputs, an output power, or off."""

    kind: str  # "share", "power", "off"
    value: float = 0.0


@dataclass(frozen=True, slots=True)
class Case:
    id: str
    name: str = ""
    duration: float | None = None
    load: tuple[tuple[str, Load], ...] = ()  # (converter id, load); converters not named run at 100 %


@dataclass(frozen=True, slots=True)
class LimitLine:
    name: str
    unit: str
    setup: str
    points: tuple[tuple[float, float], ...]
    bandwidth: tuple[tuple[float, float, float], ...] = ()
    basis: str = "own"  # "read" in the standard, from "memory", or the user's "own"
    source: str = ""  # where the points are from: standard and figure


@dataclass(frozen=True, slots=True)
class Project:
    bus: Bus
    filters: tuple[Filter, ...] = ()
    converters: tuple[Converter, ...] = ()
    cases: tuple[Case, ...] = ()  # never empty once built: one named "full" stands in
    rules: Rules = Rules()
    limits: tuple[LimitLine, ...] = ()
    checked: tuple[LimitLine, ...] = ()  # the limit sets that the rules name, relaxed for the nominal voltage
    title: str = ""
