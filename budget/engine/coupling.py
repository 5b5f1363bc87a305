"""The nonlinear inputs of a step: g = G(q), where the quantities q depend on the inputs g in turn.

Over a step the quantities follow the inputs through the modes: q = known + sense (w drive g) + direct g, w the weights
of the step. For some tens of inputs that is a product with a small matrix, kept for each step length (``modes.Steps``):
``solve_pairs``, by repetition where that contracts well, by Newton elsewhere.

For hundreds of inputs it is quicker to go through the modes each time, and the matrices would take gigabytes:
``solve_parts``. Newton's matrix then has a block for each filter with all behind it only. What the bus does between
them is left to repetition and learnt from it (``Mix``). That changes how many sweeps are needed, not what they come to:
the residual is always that of the whole network.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress

import numpy as np
from numpy.typing import NDArray

from budget.engine.modes import solve_quietly

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

_KEPT = 256  # step lengths whose blocks are kept
_DEPTH = 4  # sweeps that are remembered
_CONTRACTS = 0.15  # repetition instead of Newton
_WEAK = 0.03  # inputs that are repeated beside Newton
_SWEEPS = 12
_AGAIN = 4  # sweeps with the same blocks


def solve_pairs(
    loop: Floats,
    spread: Floats,
    known: Floats,
    guess: Floats,
    act: Callable[[Floats], tuple[Floats, Floats]],
    least: Floats,
    close: float,
) -> tuple[Floats, Bools]:
    """Inputs (m, T, M) [A] of members (m,) at T instants from the ``guess``, and whether they are found.

    ``loop`` (m, T Q, T M): quantities for inputs, beside the ``known`` (m, T, Q); ``spread`` (m, T Q) the sums of its
    sizes. ``act`` gives inputs (m, T, M) and their slopes for quantities (m, T, Q). Errors up to the share ``close``
    and ``least`` (m,) [A] pass.
    """
    shape, g, known = guess.shape, guess.reshape(len(guess), -1), known.reshape(len(known), -1)
    done: Bools = np.zeros(len(g), dtype=np.bool_)
    newton: Bools | None = None
    for _ in range(_SWEEPS):
        q = known + np.matmul(loop, g[:, :, None])[:, :, 0]
        found, slope = (part.reshape(g.shape) for part in act(q.reshape(shape)))
        gap = found - g
        off = np.abs(gap) > close * np.abs(found) + least[:, None]
        if newton is None:
            strength = np.abs(slope) * spread
            newton = strength.max(axis=1, initial=0.0) > _CONTRACTS
            some = bool(newton.any())
            # The others hardly feel what they do: small systems, and far quicker than the whole.
            strong = np.flatnonzero((strength[newton] > _WEAK).any(axis=0))
        done = np.asarray(~off.any(axis=1), dtype=np.bool_)
        if some:
            which = np.flatnonzero(newton & ~done)
            if which.size:
                cut = np.ix_(which, strong)
                matrix = np.eye(strong.size) - slope[cut][:, :, None] * loop[np.ix_(which, strong, strong)]
                with suppress(np.linalg.LinAlgError):  # a fold: repetition moves off it
                    gap[cut] = solve_quietly(matrix, gap[cut][:, :, None])[:, :, 0]
        g = g + gap
        if done.all():
            break
    return g.reshape(shape), done


def solve_parts(
    blocks: Blocks,
    coupling: Floats,
    effect: Callable[[Floats, Indices], Floats],
    known: Floats,
    guess: Floats,
    act: Callable[[Floats, Indices], tuple[Floats, Floats]],
    least: Floats,
    close: float,
) -> tuple[Floats, Bools]:
    """As ``solve_pairs``, with the ``coupling`` of the ``blocks`` and ``effect`` instead of the matrix of all pairs.

    ``effect`` gives quantities (m, T, Q) [V or V s] for inputs (m, T, M) [A], of the members that are still open, whose
    indices (m,) it is told; and so does ``act`` the inputs for quantities.
    """
    g = guess.copy()
    done = np.zeros(len(g), dtype=np.bool_)
    which = np.arange(len(g))
    inverse = None
    mix = Mix(guess.shape)
    for sweep in range(_SWEEPS):
        now = g[which]
        found, slope = act(known[which] + effect(now, which), which)
        gap = found - now
        off = np.abs(gap) > close * np.abs(found) + least[which, None, None]
        still = off.any(axis=(1, 2))
        done[which[~still]] = True
        if sweep % _AGAIN == 0 and still.any():
            with suppress(np.linalg.LinAlgError):
                inverse = blocks.inverses(coupling[which], slope, _WEAK), which
        if inverse is not None:
            (who, group, matrix), then = inverse
            place = np.minimum(np.searchsorted(which, then[who]), which.size - 1)
            here = which[place] == then[who]
            blocks.corrected(gap, (place[here], group[here], matrix[here]))
        g[which] = now + mix.next(which, now, gap)
        which = which[still]
        if not which.size:
            break
    return g, done


class Blocks:
    """The couplings within each group of inputs (M), of which input k drives what quantity k depends on."""

    def __init__(self, groups: Indices, sense: Complex, drive: Complex, direct: Floats) -> None:
        """``groups`` (M,) numbers; ``sense`` (M, R), ``drive`` (R, M) and ``direct`` (M, M) as in ``modes.Steps``."""
        names = np.unique(groups)
        members = [np.flatnonzero(groups == name) for name in names.tolist()]
        most = max((part.size for part in members), default=0)
        count = groups.size
        self.index = np.full((len(members), most), count, dtype=np.intp)  # (F, b), ``count`` where there is none
        for row, part in enumerate(members):
            self.index[row, : part.size] = part
        there = self.index < count
        safe = np.where(there, self.index, 0)
        self._sense = np.where(there[:, :, None], sense[safe], 0.0)  # (F, b, R)
        self._drive = np.where(there[:, None, :], np.swapaxes(drive.T[safe], 1, 2), 0.0)  # (F, R, b)
        both = there[:, :, None] & there[:, None, :]
        self.direct = np.where(both, direct[safe[:, :, None], safe[:, None, :]], 0.0)[:, None, :, None, :]
        self._made: dict[int, Floats] = {}

    def at(self, level: Indices, weights: Complex) -> Floats:
        """Couplings (m, F, 2, b, 2, b) from the middle and end of steps to there, ``weights`` (m, 4, 6, R)."""
        for row, key in enumerate(level.tolist()):
            if key in self._made:
                continue
            if len(self._made) >= _KEPT:
                self._made.pop(next(iter(self._made)))
            parts, size = self.index.shape
            made = np.zeros((parts, 2, size, 2, size))
            for node in range(2):
                for source in range(2):
                    w = weights[row, 2 * node + 1, 4 + source]
                    made[:, node, :, source] = ((self._sense * w) @ self._drive).real
                made[:, node, :, node] += self.direct[:, 0, :, 0]
            self._made[key] = made
        return np.stack([self._made[key] for key in level.tolist()])

    def gathered(self, values: Floats) -> Floats:
        """``values`` (m, T, M) by group, (m, F, T, b), with zeros where there is no input."""
        padded = np.concatenate((values, np.zeros((*values.shape[:-1], 1))), axis=-1)
        return np.moveaxis(padded[..., self.index], 2, 1)

    def inverses(self, coupling: Floats, slope: Floats, weak: float) -> tuple[Indices, Indices, Floats]:
        """Where the inputs of a group act back on themselves by more than ``weak``: member, group, (1 - slope K)^-1.

        ``coupling`` (m, F, T, b, T, b), ``slope`` (m, T, M). The inverses have shape (., T b, T b).
        """
        steep = self.gathered(slope)
        strength = np.abs(steep) * np.abs(coupling).sum(axis=(4, 5))
        who, group = np.nonzero(strength.max(axis=(2, 3), initial=0.0) > weak)
        size = steep.shape[2] * steep.shape[3]
        matrix = np.eye(size) - (steep[who, group, :, :, None, None] * coupling[who, group]).reshape(-1, size, size)
        return who, group, np.asarray(np.linalg.inv(matrix), dtype=np.float64)

    def corrected(self, gap: Floats, found: tuple[Indices, Indices, Floats]) -> None:
        """Put the ``gap`` (m, T, M) of each group right, in place, as its inverse says."""
        who, group, inverse = found
        if not who.size:
            return
        parts = self.gathered(gap)[who, group]
        count, times, size = parts.shape
        better = (inverse @ parts.reshape(count, times * size, 1)).reshape(parts.shape)
        padded = np.concatenate((gap, np.zeros((*gap.shape[:-1], 1))), axis=-1)
        place = self.index[group]
        padded[who[:, None, None], np.arange(times)[:, None], place[:, None, :]] = better
        gap[...] = padded[..., :-1]


class Mix:
    """Sweeps that learn from each other: Anderson's acceleration (J. ACM 12, 1965) of m repetitions side by side.

    What blocks leave over are few ways in which filters act on each other through the bus; each sweep finds one.
    """

    def __init__(self, shape: tuple[int, ...]) -> None:
        """``shape`` (m, T, M) of the unknowns."""
        size = int(np.prod(shape[1:]))
        self._last = np.zeros((2, shape[0], size))  # unknowns, and how far a sweep would move them
        self._steps = np.zeros((2, shape[0], _DEPTH, size))
        self._count = 0

    def next(self, which: Indices, now: Floats, move: Floats) -> Floats:
        """How far to move (k, T, M) the unknowns ``now`` of the members ``which`` (k,), where a sweep says ``move``.

        Members may leave, but not come back.
        """
        g, r = now.reshape(which.size, -1), move.reshape(which.size, -1)
        better = r
        if self._count:
            slot = (self._count - 1) % _DEPTH
            self._steps[0, which, slot] = g - self._last[0, which]
            self._steps[1, which, slot] = r - self._last[1, which]
            depth = min(self._count, _DEPTH)
            dg, dr = self._steps[0, which, :depth], self._steps[1, which, :depth]
            # Each difference scaled to one, so that the oldest, which may be far greater, does not drown the latest.
            scale = 1.0 / np.maximum(np.sqrt((dr * dr).sum(axis=2)), 1e-300)
            unit = dr * scale[:, :, None]
            square = unit @ np.swapaxes(unit, 1, 2) + 1e-12 * np.eye(depth)
            share = np.linalg.solve(square, unit @ r[:, :, None])[:, :, 0] * scale
            better = r - (share[:, None] @ (dg + dr))[:, 0]
        self._last[0, which], self._last[1, which] = g, r
        self._count += 1
        return np.asarray(better.reshape(move.shape))
