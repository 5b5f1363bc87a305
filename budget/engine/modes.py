"""The linear network in the coordinates of its modes, where it can be advanced exactly over a step of any length.

With x' = A x + B u and A = V diag(rate) V^-1 the modes z = V^-1 x obey z' = rate z + V^-1 B u, one by one. For an input
that is a polynomial in time over the step, z is then known in closed form through the functions

    phi_0(a) = e^a,   phi_k(a) = (phi_(k-1)(a) - 1/(k-1)!) / a,
    integral of e^(r (T - s)) s^k ds from 0 to T = k! T^(k+1) phi_(k+1)(r T)

(Hochbruck & Ostermann, "Exponential integrators", Acta Numerica 19, 2010, section 2). Of a pair of conjugate modes one
is kept. The price of modes is their condition: where A is close to having no basis of
eigenvectors (critical damping) V is close to singular, and rounding grows by cond(V). ``condition`` tells.

A table of steps in powers of 2^(1/4) keeps what depends on the step length alone; rows are made when first used.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import factorial

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Indices = NDArray[np.intp]
Singles = NDArray[np.float32]

PER_OCTAVE = 4  # step lengths
NODES = (0.25, 0.5, 0.75, 1.0)  # of a step, where values are exact
_QUIET = 200_000  # multiplications in one product: common linear algebra libraries start threads above some 260 000
_SMALL = 40  # unknowns
_MANY = 100  # inputs
_CARRIED = 12_000_000  # numbers in ``Steps.carried``: 48 MB
_OCTAVES = 50  # from the shortest step to the window
_SERIES = 18  # terms of phi_3 inside the unit circle: 1/21! is below rounding


@dataclass(frozen=True, slots=True)
class Modes:
    """Modes of x' = A x + B u, R of them; x = Re(right z), z = left x."""

    rate: Complex  # (R,) 1/s
    right: Complex  # (K, R)
    left: Complex  # (R, K)
    condition: float  # of the eigenvectors in energy coordinates, by Frobenius norms; 1 at best

    def seen(self, matrix: Floats) -> Complex:
        """Rows ``matrix`` (Y, K) of states as rows (Y, R) of modes; ratio of the row's unit to that of a state."""
        found: Complex = matrix @ self.right
        return found

    def driven(self, matrix: Floats) -> Complex:
        """Columns ``matrix`` (K, M) of inputs as columns (R, M) on modes, each in the unit of a state's derivative."""
        found: Complex = self.left @ matrix
        return found


def modes(A: Floats, weight: Floats) -> Modes:  # noqa: N803
    """The modes of ``A`` (K, K) [1/s], found in the coordinates weight * x, ``weight`` (K,) the root of each energy.

    A network without states gets one mode that nothing drives and nobody sees.
    """
    if not A.size:
        nothing = np.zeros((0, 1), dtype=np.complex128)
        return Modes(np.array([-1.0 + 0j]), nothing, nothing.T.copy(), 1.0)
    found, vectors = np.linalg.eig(weight[:, None] * A / weight)
    rate: Complex = found.astype(np.complex128)
    kept = np.flatnonzero(rate.imag >= 0.0)
    rate, kept_vectors = rate[kept], vectors[:, kept].astype(np.complex128)
    paired = np.flatnonzero(rate.imag > 0.0)
    # x = Re(v) a + Im(v) b is Re(v z) with z = a - jb. The real basis keeps the residual of the inverse at rounding
    # also where a pair is about to merge, and the inverse of the complex one would not be conjugate to all digits.
    basis = np.concatenate((kept_vectors.real, kept_vectors.imag[:, paired]), axis=1)
    basis_scale = np.linalg.norm(basis, axis=0)
    left = np.zeros((rate.size, weight.size), dtype=np.complex128)
    try:
        inverse = np.linalg.inv(basis / basis_scale)
        condition = float(np.linalg.norm(basis / basis_scale) * np.linalg.norm(inverse)) / weight.size
        inverse = inverse / basis_scale[:, None]
        left += inverse[: rate.size]
        left[paired] -= 1j * inverse[rate.size :]
    except np.linalg.LinAlgError:
        condition = np.inf
    rate.real = np.minimum(rate.real, 0.0)  # the network is passive: growth is rounding
    right: Complex = kept_vectors / weight[:, None]
    return Modes(rate, right, left * weight, condition)


def phi(a: Complex) -> tuple[Complex, Complex, Complex, Complex]:
    """phi_0 to phi_3 of any array ``a`` (R,) of complex numbers with real parts that are not large: four ratios."""
    small = np.abs(a) < 1.0
    near = np.where(small, a, 0.0)
    series = np.zeros_like(near)
    for k in range(_SERIES, -1, -1):
        series = series * near + 1.0 / factorial(k + 3)
    far = np.where(small, 1.0, a)
    p0 = np.exp(a)
    f1 = (p0 - 1.0) / far
    f2 = (f1 - 1.0) / far
    f3 = (f2 - 0.5) / far
    p3 = np.where(small, series, f3)
    p2 = np.where(small, 0.5 + near * series, f2)
    p1 = np.where(small, 1.0 + near * (0.5 + near * series), f1)
    return p0, p1, p2, p3


def step_weights(rate: Complex, length: Floats, theta: Floats) -> Complex:
    """What makes z at ``theta`` (T,) or (J, T) of steps of ``length`` (J,) [s], shape (J, T, 6, R).

    The six factors, in s or a ratio, belong to z at the start, the input at the start when it is linear, its slope, and
    to the values at the start, the middle and the end of an input that is quadratic over the whole step.
    """
    reach = (length[:, None] * theta)[:, :, None]
    p0, p1, p2, p3 = phi(rate * reach)
    once, twice = reach * p1, reach**2 * p2
    first = reach * (theta[..., None] * p2)  # of (s/h), over the whole step h = reach / theta
    second = 2.0 * reach * (theta[..., None] ** 2 * p3)  # of (s/h)^2
    start = once - 3.0 * first + 2.0 * second
    middle = 4.0 * (first - second)
    return np.stack((p0, once, twice, start, middle, 2.0 * second - first), axis=2)


def solve_quietly(matrix: Floats, right: Floats) -> Floats:
    """Solve ``matrix`` (m, N, N) times x = ``right`` (m, N, J), ratios, for m small systems by halves.

    Linear algebra libraries start threads from some hundred unknowns on, which then cost far more than they save; the
    halves are not pivoted against each other, so that the diagonal blocks must be regular. Raises ``LinAlgError``.
    """
    size = matrix.shape[1]
    if size <= _SMALL:
        return np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)
    half = size // 2
    upper = solve_quietly(matrix[:, :half, :half], np.concatenate((matrix[:, :half, half:], right[:, :half]), axis=2))
    across, first = upper[:, :, : size - half], upper[:, :, size - half :]
    below = matrix[:, half:, :half]
    second = solve_quietly(matrix[:, half:, half:] - below @ across, right[:, half:] - below @ first)
    return np.concatenate((first - across @ second, second), axis=1)


@dataclass(slots=True)
class Steps:
    """Tables over the step lengths ``length`` (J,) [s], rising; see :func:`make_steps`.

    With Q quantities that the nonlinear inputs (M) depend on and P outputs. ``known`` marks rows that have been made.
    Where the inputs are ``many``, ``loop`` and ``spread`` are empty (see ``coupling``), and of ``defect`` the rows used
    of late are kept only, in ``carried``.
    """

    length: Floats  # (J,) s
    weights: Complex  # (J, 4, 6, R) at the nodes
    loop: Floats  # (J, 2 Q, 2 M) from the inputs at the middle and the end to the quantities there
    spread: Floats  # (J, 2 Q) sum over |loop|, a bound for its effect
    defect: Floats  # (J, P, M) outputs at the end for a constant error of an input
    known: NDArray[np.bool_]  # (J,)
    rate: Complex  # (R,)
    drive: Complex  # (R, M)
    sense: Complex  # (Q, R)
    direct: Floats  # (Q, M)
    show: Complex  # (P, R)
    show_direct: Floats  # (P, M)
    many: bool = False
    carried: dict[int, Singles] = field(default_factory=dict)

    def need(self, levels: Indices) -> None:
        """Make the rows ``levels`` (m,), indices of ``length``, that are not known yet."""
        missing = np.unique(levels[~self.known[levels]])
        if not missing.size:
            return
        made = step_weights(self.rate, self.length[missing], np.array(NODES))
        self.weights[missing] = made
        self.known[missing] = True
        if self.many:
            return
        count_q, count_m = self.direct.shape
        for row, w in zip(missing.tolist(), made, strict=True):
            pushed = (self.sense * w[node, source] for node in (1, 3) for source in (4, 5))
            found = self._driven(np.concatenate((*pushed, self.show * w[3, 1])))
            loop = found[: 4 * count_q].reshape(2, 2, count_q, count_m).transpose(0, 2, 1, 3).copy()
            for node in range(2):
                loop[node, :, node] += self.direct
            self.loop[row] = loop.reshape(2 * count_q, 2 * count_m)
            self.spread[row] = np.abs(self.loop[row]).sum(axis=1)
            self.defect[row] = np.abs(found[4 * count_q :] + self.show_direct)

    def errors(self, level: Indices, defect: Floats) -> Floats:
        """Bounds (m, P) of the outputs' errors at the end of steps for errors ``defect`` (m, M) of the inputs."""
        if not self.many:
            return np.asarray(np.matmul(self.defect[level], defect[:, :, None])[:, :, 0], dtype=np.float64)
        found = np.zeros((level.size, self.show_direct.shape[0]))
        most = max(8, _CARRIED // max(1, self.show_direct.size))
        for key in np.unique(level).tolist():
            table = self.carried.pop(key, None)
            if table is None:
                if len(self.carried) >= most:
                    self.carried.pop(next(iter(self.carried)))
                pushed = self._driven(self.show * self.weights[key, 3, 1])
                table = np.abs(pushed + self.show_direct).astype(np.float32)
            self.carried[key] = table  # the latest last
            rows = level == key
            found[rows] = defect[rows].astype(np.float32) @ table.T
        return found

    def _driven(self, rows: Complex) -> Floats:
        """Real part of rows (Y, R) times ``drive``, (Y, M), in pieces so small that no threads are started for them."""
        width = 2 * rows.shape[1]
        pairs = np.stack((rows.real, -rows.imag), axis=-1).reshape(rows.shape[0], width)
        drive = np.stack((self.drive.real, self.drive.imag), axis=1).reshape(width, self.drive.shape[1])
        piece = max(1, pairs.shape[0] if self.many else _QUIET // max(1, drive.size))
        parts = [pairs[k : k + piece] @ drive for k in range(0, pairs.shape[0], piece)]
        return np.concatenate(parts) if parts else np.zeros((0, self.drive.shape[1]))


def make_steps(
    rate: Complex,
    window: float,
    drive: Complex,
    sense: Complex,
    direct: Floats,
    show: Complex,
    show_direct: Floats,
) -> Steps:
    """Empty tables for steps up to ``window`` [s] and a little more.

    ``rate`` (R,) [1/s]; ``drive`` (R, M) from the nonlinear inputs; ``sense`` (Q, R) and ``direct`` (Q, M) to the
    quantities they depend on; ``show`` (P, R) and ``show_direct`` (P, M) to the outputs.
    """
    count = _OCTAVES * PER_OCTAVE + 1
    longest = 2.0 ** np.ceil(np.log2(window))  # the same lengths whatever the window
    length = longest * 2.0 ** ((np.arange(count) - (count - 1)) / PER_OCTAVE)
    outputs, inputs = show_direct.shape
    quantities = direct.shape[0]
    many = inputs > _MANY
    kept = 0 if many else count
    return Steps(
        length=length,
        weights=np.empty((count, len(NODES), 6, rate.size), dtype=np.complex128),
        loop=np.empty((kept, 2 * quantities, 2 * inputs)),
        spread=np.empty((kept, 2 * quantities)),
        defect=np.empty((kept, outputs, inputs)),
        known=np.zeros(count, dtype=np.bool_),
        rate=rate,
        drive=drive,
        sense=sense,
        direct=direct,
        show=show,
        show_direct=show_direct,
        many=many,
    )
