"""From each converter's noise to the level on one line of the bus, at given frequencies.

The networks are trees: a bus node, filters tied to it, converters behind each filter. Take 1 V at the open end of a
converter's input ladder and carry it towards the bus: at the filter's output it has become v with a current i towards
the converter, whose admittance there is i/v. Take 1 V at the filter's output with the admittances of all its converters
and carry it through the filter: it has become V at the bus, with I/V the filter's admittance. The sum of these and of
the set-up is Y. All chain matrices have the determinant 1, so a current drawn at the end of the input ladder makes

    V_bus / I = -1 / (v V Y)

by reciprocity (derived; chain matrices e.g. in Pozar, Microwave Engineering, section 4.4). That is exact, and costs one
pass over the elements for each frequency, whatever the number of sources.

A filter given as a table is open to the rest; behind it a converter has the level it would have alone on the set-up,
less the table's dB. ``isolation`` keeps the magnitude of a transfer above that of the converter alone less its dB.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.ladder import SMALLEST, elements, inverse
from budget.engine.model import Branch, Filter, Ladder, Lead, LimitLine, Project
from budget.engine.receiver import line_impedance

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

Steps = list[tuple[bool, int]]  # of a ladder, its inner end first: whether in series, and the row of the element

SWITCH, TERMINALS, COMMON = "switch", "terminals", "common"
_CHUNK, _VALUES = 8192, 1_000_000  # frequencies at a time, and with all designs: bounded memory


@dataclass(frozen=True, slots=True)
class Job:
    """One source whose transfer is wanted at the frequencies ``start`` to ``stop`` of an array.

    ``place``: current drawn at the "switch" (the end of the input ladder) or at the "terminals"; or the voltage behind
    the "common"-mode capacitance. ``converter`` is an index of the project and must be allocated.
    """

    converter: int
    place: str
    start: int
    stop: int


def homes(project: Project) -> list[int]:
    """Index of the filter of each converter; -1 without one."""
    index = {f.id: k for k, f in enumerate(project.filters)}
    index.pop("", None)
    return [index.get(c.filter, -1) for c in project.converters]


def transfers(
    project: Project, limit: LimitLine, frequency: Floats, jobs: Sequence[Job], *, alone: bool = False
) -> list[Complex]:
    """Level on one line, in the unit of the limit line, for each source of 1 A (or 1 V, "common").

    ``frequency`` (K,) [Hz]; one array (stop - start,) for each job, in V/A, V/V, A/A or A/V. With ``alone`` the
    converter stands straight on the set-up without filter and neighbours (the ``bare`` emission).
    """
    found = [np.empty(job.stop - job.start, dtype=np.complex128) for job in jobs]
    tree = _Tree(project, homes(project))
    chunk = max(256, min(_CHUNK, _VALUES // (len(tree.designs) + len(project.filters) + len(tree.branches) + 1)))
    for begin in range(0, frequency.size, chunk):
        end = min(begin + chunk, frequency.size)
        part = _Part(tree, limit, frequency[begin:end])
        for common in (False, True):
            here = [
                (k, job, slice(max(job.start, begin) - begin, min(job.stop, end) - begin))
                for k, job in enumerate(jobs)
                if (job.place == COMMON) == common and job.start < end and job.stop > begin
            ]
            if not here:
                continue
            ways = part.transfers([job for _, job, _ in here], [cut for _, _, cut in here], common, alone)
            at = 0
            for k, job, cut in here:
                size = cut.stop - cut.start
                first = begin + cut.start - job.start
                found[k][first : first + size] = ways[at : at + size]
                at += size
    return found


def held(project: Project, frequency: Floats, jobs: Sequence[Job]) -> tuple[str, ...]:
    """Ids of table filters that were asked for frequencies (K,) [Hz] beyond the ends of their table."""
    home = homes(project)
    ids: dict[str, None] = {}
    for job in jobs:
        part = project.filters[home[job.converter]]
        if part.attenuation and job.stop > job.start:
            asked = frequency[job.start : job.stop]
            if asked.min() < part.attenuation[0][0] or asked.max() > part.attenuation[-1][0]:
                ids[part.id] = None
    return tuple(ids)


def table_loss(part: Filter, frequency: Floats, common: bool) -> Floats:
    """Insertion loss (K,) in dB of a table filter at the frequencies (K,) [Hz]: linear over log f, ends held."""
    rows = np.array(part.attenuation, dtype=np.float64)
    return np.interp(np.log(frequency), np.log(rows[:, 0]), rows[:, 2 if common else 1])


class _Tree:
    """What of a network does not depend on frequency: equal designs of lead and input are counted, not copied."""

    __slots__ = ("behind", "branches", "cm", "cm_load", "design", "designs", "dm", "home", "project")

    def __init__(self, project: Project, home: list[int]) -> None:
        self.project, self.home = project, home
        numbers: dict[tuple[Lead, Ladder], int] = {}
        self.design = [numbers.setdefault((c.lead, c.input), len(numbers)) for c in project.converters]
        rows: dict[Branch, int] = {}

        def steps(ladder: Ladder) -> Steps:
            return [(b.place == "series", rows.setdefault(b, len(rows))) for b in reversed(ladder)]

        self.designs = [(lead, steps(ladder)) for lead, ladder in numbers]
        self.dm = [steps(part.dm) for part in project.filters]
        self.cm = [steps(part.cm) for part in project.filters]
        self.branches = tuple(rows)
        self.behind: list[Counter[int]] = [Counter() for _ in project.filters]  # how many of each design
        self.cm_load = np.zeros(len(project.filters))  # F, at each common-mode output
        for c, f, d in zip(project.converters, home, self.design, strict=True):
            if f >= 0:
                self.behind[f][d] += 1
                self.cm_load[f] += c.cm.capacitance + c.cm.shunt if c.cm else 0.0


class _Part:
    """The network at some of the frequencies; what several sources share is computed when first asked for."""

    __slots__ = ("_cm", "_designs", "_dm", "elements", "frequency", "level", "limit", "line", "s", "tree", "w")

    def __init__(self, tree: _Tree, limit: LimitLine, frequency: Floats) -> None:
        self.tree, self.limit, self.frequency = tree, limit, frequency
        self.w = 2.0 * np.pi * frequency
        self.s = np.zeros(frequency.shape, dtype=np.complex128)
        self.s.imag = self.w
        self.line = line_impedance(limit.setup, self.w)
        # from the voltage between both lines, or of both to chassis, to the level: halved for the differential mode
        self.level = np.ones_like(self.line) if limit.unit == "dBuV" else 1.0 / self.line
        self.elements = elements(tree.branches, self.w)
        self._designs: tuple[Complex, Complex, Complex] | None = None
        self._dm: Complex | None = None
        self._cm: Complex | None = None

    def carry(self, steps: Steps, v: Complex, i: Complex) -> tuple[Complex, Complex]:
        for series, row in steps:
            if series:
                v = v + self.elements[row] * i
            else:
                i = i + self.elements[row] * v
        return v, i

    @property
    def designs(self) -> tuple[Complex, Complex, Complex]:
        """Of 1 V at the end of each input ladder: at the terminals, behind the lead, and the current there (D, K)."""
        if self._designs is None:
            tree, size = self.tree, self.w.size
            terminals, v, i = (np.empty((len(tree.designs), size), dtype=np.complex128) for _ in range(3))
            one, none = np.ones(size, dtype=np.complex128), np.zeros(size, dtype=np.complex128)
            for d, (lead, ladder) in enumerate(tree.designs):
                terminals[d], i[d] = self.carry(ladder, one, none)
                v[d] = terminals[d] + (lead.R + lead.L * self.s) * i[d]
            self._designs = terminals, _nonzero(v), i
        return self._designs

    @property
    def dm(self) -> Complex:
        """Differential level (F, K) on one line for 1 A fed into each filter's output; 0 for tables."""
        if self._dm is None:
            _, v, i = self.designs
            behind = i / v
            none = np.zeros(self.w.size, dtype=np.complex128)
            loads = [_sum(behind, count, none) for count in self.tree.behind]
            self._dm = self._filters(self.tree.dm, loads, 0.5 / self.line, 0.5)
        return self._dm

    @property
    def cm(self) -> Complex:
        """Common-mode level (F, K) on one line for 1 A fed into each filter's output; 0 for tables."""
        if self._cm is None:
            loads = [farads * self.s for farads in self.tree.cm_load.tolist()]
            self._cm = self._filters(self.tree.cm, loads, 2.0 / self.line, 1.0)
        return self._cm

    def _filters(self, ladders: list[Steps], loads: list[Complex], setup: Complex, share: float) -> Complex:
        one = np.ones(self.w.size, dtype=np.complex128)
        total = setup
        found: list[Complex | None] = []
        for part, ladder, load in zip(self.tree.project.filters, ladders, loads, strict=True):
            if part.attenuation:
                found.append(None)
                continue
            v, i = self.carry(ladder, one, load)
            v = _nonzero(v)
            total = total + i / v
            found.append(v)
        level = share * self.level
        ways = np.zeros((len(found), self.w.size), dtype=np.complex128)
        for f, volts in enumerate(found):
            if volts is not None:
                ways[f] = level * inverse(volts * total)
        return ways

    def transfers(self, jobs: list[Job], cuts: list[slice], common: bool, alone: bool) -> Complex:
        """Transfers of all jobs of one mode, one after the other (P,); ``cuts`` are their frequencies here."""
        tree = self.tree
        sizes = [cut.stop - cut.start for cut in cuts]
        k = np.concatenate([np.arange(cut.start, cut.stop) for cut in cuts])
        filters = np.repeat([tree.home[job.converter] for job in jobs], sizes)
        drawn, alone_volts = self._common(jobs, sizes, k) if common else self._differential(jobs, sizes, k)
        parts = [tree.project.filters[tree.home[job.converter]] for job in jobs]
        bare = alone_volts * self.level[k] if alone or any(_stray(part) for part in parts) else None
        if alone:
            return np.asarray(bare, dtype=np.complex128)
        ways = self.cm if common else self.dm
        through: Complex = drawn * ways[filters, k]
        if bare is None:
            return through
        at = 0
        for part, cut, size in zip(parts, cuts, sizes, strict=True):
            if part.attenuation:
                loss = table_loss(part, self.frequency[cut], common)
                through[at : at + size] = bare[at : at + size] * 10.0 ** (-loss / 20.0)
            at += size
        floor = np.array([0.0 if f.isolation is None else 10.0 ** (-f.isolation / 20.0) for f in tree.project.filters])
        least, reached = np.abs(bare) * floor[filters], np.abs(through)
        raised = np.maximum(least / np.maximum(reached, SMALLEST**4), 1.0)
        return np.asarray(through * raised, dtype=np.complex128)

    def _differential(self, jobs: list[Job], sizes: list[int], k: Indices) -> tuple[Complex, Complex]:
        """What 1 A drawn at each source is at the filter's output, and the voltage on one line when alone (P,)."""
        terminals, v, i = self.designs
        d = np.repeat([self.tree.design[job.converter] for job in jobs], sizes)
        volts = v[d, k]
        drawn: Complex = -1.0 / volts
        alone: Complex = -0.5 * inverse(i[d, k] + volts * (0.5 / self.line[k]))
        if any(job.place == TERMINALS for job in jobs):
            scale = np.where(np.repeat([job.place == TERMINALS for job in jobs], sizes), terminals[d, k], 1.0)
            drawn *= scale
            alone *= scale
        return drawn, alone

    def _common(self, jobs: list[Job], sizes: list[int], k: Indices) -> tuple[Complex, Complex]:
        """What 1 V behind each capacitance drives into the filter's output, and the voltage it makes alone (P,)."""
        sources = [self.tree.project.converters[job.converter].cm for job in jobs]
        farads = np.repeat([cm.capacitance if cm else 0.0 for cm in sources], sizes)
        loads = np.repeat([cm.capacitance + cm.shunt if cm else 0.0 for cm in sources], sizes)
        driven: Complex = farads * self.s[k]
        return driven, driven * inverse(loads * self.s[k] + 2.0 / self.line[k])


def _stray(part: Filter) -> bool:
    """Whether what a converter would do alone matters behind this filter."""
    return bool(part.attenuation) or part.isolation is not None


def _nonzero(z: Complex) -> Complex:
    """A voltage that a lossless resonance has made exactly zero counts as the smallest there is."""
    return z if z.all() else np.where(z == 0.0, SMALLEST, z)


def _sum(rows: Complex, wanted: Counter[int], start: Complex) -> Complex:
    """Rows added up, each as often as wanted; a small matrix product would wait for other threads instead."""
    total = start
    for row, times in wanted.items():
        total = total + (rows[row] if times == 1 else times * rows[row])
    return total
