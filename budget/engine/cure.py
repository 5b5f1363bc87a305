"""Where damping is missing, and what would supply it.

**Modes.** Participation factors tell which element takes part in which eigenvalue: the product of its entries in the
right and the left eigenvector (Perez-Arriaga, Verghese & Schweppe, "Selective modal analysis", IEEE Trans. PAS 101,
1982). Summed over the elements of each filter and converter, and scaled to a sum of one, they name the owners.

**Damping.** A branch of C and R at a filter's output is the classical cure of an underdamped filter (Middlebrook 1978;
Erickson & Maksimovic, Fundamentals of Power Electronics, 3rd ed., 17.4). Its size is solved on the exact margin: for
each C the best R is looked for, and the smallest C at which some R reaches what is wanted.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from budget.engine.loop import open_loop, polished, spectra
from budget.engine.margin import smallest_factors
from budget.engine.model import Branch, Project
from budget.engine.operating import Operating
from budget.engine.stability import conductances
from budget.engine.statespace import Element, state_space

Floats = NDArray[np.float64]

Owner = tuple[str, str]  # ("bus", ""), ("filter", id), ("converter", id), ("converters", "") for several together


@dataclass(frozen=True, slots=True)
class Mode:
    """One eigenvalue: frequency |.|/2pi [Hz], damping (a ratio), and the shares of its owners, greatest first."""

    frequency: float
    damping: float
    owners: tuple[tuple[Owner, float], ...]


def mode_table(
    project: Project, operating: Operating, case: int, line: int, most: int | None = None
) -> tuple[Mode, ...]:
    """The modes of one corner (indices of case and line), least damped first; at most ``most`` of them.

    Empty where the corner has no operating point. Frequencies in Hz, dampings as ratios.
    """
    if not operating.solved[case, line]:
        return ()
    network = state_space(project)
    g = conductances(operating, network)[case * 3 + line]
    matrix, values = spectra(open_loop(project, network), g[None])[0]
    names: list[Element] = list(network.states)
    running = [project.converters[k] for k in network.converters[g > 0.0].tolist()]
    names += [("converter", c.id) for c in running if c.control_bandwidth]
    values = values[(values.imag >= 0.0) & (np.abs(values) > 0.0)]
    # Equal ones are in order of frequency, equal owners in that of the network, whatever rounding leaves of them.
    order = np.lexsort((np.abs(values), np.round(-values.real / np.abs(values), 9)))[:most]
    found = []
    for value in values[order].tolist():
        value, right, left = polished(matrix, complex(value))
        share = np.abs(right * left)
        total = float(share.sum())
        owners: dict[Owner, float] = {}
        for k, part in enumerate(share.tolist()):
            # Last come the currents of loads that hang on inductors alone: they mix, and count in common.
            name = names[k] if k < len(names) else ("converters", "")
            owner = (str(name[0]), "" if name[0] == "bus" else str(name[1]))
            owners[owner] = owners.get(owner, 0.0) + (part / total if total > 0.0 else 0.0)
        ranked = tuple(sorted(owners.items(), key=lambda item: -round(item[1], 6)))
        found.append(Mode(abs(value) / (2.0 * np.pi), -value.real / abs(value), ranked))
    return tuple(found)


@dataclass(frozen=True, slots=True)
class Suggestion:
    """A damping branch at a filter's output: C [F] in series with R [ohm], and the margin [dB] that it gives.

    Where nothing is reached C and R are None, ``margin_db`` is the best that was seen (nan if nothing was tried), and
    ``reason`` is a code: "no such filter", "known by a table only", "no operating point", "nothing to damp" (the wanted
    margin is there already), "out of reach" (no branch at this output will do; the trouble is elsewhere).
    """

    filter: str
    wanted_db: float
    margin_db: float
    C: float | None = None
    R: float | None = None
    reason: str = ""


def damping_for(project: Project, operating: Operating, filter_id: str, wanted_db: float) -> Suggestion:
    """The smallest C, with an R, that behind a filter's ladder gives the wanted margin [dB] in every solved corner.

    The DC operating points do not depend on such a branch, so they are not computed again. C is found to 2 %, upward.
    """

    def none(reason: str, margin: float = np.nan) -> Suggestion:
        return Suggestion(filter_id, wanted_db, margin, reason=reason)

    place = next((k for k, part in enumerate(project.filters) if part.id == filter_id), None)
    if place is None:
        return none("no such filter")
    if project.filters[place].attenuation:
        return none("known by a table only")
    if not operating.solved.any():
        return none("no operating point")
    network = state_space(project)
    g = np.unique(conductances(operating, network)[operating.solved.ravel()], axis=0)

    def margin(part: Project, rows: Floats) -> Floats:
        with np.errstate(divide="ignore"):
            return np.asarray(20.0 * np.log10(smallest_factors(open_loop(part, state_space(part)), rows)))

    before = margin(project, g)
    if before.min() >= wanted_db:
        return none("nothing to damp", float(before.min()))
    worst = g[[int(before.argmin())]]

    def best(c: float, rows: Floats) -> tuple[float, float]:
        """A margin that is enough, or the greatest over R for one C, and that R: a scan, then golden section."""
        centre = _characteristic(project, place)

        def at(level: float) -> float:
            return float(margin(_with_branch(project, place, c, 10.0**level), rows).min())

        levels = (np.log10(centre) + np.linspace(-1.5, 1.5, 7)).tolist()
        seen = []
        for x in levels:
            seen.append(at(x))
            if seen[-1] >= wanted_db:
                return seen[-1], 10.0**x
        top = int(np.argmax(seen))
        low, high = levels[max(top - 1, 0)], levels[min(top + 1, 6)]
        ratio = (5.0**0.5 - 1.0) / 2.0
        a, b = high - ratio * (high - low), low + ratio * (high - low)
        fa, fb = at(a), at(b)
        for _ in range(9):
            if max(fa, fb) >= wanted_db:
                break
            if fa >= fb:
                high, b, fb = b, a, fa
                a = high - ratio * (high - low)
                fa = at(a)
            else:
                low, a, fa = a, b, fb
                b = low + ratio * (high - low)
                fb = at(b)
        options = [(fa, 10.0**a), (fb, 10.0**b), (seen[top], 10.0 ** levels[top])]
        return max(options)

    unit = _capacitance(project, place)
    small, large, reached = 0.0, 0.0, -np.inf
    resistance = 0.0
    for exponent in range(-2, 9):  # from a fraction of the capacitance that is there to some 100 times it
        c = unit * 2.0**exponent
        reached, resistance = best(c, worst)
        if reached >= wanted_db:
            large = c
            break
        small = c
    if not large:
        return none("out of reach", reached)
    while not small and large > unit * 2.0**-12:  # less than the first try may do
        level, ohms = best(0.5 * large, worst)
        if level >= wanted_db:
            large, resistance = 0.5 * large, ohms
        else:
            small = 0.5 * large
    while small > 0.0 and large / small > 1.02:
        middle = (small * large) ** 0.5
        level, ohms = best(middle, worst)
        if level >= wanted_db:
            large, resistance = middle, ohms
        else:
            small = middle
    for _ in range(6):  # another corner may be the worst once this one is damped
        level = float(margin(_with_branch(project, place, large, resistance), g).min())
        if level >= wanted_db:
            return Suggestion(filter_id, wanted_db, level, large, resistance)
        large *= 1.1
        reached, resistance = best(large, g)
    return none("out of reach", level)


def _with_branch(project: Project, place: int, c: float, r: float) -> Project:
    part = project.filters[place]
    part = replace(part, dm=(*part.dm, Branch("shunt", R=r, C=c)))
    return replace(project, filters=(*project.filters[:place], part, *project.filters[place + 1 :]))


def _capacitance(project: Project, place: int) -> float:
    """A capacitance that suits the filter's output [F]: all that lies across it and behind it, or 1 uF."""
    part = project.filters[place]
    total = sum(b.C or 0.0 for b in part.dm if b.place == "shunt")
    behind = (c for c in project.converters if c.filter == part.id)
    total += sum(b.C or 0.0 for c in behind for b in c.input if b.place == "shunt")
    return total or 1e-6


def _characteristic(project: Project, place: int) -> float:
    """sqrt(L/C) [ohm] of the filter with the feed; 1 ohm where it has no inductance."""
    part = project.filters[place]
    total = project.bus.inductance + sum(b.L for b in part.dm if b.place == "series")
    return float(np.sqrt(total / _capacitance(project, place))) if total > 0.0 else 1.0
