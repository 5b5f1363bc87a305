"""The DC operating point of every load case at the low, nominal and high line, all at once.

Why plain Newton from no load is safe here. A converter that takes the power P through a lead r from the voltage v at
its filter's output draws i(v) = 2 P / (v + sqrt(v^2 - 4 r P)), the upper root of v i - r i^2 = P written without
cancellation. It falls with v and is convex where it exists: di/dv = -i / sqrt(v^2 - 4 r P). With the voltages
x = (v_f of each filter, v_b of the bus node) and the currents I_f(v_f) = sum of i, the network is F(x) = 0 with

    F_f = v_f + R_f I_f(v_f) - v_b,        F_b = v_b + R_b sum_f I_f(v_f) - V_source.

F is convex, and no row of its Jacobian J has a positive entry off the diagonal (J is a Z-matrix). At no load,
x0 = V_source everywhere, F(x0) >= 0. Every solution x* lies below x0, for no current is negative.

1. Let x lie above x* with F(x) >= 0, and z = x - x* >= 0. Convexity gives 0 = F(x*) >= F(x) - J z, so J z >= F(x) >= 0.
   The row of a filter reads a_f z_f >= F_f + z_b with the pivot a_f = 1 + R_f dI_f/dv_f, and eliminating the filters
   leaves b z_b >= F_b + R_b sum_f (-dI_f/dv_f) F_f / a_f with the bus pivot b = 1 + R_b sum_f (dI_f/dv_f) / a_f.
   So the pivots are positive and J is an M-matrix (its inverse has no negative entry), unless a part of the network
   has arrived: F = 0 there, and z = 0. Parts arrive alone only where R_b = 0 and the filters do not see each other.
2. The Newton step d = J^-1 F is then not negative, and d <= z, so x - d is above x* still; convexity once more gives
   F(x - d) >= F(x) - J d = 0. The iterates fall, and 1. holds for each of them. They converge to the greatest
   solution, which is the one continued from no load.
3. Hence a negative discriminant, a voltage that is not positive, or a pivot <= 0 where F is not zero proves that there
   is no solution: it would lie below the iterate, where discriminant and voltage are worse, and 1. would hold. Without
   a solution the falling iterates must meet one of these, since a limit would be a solution.

A corner counts as solved when the residual F is at the level of rounding, a few 1e-15 of the source voltage. Exactly at
the limit (12 V behind 1 ohm with 36 W: 6 V, 6 A) the root is double: Newton halves its step, gets to that residual
after some 25 steps, and the voltage is then good to the square root of rounding (1e-7) and no better. A load beyond
the limit by less than some 1e-14 of itself (rising with the square root of the number of converters) cannot be told
from one at the limit and counts as solved.

Sums run per corner in a fixed order, so that a corner has the same bits whatever is computed beside it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Converter, Filter, Project

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

ROUNDING = 1e-12  # relative; a value this close to a limit or to the end of a table is at it
_STEPS = 200  # far above need: a double root takes about 25
_TINY = 1e-150  # stands for a square root of zero under a quotient; its inverse still has room before overflow


@dataclass(frozen=True, slots=True)
class Loads:
    """What each case asks of each converter; shapes (case C, converter N), powers in W.

    ``home`` (N,) is the index of the converter's filter, -1 if it has none; such a converter has zero powers.
    ``running``: not switched off by the case, and allocated. ``beyond_data``: above the last efficiency point.
    """

    home: Indices
    output_power: Floats
    input_power: Floats
    running: Bools
    beyond_data: Bools


@dataclass(frozen=True, slots=True)
class Operating:
    """Operating points; axes case (C), line (3: low, nominal, high), filter (F) or converter (N), in project order.

    Where ``solved`` is false the electrical values of that corner are nan; powers and losses of converters are not, for
    they do not depend on the voltage. A converter without a filter has zero powers, zero current and the voltage nan.
    """

    solved: Bools  # (C, 3)
    source_voltage: Floats  # (3,) V
    bus_voltage: Floats  # (C, 3) V at the node where the filters are tied together
    bus_current: Floats  # (C, 3) A from the source
    bus_loss: Floats  # (C, 3) W in the bus resistance
    filter_current: Floats  # (C, 3, F) A
    filter_voltage: Floats  # (C, 3, F) V at the filter's output
    filter_loss: Floats  # (C, 3, F) W
    output_power: Floats  # (C, N) W
    input_power: Floats  # (C, N) W at the terminals
    loss: Floats  # (C, N) W, input less output
    current: Floats  # (C, 3, N) A
    voltage: Floats  # (C, 3, N) V at the terminals
    lead_loss: Floats  # (C, 3, N) W
    running: Bools  # (C, N) not switched off, and allocated
    beyond_data: Bools  # (C, N) output power above the last efficiency point
    home: Indices  # (N,) index of the filter, -1 without one
    filter_resistance: Floats  # (F,) ohm
    lead_resistance: Floats  # (N,) ohm


def series_resistance(part: Filter) -> float:
    """DC loop resistance of a filter [ohm]: its table's ``resistance``, or the series R of its ``dm`` ladder summed."""
    if part.attenuation:
        return part.resistance
    return sum(branch.R for branch in part.dm if branch.place == "series")


def derating(temperature: float, start: float | None, end: float | None) -> float:
    """Share of a rating left at ``temperature``: 1 up to ``start``, falling linearly to 0 at ``end`` and above [degC].

    Without both ``start`` and ``end`` there is no derating.
    """
    if start is None or end is None:
        return 1.0
    if temperature >= end:
        return 0.0
    if temperature <= start:
        return 1.0
    return (end - temperature) / (end - start)


def allowed_current(project: Project) -> Floats:
    """Derated current rating of each filter, shape (F,) [A]; nan where no rating was entered."""
    degrees = project.bus.temperature
    return np.array(
        [
            np.nan if f.rated_current is None else f.rated_current * derating(degrees, f.derate_from, f.derate_to)
            for f in project.filters
        ],
        dtype=np.float64,
    )


def loads(project: Project) -> Loads:
    """Output and input power of every converter in every case, see :class:`Loads`."""
    converters, cases = project.converters, project.cases
    filters = {f.id: k for k, f in enumerate(project.filters)}
    filters.pop("", None)
    home = np.array([filters.get(c.filter, -1) for c in converters], dtype=np.intp)
    full = [sum(abs(o.voltage) * o.current for o in c.output) for c in converters]
    common = project.rules.growth
    growth = np.array([1.0 + (common if c.growth is None else c.growth) for c in converters], dtype=np.float64)

    output = np.tile(np.array(full, dtype=np.float64), (len(cases), 1))
    off = np.zeros(output.shape, dtype=np.bool_)
    index = {c.id: k for k, c in enumerate(converters)}
    for row, case in enumerate(cases):
        for name, load in case.load:
            column = index.get(name)
            if column is None:
                continue
            off[row, column] = load.kind == "off"
            if load.kind == "share":
                output[row, column] = full[column] * load.value
            else:
                output[row, column] = load.value if load.kind == "power" else 0.0
    output *= growth

    loss, beyond = _loss(converters, output)
    off_power = np.array([c.off_power for c in converters], dtype=np.float64)
    taken = np.where(off, off_power, output + loss)
    allocated = home >= 0
    return Loads(
        home=home,
        output_power=np.where(allocated, output, 0.0),
        input_power=np.where(allocated, taken, 0.0),
        running=allocated & ~off,
        beyond_data=allocated & beyond,
    )


def _loss(converters: tuple[Converter, ...], output: Floats) -> tuple[Floats, Bools]:
    """Loss [W] at the output powers (C, N) [W], and whether they lie beyond the last efficiency point.

    Constant efficiency below the first point is a straight line of loss through zero, so that every table begins with
    (0, 0) or (0, idle power).
    """
    if not output.size:
        return np.zeros(output.shape), np.zeros(output.shape, dtype=np.bool_)
    points: list[float] = []
    losses: list[float] = []
    ends: list[int] = []
    last_ratio: list[float] = []
    for c in converters:
        if not c.efficiency:
            raise ValueError(f'converter "{c.id}" has no efficiency: enter one number or a table of points')
        points.append(0.0)
        losses.append(c.idle_power or 0.0)
        ratio = 0.0
        for share, efficiency in c.efficiency:
            ratio = 1.0 / efficiency - 1.0
            if share > 0.0:
                points.append(share * c.rated_power)
                losses.append(points[-1] * ratio)
        ends.append(len(points))
        last_ratio.append(ratio)

    power, lost = np.array(points), np.array(losses)
    end = np.array(ends, dtype=np.intp)
    begin = np.concatenate((np.zeros(1, dtype=np.intp), end[:-1]))
    low = np.broadcast_to(begin, output.shape)
    high = np.broadcast_to(end, output.shape)
    for _ in range(int((end - begin).max()).bit_length()):  # bisection: power[low] <= output < power[high]
        middle = (low + high) >> 1
        below = power[middle] <= output
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    following = np.minimum(low + 1, end - 1)
    width = power[following] - power[low]
    inside = width > 0.0
    along = np.where(inside, output - power[low], 0.0) / np.where(inside, width, 1.0)
    loss = lost[low] + along * (lost[following] - lost[low])
    final = power[end - 1]
    loss = np.where(output > final, output * np.array(last_ratio), loss)
    return loss, output > final * (1.0 + ROUNDING)


def operating_points(project: Project) -> Operating:
    """Solve every case at the low, nominal and high line. Method, proof and limits: see the module."""
    asked = loads(project)
    bus = project.bus
    cases, count, filters = len(project.cases), len(project.converters), len(project.filters)
    source = np.array([bus.low, bus.nominal, bus.high], dtype=np.float64)
    filter_resistance = np.array([series_resistance(f) for f in project.filters], dtype=np.float64)
    lead = np.array([c.lead.R for c in project.converters], dtype=np.float64)

    home = asked.home
    order = np.argsort(home, kind="stable")
    order = order[home[order] >= 0]
    used, starts, group = np.unique(home[order], return_index=True, return_inverse=True)
    power = asked.input_power[:, order].repeat(3, axis=0)
    corner_source = np.tile(source, cases)
    network = _Network(bus.resistance, filter_resistance[used], lead[order], starts.astype(np.intp), group)
    node, behind, found = _solve(network, corner_source, power)

    current = np.full((cases * 3, count), np.nan)
    voltage = np.full((cases * 3, count), np.nan)
    filter_current = np.full((cases * 3, filters), np.nan)
    filter_voltage = np.full((cases * 3, filters), np.nan)
    current[found] = 0.0
    filter_current[found] = 0.0
    filter_voltage[found] = node[found, None]
    if order.size:
        at_filter, taken = behind[found][:, group], power[found]
        knee = 2.0 * np.sqrt(network.lead * taken)
        terminal = 0.5 * (at_filter + np.sqrt(np.maximum(at_filter - knee, 0.0) * (at_filter + knee)))
        drawn = taken / terminal
        solved_rows = np.flatnonzero(found)[:, None]
        current[solved_rows, order] = drawn
        voltage[solved_rows, order] = terminal
        filter_current[solved_rows, used] = np.add.reduceat(drawn, starts, axis=1)
        filter_voltage[solved_rows, used] = behind[found]

    shape = (cases, 3)
    bus_current = filter_current.sum(axis=1) if filters else np.where(found, 0.0, np.nan)
    return Operating(
        solved=found.reshape(shape),
        source_voltage=source,
        bus_voltage=node.reshape(shape),
        bus_current=bus_current.reshape(shape),
        bus_loss=(bus.resistance * bus_current**2).reshape(shape),
        filter_current=filter_current.reshape(*shape, filters),
        filter_voltage=filter_voltage.reshape(*shape, filters),
        filter_loss=(filter_resistance * filter_current**2).reshape(*shape, filters),
        output_power=asked.output_power,
        input_power=asked.input_power,
        loss=asked.input_power - asked.output_power,
        current=current.reshape(*shape, count),
        voltage=voltage.reshape(*shape, count),
        lead_loss=(lead * current**2).reshape(*shape, count),
        running=asked.running,
        beyond_data=asked.beyond_data,
        home=home,
        filter_resistance=filter_resistance,
        lead_resistance=lead,
    )


@dataclass(frozen=True, slots=True)
class _Network:
    """The tree, converters sorted by filter: M allocated converters, G filters that have any."""

    bus: float  # ohm
    filter: Floats  # (G,) ohm
    lead: Floats  # (M,) ohm
    starts: Indices  # (G,) first converter of each filter
    group: Indices  # (M,) filter of each converter, rising


def _solve(network: _Network, source: Floats, power: Floats) -> tuple[Floats, Floats, Bools]:
    """Newton from no load for the corners R at once.

    ``source`` (R,) [V], ``power`` (R, M) [W]. Returns the bus node (R,) [V] and the filter outputs (R, G) [V], nan
    where there is no solution, and which corners are solved (R,).
    """
    corners, filters = source.size, network.starts.size
    node_out, behind_out = np.full(corners, np.nan), np.full((corners, filters), np.nan)
    solved = np.zeros(corners, dtype=np.bool_)
    if not filters:
        return source.copy(), behind_out, np.ones(corners, dtype=np.bool_)

    starts, group = network.starts, network.group
    tolerance = np.finfo(np.float64).eps * (16.0 + np.sqrt(network.lead.size))
    rows = np.arange(corners)
    node, behind = source.copy(), np.repeat(source[:, None], filters, axis=1)
    double, knee = 2.0 * power, 2.0 * np.sqrt(network.lead * power)  # W; V, the least voltage that feeds the load
    for _ in range(_STEPS):
        at_filter = behind[:, group]
        room = at_filter - knee
        alive = (room.min(axis=1) >= -tolerance * source) & (behind.min(axis=1) > 0.0)
        if not alive.all():
            rows, source, node, behind = rows[alive], source[alive], node[alive], behind[alive]
            double, knee, at_filter, room = double[alive], knee[alive], at_filter[alive], room[alive]
            if not rows.size:
                break
        root = np.sqrt(np.maximum(room, 0.0) * (at_filter + knee))
        current = double / (at_filter + root)
        through = np.add.reduceat(current, starts, axis=1)
        excess = behind + network.filter * through - node[:, None]
        excess_node = node + network.bus * through.sum(axis=1) - source
        residual = np.maximum(np.abs(excess).max(axis=1), np.abs(excess_node))
        done = residual <= tolerance * source
        if network.bus == 0.0:  # a filter that has arrived stays put while others go on; its pivot may be zero
            arrived = np.abs(excess) <= (tolerance * source)[:, None]
            excess = np.where(arrived, 0.0, excess)
        else:
            arrived = np.zeros((1, 1), dtype=np.bool_)

        slope = np.add.reduceat(current / np.maximum(root, _TINY), starts, axis=1)  # -dI/dv
        pivot = np.where(arrived, 1.0, 1.0 - network.filter * slope)
        regular = pivot.min(axis=1) > 0.0
        pivot = np.where(pivot > 0.0, pivot, 1.0)
        pivot_node = 1.0 - network.bus * (slope / pivot).sum(axis=1)
        regular &= pivot_node > 0.0

        going = regular & ~done
        if not going.all():
            finished = rows[done]
            node_out[finished], behind_out[finished], solved[finished] = node[done], behind[done], True
            rows, source, node, behind = rows[going], source[going], node[going], behind[going]
            if not rows.size:
                break
            double, knee, excess, excess_node = double[going], knee[going], excess[going], excess_node[going]
            slope, pivot, pivot_node = slope[going], pivot[going], pivot_node[going]
        fall_node = (excess_node + network.bus * (slope * excess / pivot).sum(axis=1)) / pivot_node
        behind = behind - (excess + fall_node[:, None]) / pivot
        node = node - fall_node
    return node_out, behind_out, solved
