"""What tells two projects apart: the inputs that differ, and the checks that came out otherwise.

Rows are matched by their ids, so that their order does not matter, and with what their shelf parts lend them, so that
it does not matter where a value stands. Two ways to write one number are no difference, nor is a default written out.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from budget import quantity
from budget.engine.checks import CheckRow
from budget.engine.evaluate import Energy, Result
from budget.project import edits, read, schema, toml_dump
from budget.project.build import Shelf
from budget.project.document import Document, Path
from budget.study.paths import text_of

WORSE, BETTER, OTHER, NEW, GONE = "worse", "better", "other", "new", "gone"
CHANGED, ADDED, REMOVED = "changed", "added", "removed"
_LEVEL = {"fail": 3, "thin": 2, "no data": 1, "ok": 0}
_SAME = 1e-9  # of a value or margin; less is no difference
_EQUAL = 1e-12  # of an input; the two texts mean one number


@dataclass(frozen=True, slots=True)
class Variant:
    """One of the two: what it is called, the file's data and what was calculated from it (None: nothing yet)."""

    name: str
    document: Document
    shelves: tuple[Shelf, ...]
    result: Result | None


@dataclass(frozen=True, slots=True)
class Input:
    """An input that differs, with both texts as typed; "" where there is none. ``path`` is one to type."""

    path: str
    kind: str  # "changed", "added" (a row or a value that the first has not), "removed"
    before: str
    after: str


@dataclass(frozen=True, slots=True)
class Change:
    """A check that came out otherwise; ``verdict`` is "worse", "better", "other", "new" or "gone".

    Worse and better go by the status, and where that is the same by the margin; "other" has no margin to go by.
    """

    verdict: str
    before: CheckRow | None
    after: CheckRow | None

    @property
    def row(self) -> CheckRow:
        row = self.after or self.before
        assert row is not None
        return row

    @property
    def turned_worse(self) -> bool:
        """Whether the status itself got worse, a failing check fails by more, or a new check is bad from the start."""
        if self.after is None:
            return False
        if self.before is None:
            return self.after.status in ("fail", "thin")
        if self.before.status != self.after.status:
            return _LEVEL[self.after.status] > _LEVEL[self.before.status]
        return self.verdict == WORSE and self.after.status == "fail"


@dataclass(frozen=True, slots=True)
class EnergyChange:
    """A case that takes another energy from the source [Wh]; None where it has none in one of the two."""

    case: str
    before: float | None
    after: float | None


@dataclass(frozen=True, slots=True)
class Comparison:
    """The second against the first. ``checks`` stand worst first."""

    before: str
    after: str
    status: tuple[str, str]
    inputs: tuple[Input, ...]
    checks: tuple[Change, ...]
    energy: tuple[EnergyChange, ...]

    @property
    def worse(self) -> bool:
        """Whether a check got worse: its status fell, it fails by more, or it is new and bad; see also ``lower``."""
        return any(change.turned_worse for change in self.checks)

    @property
    def lower(self) -> bool:
        """Whether any margin got smaller at all, be it still large enough."""
        return any(change.verdict == WORSE for change in self.checks)


def compare(before: Variant, after: Variant) -> Comparison:
    """Everything that differs between two calculated projects; both should be calculated to the same depth.

    A check that only one of the two calculated is "new" or "gone", and so is that of a subject only one of them has.
    """
    assert before.result is not None
    assert after.result is not None
    return Comparison(
        before.name,
        after.name,
        (before.result.status, after.result.status),
        inputs(before, after),
        tuple(sorted(_changes(before.result, after.result), key=_severity)),
        tuple(_energy(before.result, after.result)),
    )


# -- inputs ----------------------------------------------------------------------------------------------------------


def inputs(before: Variant, after: Variant) -> tuple[Input, ...]:
    """What differs in what was entered."""
    return tuple(_inputs(before, after))


def _inputs(before: Variant, after: Variant) -> Iterator[Input]:
    a, b = _rows(before.document), _rows(after.document)
    for key in dict.fromkeys((*a, *b)):
        if key not in b:
            yield Input(text_of(before.document, a[key]), REMOVED, _named(before.document, a[key]), "")
        elif key not in a:
            yield Input(text_of(after.document, b[key]), ADDED, "", _named(after.document, b[key]))
        else:
            yield from _cells(before, a[key], after, b[key])


def _rows(document: Document) -> dict[tuple[str, str], Path]:
    """The paths of single tables and rows, by table and id; of two rows with one id the first is meant."""
    found: dict[tuple[str, str], Path] = {}
    for key, table in schema.TABLES_BY_KEY.items():
        if not table.many:
            found[key, ""] = (key,)
            continue
        rows = document.data.get(key)
        column = "name" if key == "limit" else "id"
        for index, row in enumerate(rows if isinstance(rows, list) else ()):
            ident = row.get(column) if isinstance(row, dict) else None
            name = ident if isinstance(ident, str) and ident else f"#{index + 1}"
            found.setdefault((key, name), (key, index))
    return found


def _named(document: Document, path: Path) -> str:
    name = edits.value_at(document, (), (*path, "name"))[0]
    label = schema.TABLES_BY_KEY[str(path[0])].label
    return f"{label} {name}" if isinstance(name, str) and name and path[0] != "limit" else label


def _cells(before: Variant, base_a: Path, after: Variant, base_b: Path) -> Iterator[Input]:
    a = dict(_leaves(before, base_a))
    b = dict(_leaves(after, base_b))
    for rest in dict.fromkeys((*a, *b)):
        spec = edits.spec_at((*base_b, *rest))
        if rest in a and rest in b and toml_dump.same(a[rest], b[rest]):
            continue
        if _meaning(spec, a.get(rest)) == _meaning(spec, b.get(rest)):
            continue
        kind = CHANGED if rest in a and rest in b else ADDED if rest in b else REMOVED
        base, document = (base_b, after.document) if rest in b else (base_a, before.document)
        yield Input(text_of(document, (*base, *rest)), kind, edits.typed(a.get(rest)), edits.typed(b.get(rest)))


def _leaves(side: Variant, base: Path) -> Iterator[tuple[Path, Any]]:
    """The cells of a row below its path, with what the shelf lends."""
    row: Any = side.document.data.get(str(base[0]), {})
    if len(base) > 1:
        row = row[base[1]]
    if isinstance(row, dict):
        part = edits.part_of(side.document, side.shelves, base) if len(base) > 1 else {}
        for key in dict.fromkeys((*row, *part)):
            if key != "id" or len(base) == 1:
                yield from _walk((key,), row[key] if key in row else part[key])


def _walk(path: Path, value: Any) -> Iterator[tuple[Path, Any]]:
    if isinstance(value, dict):
        place = next((p for p in edits.PLACES if p in value), None) if isinstance(path[-1], int) else None
        if place is not None:  # an element of a ladder is one table, its place a field
            yield (*path, "place"), place
            value = {**{k: v for k, v in value.items() if k != place}, **_table(value[place])}
        for key, inner in value.items():
            yield from _walk((*path, key), inner)
    elif isinstance(value, list) and not (value and all(isinstance(item, str) for item in value) and len(path) == 1):
        for index, inner in enumerate(value):
            yield from _walk((*path, index), inner)
    else:
        yield path, value


def _table(value: Any) -> dict[str, Any]:
    return value if isinstance(value, dict) else {}


def _meaning(spec: schema.Field | None, raw: Any) -> Any:
    """What a cell says: a number as one to compare, a default where nothing stands, anything else as its text."""
    try:
        if spec is schema.LOAD:
            kind, number = read.read_load(raw) if raw is not None else ("share", 1.0)
            return kind, _rounded(number)
        if spec is not None and spec.kind == schema.CURVE and not isinstance(raw, list):
            spec = spec.fields[-1]
        if spec is not None and spec.kind in quantity.KINDS:
            value = spec.default if raw is None else read.quantity_value(spec, raw)
            return _rounded(value) if isinstance(value, int | float) else value
    except ValueError:
        return edits.typed(raw)
    if spec is not None and raw is None:
        return edits.typed(list(spec.default) if isinstance(spec.default, tuple) else spec.default)
    return edits.typed(raw)


def _rounded(value: float) -> float:
    """To 12 digits: '0.1 * 3' and '0.3' are one number."""
    return float(f"{value:.{int(-math.log10(_EQUAL)) - 1}e}")


# -- results ---------------------------------------------------------------------------------------------------------


def _changes(before: Result, after: Result) -> Iterator[Change]:
    a = {(row.check, row.subject): row for row in before.checks}
    b = {(row.check, row.subject): row for row in after.checks}
    for key in dict.fromkeys((*a, *b)):
        one, two = a.get(key), b.get(key)
        if one is None or two is None:
            yield Change(NEW if one is None else GONE, one, two)
            continue
        verdict = _verdict(one, two)
        if verdict:
            yield Change(verdict, one, two)


def _verdict(one: CheckRow, two: CheckRow) -> str:
    """What became of a check; empty where nothing did."""
    if one.status != two.status:
        return WORSE if _LEVEL[two.status] > _LEVEL[one.status] else BETTER
    if one.margin is not None and two.margin is not None:
        if not _near(one.margin, two.margin):
            return WORSE if two.margin < one.margin else BETTER
    elif one.margin is not None or two.margin is not None:
        return OTHER
    same = all(_near(x, y) for x, y in ((one.value, two.value), (one.limit, two.limit), (one.wanted, two.wanted)))
    return "" if same and one.remarks == two.remarks else OTHER


def _near(one: float | None, two: float | None) -> bool:
    if one is None or two is None:
        return one is two
    return one == two or abs(one - two) <= _SAME * max(abs(one), abs(two), 1e-3)


def _severity(change: Change) -> tuple[int, int, float]:
    order = {WORSE: 0, NEW: 2, OTHER: 3, BETTER: 4, GONE: 5}[change.verdict]
    margin = change.row.margin
    return 0 if change.turned_worse else order + 1, -_LEVEL[change.row.status], margin if margin is not None else 0.0


def _energy(before: Result, after: Result) -> Iterator[EnergyChange]:
    def by_case(rows: tuple[Energy, ...]) -> dict[str, float | None]:
        return {row.case: row.energy_wh for row in rows}

    a, b = by_case(before.energy), by_case(after.energy)
    for case in dict.fromkeys((*a, *b)):
        if not _near(a.get(case), b.get(case)):
            yield EnergyChange(case, a.get(case), b.get(case))
