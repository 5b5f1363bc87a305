"""Several states of one project side by side: the worst margin of each kind of check, headroom, heat, what differs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from budget.engine.checks import ORDER, CheckRow
from budget.engine.evaluate import Result
from budget.study.compare import Variant, inputs

_LEVEL = {"fail": 3, "thin": 2, "no data": 1, "ok": 0}


@dataclass(frozen=True, slots=True)
class Line:
    """One row of the table: the worst check of a kind, or of a filter, for each variant; None where it has none."""

    label: str
    rows: tuple[CheckRow | None, ...]


@dataclass(frozen=True, slots=True)
class Beside:
    """The table: a value for each variant in every row, in their order.

    ``kinds``: the worst check of each kind; ``filters``: the current of each filter; ``heat`` [W] in the worst corner;
    ``failing`` and ``thin``: how many checks are; ``inputs``: the path of a cell with its text in each variant.
    """

    kinds: tuple[Line, ...]
    filters: tuple[Line, ...]
    heat: tuple[float | None, ...]
    failing: tuple[int | None, ...]
    thin: tuple[int | None, ...]
    inputs: tuple[tuple[str, tuple[str, ...]], ...]


def beside(variants: Sequence[Variant]) -> Beside:
    """All variants in one table; what differs in the inputs is told against the first."""
    results = [v.result for v in variants]
    found = [_worst_by_kind(r) for r in results]
    kinds = sorted({kind for one in found for kind in one}, key=_order)
    filters = list(dict.fromkeys(f.id for r in results if r is not None for f in r.project.filters))
    currents = [
        {row.subject: row for row in r.checks if row.check == "filter current"} if r is not None else {}
        for r in results
    ]
    return Beside(
        tuple(Line(kind, tuple(one.get(kind) for one in found)) for kind in kinds),
        tuple(Line(name, tuple(one.get(name) for one in currents)) for name in filters),
        tuple(_heat(r) for r in results),
        tuple(_count(r, "fail") for r in results),
        tuple(_count(r, "thin") for r in results),
        _inputs(variants),
    )


def _order(kind: str) -> tuple[int, str]:
    name = kind if kind in ORDER else kind.partition(" ")[0]  # "emission CE102"
    return (ORDER.index(name) if name in ORDER else len(ORDER)), kind


def severity(row: CheckRow) -> tuple[int, float]:
    """A key by which the worst check is the largest."""
    return _LEVEL[row.status], -(row.margin if row.margin is not None else 1e9)


def _worst_by_kind(result: Result | None) -> dict[str, CheckRow]:
    worst: dict[str, CheckRow] = {}
    for row in result.checks if result is not None else ():
        if row.check not in worst or severity(row) > severity(worst[row.check]):
            worst[row.check] = row
    return worst


def _count(result: Result | None, status: str) -> int | None:
    return None if result is None else sum(row.status == status for row in result.checks)


def _heat(result: Result | None) -> float | None:
    """Everything that does not leave as output power, in the worst solved corner [W]."""
    if result is None:
        return None
    op = result.operating
    heat = op.source_voltage[None, :] * op.bus_current - op.output_power.sum(axis=1)[:, None]
    return float(heat[op.solved].max()) if op.solved.any() else None


def _inputs(variants: Sequence[Variant]) -> tuple[tuple[str, tuple[str, ...]], ...]:
    first, *others = variants
    told = [{i.path: i for i in inputs(first, other)} for other in others]
    table = []
    for path in dict.fromkeys(path for one in told for path in one):
        before = next(one[path].before for one in told if path in one)
        table.append((path, (before, *(one[path].after if path in one else before for one in told))))
    return tuple(table)
