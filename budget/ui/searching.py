"""Commands of the allocation view: search, stop, take a candidate, and the wishes that a search must obey."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from budget.project import edits
from budget.project.problems import ProjectError
from budget.report import allocation as report
from budget.ui.allocation import CHECKING, DONE, FIRST, Search, Wish, missing, same_bus
from budget.ui.desk import Desk, Work
from budget.ui.sheet import rows_of, words_only

if TYPE_CHECKING:
    from budget.engine.candidates import Allocation, Candidate

TELL = 0.1  # s, at least, between two looks at what a search has

Cancelled = Callable[[], bool]
Progress = Callable[[float], None]

GOALS = (
    ("even: the largest headroom", "even"),
    ("fewest: the fewest filters in use, then the largest headroom", "fewest"),
    ("quiet: the largest emission margin", "quiet"),
)


def propose(desk: Desk) -> None:
    """Search in the background for the best allocation, showing the best so far; while it runs, stop it."""
    search: Search | None = desk.options.allocation
    if _runs(desk, search):
        desk.stop_job()
        return
    result = desk.session.result
    if result is None:
        raise ProjectError("there are no results yet to search with.")
    if not desk.session.fresh:
        raise ProjectError("the last edit is still being calculated; search when it is done.")
    project = result.project
    items: list[tuple[str, Any]] = list(GOALS)
    at = next((k for k, (_, goal) in enumerate(GOALS) if search is not None and goal == search.goal), 0)
    if search is not None and any(c.unchecked for c in search.candidates) and same_bus(search.project, project):
        items.insert(0, ("go on with the checks of the candidates", None))
        at = 0

    def start(goal: str | None) -> None:
        if goal is None and search is not None:
            _start(desk, replace(search, state=CHECKING), _check)
            return
        wishes = tuple(w for w in desk.options.wishes if missing(w, project) is None)
        ids = tuple(edits.ids(desk.session.document, "converter"))
        _start(desk, Search(goal or "even", project, wishes, ids), _search)
        left = [report.wish(w) for w in desk.options.wishes if w not in wishes]
        if left:
            desk.say(words_only(f"left out, as they name what is not there: {', '.join(left)}"), "thin")

    desk.pick("search for which allocation?", items, start, at)


def _runs(desk: Desk, search: Search | None) -> bool:
    """Whether this search is the calculation that runs now."""
    return search is not None and search.state != DONE and desk.job is not None and desk.job.label == search.label


class _Teller:
    """Brings what a search finds to the screen, from the thread of the search and not more often than can be seen."""

    def __init__(self, desk: Desk, search: Search, cancelled: Cancelled, progress: Progress, whole: float) -> None:
        self.desk, self.token, self.state = desk, search.token, search.state
        self._cancelled, self._progress, self._whole = cancelled, progress, whole
        self._begun = self._last = time.monotonic()
        self._share = 0.0
        self._waiting: Allocation | None = None
        self._first = True

    def cancelled(self) -> bool:
        """Asked often by a search; the time it takes is told by the way."""
        now = time.monotonic()
        self._tell(min((now - self._begun) / self._whole, 0.99))
        if self._waiting is not None and (self._first or now >= self._last + TELL):
            self.show(self._waiting)
        return self._cancelled()

    def hear(self, found: Allocation) -> None:
        """Something better was found: shown at the next occasion."""
        self._waiting = found

    def show(self, found: Allocation | None, state: str = "") -> None:
        self._waiting, self._first, self._last = None, False, time.monotonic()
        self.state = state or self.state
        desk, token, now = self.desk, self.token, self.state
        desk.later(lambda: _show(desk, token, found, now))

    def share(self, number: int, count: int) -> Progress:
        """Progress of one of several parts."""
        return lambda share: self._tell((number + share) / count)

    def _tell(self, share: float) -> None:
        if share >= self._share + 0.05 or share < self._share:  # each word costs the terminal bytes
            self._share = share
            self._progress(share)


Run = Callable[[Search, _Teller, Cancelled], "Allocation | None"]


def _start(desk: Desk, search: Search, what: Run) -> None:
    from budget.engine.allocate import TIME

    desk.options = replace(desk.options, allocation=search)
    desk.view_name = "allocation"
    cursor = desk.cursor
    cursor.key, cursor.index, cursor.top, cursor.column = (), 0, 0, FIRST
    stopped: list[bool] = []

    def run(cancelled: Cancelled, progress: Progress) -> Any:
        teller = _Teller(desk, search, cancelled, progress, TIME)
        try:
            found = what(search, teller, cancelled)
        except BaseException:
            teller.show(None, DONE)  # it will be told; what was found before stays
            raise
        stopped.append(cancelled())
        return found

    def done(found: Allocation | None) -> None:
        _show(desk, search.token, found, DONE)
        if True in stopped and desk.job is None:
            desk.say("stopped; what was found so far is kept")

    desk.start_job(Work(search.label, run, done, keeps=True))


def _search(search: Search, teller: _Teller, cancelled: Cancelled) -> Allocation:
    """Find the candidates; then check them, see ``_check``."""
    from budget.engine.allocate import allocate
    from budget.engine.candidates import so_far
    from budget.engine.evaluate import evaluate_dc
    from budget.engine.placing import constraints_of

    def better(best: Candidate, bound: float | None) -> None:
        teller.hear(so_far(search.goal, best, bound))

    found = allocate(
        search.project,
        search.goal,
        constraints_of(search.wishes),
        cancelled=teller.cancelled,
        progress=better,
        finish=evaluate_dc,
    )
    if cancelled() or not found.candidates:
        return found
    return _check(replace(search, found=found), teller, cancelled) or found


def _check(search: Search, teller: _Teller, cancelled: Cancelled) -> Allocation | None:
    """Make the checks that were not made yet, stage by stage of all candidates: the fast ones are there at once."""
    from budget.engine.candidates import STAGES, moved, with_checks
    from budget.engine.evaluate import evaluate_dc, with_emissions, with_inrush, with_stability
    from budget.engine.transient import CancelledError

    found = search.found
    if found is None:
        return None
    teller.show(found, CHECKING)
    units = sorted(found.candidates, key=lambda c: c.place)
    results = {c.allocation: evaluate_dc(moved(search.project, c.allocation)) for c in units if c.unchecked}
    for stage, make in zip(STAGES[1:], (with_emissions, with_stability, None), strict=True):
        for number, places in enumerate(results):
            if cancelled():
                return found
            result = results[places]
            share = teller.share(number, len(results))
            share(0.0)
            try:
                result = with_inrush(result, cancelled, share) if make is None else make(result)
            except CancelledError:
                return found
            results[places] = result
            if any(c.allocation == places and stage in c.unchecked for c in found.candidates):
                found = with_checks(found, places, result)
                teller.show(found)
    return found


def _show(desk: Desk, token: object, found: Allocation | None, state: str) -> None:
    """Take what a search has, unless a newer one took its place.

    The cursor stays on its candidate, wherever that stands now; on the first it stays on the first, which is the best.
    """
    search: Search | None = desk.options.allocation
    if search is None or search.token is not token:
        return
    if found is None:  # it ended in the middle
        found = search.found
        if found is not None and "searching" in found.note:
            found = replace(found, note=("stopped",))
    if search.state != state and desk.job is not None and desk.job.label == search.label:
        desk.job.label = replace(search, state=state).label
    cursor = desk.cursor if desk.view_name == "allocation" else None
    on = cursor.column - FIRST if cursor is not None else -1
    new = replace(search, found=found, state=state)
    desk.options = replace(desk.options, allocation=new)
    if cursor is not None and 0 < on < len(search.candidates):
        here = search.candidates[on].allocation
        at = next((k for k, c in enumerate(new.candidates) if c.allocation == here), min(on, len(new.candidates) - 1))
        cursor.column = FIRST + max(0, at)


# -- what the cursor is on


def enter(desk: Desk) -> None:
    """On a candidate, take it; on a wish with a number, change the number."""
    row, _ = desk.here()
    if row is not None and row.key[0] in ("fact", "converter"):
        take_candidate(desk)
    elif row is not None and row.key[:2] == ("wish", "most"):
        _ask_number(desk, str(row.key[2]), str(row.key[3]))
    elif row is not None and row.key[0] == "wish":
        raise ProjectError("a wish has nothing to type; R removes it, n makes another.")
    elif row is not None and row.key[0] == "no wish":
        new_wish(desk)
    else:
        raise ProjectError("the cursor is not on a candidate.")


def take_candidate(desk: Desk) -> None:
    """Put every converter where the candidate under the cursor has it, as one edit."""
    search: Search | None = desk.options.allocation
    column = desk.cursor.column - FIRST
    if search is None or not 0 <= column < len(search.candidates):
        raise ProjectError("the cursor is not on a candidate.")
    document = desk.session.document
    homes = dict(search.candidates[column].allocation)
    ids, filters = edits.ids(document, "converter"), edits.ids(document, "filter")
    for what, names in (
        ("is gone", [unit for unit in homes if unit not in ids]),
        ("is gone", sorted({home for home in homes.values() if home not in filters})),
        ("came", [unit for unit in ids if unit not in search.ids]),
    ):
        if names:
            many = what.replace("is", "are") if len(names) > 1 else what
            raise ProjectError(words_only(f"{', '.join(names)} {many} since this search; search again (G)."))
    for index, row in rows_of(document, "converter"):
        home = homes.get(str(row.get("id")))
        if home is not None and home != row.get("filter"):
            document = edits.to_filter(document, index, home)
    desk.change(f"allocation no. {column + 1}", document)


# -- wishes

KINDS = (
    ("keep: a converter stays where it is", "keep"),
    ("apart: two not behind one filter, a redundant pair", "apart"),
    ("together: two behind one filter", "together"),
    ("not behind: a converter not behind a filter", "banned"),
    ("at most: so many converters behind a filter, or behind each", "most"),
)


def new_wish(desk: Desk) -> None:
    """Ask for a kind, then for what it names; the converter under the cursor is offered first."""
    desk.pick("a new wish", list(KINDS), lambda code: _begin(desk, code))


def _begin(desk: Desk, code: str) -> None:
    row, _ = desk.here()
    units = _named(desk, "converter")
    under = row.cells[0].text if row is not None and row.key[0] == "converter" else ""
    at = next((k for k, (text, _) in enumerate(units) if text == under), 0)
    if code == "most":
        places = [("each filter", ""), *_named(desk, "filter")]
        desk.pick("at most so many behind", places, lambda where: _ask_number(desk, where, ""))
    elif code == "keep":
        desk.pick("which converter stays where it is?", units, lambda one: _add(desk, ("keep", one)), at)
    elif code == "banned":
        desk.pick("which converter?", units, lambda one: _then_filter(desk, one), at)
    else:
        desk.pick(f"{code}: the first converter", units, lambda one: _then_other(desk, code, one), at)


def _then_filter(desk: Desk, one: str) -> None:
    desk.pick(f"{one} not behind", _named(desk, "filter"), lambda where: _add(desk, ("banned", one, where)))


def _then_other(desk: Desk, code: str, one: str) -> None:
    others = [(text, ident) for text, ident in _named(desk, "converter") if ident != one]
    desk.pick(f"{one} {code} {'with' if code == 'together' else 'from'}", others, lambda b: _add(desk, (code, one, b)))


def _named(desk: Desk, table: str) -> list[tuple[str, str]]:
    """(id and name, id) of the converters or filters."""
    rows = rows_of(desk.session.document, table)
    pairs = ((str(row.get("id", "")), str(row.get("name", ""))) for _, row in rows)
    return [(words_only(f"{ident} {name}"), ident) for ident, name in pairs if ident]


def _ask_number(desk: Desk, where: str, now: str) -> None:
    def accept(text: str) -> None:
        text = text.strip()
        if not (text.isascii() and text.isdigit() and int(text[:9]) > 0):
            raise ProjectError("a number of converters from 1 on was expected.")
        _add(desk, ("most", where, str(int(text[:9]))))

    desk.prompt(f"at most how many behind {where or 'each filter'}", now, accept)


def _add(desk: Desk, wish: Wish) -> None:
    wishes = desk.options.wishes
    same = [w for w in wishes if _same(w, wish)]
    if wish in same or (same and wish[0] != "most"):
        raise ProjectError(words_only(f"{report.wish(same[0])}: this wish is there already."))
    wishes = tuple(wish if w in same else w for w in wishes) if same else (*wishes, wish)
    desk.options = replace(desk.options, wishes=wishes)
    desk.cursor.key, desk.cursor.index = ("wish", *wish), -1
    desk.say(words_only(f"wish: {report.wish(wish)}; the next search (G) obeys it"))


def _same(one: Wish, two: Wish) -> bool:
    """Whether two wishes are about the same: one number a filter, and pairs without an order."""
    if one[0] != two[0]:
        return False
    if one[0] == "most":
        return one[1] == two[1]
    return one == two or (one[0] in ("apart", "together") and set(one[1:]) == set(two[1:]))


def remove_wish(desk: Desk) -> None:
    row, _ = desk.here()
    if row is None or row.key[0] != "wish":
        raise ProjectError("the cursor is not on a wish; R removes one.")
    wish = tuple(row.key[1:])
    desk.options = replace(desk.options, wishes=tuple(w for w in desk.options.wishes if w != wish))
    desk.cursor.key = ()
    desk.say(words_only(f"wish removed: {report.wish(wish)}"))


ACTIONS: dict[str, Callable[[Desk], None]] = {"propose": propose}
