"""Switch-on and surge of one network, for many members (a load case and an event each) at once.

**Method.** The linear part of the network is advanced exactly, mode by mode (see ``modes``). What is not linear enters
by a few inputs g: the load currents P(t)/v and the corrections w of saturating inductors. Over a step they are taken as
quadratic in time through their values at its start, middle and end, which makes an exponential collocation method
(Hochbruck & Ostermann, Acta Numerica 2010, section 2.2; of Lobatto type, order 4 where the step resolves the modes,
exact for quasi-static modes however stiff). The two unknown values solve a small system, g = G(q0 + K g) with K from
the step table: by repetition where that contracts well, by Newton elsewhere. Newton starts from the voltage before, so
that a load without a capacitor of its own is at the upper of its two voltages for as long as that exists.

**Steps.** Each member has its own time and step length. A step is limited by the defect of the quadratic, evaluated at
a quarter and three quarters and carried to the outputs; and by the modes that are still ringing, as strongly as they
can be seen at an output: between its nodes a step is read from the quartic through five exact values, for peaks,
integrals (Boole's rule) and thresholds. Fast modes that have died away, or never were excited, cost nothing, unless the
loads make them grow.

**Events.** A step that meets a threshold or an instant is cut there: the point is found on the quartic and put right on
the exact solution, at which the network's own equations, not an interpolation, give the state.

Voltages at a load that inductors alone feed leave out L di/dt of the load current itself: a constant power behind an
inductor with no capacitor has no solution that holds still. So the load is followed quasi-statically, with a remark.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from budget.engine.coupling import Blocks, solve_pairs, solve_parts
from budget.engine.events import HYSTERESIS, Logic, Phase, Segment, initial
from budget.engine.linear import Solved, as_real, exact, make_linear, met_at, times
from budget.engine.modes import NODES, PER_OCTAVE, Modes, Steps, make_steps
from budget.engine.statespace import StateSpace, saturation
from budget.engine.waves import Values, Waves

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

TOLERANCE = 1e-5  # of an output's scale, for the defect of one step
_RESOLVE = 2.0  # tolerances: a mode that rings by less at every output is not followed
_QUARTIC = 3e-5  # error of the quartic through five points is this times (rate h)^5 of the amplitude
_GROW, _SHRINK = 2 * PER_OCTAVE, 4 * PER_OCTAVE  # levels
_WARY, _GROWN = 1.5, 3.0  # the loads' push on a mode is taken this much larger; growth e^3 over the window counts
_STRICT, _GROWING = 3e-3, 0.01  # of the tolerance, while a mode that grows is below this share of every output
_EVENT = 4  # steps that an event counts for in the limit
_JUMP = 1e-13  # of the window: a step this short that the defect still rejects holds a jump, and is taken
_BAND = 0.01  # of a threshold: within it the outcome is a coin toss

_THETA = np.array(NODES)
_FINE = np.linspace(0.0, 1.0, 25)
_AT = np.array((0.0, *NODES))
_LAGRANGE = np.array([[np.prod([(s - b) / (a - b) for b in _AT if b != a]) for a in _AT] for s in _FINE])  # (25, 5)
_MIX = np.stack(  # (4, 3) quadratic through start, middle, end, at the nodes
    ((1 - _THETA) * (1 - 2 * _THETA), 4 * _THETA * (1 - _THETA), _THETA * (2 * _THETA - 1)), axis=1
)
_BOOLE = np.array([7.0, 32.0, 12.0, 32.0, 7.0]) / 90.0


@dataclass(frozen=True, slots=True)
class Member:
    """One run: its case (an index), the source's segments, and whether it starts from a steady state, and from which.

    ``currents`` (N,) [A] drawn in that steady state at the source voltage ``before`` [V]; None starts from zero.
    """

    case: int
    segments: tuple[Segment, ...]
    currents: Floats | None = None
    before: float = 0.0


@dataclass(slots=True)
class Outcome:
    """What a member's run gave. Rows of the state space's outputs: W = 1 + 2 F + N, the first ones, [A] and [V]."""

    peak: Floats  # (W,)
    i2t: Floats  # (1 + F,) A^2 s
    runs_at: Floats  # (N,) s, nan: never, or throughout
    phase: NDArray[np.int8]  # (N,) at the end
    timer: Floats  # (N,) s, what it waits for, inf: nothing
    tripped: Bools  # (N,)
    near_on: Bools  # (N,) came within 1 % of turn_on without clearly crossing it
    near_off: Bools  # (N,)
    reached: float  # s, the end of the window if all went well
    problem: str  # "", "chatter", "steps"
    steps: int
    time: Floats = field(default_factory=lambda: np.zeros(0))  # (K,) s
    values: Values = field(default_factory=lambda: np.zeros((0, 0)))  # (K, W) A and V


class Batch:
    """Members that still run. Arrays have one row for each; see the module for the method."""

    _ROWS = ("member", "case", "t", "stop", "volts", "slope", "z", "g", "drive", "y", "bend", "level", "peak", "i2t")
    _MORE = ("hint", "used", "still", "side", "touch", "near")
    _PHASE = ("phase", "timer", "level", "climb", "upper", "lower", "runs_at", "tripped")

    def __init__(
        self,
        space: StateSpace,
        modal: Modes,
        logic: Logic,
        members: Sequence[Member],
        reference: float,
        limit: int,
        tolerance: float = TOLERANCE,
        groups: Indices | None = None,
    ) -> None:
        """``reference`` [V]: errors of voltages count against it; ``limit``: steps that a member may take.

        ``groups`` (M,): numbers of the filters that loads and saturating inductors belong to; without them, all to one.
        """
        self.members, self.logic, self.limit, self.tolerance = members, logic, limit, tolerance
        self.reference = reference
        self.loads = space.converters.size
        filters = space.filters.size
        self.meters = 1 + filters
        self.watch = 1 + 2 * filters + self.loads
        self.terminals = space.terminal_voltages
        self.curves = space.L0, space.saturation
        outputs = space.C.shape[0]
        self.outputs = outputs
        self.quantities = slice(outputs - self.loads, outputs + space.L0.size)

        self.linear, shown, driven = make_linear(space, modal)
        linear = self.linear
        self.rate, self.by_source, self.drive_real = linear.rate, linear.by_source, linear.drive_real
        self.show_real, self.direct, self.late = linear.show_real, linear.direct, linear.late
        self.direct_source, self.late_source = linear.direct_source, linear.late_source
        self.slow = np.where(np.abs(self.rate) > 1e-30, 1.0 / np.where(self.rate == 0.0, 1.0, self.rate), 0.0)
        weight_seen = np.abs(shown[:outputs])
        self.amps_seen = weight_seen[: self.meters]
        self.volts_seen = weight_seen[self.meters :].max(axis=0, initial=0.0) / reference
        q = self.quantities
        window = max(m.segments[-1].end for m in members)
        self.tables: Steps = make_steps(
            self.rate, window, driven[:, 1:], shown[q], self.direct[q], shown[:outputs], self.direct[:outputs]
        )
        self.blocks: Blocks | None = None
        if self.tables.many:
            together = np.zeros(driven.shape[1] - 1, dtype=np.intp) if groups is None else groups
            self.blocks = Blocks(together, shown[q], driven[:, 1:], self.direct[q])
        self.jump = window * _JUMP
        self.span = window
        share = np.where(self.rate.imag > 0.0, 0.5, 1.0)  # of a pair one mode is kept
        feedback = shown[q][: self.loads] * driven[:, 1 : 1 + self.loads].T * share  # (N, R) of 1/s per A/V
        self.feedback = as_real(feedback)
        self.decay = np.exp(self.rate * self.tables.length[:: 2 * PER_OCTAVE, None])  # (times, R) for a look ahead
        self.waves = Waves(len(members), self.watch)
        self.outcomes: list[Outcome | None] = [None] * len(members)
        self._begin(modal)

    def _begin(self, modal: Modes) -> None:
        count, inputs = len(self.members), self.direct.shape[1]
        self.member = np.arange(count)
        self.case = np.array([m.case for m in self.members], dtype=np.intp)
        self.t, self.stop = np.zeros(count), np.zeros(count)
        self.volts, self.slope = np.zeros(count), np.zeros(count)
        self.z = np.zeros((count, self.rate.size), dtype=np.complex128)
        self.g, self.bend = np.zeros((count, inputs)), np.zeros((count, 2, inputs))
        self.drive = np.zeros((count, self.rate.size), dtype=np.complex128)
        self.y = np.zeros((count, self.outputs + self.curves[0].size))
        self.level = np.full(count, self.tables.length.size - 1, dtype=np.intp)
        self.peak, self.i2t = np.zeros((count, self.watch)), np.zeros((count, self.meters))
        self.hint, self.used = np.full(count, 1e-300), np.zeros(count, dtype=np.intp)
        self.still = np.zeros(count, dtype=np.intp)
        self.side = np.zeros((count, 2 * self.loads), dtype=np.int8)
        self.touch = np.zeros((count, 2 * self.loads), dtype=np.int8)
        self.near = np.zeros((count, 2 * self.loads), dtype=np.bool_)
        self.threshold = np.concatenate((self.logic.turn_on, self.logic.turn_off))
        running = np.array([m.currents is not None for m in self.members], dtype=np.bool_)
        self.ph: Phase = initial(self.logic, self.case, running)
        for i, member in enumerate(self.members):
            if member.currents is not None:
                self._settle(i, member.currents, member.before)
            self._segment(i)
        self._restart(np.arange(count))
        at = np.tile(self.y[:, self.terminals], 2)
        clear = np.abs(at - self.threshold) > _BAND * self.threshold
        self.side = np.where(clear, np.sign(at - self.threshold), 0.0).astype(np.int8)

    # --- what does not move ---------------------------------------------------------------------------------------

    def _segment(self, i: int) -> None:
        """Take the source's segment that begins now, or holds now."""
        for s in self.members[int(self.member[i])].segments:
            if s.end > self.t[i] * (1.0 + 1e-15):
                self.stop[i] = s.end
                self.volts[i], self.slope[i] = s.voltage + s.slope * (self.t[i] - s.start), s.slope
                return

    def _settle(self, i: int, currents: Floats, volts: float) -> None:
        """The steady state at a source of ``volts`` [V] and load ``currents`` (N,) [A]; undamped modes rest."""
        source = self.by_source * volts
        inverse = self.slow
        sense = self.show_real[:, self.quantities]
        flux = slice(self.loads, None)
        g = np.zeros(self.g.shape[1])
        g[: self.loads] = currents
        whole = self.drive_real.view(np.complex128) * -inverse  # (M, R) steady z for each input
        rows = np.ascontiguousarray(whole).view(np.float64) @ sense + self.direct[self.quantities].T  # (M, Q)
        at = np.ascontiguousarray(-inverse * source).view(np.float64) @ sense
        at = at + self.direct_source[self.quantities] * volts
        L0, sat = self.curves  # noqa: N806
        for _ in range(100 if L0.size else 0):
            q = at + g @ rows
            current, slope = saturation(q[flux], L0, sat)
            gap = current - q[flux] / L0 - g[flux]
            if np.abs(gap).max() <= 1e-13 * max(1.0, np.abs(g).max()):
                break
            matrix = np.eye(L0.size) - (slope - 1.0 / L0)[:, None] * rows[flux, flux].T
            g[flux] += np.linalg.solve(matrix, gap)
        self.z[i] = -inverse * (source + (g @ self.drive_real).view(np.complex128))
        self.g[i] = g

    def _restart(self, rows: Indices) -> None:
        """Inputs and outputs of the members ``rows`` (m,) anew at this instant, after something has jumped."""
        seen = self.z[rows].view(np.float64) @ self.show_real
        seen = seen + self.volts[rows, None] * self.direct_source + self.slope[rows, None] * self.late_source
        q, n = self.quantities, self.loads
        t = self.t[rows][:, None]
        start = self.g[rows].copy()
        start[:, :n] = self._nonlinear(self.y[rows][:, None, q], t, rows)[0][:, 0, :n]
        fresh = np.flatnonzero(~self.y[rows].any(axis=1))
        if fresh.size:
            start[fresh] = self._nonlinear(seen[fresh][:, None, q], t[fresh], rows[fresh])[0][:, 0]
        g, fine = self._solve_now(seen[:, q], start, t, rows)
        bad = np.flatnonzero(~fine)
        if bad.size:  # no root from there: the one below
            low = start[bad]
            power = self.ph.level[rows[bad]] + self.ph.climb[rows[bad]] * t[bad]
            low[:, :n] = np.maximum(power, 0.0) / self.logic.floor
            g[bad] = self._solve_now(seen[bad][:, q], low, t[bad], rows[bad])[0]
        self.g[rows] = g
        self.bend[rows] = 0.0
        self.drive[rows] = (g @ self.drive_real).view(np.complex128)
        self.y[rows] = seen + g @ self.direct.T
        later = np.ascontiguousarray(self._free(rows)[:, None] * self.decay).view(np.float64)
        to_come = np.abs(times(later, self.show_real[:, : self.meters])).max(axis=(1, 2))
        self.hint[rows] = np.maximum(0.5 * to_come, 1e-300)
        self._record(rows, self.t[rows][:, None], self.y[rows][:, None, : self.watch])

    def _solve_now(self, known: Floats, guess: Floats, t: Floats, rows: Indices) -> tuple[Floats, Bools]:
        """Inputs (m, M) [A] at one instant each, ``t`` (m, 1) [s], where they act without delay only; if it is done."""
        direct = self.direct[self.quantities]
        least, close = self._least(rows), 0.02 * self.tolerance
        if self.blocks is not None:
            coupling = np.broadcast_to(self.blocks.direct, (rows.size, *self.blocks.direct.shape))
            found, fine = solve_parts(
                *(self.blocks, coupling, lambda g, _: g @ direct.T, known[:, None], guess[:, None]),
                *(lambda q, which: self._nonlinear(q, t[which], rows[which]), least, close),
            )
            return found[:, 0], fine
        loop = np.broadcast_to(direct, (rows.size, *direct.shape))
        spread = np.abs(direct).sum(axis=1)[None]
        found, fine = solve_pairs(
            loop, spread, known[:, None], guess[:, None], lambda q: self._nonlinear(q, t, rows), least, close
        )
        return found[:, 0], fine

    def _nonlinear(self, q: Floats, t: Floats, rows: Indices | slice) -> tuple[Floats, Floats]:
        """Inputs [A] and their slopes from the quantities ``q`` (m, T, Q) [V, V s] at the times ``t`` (m, T) [s]."""
        n = self.loads
        volts = np.maximum(q[..., :n], self.logic.floor)
        power = self.ph.level[rows][:, None] + self.ph.climb[rows][:, None] * t[..., None]
        amps = power / volts
        slope = np.where(q[..., :n] > self.logic.floor, -amps / volts, 0.0)
        if not self.curves[0].size:
            return amps, slope
        L0, sat = self.curves  # noqa: N806
        flux = q[..., n:]
        current, steep = saturation(flux, L0, sat)
        return (
            np.concatenate((amps, current - flux / L0), axis=-1),
            np.concatenate((slope, steep - 1.0 / L0), axis=-1),
        )

    def _least(self, rows: Indices | slice) -> Floats:
        """The error (m,) [A] of an input that is let pass: rounding must not keep it going where nothing flows."""
        most = np.maximum(self.peak[rows, : self.meters].max(axis=1), self.hint[rows])
        return np.asarray(1e-3 * self.tolerance * most, dtype=np.float64)

    # --- one step -------------------------------------------------------------------------------------------------

    def _free(self, rows: Indices | slice) -> Complex:
        """What of each mode the inputs, with their slopes as they are now, do not hold; (m, R)."""
        bend = times(self.bend[rows], self.drive_real).view(np.complex128)  # (m, 2, R)
        forced = 2.0 * bend[:, 1] * self.slow
        forced = (forced + bend[:, 0] + self.slope[rows][:, None] * self.by_source) * self.slow
        forced += self.volts[rows][:, None] * self.by_source + self.drive[rows]
        free: Complex = self.z[rows] + forced * self.slow
        return free

    def _scale(self) -> Floats:
        """What an error of each output counts against, (m, P): currents [A] by the greatest so far, voltages [V]."""
        scale = np.full((self.t.size, self.outputs), self.reference)
        amps = np.maximum(self.peak[:, : self.meters], np.abs(self.y[:, : self.meters]))
        most = np.maximum(amps.max(axis=1), self.hint)
        scale[:, : self.meters] = np.maximum(amps, 0.02 * most[:, None])
        return scale

    def _growth(self, seen: Floats) -> tuple[Floats, Bools]:
        """The longest step (m,) [s] that follows modes that the loads make grow; and whether one is still out of sight.

        Below the tolerance a mode is stepped over and dies away in the numbers, which must not happen to one that grows
        in fact; and while it is small, errors grow with it. To first order a load of the slope di/dv at its end moves
        the mode k by feedback_k di/dv. ``seen`` (m, R): share of the outputs' scales that each mode has now.
        """
        n = self.loads
        volts = self.y[:, self.quantities][:, :n]
        slope = np.where(volts > self.logic.floor, -self.g[:, :n] / np.maximum(volts, self.logic.floor), 0.0)
        shift = (slope @ self.feedback).view(np.complex128)
        growth = self.rate.real + _WARY * shift.real
        risky = growth * self.span > _GROWN
        fastest = np.where(risky, np.abs(self.rate + shift), 0.0).max(axis=1, initial=0.0)
        hidden: Bools = np.logical_or.reduce(risky & (seen < _GROWING), axis=1)
        return 1.0 / np.maximum(fastest, 1e-300), hidden

    def advance(self) -> None:
        """One step of every member that still runs."""
        tables = self.tables
        scale = self._scale()
        free = np.abs(self._free(slice(None)))
        amps = (free[:, None] * (self.amps_seen / scale[:, : self.meters, None])).max(axis=1)
        seen = np.maximum(amps, free * self.volts_seen)
        speed = np.abs(self.rate)
        resolve = _RESOLVE * self.tolerance
        rings = seen > resolve
        reach = np.where(rings, (resolve / (_QUARTIC * np.where(rings, seen, 1.0))) ** 0.2, np.inf)
        bound = (reach / np.maximum(speed, 1e-300)).min(axis=1)
        limit, grows = self._growth(seen)
        bound = np.minimum(np.minimum(bound, limit), tables.length[-1])
        tolerance = np.where(grows, _STRICT, 1.0) * self.tolerance
        instant = np.minimum(self.stop, self.ph.timer.min(axis=1, initial=np.inf))
        left = instant - self.t
        shortest = tables.length[0]
        most = np.floor(PER_OCTAVE * np.log2(np.maximum(bound, shortest) / shortest))
        cover = np.ceil(PER_OCTAVE * np.log2(np.maximum(left, shortest) / shortest) + 1e-9)
        top = np.minimum(np.minimum(most, cover), tables.length.size - 1)
        level = np.maximum(np.minimum(self.level, top.astype(np.intp)), 0)
        tables.need(level)

        h = tables.length[level]
        w = tables.weights[level]
        m = self.t.size
        everyone = slice(None)
        source = self.volts[:, None] * self.by_source
        ramp = self.slope[:, None] * self.by_source
        base = w[:, :, 0] * self.z[:, None] + w[:, :, 1] * source[:, None]
        base += w[:, :, 2] * ramp[:, None]
        base += w[:, :, 3] * self.drive[:, None]
        volts = self.volts[:, None] + (self.slope * h)[:, None] * _THETA
        fixed = volts[:, :, None] * self.direct_source + (self.slope[:, None] * self.late_source)[:, None]
        q = self.quantities
        known = times(base[:, 1::2].view(np.float64), self.show_real[:, q]) + fixed[:, 1::2, q]
        t = self.t[:, None] + h[:, None] * _THETA
        ratio = h[:, None]
        first, second = self.bend[:, 0] * ratio, self.bend[:, 1] * ratio**2
        guess = np.stack((self.g + 0.5 * first + 0.25 * second, self.g + first + second), axis=1)
        at, least, close = t[:, 1::2], self._least(everyone), 0.02 * self.tolerance
        if self.blocks is None:
            ends, fine = solve_pairs(
                *(tables.loop[level], tables.spread[level], known, guess),
                *(lambda q: self._nonlinear(q, at, everyone), least, close),
            )
        else:
            each = np.arange(m)
            ends, fine = solve_parts(
                *(self.blocks, self.blocks.at(level, w), self._through(w), known, guess),
                *(lambda q, which: self._nonlinear(q, at[which], each[which]), least, close),
            )
        pushed = times(ends, self.drive_real).view(np.complex128)
        z = base + w[:, :, 4] * pushed[:, 0, None] + w[:, :, 5] * pushed[:, 1, None]
        along = _MIX @ np.stack((self.g, ends[:, 0], ends[:, 1]), axis=1)
        y = times(z.view(np.float64), self.show_real) + fixed + times(along, self.direct.T)
        bend = np.stack(
            (4.0 * ends[:, 0] - 3.0 * self.g - ends[:, 1], 2.0 * (self.g + ends[:, 1]) - 4.0 * ends[:, 0]), 1
        )
        if self.late is not None:
            tilt = (bend[:, 0, None] + 2.0 * _THETA[:, None] * bend[:, 1, None]) / h[:, None, None]
            y += tilt[:, :, self.loads :] @ self.late.T

        check, _ = self._nonlinear(y[:, 0::2, q], t[:, 0::2], everyone)
        defect = np.abs(check - along[:, 0::2]).max(axis=1)
        error = tables.errors(level, defect) / scale
        worst = error.max(axis=1) / tolerance
        taken = fine & ((worst <= 1.0) | (h <= self.jump))
        self.used += 1
        change = np.floor(PER_OCTAVE * np.log2(0.9 * np.maximum(worst, 1e-6) ** (-1.0 / 3.0)))
        change = np.where(fine, np.clip(change, -_SHRINK, _GROW), -_SHRINK)
        change = np.where(taken, change, np.minimum(change, -1))
        self.level = np.clip(level + change.astype(np.intp), 0, tables.length.size - 1)

        five = np.concatenate((self.y[:, None, : self.watch], y[:, :, : self.watch]), axis=1)
        fine_values = _LAGRANGE @ five
        high, low = fine_values.max(axis=1), fine_values.min(axis=1)
        v = self.terminals
        met = (high[:, v] >= self.ph.upper) | (low[:, v] < self.ph.lower)
        cut = taken & (met.any(axis=1) | (t[:, 3] >= instant * (1.0 - 1e-14)))
        plain = taken & ~cut
        rows = everyone if plain.all() else np.flatnonzero(plain)
        if plain.any():
            self._account(rows, h[rows], t[rows], five[rows], fine_values[rows], high[rows], low[rows])
            self.z[rows], self.g[rows], self.drive[rows] = z[rows, 3], ends[rows, 1], pushed[rows, 1]
            self.y[rows], self.t[rows], self.volts[rows] = y[rows, 3], t[rows, 3], volts[rows, 3]
            steep = bend[rows] / np.stack((h[rows], h[rows] ** 2), axis=1)[:, :, None]
            steep[:, 0] += 2.0 * steep[:, 1] * h[rows][:, None]
            self.bend[rows] = steep
            self.still[rows] = 0
        if cut.any():
            self._land(np.flatnonzero(cut), h, instant, ends, pushed, fine_values, met)
        late = np.flatnonzero((self.used > self.limit) | (~taken & (level == 0)))
        for i in late.tolist():
            self._finish(i, "steps")
        self._compress()

    def _through(self, w: Complex) -> Callable[[Floats, Indices], Floats]:
        """What inputs at the middle and the end of steps do to the quantities there, through the modes."""
        q = self.quantities
        show, direct = np.ascontiguousarray(self.show_real[:, q]), self.direct[q].T

        def effect(g: Floats, which: Indices) -> Floats:
            pushed = times(g, self.drive_real).view(np.complex128)
            part = w if which.size == len(w) else w[which]
            z = part[:, 1::2, 4] * pushed[:, :1] + part[:, 1::2, 5] * pushed[:, 1:]
            return times(z.view(np.float64), show) + times(g, direct)

        return effect

    def _account(
        self, rows: Indices | slice, h: Floats, t: Floats, five: Floats, values: Floats, high: Floats, low: Floats
    ) -> None:
        """Peaks, integrals, thresholds and the waveform of steps that have been taken."""
        peak = self.peak[rows]
        better = high > peak * (1.0 - 1e-3)
        if better.any():
            who, what = np.nonzero(better)
            curve = values[who, :, what]
            top = curve.argmax(axis=1)
            inner = (top > 0) & (top < len(_FINE) - 1)
            centre = np.clip(top, 1, len(_FINE) - 2)
            each = np.arange(top.size)
            a, b, c = curve[each, centre - 1], curve[each, centre], curve[each, centre + 1]
            bow = np.where(inner, 2.0 * b - a - c, 0.0)
            bonus = np.where(bow > 0.0, (c - a) ** 2 / (8.0 * np.where(bow > 0.0, bow, 1.0)), 0.0)
            peak[who, what] = np.maximum(peak[who, what], high[who, what] + np.minimum(bonus, 0.25 * bow))
            self.peak[rows] = peak
        self.i2t[rows] += h[:, None] * (_BOOLE @ five[:, :, : self.meters] ** 2)
        self._watch_bands(rows, low, high, five[:, 4])
        self._record(rows, t, five[:, 1:])

    def _watch_bands(self, rows: Indices | slice, low: Floats, high: Floats, end: Floats) -> None:
        """Note terminals that come within 1 % of a threshold that counts and leave to the side they came from."""
        v, at = self.terminals, self.threshold
        low2, high2 = np.tile(low[:, v], 2), np.tile(high[:, v], 2)
        inside = (high2 >= (1.0 - _BAND) * at) & (low2 <= (1.0 + _BAND) * at)
        touch = self.touch[rows]
        if inside.any() or touch.any():
            end2 = np.tile(end[:, v], 2)
            before = self.side[rows]
            now = np.where(end2 > (1.0 + _BAND) * at, 1, np.where(end2 < (1.0 - _BAND) * at, -1, 0)).astype(np.int8)
            across = ((before > 0) & (low2 < (1.0 - _BAND) * at)) | ((before < 0) & (high2 > (1.0 + _BAND) * at))
            touch = np.where(across, 2, np.maximum(touch, inside & self._counts(rows))).astype(np.int8)
            left = now != 0
            self.near[rows] |= left & (touch == 1) & (now == before)
            self.touch[rows] = np.where(left, 0, touch)
            self.side[rows] = np.where(left, now, before)
        else:
            self.side[rows] = np.where(low2 > at, 1, -1)

    def _counts(self, rows: Indices | slice) -> Bools:
        """Which thresholds count: turn_on while it waits or counts, turn_off while it runs (m, 2 N)."""
        runs = self.ph.phase[rows] == 2
        enabled = self.logic.enabled[self.case[rows]]
        return np.concatenate((~runs & enabled, runs & enabled), axis=1)

    # --- events ---------------------------------------------------------------------------------------------------

    def _solved(self, who: Indices, step: Floats, ends: Floats, pushed: Complex) -> Solved:
        """The solved steps of the members ``who`` (m,); the others are of all members."""
        start = self.z[who], self.g[who], self.drive[who], self.volts[who], self.slope[who]
        return Solved(self.linear, *start, step[who], ends[who], pushed[who])

    def _land(
        self,
        rows: Indices,
        step: Floats,
        until: Floats,
        all_ends: Floats,
        all_pushed: Complex,
        all_values: Floats,
        met: Bools,
    ) -> None:
        """Cut the steps of the members ``rows`` at the first event inside each, and let that happen.

        The others are of all members: steps [s], instants [s], inputs and what they drive, the outputs along the steps,
        and whose terminals (m, N) meet a threshold.
        """
        share, event = np.zeros(rows.size), np.full(rows.size, -1)
        around, steepness = np.zeros((rows.size, 2)), np.zeros(rows.size)
        for k, i in enumerate(rows.tolist()):
            h = float(step[i])
            theta = (float(until[i]) - float(self.t[i])) / h
            theta = min(max(theta, 0.0), 1.0)
            crossing = -1
            bracket, chord = (0.0, 0.0), 0.0
            for j in np.flatnonzero(met[i]).tolist():
                upper, lower = self.ph.upper[i, j], self.ph.lower[i, j]
                curve = all_values[i, :, self.terminals.start + j]
                beyond = curve >= upper if upper < np.inf else curve < lower
                first = int(beyond.argmax())
                if first == 0:
                    theta, crossing = 0.0, j
                    break
                limit = float(upper if upper < np.inf else lower)
                low, high = float(_FINE[first - 1]), float(_FINE[first])
                slope = float(curve[first] - curve[first - 1]) / (high - low)
                at = low + (limit - float(curve[first - 1])) / slope
                if at < theta:
                    theta, crossing, bracket, chord = at, j, (low, high), slope
            share[k], event[k], around[k], steepness[k] = theta, crossing, bracket, chord
        unsure = np.flatnonzero((event >= 0) & (share > 0.0))
        if unsure.size:
            who, at_which = rows[unsure], event[unsure]
            above, below = self.ph.upper[who, at_which], self.ph.lower[who, at_which]
            share[unsure] = met_at(
                self._solved(who, step, all_ends, all_pushed),
                *(self.terminals.start + at_which, np.where(above < np.inf, above, below), above < np.inf),
                *(share[unsure], around[unsure], steepness[unsure]),
            )
        self.used[rows] += _EVENT
        inside = share > 0.0
        if inside.any():
            who = rows[inside]
            length, part = step[who], share[inside]
            nodes = part[:, None] * _THETA
            z, y, along = exact(self._solved(who, step, all_ends, all_pushed), nodes)
            five = np.concatenate((self.y[who][:, None, : self.watch], y[:, :, : self.watch]), axis=1)
            values = _LAGRANGE @ five
            t = self.t[who][:, None] + length[:, None] * nodes
            t[:, 3] = np.where(event[inside] < 0, until[who], t[:, 3])
            self._account(who, part * length, t, five, values, values.max(axis=1), values.min(axis=1))
            self.z[who], self.y[who], self.g[who] = z[:, 3], y[:, 3], along[:, 3]
            self.volts[who] += self.slope[who] * (part * length)
            self.t[who] = t[:, 3]
            self.still[who] = 0
        for i, theta, crossing in zip(rows.tolist(), share.tolist(), event.tolist(), strict=True):
            if theta <= 0.0:
                self.still[i] += 1
                if crossing < 0:
                    self.t[i] = until[i]
        anew = [
            i
            for i, crossing in zip(rows.tolist(), event.tolist(), strict=True)
            if self._happen(i, crossing, float(until[i]) if crossing < 0 else -1.0)
        ]
        if anew:
            self._restart(np.array(anew))

    def _happen(self, i: int, crossing: int, instant: float) -> bool:
        """Let an event of a member happen; whether it then has to start anew from this instant."""
        now, case = float(self.t[i]), int(self.case[i])
        segments = self.members[int(self.member[i])].segments
        if crossing >= 0:
            for j in self._together(i, crossing):
                self.ph.cross(i, j, self.logic, case, now)
        else:
            for j in np.flatnonzero(self.ph.timer[i] <= instant).tolist():
                self.ph.expire(i, j, self.logic, case, now)
            if self.stop[i] <= instant:
                if instant >= segments[-1].end:
                    self._finish(i, "")
                    return False
                self._segment(i)
        if self.still[i] > 6 * self.loads + 30:
            self._finish(i, "chatter")
            return False
        return True

    def _together(self, i: int, crossing: int) -> list[int]:
        """The converters of a member that meet their thresholds now, ``crossing`` among them.

        Of those that start with a jump, or stop, it is that one alone: what it does may spare the others. Where parts
        are alike, many reach turn_on at one instant, and what they do then begins from nothing.
        """
        waits = self.ph.upper[i] < np.inf
        gently = waits & ((self.logic.delay > 0.0) | (self.logic.soft > 0.0))
        if not gently[crossing]:
            return [crossing]
        reached = self.y[i, self.terminals] >= self.ph.upper[i] * (1.0 - HYSTERESIS)
        reached[crossing] = True
        return [int(j) for j in np.flatnonzero(gently & reached)]

    def _finish(self, i: int, problem: str) -> None:
        who = int(self.member[i])
        if self.outcomes[who] is not None:
            return
        n = self.loads
        resting = (self.side[i] != 0) & (self.touch[i] == 1)
        near = self.near[i] | resting
        self.outcomes[who] = Outcome(
            peak=self.peak[i].copy(),
            i2t=self.i2t[i].copy(),
            runs_at=self.ph.runs_at[i].copy(),
            phase=self.ph.phase[i].copy(),
            timer=self.ph.timer[i].copy(),
            tripped=self.ph.tripped[i].copy(),
            near_on=near[:n],
            near_off=near[n:],
            reached=float(self.t[i]),
            problem=problem,
            steps=int(self.used[i]),
        )

    def _record(self, rows: Indices | slice, t: Floats, y: Floats) -> None:
        """Keep points of the waveforms: times ``t`` (m, T) [s] and outputs ``y`` (m, T, W)."""
        self.waves.add(self.member[rows], t, y)

    def _compress(self) -> None:
        alive = np.array([self.outcomes[k] is None for k in self.member.tolist()], dtype=np.bool_)
        if alive.all():
            return
        for name in (*self._ROWS, *self._MORE):
            setattr(self, name, getattr(self, name)[alive])
        for name in self._PHASE:
            setattr(self.ph, name, getattr(self.ph, name)[alive])

    def run(self, tick: Callable[[float], None]) -> list[Outcome]:
        """Advance all to their ends; ``tick`` is told the share done, 0 to 1, every few steps, and may raise."""
        total = sum(m.segments[-1].end for m in self.members)
        count = 0
        every = 1 if self.tables.many else 16
        while self.member.size:
            self.advance()
            count += 1
            if count % every == 0:
                pairs = zip(self.outcomes, self.members, strict=True)
                done = sum(m.segments[-1].end for o, m in pairs if o is not None)
                tick(min(1.0, (done + float(self.t.sum())) / total))
        found = [o for o in self.outcomes if o is not None]
        for outcome, (time, values) in zip(found, self.waves.sorted(), strict=True):
            outcome.time, outcome.values = time, values
        return found
