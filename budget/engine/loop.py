"""The network of state equations closed by the converters' negative conductances.

Each load draws j with (1 + s tau) j = -g v, v the voltage at the end of its input ladder and g = i/v > 0: a regulated
converter takes constant power, so more voltage means less current, and no faster than its control follows. Together
with x' = A x + B j and v = C x + D j + D1 j' that is a linear system. Loads without a pole (tau = 0) are eliminated;
where loads hang on inductors alone (D1 not zero) some of them are states of their own, and which ones is read from the
whole numbers of the network's topology, so that what is left has the finite eigenvalues only.

The frequency side of the same loop: with the impedances Z(s) = -(C (s - A)^-1 B + D + s D1) seen by the loads, a
common factor k on all g puts an eigenvalue at s where 1/k is an eigenvalue of T(s) = Z(s) diag(g/(1 + s tau)).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Project
from budget.engine.statespace import StateSpace

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Loop:
    """What the loads of N converters see: the network in energy coordinates, in V and A, and tau [s]."""

    A: Floats  # (K, K)
    B: Floats  # (K, N)
    C: Floats  # (N, K)
    D: Floats  # (N, N)
    D1: Floats  # (N, N)
    cut: Floats  # (T, N) whole numbers: D1 = -cut^T (positive definite) cut
    tau: Floats  # (N,) s, 0 for a load without a pole

    def of(self, chosen: Bools) -> Loop:
        """The loop with some of the loads only; ``chosen`` (N,) whether a load counts."""
        both = np.ix_(chosen, chosen)
        return Loop(
            self.A,
            self.B[:, chosen],
            self.C[chosen],
            self.D[both],
            self.D1[both],
            self.cut[:, chosen],
            self.tau[chosen],
        )


def open_loop(project: Project, network: StateSpace) -> Loop:
    """The loop of a project's network, with the loads in the order of ``network.converters``."""
    tau = []
    for k in network.converters.tolist():
        bandwidth = project.converters[k].control_bandwidth
        tau.append(1.0 / (2.0 * np.pi * bandwidth) if bandwidth else 0.0)
    w, loads, ends = network.weight, network.loads, network.end_voltages
    return Loop(
        A=w[:, None] * network.A / w,
        B=w[:, None] * network.B[:, loads],
        C=network.C[ends] / w,
        D=network.D[ends, loads],
        D1=network.D1[ends, loads],
        cut=network.load_cut,
        tau=np.array(tau, dtype=np.float64),
    )


def closed(loop: Loop, g: Floats) -> Floats:
    """System matrix of the closed loop, shape (Q, E, E), for the conductances ``g`` (Q, N) [S], all positive.

    The first K states are the network's, the others those of the loads.
    """
    q, n = g.shape
    order = loop.A.shape[0]
    root = np.sqrt(g)
    b = loop.B * root[:, None, :]
    c = loop.C * root[:, :, None]
    pair = root[:, :, None] * root[:, None, :]
    static = loop.D * pair + np.eye(n)
    slope = loop.D1 * pair + np.diag(loop.tau)
    slack, moving = _bases(loop, root)
    if slack.shape[2]:
        # Loads without a pole and without an inductance of their own: 0 = slack^T (c x + static (moving y + slack a)).
        left = np.swapaxes(slack, 1, 2)
        inner = left @ static @ slack
        from_x = -_divide(inner, left @ c)
        from_y = -_divide(inner, left @ static @ moving)
        x_load, y_load = slack @ from_x, moving + slack @ from_y
    else:
        x_load, y_load = np.zeros((q, n, order)), moving
    left = np.swapaxes(moving, 1, 2)
    inner = left @ slope @ moving
    size = order + moving.shape[2]
    whole = np.empty((q, size, size))
    whole[:, :order, :order] = loop.A + b @ x_load
    whole[:, :order, order:] = b @ y_load
    whole[:, order:, :order] = -_divide(inner, left @ (c + static @ x_load))
    whole[:, order:, order:] = -_divide(inner, left @ static @ y_load)
    return whole


def _bases(loop: Loop, root: Floats) -> tuple[Floats, Floats]:
    """Loads that are no states, and those that are, as bases of the (scaled) load currents: (Q, N, .) each."""
    q, n = root.shape
    plain = loop.tau == 0.0
    moving = np.eye(n)[:, ~plain]
    slack = np.eye(n)[:, plain]
    cut = loop.cut[:, plain]
    if not cut.any():
        return np.broadcast_to(slack, (q, *slack.shape)), np.broadcast_to(moving, (q, *moving.shape))
    _, values, rows = np.linalg.svd(cut)  # of whole numbers from -1 to 1: the rank is beyond doubt
    rank = int(np.sum(values > 1e-6))
    both = root[:, plain]
    own = np.zeros((q, n, rank))
    own[:, plain] = both[:, :, None] * rows[:rank].T
    rest = np.zeros((q, n, rows.shape[0] - rank))
    rest[:, plain] = rows[rank:].T / both[:, :, None]
    for basis in (own, rest):
        basis /= np.maximum(np.linalg.norm(basis, axis=1, keepdims=True), 1e-300)
    return rest, np.concatenate((np.broadcast_to(moving, (q, *moving.shape)), own), axis=2)


def _divide(matrix: Floats, right: Floats) -> Floats:
    """matrix^-1 right; on the boundary itself, where a pole passes infinity, a hair beside it."""
    if not matrix.shape[-1]:
        return np.zeros((*matrix.shape[:-1], right.shape[-1]))
    try:
        return np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)
    except np.linalg.LinAlgError:
        hair = 1e-14 * np.abs(matrix).max(axis=(1, 2), keepdims=True) * np.eye(matrix.shape[-1])
        matrix = matrix + hair + 1e-300 * np.eye(matrix.shape[-1])
        return np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Modes:
    """Eigenvalues of the open network, and what the loads see of each: Z = -(sum of seen/(s - value) + D + s D1).

    ``seen`` is ``sight`` times ``push``, of rank one for each mode; for many loads it is kept as these factors.
    """

    values: Complex  # (K,) rad/s
    sight: Complex  # (N, K) what a load sees of a mode; empty if the eigenvectors do not carry it
    push: Complex  # (K, N) how a load moves it
    seen: Complex  # (K, N, N); empty where it would be large
    loop: Loop

    def of(self, kept: Bools) -> Modes:
        """Some of the modes only; ``kept`` (K,) whether a mode counts."""
        if kept.all():
            return self
        sight, push = (self.sight[:, kept], self.push[kept]) if self.sight.size else (self.sight, self.push)
        return Modes(self.values[kept], sight, push, self.seen[kept] if self.seen.size else self.seen, self.loop)

    def impedances(self, w: Floats) -> Complex:
        """Z at the angular frequencies ``w`` (W,) [rad/s]: ohm, shape (W, N, N)."""
        loop = self.loop
        s = 1j * w
        count = loop.tau.size
        z = -(loop.D + s[:, None, None] * loop.D1)
        if not self.values.size:
            return z
        if self.sight.size:
            # einsum, for threads of a linear algebra library cost more than such small sums
            apart = s[:, None] - self.values
            shares = 1.0 / np.where(apart == 0.0, np.finfo(np.float64).eps * np.abs(self.values), apart)
            if self.seen.size:
                flat = np.einsum("wk,kp->wp", shares, self.seen.reshape(self.values.size, count * count))
                return np.asarray(z - flat.reshape(w.size, count, count))
            # Of a pair of modes p R + q R* = (p + q) Re R + j (p - q) Im R: a product of real by complex numbers.
            up, still = self.values.imag > 0.0, self.values.imag == 0.0
            seen, pushed = self.sight[:, up], self.push[up]
            left = np.concatenate((self.sight[:, still].real, seen.real, seen.imag), axis=1)
            for k in range(w.size):
                other = 1.0 / (s[k] - self.values[up].conj())
                even, odd = (shares[k, up] + other)[:, None], 1j * (shares[k, up] - other)[:, None]
                right = np.concatenate(
                    (
                        shares[k, still, None] * self.push[still].real,
                        even * pushed.real + odd * pushed.imag,
                        odd * pushed.real - even * pushed.imag,
                    )
                )
                z[k] -= (left @ right.view(np.float64)).view(np.complex128)
            return z
        eye = np.eye(loop.A.shape[0])
        for k in range(w.size):
            z[k] -= loop.C @ np.linalg.solve(s[k] * eye - loop.A, loop.B)
        return z


def modes(loop: Loop) -> Modes:
    """The modes of the network without any load's conductance."""
    count = loop.tau.size
    none = np.zeros((count, 0), dtype=np.complex128), np.zeros((0, count), dtype=np.complex128)
    nothing = np.zeros((0, 0, 0), dtype=np.complex128)
    if not loop.A.size:
        return Modes(np.zeros(0, dtype=np.complex128), *none, nothing, loop)
    values, right = np.linalg.eig(loop.A)
    values, right = values.astype(np.complex128), right.astype(np.complex128)
    sharp = _with_slow(loop.A, values)
    if sharp is not values:  # the eigenvectors of slow modes are then no better than their values were
        return Modes(sharp, *none, nothing, loop)
    try:
        left = np.linalg.inv(right)
    except np.linalg.LinAlgError:
        return Modes(values, *none, nothing, loop)
    # The greater norm is quick; only if it does not tell, the one that is exact.
    condition = np.linalg.norm(right) * np.linalg.norm(left)
    if condition >= 1e8:
        condition = np.linalg.norm(right, 2) * np.linalg.norm(left, 2)
    if not condition < 1e8:
        return Modes(values, *none, nothing, loop)
    c = np.asarray(loop.C @ right, dtype=np.complex128)
    b = np.asarray(left @ loop.B, dtype=np.complex128)
    if values.size * count * count <= _WHOLE:
        nothing = np.einsum("ik,kj->kij", c, b)
    return Modes(values, c, b, nothing, loop)


_LARGE = 400  # states
_WHOLE = 200_000  # numbers of ``Modes.seen``: 3.2 MB


def polished(matrix: Floats, value: complex) -> tuple[complex, Complex, Complex]:
    """An eigenvalue of ``matrix`` (E, E) [rad/s] made sharper, with its right and left eigenvectors (E,).

    Inverse iteration from both sides and the two-sided Rayleigh quotient (Parlett, The Symmetric Eigenvalue Problem,
    section 4; Ostrowski 1959): slow modes beside very fast ones get the accuracy that their own elements allow.
    """
    size = matrix.shape[0]
    scale = max(abs(value), 1e-300)
    eye = np.eye(size)
    start = 1.0 + 0.1 * np.cos(np.arange(size) * 1.7)
    right: Complex = start.astype(np.complex128)
    left: Complex = right.copy()
    best = value
    for step in range(4):
        shifted = matrix - (best + (1e-9 * scale if step == 0 else 1e-15 * scale)) * eye
        try:
            right = np.linalg.solve(shifted, right).astype(np.complex128)
            left = np.linalg.solve(shifted.T, left).astype(np.complex128)
        except np.linalg.LinAlgError:
            break
        if not (np.isfinite(right).all() and np.isfinite(left).all()):
            return value, start.astype(np.complex128), start.astype(np.complex128)
        right, left = right / np.abs(right).max(), left / np.abs(left).max()
        overlap = left @ right
        if abs(overlap) < 1e-12:  # nearly defective: the quotient would not help
            break
        found = complex(left @ (matrix @ right) / overlap)
        if abs(found - value) > 1e-3 * scale:
            break
        done = abs(found - best) <= (1e-15 if size < _LARGE else 1e-14) * scale  # each step cubes what is left
        best = found
        if done:
            break
    return best, right, left


def spectra(loop: Loop, g: Floats) -> list[tuple[Floats, Complex]]:
    """Matrix (E, E) and eigenvalues (E,) [rad/s] of the closed loop for each row of ``g`` (Q, N) [S].

    Loads with a conductance of zero are left out, so E depends on the row.
    """
    found: list[tuple[Floats, Complex]] = [(loop.A, np.zeros(0, dtype=np.complex128))] * len(g)
    for row, matrix, values in each_spectrum(loop, g):
        found[row] = matrix, values
    return found


def each_spectrum(loop: Loop, g: Floats) -> Iterator[tuple[int, Floats, Complex]]:
    """What ``spectra`` finds for ``g`` (Q, N) [S], with the index of its row; rows of the same loads follow each other.

    So many as fit into a few megabytes are found at once; of large networks, one after the other.
    """
    running = g > 0.0
    patterns, which = np.unique(running, axis=0, return_inverse=True)
    which = which.reshape(-1)
    for k, chosen in enumerate(patterns):
        rows = np.flatnonzero(which == k)
        part = loop.of(chosen)
        many = max(1, _AT_ONCE // (part.A.shape[0] + part.tau.size + 1) ** 2)
        for first in range(0, rows.size, many):
            piece = rows[first : first + many]
            matrices = closed(part, g[np.ix_(piece, chosen)])
            values = np.linalg.eigvals(matrices) if matrices.size else np.zeros(matrices.shape[:2])
            for i, row in enumerate(piece.tolist()):
                yield row, matrices[i], _with_slow(matrices[i], values[i].astype(np.complex128))


_AT_ONCE = 1_000_000  # numbers of matrices that are found at once


def _with_slow(matrix: Floats, values: Complex) -> Complex:
    """The eigenvalues (E,) [rad/s] of ``matrix`` (E, E), the slow ones taken from its inverse where rounding needs it.

    The error of an eigenvalue is about 1e-16 of the greatest; that of an inverse one, 1e-16 of the inverse's greatest.
    """
    size = np.abs(values)
    if not size.size or size.max() < _SPREAD * size.min():
        return values
    try:
        inverse = np.linalg.eigvals(np.linalg.inv(matrix)).astype(np.complex128)
    except np.linalg.LinAlgError:
        return values
    if not np.all(np.abs(inverse) > 0.0):
        return values
    slow = 1.0 / inverse
    fast_order, slow_order = np.argsort(-size), np.argsort(-np.abs(slow))
    middle = np.sqrt(size.max() * np.abs(slow).min())
    count = int(np.sum(size >= middle))
    if 0 < count < size.size and values[fast_order[count - 1]].imag > 0.0:
        count += 1  # a pair stays together
    return np.concatenate((values[fast_order[:count]], slow[slow_order[count:]]))


_SPREAD = 1e10  # between the greatest and the smallest eigenvalue


def least_damped(matrix: Floats, values: Complex, accuracy: float = 1e-9) -> tuple[float, float]:
    """Smallest damping -Re/|.| (a ratio) of the eigenvalues (E,) [rad/s] of ``matrix`` (E, E), and its |.|/2pi [Hz].

    Two nan where there is no eigenvalue other than zero. Eigenvalues that rounding may have moved by more than
    ``accuracy`` (a share of the damping) are made sharper.
    """
    found = values[(np.abs(values) > 0.0) & (values.imag >= 0.0)]
    if not found.size:
        return np.nan, np.nan
    ratio = -found.real / np.abs(found)
    size = np.abs(found)
    noise = 1e-15 * np.minimum(np.abs(matrix).max() / size, np.maximum(size / size.min(), _SPREAD))
    doubtful = np.flatnonzero(ratio - noise <= (ratio + noise).min())
    if np.any(noise[doubtful] > accuracy * np.abs(ratio[doubtful])):
        doubtful = doubtful[np.argsort(ratio[doubtful])]
        chosen: list[int] = []
        for i in doubtful.tolist():  # of equal parts of the network each has the same
            if len(chosen) < 8 and not np.any(np.abs(found[chosen] - found[i]) <= 4.0 * noise[i] * size[i]):
                chosen.append(i)
        found = np.array([polished(matrix, complex(found[i]))[0] for i in chosen])
        ratio = -found.real / np.abs(found)
    best = int(ratio.argmin())
    damping = 0.0 if abs(ratio[best]) < ON_AXIS else float(ratio[best])
    return damping, float(np.abs(found[best])) / (2.0 * np.pi)


ON_AXIS = 1e-12  # a damping this small is rounding: the eigenvalue lies on the axis
