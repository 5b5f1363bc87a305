"""Proposals of which converter goes behind which filter, side by side, and the wishes that the search must obey."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

from budget.report import allocation as report
from budget.ui.sheet import Context, rows_of, words_only
from budget.ui.view import RIGHT, Cell, Column, Row, Section, View

if TYPE_CHECKING:
    from budget.engine.candidates import Allocation, Candidate
    from budget.engine.model import Project
    from budget.project.document import Document

SEARCHING, CHECKING, DONE = "searching", "checking", "done"
FIRST = 2  # the column of the first candidate

Wish = tuple[str, ...]  # the name of a constraint, see ``engine.placing``


@dataclass(frozen=True, slots=True, eq=False)
class Search:
    """One search: what it was asked, and what it has found so far."""

    goal: str
    project: Project
    wishes: tuple[Wish, ...]  # those that were obeyed
    ids: tuple[str, ...]  # of all converters in the document then
    found: Allocation | None = None
    state: str = SEARCHING
    token: object = field(default_factory=object)  # tells searches apart

    @property
    def label(self) -> str:
        return f"checking, {self.goal}" if self.state == CHECKING else f"searching, {self.goal}"

    @property
    def candidates(self) -> tuple[Candidate, ...]:
        return self.found.candidates if self.found is not None else ()


def allocation(context: Context) -> View:
    """The candidates of the last search, Enter on one takes it as one edit; below them the wishes."""
    search: Search | None = context.options.allocation
    result = context.session.result
    if search is None or result is None:
        text = "no search yet: G looks for allocations" if result else "~ calculating"
        return View("allocation", "allocation", (_lines([text]), _wishes(context)))
    mark, remark = _age(context, search, result.project)
    if search.state == SEARCHING:
        mark += "~ searching: "
    title = f"{mark}allocation, {search.goal}"
    found = search.found
    if found is None or not found.candidates:
        lines = ["~ nothing admissible yet"]
        if found is not None:
            lines = [report.headline(found), *report.why_none(found)]
        elif search.state == DONE:
            lines = ["the search ended before anything was found"]
        return View("allocation", title, (_lines(lines), _wishes(context)), summary=remark)
    summary = f"{report.headline(found)}; > marks what moves; Enter on a candidate takes it, u brings it back"
    summary = f"{remark} {summary}" if remark else summary
    return View("allocation", title, (_table(context, search, result.project), _wishes(context)), summary=summary)


def _lines(lines: list[str]) -> Section:
    return Section((Column("", 76, most=140),), tuple(Row(("none", k), (Cell(words_only(t), info=words_only(t)),))
                                                     for k, t in enumerate(lines)))  # fmt: skip


def _age(context: Context, search: Search, project: Project) -> tuple[str, str]:
    """A mark for the title and a sentence where the project or the wishes are no longer those of the search."""
    same = context.once("allocation age", (search.project, project), lambda: same_bus(search.project, project))
    if not same:
        return "~ before the edit: ", "The project changed since this search; G searches anew."
    if tuple(w for w in context.options.wishes if missing(w, project) is None) != search.wishes:
        return "~ other wishes: ", "The wishes changed since this search; G searches anew."
    if _anchors(search, search.project) != _anchors(search, project):
        return "~ before the move: ", "What had to stay was moved since this search; G searches anew."
    return "", ""


def _anchors(search: Search, project: Project) -> tuple[tuple[str, str], ...]:
    """The converters that had to stay where they were, by a wish or for want of a rating, with their filters."""
    kept = {wish[1] for wish in search.wishes if wish[0] == "keep"}
    unrated = {f.id for f in project.filters if f.rated_current is None}
    return tuple((c.id, c.filter) for c in project.converters if c.id in kept or c.filter in unrated)


def same_bus(one: Project, two: Project) -> bool:
    """Whether two projects differ in nothing but names and which converter is behind which filter."""
    return one is two or _bare(one) == _bare(two)


def _bare(project: Project) -> Project:
    return replace(
        project,
        title="",
        filters=tuple(replace(f, name="") for f in project.filters),
        converters=tuple(replace(c, name="", filter="") for c in project.converters),
    )


def _table(context: Context, search: Search, project: Project) -> Section:
    now = {c.id: c.filter for c in project.converters}
    shown = [replace(c, moves=sum(now.get(u, f) != f for u, f in c.allocation)) for c in search.candidates]
    names = ["so far"] if search.state == SEARCHING else [f"no. {k + 1}" for k, _ in enumerate(shown)]
    columns = [Column("", 16, most=30), Column("now", 5, most=10), *(Column(name, 10, most=14) for name in names)]

    def row(key: str, name: str, present: str, texts: list[tuple[str, str]], align: str = "left") -> Row:
        cells = [Cell(words_only(name), tone="head"), Cell(words_only(present))]
        for k, (text, tone) in enumerate(texts):
            info = f"{names[k]}: {report.verdict(shown[k])}"
            if key == "converter" and text.startswith("> "):
                info += f"; {name.split()[0]} {present} -> {text[2:]}"
            cells.append(Cell(words_only(text), None, align, tone, "", info))
        return Row((key, name), tuple(cells))

    waits = "~ " if search.state != DONE else ""
    states = [(_state(c, waits), c.status) for c in shown]
    rows = [row("fact", "state", "", states)]
    if any(c.unchecked for c in shown):
        left = [_unchecked(c) for c in shown]
        rows.append(row("fact", "not checked", "", [(text, "thin") for text in left]))
    rows += [
        row("fact", "headroom", "", [(_percent(c.headroom), "") for c in shown], RIGHT),
        row("fact", "emission margin", "", [(_db(c.emission_margin), "") for c in shown], RIGHT),
        row("fact", "filters in use", "", [(str(c.filters_used), "") for c in shown], RIGHT),
        row("fact", "moves", "", [(str(c.moves), "") for c in shown], RIGHT),
    ]
    homes = [dict(c.allocation) for c in shown]
    for unit in project.converters:
        present = now.get(unit.id, "")
        texts = [(("" if h.get(unit.id, "") == present else "> ") + h.get(unit.id, "?"), "") for h in homes]
        rows.append(row("converter", f"{unit.id} {unit.name}", present or "none", texts))
    return Section(tuple(columns), tuple(rows))


def _state(candidate: Candidate, waits: str) -> str:
    if not candidate.status:
        return waits.strip() or "unknown"
    return (waits if candidate.unchecked else "") + ("FAIL" if candidate.status == "fail" else candidate.status)


def _unchecked(candidate: Candidate) -> str:
    """The stages whose checks were not made, in a word."""
    if len(candidate.unchecked) > 1:
        return "all" if not candidate.status else f"{len(candidate.unchecked)} stages"
    return candidate.unchecked[0] if candidate.unchecked else ""


def _percent(value: float | None) -> str:
    return "" if value is None else f"{value * 100:.1f} %"


def _db(value: float | None) -> str:
    return "" if value is None else f"{value:.1f} dB"


# -- wishes


def _wishes(context: Context) -> Section:
    """One row a wish, with what is to be said about it."""
    columns = (Column("wishes", 40, most=60), Column("", 36, most=80))
    rows = []
    for wish in context.options.wishes:
        state, tone, info = _of_wish(context, wish)
        cells = (Cell(words_only(report.wish(wish)), info=info), Cell(words_only(state), tone=tone, info=info))
        rows.append(Row(("wish", *wish), cells))
    if not rows:
        text = "none; n adds one, such as a redundant pair apart"
        rows.append(Row(("no wish",), (Cell(text, tone="pale", info="Wishes last as long as the sheet is open."),)))
    return Section(columns, tuple(rows))


def _of_wish(context: Context, wish: Wish) -> tuple[str, str, str]:
    """Its state in words, the tone, and a line about it."""
    help_ = "The next search (G) obeys it; R removes it."
    gone = lacking(wish, context.session.document)
    if gone:
        return f"gone: there is no {gone}", "thin", f"There is no {gone} any more; the search leaves this wish out."
    result = context.session.result
    if result is None:
        return "", "", help_
    project = result.project
    out = missing(wish, project)
    if out is not None:
        return f"left out: {out} cannot be read", "thin", f"{out} is left out until its cells can be read."
    clash = context.once("wishes", (project, context.options.wishes), lambda: contradiction(context, project))
    if wish in clash:
        others = ", ".join(report.wish(c) for c in clash if c != wish)
        text = f"cannot be together with: {others}" if others else "cannot be met"
        return "! contradiction", "fail", words_only(text)
    return ("holds now", "", help_) if holds(wish, project) else ("not so now", "", help_)


def contradiction(context: Context, project: Project) -> tuple[Wish, ...]:
    """The constraints that contradict each other, or nothing."""
    from budget.engine.placing import Task, constraints_of, task_of

    wishes = tuple(w for w in context.options.wishes if missing(w, project) is None)
    if not wishes or not project.filters:
        return ()
    found = task_of(project, constraints_of(wishes))
    return () if isinstance(found, Task) else found


def named(wish: Wish) -> tuple[tuple[str, str], ...]:
    """What a wish names: (table, id) each."""
    code, *ids = wish
    if code == "most":
        return (("filter", ids[0]),) if ids[0] else ()
    if code == "banned":
        return (("converter", ids[0]), ("filter", ids[1]))
    return tuple(("converter", one) for one in ids)


def lacking(wish: Wish, document: Document) -> str:
    """The first id of a wish that the document does not have; "" if it has all."""
    for table, ident in named(wish):
        if not any(row.get("id") == ident for _, row in rows_of(document, table)):
            return ident
    return ""


def missing(wish: Wish, project: Project) -> str | None:
    """The first id of a wish that the project does not have: gone, or left out as it cannot be read."""
    known = {"filter": {f.id for f in project.filters}, "converter": {c.id for c in project.converters}}
    return next((ident for table, ident in named(wish) if ident not in known[table]), None)


def holds(wish: Wish, project: Project) -> bool:
    """Whether the project as it stands is as a wish wants it."""
    code, *ids = wish
    home = {c.id: c.filter for c in project.converters}
    if code == "keep":
        return True
    if code == "banned":
        return home[ids[0]] != ids[1]
    if code == "most":
        places = [ids[0]] if ids[0] else [f.id for f in project.filters]
        return all(list(home.values()).count(f) <= int(ids[1]) for f in places)
    together = home[ids[0]] == home[ids[1]] and bool(home[ids[0]])
    return together if code == "together" else not together
