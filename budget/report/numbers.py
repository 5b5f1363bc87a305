"""The numbers of the sheet for one corner, or the worst of all of them, each with the corner it comes from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from budget.engine.model import LINES

if TYPE_CHECKING:
    from budget.engine.evaluate import Result

Corner = tuple[str, str]  # case id, line


@dataclass(frozen=True, slots=True)
class Number:
    value: float
    corner: str  # in words
    share: float | None = None


@dataclass(frozen=True, slots=True)
class Numbers:
    """By row: the bus, each filter and each converter by index; a missing key has no value."""

    bus: dict[str, Number]
    filters: list[dict[str, Number]]
    converters: list[dict[str, Number]]
    allowed: list[float | None]
    heat: dict[tuple[str, int], str]  # where the heat of a row arises, in words
    unsolved: int


def corner_index(result: Result, corner: Corner | None) -> tuple[int, int] | None:
    """The place of a corner in the result's arrays; None for the worst of all, or a case that is gone."""
    if corner is None:
        return None
    cases = [case.id for case in result.project.cases]
    return (cases.index(corner[0]), LINES.index(corner[1])) if corner[0] in cases else None


def numbers(result: Result, corner: Corner | None) -> Numbers:
    """Everything the sheet shows of ``result``: at ``corner``, or the worst over all solved corners (None)."""
    import numpy as np

    op, project = result.operating, result.project
    from budget.engine.operating import allowed_current

    cases, filters = len(project.cases), len(project.filters)
    lines = 3
    home = op.home
    member = (home[None, :] == np.arange(filters)[:, None]).astype(float) if filters else np.zeros((0, len(home)))
    out = np.broadcast_to(op.output_power[:, None, :], op.current.shape)
    taken = np.broadcast_to(op.input_power[:, None, :], op.current.shape)
    lead = np.nan_to_num(op.lead_loss)
    own = np.broadcast_to(op.loss[:, None, :], op.current.shape)
    filter_out = out @ member.T
    filter_in = op.bus_voltage[:, :, None] * op.filter_current
    source = op.source_voltage[None, :] * op.bus_current
    total_out = out.sum(axis=2)
    allowed = allowed_current(project)
    at = corner_index(result, corner)
    solved = op.solved

    chosen = np.zeros(lines, dtype=np.bool_)
    chosen[list(result.lines)] = True
    flat = (solved & chosen).reshape(-1)
    names = [f"{case.id}, {line} line" for case in project.cases for line in LINES]

    def pick(values: Any, largest: bool = True) -> tuple[list[float], list[str]]:
        """(C, 3, K) -> the shown value of each of the K columns and its corner."""
        table = np.asarray(values).reshape(cases * lines, -1)
        if at is not None:
            row = at[0] * lines + at[1]
            return (table[row].tolist() if flat[row] else [float("nan")] * table.shape[1]), [""] * table.shape[1]
        if not flat.any():
            return [float("nan")] * table.shape[1], [""] * table.shape[1]
        masked = np.where(flat[:, None] & np.isfinite(table), table, -np.inf if largest else np.inf)
        rows = masked.argmax(axis=0) if largest else masked.argmin(axis=0)
        found = np.take_along_axis(masked, rows[None, :], axis=0)[0]
        return found.tolist(), [names[r] for r in rows.tolist()]

    def gather(count: int, **columns: tuple[Any, bool]) -> list[dict[str, Number]]:
        rows: list[dict[str, Number]] = [{} for _ in range(count)]
        for key, (values, largest) in columns.items():
            found, where = pick(values, largest)
            for row, value, name in zip(rows, found, where, strict=True):
                if np.isfinite(value):
                    row[key] = Number(float(value), name)
        return rows

    bus = gather(
        1,
        out=(total_out, True),
        taken=(source, True),
        current=(op.bus_current, True),
        voltage=(op.bus_voltage, False),
        heat=(source - total_out, True),
    )[0]
    rows = gather(
        filters,
        out=(filter_out, True),
        taken=(filter_in, True),
        current=(op.filter_current, True),
        voltage=(op.filter_voltage, False),
        heat=(filter_in - filter_out, True),
    )
    units = gather(
        len(project.converters),
        out=(out, True),
        taken=(taken, True),
        current=(op.current, True),
        voltage=(op.voltage, False),
        heat=(own + lead, True),
    )
    limits = [float(a) if np.isfinite(a) else None for a in allowed.tolist()]
    return Numbers(bus, rows, units, limits, _heat(op, pick, member, own, lead), int((~solved).sum()))


def _heat(op: Any, pick: Any, member: Any, own: Any, lead: Any) -> dict[tuple[str, int], str]:
    words: dict[tuple[str, int], str] = {}
    of_filter, of_lead = pick(op.filter_loss)[0], pick(lead)[0]
    of_unit, leads, units = pick(own)[0], pick(lead @ member.T)[0], pick(own @ member.T)[0]
    for f, value in enumerate(of_filter):
        words["filter", f] = f"{value:.3g} W in the filter, {leads[f]:.3g} W in leads, {units[f]:.3g} W in converters"
    for n, value in enumerate(of_unit):
        words["converter", n] = f"{value:.3g} W in the converter, {of_lead[n]:.3g} W in its lead"
    words["bus", 0] = f"of it {pick(op.bus_loss)[0][0]:.3g} W in the feed"
    return words
