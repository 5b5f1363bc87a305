"""What an allocation must obey: ratings, and what the user asks for; contradictions are named as pairs.

Converters that must stay together move as one item. A filter whose derated rating is zero takes nothing. Of a filter
without ``rated_current`` nobody can say what it carries: converters already there may stay, nothing new is put there,
and the headroom does not count it.

Constraints are named by tuples: ("keep", converter), ("banned", converter, filter), ("apart", a, b),
("together", a, b), ("most", filter or "", number), and what the project itself demands: ("no rating", filter),
("rating zero", filter), ("not allocated", converter), ("converters", number).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from budget.engine.feed import Feed
from budget.engine.model import Project
from budget.engine.operating import allowed_current, loads, series_resistance

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

Name = tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Constraints:
    """What the user asks for, by ids. ``most``: so many converters per filter, for all ("" in a pair) or for some."""

    keep: tuple[str, ...] = ()
    apart: tuple[tuple[str, str], ...] = ()
    together: tuple[tuple[str, str], ...] = ()
    banned: tuple[tuple[str, str], ...] = ()  # (converter, filter)
    most: int | tuple[tuple[str, int], ...] | None = None

    def counts(self) -> tuple[tuple[str, int], ...]:
        """``most`` as pairs of a filter's id, or "" for each filter, and a number of converters."""
        return (("", self.most),) if isinstance(self.most, int) else self.most or ()


def constraints_of(names: Iterable[Name]) -> Constraints:
    """Constraints from their names, see the module. Raises ValueError for a name that is none of a user's."""
    found: dict[str, list[Name]] = {"keep": [], "banned": [], "apart": [], "together": [], "most": []}
    for code, *ids in names:
        if code not in found or len(ids) != (1 if code == "keep" else 2):
            raise ValueError(f"{(code, *ids)} names no constraint")
        found[code].append(tuple(ids))
    return Constraints(
        keep=tuple(who for (who,) in found["keep"]),
        apart=tuple((a, b) for a, b in found["apart"]),
        together=tuple((a, b) for a, b in found["together"]),
        banned=tuple((who, where) for who, where in found["banned"]),
        most=tuple((where, int(number)) for where, number in found["most"]) or None,
    )


@dataclass(frozen=True, slots=True)
class Task:
    """Items K are to be placed behind filters F; cases C are those that can be the worst."""

    feed: Feed
    wanted: Floats  # (F,) A a filter may carry; inf without a rating
    items: tuple[tuple[int, ...], ...]  # converters that move as one
    allowed: Bools  # (K, F)
    apart: tuple[tuple[int, int], ...]  # items
    most: Indices  # (F,) converters
    present: Indices  # (N,) where the converters are now, -1 for nowhere
    cases: tuple[int, ...]  # indices of the project's cases, for the rows of the feed


def wanted_current(project: Project) -> Floats:
    """What each filter may carry by the rules, shape (F,) [A]; inf where no rating was entered."""
    allowed = allowed_current(project) * project.rules.filter_load
    return np.where(np.isnan(allowed), np.inf, allowed)


def task_of(project: Project, constraints: Constraints) -> Task | tuple[Name, ...]:
    """The task, or the constraints that contradict each other (usually two), by name.

    Raises ValueError for an id that the project does not have.
    """
    _known(project, constraints)
    filters = {f.id: k for k, f in enumerate(project.filters)}
    index = {c.id: k for k, c in enumerate(project.converters)}
    present = np.array([filters.get(c.filter, -1) for c in project.converters], dtype=np.intp)
    wanted = wanted_current(project)

    # who forbids what: for each converter and filter the name of one constraint
    forbidden: list[dict[int, Name]] = [{} for _ in project.converters]
    for k in range(len(project.converters)):
        for f, part in enumerate(project.filters):
            if wanted[f] <= 0.0:
                forbidden[k][f] = ("rating zero", part.id)
            elif np.isinf(wanted[f]) and present[k] != f:
                forbidden[k][f] = ("no rating", part.id)
    for who, where in constraints.banned:
        forbidden[index[who]][filters[where]] = ("banned", who, where)
    for who in constraints.keep:
        k = index[who]
        if present[k] < 0:
            return (("keep", who), ("not allocated", who))
        if present[k] in forbidden[k]:
            return (("keep", who), forbidden[k][int(present[k])])
        for f in range(len(filters)):
            if f != present[k]:
                forbidden[k][f] = ("keep", who)

    groups, clash = _groups(project, constraints, index, forbidden)
    if clash:
        return clash
    of = {k: number for number, group in enumerate(groups) for k in group}
    allowed = np.array(
        [[all(f not in forbidden[k] for k in group) for f in range(len(filters))] for group in groups], dtype=np.bool_
    ).reshape(len(groups), len(filters))
    clash = _apart(constraints, index, of, allowed, forbidden, project)
    if clash:
        return clash

    most = np.full(len(filters), len(project.converters), dtype=np.intp)
    named: list[Name] = [("most", "", "")] * len(filters)  # the constraint that counts
    for where, number in constraints.counts():
        for f in range(len(filters)) if not where else (filters[where],):
            if number < most[f]:
                most[f], named[f] = number, ("most", where, str(number))
    clash = _counts(project, groups, allowed, most, forbidden, named)
    if clash:
        return clash
    pairs = tuple(sorted({(min(of[index[a]], of[index[b]]), max(of[index[a]], of[index[b]]))
                          for a, b in constraints.apart}))  # fmt: skip
    feed, cases = _feed(project)
    return Task(feed, wanted, groups, allowed, pairs, most, present, cases)


def _known(project: Project, constraints: Constraints) -> None:
    converters, filters = [c.id for c in project.converters], [f.id for f in project.filters]
    named = [*constraints.keep, *(x for pair in (*constraints.apart, *constraints.together) for x in pair)]
    named += [who for who, _ in constraints.banned]
    places = [where for _, where in constraints.banned]
    places += [where for where, _ in constraints.counts() if where]
    for kind, ids, known in (("converter", named, converters), ("filter", places, filters)):
        for one in ids:
            if one not in known:
                raise ValueError(f'there is no {kind} "{one}": name one of {", ".join(known) or "none"}')


def _groups(
    project: Project, constraints: Constraints, index: dict[str, int], forbidden: list[dict[int, Name]]
) -> tuple[tuple[tuple[int, ...], ...], tuple[Name, ...]]:
    """Converters by what must stay together, and a contradiction if one shows."""
    group = list(range(len(project.converters)))
    count = len(project.filters)
    for a, b in constraints.together:
        one, two = group[index[a]], group[index[b]]
        if one == two:
            continue
        first = [k for k, g in enumerate(group) if g == one]
        second = [k for k, g in enumerate(group) if g == two]
        for k in second:
            group[k] = one
        free = set(range(count)) - {f for k in first + second for f in forbidden[k]}
        if count and not free:
            kept: list[Name] = [("keep", project.converters[k].id) for part in (first, second) for k in part
                    if ("keep", project.converters[k].id) in forbidden[k].values()]  # fmt: skip
            others = kept or sorted({name for k in first + second for name in forbidden[k].values()})
            return (), (("together", a, b), *others)
    found: dict[int, list[int]] = {}
    for k, g in enumerate(group):
        found.setdefault(g, []).append(k)
    for k, reasons in enumerate(forbidden):
        if count and len(reasons) == count:
            return (), tuple(sorted(set(reasons.values()))) or (("not allocated", project.converters[k].id),)
    return tuple(tuple(members) for members in found.values()), ()


def _apart(
    constraints: Constraints,
    index: dict[str, int],
    of: dict[int, int],
    allowed: Bools,
    forbidden: list[dict[int, Name]],
    project: Project,
) -> tuple[Name, ...]:
    """Takes from ``allowed`` what an item with one filter denies those that must not be with it."""
    changed = True
    while changed:
        changed = False
        for a, b in constraints.apart:
            one, two = of[index[a]], of[index[b]]
            if one == two:
                chain: list[Name] = [("together", *pair) for pair in constraints.together if of[index[pair[0]]] == one]
                return (("apart", a, b), *chain)
            for x, y in ((one, two), (two, one)):
                if allowed[x].sum() == 1:
                    f = int(allowed[x].argmax())
                    if allowed[y, f]:
                        allowed[y, f] = False
                        changed = True
                        if not allowed[y].any():
                            members = [k for k, g in of.items() if g in (x, y)]
                            why = sorted({name for k in members for name in forbidden[k].values()})
                            return (("apart", a, b), *why)
    return ()


def _counts(
    project: Project,
    groups: tuple[tuple[int, ...], ...],
    allowed: Bools,
    most: Indices,
    forbidden: list[dict[int, Name]],
    named: list[Name],
) -> tuple[Name, ...]:
    sizes = np.array([len(g) for g in groups], dtype=np.intp)
    for f, name in enumerate(named):
        for g, size in enumerate(sizes.tolist()):
            if size > most[f] and allowed[g, f]:
                allowed[g, f] = False
                if not allowed[g].any():
                    why = sorted({n for k in groups[g] for n in forbidden[k].values()})
                    if not why and size > 1:
                        why = [("together", *(project.converters[k].id for k in groups[g]))]
                    crowded = dict.fromkeys(named[n] for n in np.flatnonzero(most < size).tolist())
                    return (*crowded, *why)
        there = allowed[:, f] & (allowed.sum(axis=1) == 1)
        if int(sizes[there].sum()) > most[f]:
            why = sorted({n for g in np.flatnonzero(there) for k in groups[int(g)] for n in forbidden[k].values()})
            return (name, *why)
    usable = allowed.any(axis=0)
    if groups and int(most[usable].sum()) < len(project.converters):
        counts = dict.fromkeys(named[f] for f in np.flatnonzero(usable).tolist())
        return (*counts, ("converters", str(len(project.converters))))
    return ()


def _feed(project: Project) -> tuple[Feed, tuple[int, ...]]:
    """The bus at its lowest source voltage with every converter allocated, without cases that others dominate."""
    home = project.filters[0].id if project.filters else ""
    placed = replace(project, converters=tuple(replace(c, filter=home) for c in project.converters))
    power = loads(placed).input_power
    keep: list[int] = []
    for k in range(power.shape[0]):
        if any((power[k] <= power[j]).all() and ((power[k] < power[j]).any() or j < k) for j in range(power.shape[0])
               if j != k):  # fmt: skip
            continue
        keep.append(k)
    bus = project.bus
    feed = Feed(
        source=min(bus.low, bus.nominal, bus.high),
        resistance=bus.resistance,
        filter=np.array([series_resistance(f) for f in project.filters], dtype=np.float64),
        lead=np.array([c.lead.R for c in project.converters], dtype=np.float64),
        power=power[keep],
    )
    return feed, tuple(keep)
