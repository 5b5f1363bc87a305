"""Switch-on and surge of a whole project: every load case at every event, as plain data.

Events are "on-low" and "on-high" (everything at zero, the source rises over ``bus.rise``) and, where the bus has one,
"surge" (from the steady state at nominal). The equations are those of ``statespace``, the method is that of
``integrator``, the converters behave as ``events`` says. Accuracy: steps are held to 1e-5 of each output's scale.

What a run has to say beyond its numbers are remarks, a code and a subject each:

- ("infinite current", "bus" or a filter's id): a capacitor without resistance takes a step of the source through none;
  the current has no peak and no i2t, and what follows it is sound;
- ("no operating point", ""): a surge has no steady state to start from; the run has no numbers;
- ("near turn_on" or "near turn_off", converter id): its terminals come within 1 % of that voltage without clearly
  crossing it, so that a small tolerance decides the outcome;
- ("not finished", "") and ("chatter", ""): the run was given up before its window ended, because it took too many
  steps or because converters start and stop without end at one instant; the numbers hold up to ``reached`` only;
- ("turn_on assumed", converter id): none was entered, see ``events``;
- ("no input capacitor", converter id): inductors alone feed its load, see ``integrator``.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from budget.engine.cancel import CancelledError as CancelledError  # also found here
from budget.engine.events import COUNTING, RUNNING, Logic, make_logic, waveform
from budget.engine.integrator import TOLERANCE, Batch, Member, Outcome
from budget.engine.model import Branch, Project
from budget.engine.modes import Modes, modes
from budget.engine.operating import Operating, loads, operating_points
from budget.engine.statespace import StateSpace, state_space
from budget.engine.waves import Values

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

EVENTS = ("on-low", "on-high", "surge")
STEPS = 20_000  # of one run, an event counting for four: some ten seconds
INFINITE, NO_POINT, NEAR_ON, NEAR_OFF = "infinite current", "no operating point", "near turn_on", "near turn_off"
NOT_FINISHED, CHATTER, ASSUMED, NO_CAPACITOR = "not finished", "chatter", "turn_on assumed", "no input capacitor"
_CONDITION = 1e7  # of the modes; above it the elements are set apart by 1e-6 of themselves
_APART = 1e-6


@dataclass(frozen=True, slots=True)
class FilterRun:
    """Peak current [A] into a filter, its i2t [A^2 s] and its highest output voltage [V]; None where there is none."""

    id: str
    peak: float | None
    i2t: float | None
    peak_voltage: float | None


@dataclass(frozen=True, slots=True)
class ConverterRun:
    """Highest voltage [V] at a converter's terminals, its last start [s], and where it stands when the window ends.

    ``state``: "off" (by the case), "waiting", "tripped" (waiting again), "counting", "soft start" or "running".
    """

    id: str
    peak_voltage: float | None
    runs_at: float | None
    state: str


@dataclass(frozen=True, slots=True)
class Wave:
    """Waveforms: bus current, filter currents [A], filter output voltages, terminal voltages [V], in project order.

    Points are exact, not equidistant, and double where something jumps; from 6000 on (fewer in large projects, and then
    in single precision) they are thinned without losing peaks.
    """

    time: Floats  # (K,) s
    bus: Values  # (K,) A
    filters: Values  # (K, F) A
    outputs: Values  # (K, F) V
    terminals: Values  # (K, N) V


@dataclass(frozen=True, slots=True)
class Run:
    """One case at one event. Numbers are None where a remark says why; the module lists the remarks."""

    case: str
    event: str
    bus_peak: float | None  # A
    bus_i2t: float | None  # A^2 s
    filters: tuple[FilterRun, ...]
    converters: tuple[ConverterRun, ...]
    remarks: tuple[tuple[str, str], ...]
    reached: float  # s
    steps: int
    wave: Wave | None = None

    @property
    def finished(self) -> bool:
        """Whether the numbers speak for the whole window."""
        return not any(code in (NOT_FINISHED, CHATTER, NO_POINT) for code, _ in self.remarks)


@dataclass(frozen=True, slots=True)
class Inrush:
    """All runs, by case and then by event; ``tables``: ids of filters left out, known by a table only."""

    runs: tuple[Run, ...]
    tables: tuple[str, ...]


def events(project: Project) -> tuple[str, ...]:
    """The events that the project's bus has."""
    bus = project.bus
    surge = None not in (bus.surge, bus.surge_time, bus.surge_rise)
    return EVENTS if surge else EVENTS[:2]


def inrush(
    project: Project,
    operating: Operating | None = None,
    *,
    only: Sequence[tuple[int, str]] | None = None,
    cancelled: Callable[[], bool] | None = None,
    progress: Callable[[float], None] | None = None,
    limit: int = STEPS,
    tolerance: float = TOLERANCE,
) -> Inrush:
    """Switch-on and surge of every case, see the module.

    ``operating``: the operating points, if they are known already. ``only``: pairs of a case's index and an event.
    ``cancelled`` is asked every few steps; if it says so, :class:`CancelledError` is raised. ``progress`` is told the
    share done, 0 to 1. ``limit``: the most steps that a run may take; ``tolerance``: of one step, a ratio.
    """

    def tick(share: float) -> None:
        if cancelled is not None and cancelled():
            raise CancelledError
        if progress is not None:
            progress(share)

    tick(0.0)
    chosen = [(c, e) for c in range(len(project.cases)) for e in events(project)] if only is None else list(only)
    space, modal = network(project)
    asked = loads(project)
    logic = make_logic(project, asked, space.converters)
    if any(e == "surge" for _, e in chosen) and operating is None:
        operating = operating_points(project)
    members: list[Member] = []
    places: dict[int, int] = {}
    same: dict[tuple[bytes, ...], int] = {}  # cases that differ in names only run once
    for place, (case, event) in enumerate(chosen):
        currents, before = None, 0.0
        if event == "surge":
            assert operating is not None
            if not operating.solved[case, 1]:
                continue
            drawn = operating.current[case, 1, space.converters]
            currents, before = np.where(logic.enabled[case], drawn, 0.0), project.bus.nominal
        drawn_by = (logic.power[case], logic.charging[case], logic.enabled[case], currents)
        key = (event.encode(), *(b"" if part is None else part.tobytes() for part in drawn_by))
        places[place] = same.setdefault(key, len(members))
        if places[place] == len(members):
            members.append(Member(case, waveform(project.bus, event, project.rules.inrush_window), currents, before))
    outcomes: list[Outcome] = []
    if members:
        groups = _groups(project, space)
        batch = Batch(space, modal, logic, members, project.bus.nominal, limit, tolerance, groups)
        outcomes = batch.run(tick)
    by_place = {place: (members[k], outcomes[k]) for place, k in places.items()}
    runs = [
        _run(project, space, logic, case, event, *by_place.get(place, (None, None)))
        for place, (case, event) in enumerate(chosen)
    ]
    if progress is not None:
        progress(1.0)
    return Inrush(tuple(runs), tuple(f.id for f in project.filters if f.attenuation))


def _groups(project: Project, space: StateSpace) -> Indices:
    """The filter (an index of the project) of each load and each saturating inductor, as the inputs of the network."""
    index = {part.id: k for k, part in enumerate(project.filters)}
    home = {c.id: index.get(c.filter, -1) for c in project.converters}
    loads = [home[project.converters[k].id] for k in space.converters.tolist()]
    bent = [(index if kind == "filter" else home)[str(owner)] for kind, owner, *_ in space.saturating]
    return np.array([*loads, *bent], dtype=np.intp)


def network(project: Project) -> tuple[StateSpace, Modes]:
    """State equations and modes; of a network without a basis of modes (critical damping), those of one beside it.

    There every inductance and capacitance differs by up to a millionth, which sets equal modes apart.
    """
    space = state_space(project)
    modal = modes(space.A, space.weight)
    if modal.condition > _CONDITION:
        beside = state_space(_apart(project))
        other = modes(beside.A, beside.weight)
        if other.condition < modal.condition:
            return beside, other
    return space, modal


def _apart(project: Project) -> Project:
    """The project with its inductances and capacitances changed by up to a millionth, each by its own share."""
    count = 0

    def share() -> float:
        nonlocal count
        count += 1
        return 1.0 + _APART * ((count * 0.6180339887498949) % 1.0 - 0.5)

    def ladder(rungs: Sequence[Branch]) -> tuple[Branch, ...]:
        return tuple(replace(b, L=b.L * share(), C=None if b.C is None else b.C * share()) for b in rungs)

    return replace(
        project,
        bus=replace(project.bus, inductance=project.bus.inductance * share()),
        filters=tuple(replace(f, dm=ladder(f.dm)) for f in project.filters),
        converters=tuple(
            replace(c, lead=replace(c.lead, L=c.lead.L * share()), input=ladder(c.input)) for c in project.converters
        ),
    )


def _run(
    project: Project,
    space: StateSpace,
    logic: Logic,
    case: int,
    event: str,
    member: Member | None,
    outcome: Outcome | None,
) -> Run:
    filters = [project.filters[k].id for k in space.filters.tolist()]
    converters = [project.converters[k].id for k in space.converters.tolist()]
    name = project.cases[case].id
    enabled = logic.enabled[case].tolist()
    if member is None or outcome is None:
        return Run(
            name,
            event,
            None,
            None,
            tuple(FilterRun(f, None, None, None) for f in filters),
            tuple(
                ConverterRun(c, None, None, "running" if on else "off")
                for c, on in zip(converters, enabled, strict=True)
            ),
            ((NO_POINT, ""),),
            0.0,
            0,
        )
    count = len(filters)
    peak: list[float | None] = outcome.peak.tolist()
    i2t: list[float | None] = outcome.i2t.tolist()
    remarks: list[tuple[str, str]] = []
    if outcome.problem:
        remarks.append((CHATTER if outcome.problem == "chatter" else NOT_FINISHED, ""))
    if _jumps(member):
        for k in np.flatnonzero(np.abs(space.D1[: 1 + count, 0]) > 0.0).tolist():
            peak[k] = i2t[k] = None
            remarks.append((INFINITE, ["bus", *filters][k]))
    fed: list[bool] = (np.abs(space.load_cut).sum(axis=0) > 0.0).tolist()
    for j, c in enumerate(converters):
        if not enabled[j]:
            continue
        notes = ((outcome.near_on[j], NEAR_ON), (outcome.near_off[j], NEAR_OFF), (logic.assumed[j], ASSUMED))
        remarks += [(code, c) for true, code in (*notes, (fed[j], NO_CAPACITOR)) if true]
    return Run(
        case=name,
        event=event,
        bus_peak=peak[0],
        bus_i2t=i2t[0],
        filters=tuple(FilterRun(f, peak[1 + k], i2t[1 + k], peak[1 + count + k]) for k, f in enumerate(filters)),
        converters=tuple(
            ConverterRun(
                c,
                peak[1 + 2 * count + j],
                None if np.isnan(outcome.runs_at[j]) else float(outcome.runs_at[j]),
                _state(enabled[j], outcome, j),
            )
            for j, c in enumerate(converters)
        ),
        remarks=tuple(remarks),
        reached=outcome.reached,
        steps=outcome.steps,
        wave=Wave(
            outcome.time,
            outcome.values[:, 0],
            outcome.values[:, 1 : 1 + count],
            outcome.values[:, 1 + count : 1 + 2 * count],
            outcome.values[:, 1 + 2 * count :],
        ),
    )


def _jumps(member: Member) -> bool:
    """Whether the source takes a step anywhere in the window."""
    first = member.segments[0]
    pairs = zip(member.segments, member.segments[1:], strict=False)
    return first.voltage != member.before or any(
        abs(a.voltage + a.slope * (a.end - a.start) - b.voltage) > 1e-9 * abs(b.voltage) for a, b in pairs
    )


def _state(enabled: bool, outcome: Outcome, j: int) -> str:
    if not enabled:
        return "off"
    if outcome.phase[j] == RUNNING:
        return "soft start" if np.isfinite(outcome.timer[j]) else "running"
    if outcome.phase[j] == COUNTING:
        return "counting"
    return "tripped" if outcome.tripped[j] else "waiting"


def as_json(found: Inrush) -> list[dict[str, Any]]:
    """The part ``inrush`` of the machine-readable result, in SI units; what has no value is None.

    So is every number of a run that was given up before its window ended.
    """
    return [
        {
            "case": run.case,
            "event": run.event,
            "bus": {"peak": known(run.bus_peak), "i2t": known(run.bus_i2t)},
            "filters": [
                {
                    "id": f.id,
                    "peak": known(f.peak),
                    "i2t": known(f.i2t),
                    "peak_voltage": known(f.peak_voltage),
                }
                for f in run.filters
            ],
            "converters": [
                {"id": c.id, "peak_voltage": known(c.peak_voltage), "runs_at": known(c.runs_at)} for c in run.converters
            ],
        }
        for run, known in ((run, _whole if run.finished else _nothing) for run in found.runs)
    ]


def _whole(value: float | None) -> float | None:
    return value


def _nothing(_: float | None) -> None:
    """A run that was given up has no numbers of its whole window."""
