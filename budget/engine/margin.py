"""The smallest factor on all the converters' conductances together at which the bus is unstable.

**What is looked for.** With T(s) = Z(s) diag(g/(1 + s tau)) (see ``loop``) the factor k puts an eigenvalue at s where
1/k is an eigenvalue of T(s). The network alone is passive, hence stable; as k grows from zero, the first eigenvalue to
enter the right half-plane does so across the imaginary axis, at zero or through infinity. So the factor is 1/lambda
with the greatest lambda > 0 at which an eigenlocus of T(jw), 0 <= w <= infinity, meets the positive real axis: the
generalised Nyquist criterion (MacFarlane & Postlethwaite, Int. J. Control 25, 1977; Middlebrook's minor loop gain
Zo/Zi with one load). No order of the unstable factors is assumed: they need not be one interval, nor all k above one.

**How none is missed.** The axis is walked in steps that are a fraction of the distance to the nearest pole of T, so
that T is smooth within each step, whatever the damping. T is similar to the complex symmetric
root(G) Z root(G), G = diag(g/(1 + jw tau)); with its real and imaginary parts P and Q an eigenvector x of a real
eigenvalue lambda has x* P x = lambda x* x and x* Q x = 0. So lambda <= max eig P and lambda <= |T|: where these are
below what has been found, nothing need be computed. Elsewhere all eigenvalues are, and matched from step to step;
steps are halved where the match is not plain. Each crossing is then polished by bisection and regula falsi.

**Proof.** The eigenvalues of the closed loop just below the factor must be stable, and at zero and at infinity those
just above it unstable; a factor below 1 goes with an unstable loop as it stands. Where that fails the walk is repeated
in finer steps.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress

import numpy as np
from numpy.typing import NDArray

from budget.engine.loop import ON_AXIS, Loop, Modes, each_spectrum, least_damped, modes, polished

Floats = NDArray[np.float64]
Complex = NDArray[np.complex128]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]

MOST = 1e6  # a greater factor is no margin worth a number
_STEPS = (0.35, 0.12, 0.04)  # of the distance to the nearest pole
_BELOW = 1e-4  # how far beside a factor the loop is looked at
_CLOSE = 0.4  # of itself: an eigenvalue that moves more within a step is looked at in between
_HALVINGS = 8
_WHOLE = 100_000  # impedances of a walk that are kept: 1.6 MB
_TILTS = (0.0, -3.0, -1.0, -0.3, 0.3, 1.0, 3.0)
_BENT = 1.25  # times a bound at both ends of a step, the bound within: T bends by some 3 % of its parts
_MANY = 40  # loci


def smallest_factors(loop: Loop, g: Floats, ask: Callable[[], None] = lambda: None) -> Floats:
    """Smallest positive factor on the conductances ``g`` (Q, N) [S] at which the loop is unstable, shape (Q,), a ratio.

    0 where any factor will do (the network has an undamped resonance at a load, or feeds one without a capacitor or a
    control pole through an inductance); inf where none up to 10^6 does. A load that does not run has zero in ``g``.
    ``ask`` is called every now and then, and may raise.
    """
    running = g > 0.0
    factors = np.full(len(g), np.inf)
    at_once = (running & (loop.cut != 0.0).any(axis=0) & (loop.tau == 0.0)).any(axis=1)
    used: Bools = np.asarray(running.any(axis=0))
    loop, g = loop.of(used), g[:, used]
    open_modes, touched = _undamped(modes(loop), g)
    at_once |= touched
    factors[at_once] = 0.0
    todo = np.flatnonzero(~at_once & running.any(axis=1))
    for step in _STEPS:
        if not todo.size:
            break
        factors[todo] = _search(open_modes, g[todo], step, ask)
        todo = todo[~_proved(loop, g[todo], factors[todo], ask)]
    factors[factors > MOST] = np.inf
    return factors


def _undamped(open_modes: Modes, g: Floats) -> tuple[Modes, Bools]:
    """The modes without those on the imaginary axis, and which corners (Q,) have a load that such a one can reach."""
    values, loop = open_modes.values, open_modes.loop
    touched = np.zeros(len(g), dtype=np.bool_)
    kept = np.ones(values.size, dtype=np.bool_)
    for k in np.flatnonzero((-values.real < 1e-9 * np.abs(values)) & (values.imag > 0.0)).tolist():
        value, right, left = polished(loop.A, complex(values[k]))
        if -value.real > ON_AXIS * abs(value):
            continue
        kept &= np.abs(values - value) > 1e-9 * abs(value)
        kept &= np.abs(values - value.conjugate()) > 1e-9 * abs(value)
        # In energy coordinates an undamped mode of a passive network has left = right* (its flow preserves energy).
        reach = np.abs(loop.C @ right) * np.abs(left @ loop.B) / max(abs(left @ right), 1e-300)
        touched |= (g * reach).max(axis=1, initial=0.0) > 1e-9 * abs(value)
    return open_modes.of(kept), touched


def _walk(values: Complex, tau: Floats, step: float) -> Floats:
    """Angular frequencies (W,) [rad/s] from near zero to far above all poles, in steps that suit the nearest pole."""
    poles = np.concatenate((values[values.imag >= 0.0], -1.0 / tau[tau > 0.0] + 0j))
    if not poles.size:
        return np.ones(1)
    size = np.abs(poles)
    w, top = 0.01 * size.min(), 100.0 * size.max()
    damping = np.maximum(-poles.real, 1e-13 * size)
    walked = [w]
    while w < top and len(walked) < 40_000:
        w += step * max(np.sqrt(((w - poles.imag) ** 2 + damping**2).min()), 1e-15 * w)
        walked.append(w)
    return np.array(walked)


def _root(loop: Loop, g: Floats, w: Floats) -> Complex:
    """sqrt(g/(1 + jw tau)) for matching rows of ``g`` (M, N) [S] and ``w`` (M,) [rad/s]; shape (M, N)."""
    root: Complex = np.sqrt(g / (1.0 + 1j * w[:, None] * loop.tau))
    return root


def _ends(loop: Loop, g: Floats) -> tuple[Floats, Floats]:
    """The greatest real loci at w = 0 and at infinity, shape (Q,) each, a ratio."""
    pair = np.sqrt(g)[:, :, None] * np.sqrt(g)[:, None, :]
    static = -loop.D
    if loop.A.size:
        static = static + loop.C @ np.linalg.solve(loop.A, loop.B)
    still = np.linalg.eigvalsh(pair * 0.5 * (static + static.T)).max(axis=1)
    plain = loop.tau == 0.0
    fast = np.zeros(len(g))
    if plain.any():
        part = (pair * -loop.D)[:, plain][:, :, plain]
        fast = np.maximum(fast, np.linalg.eigvalsh(0.5 * (part + np.swapaxes(part, 1, 2))).max(axis=1))
    if not plain.all() and loop.D1.any():
        slow = np.sqrt(loop.tau[~plain])
        part = (pair * -loop.D1)[:, ~plain][:, :, ~plain] / (slow[:, None] * slow)
        fast = np.maximum(fast, np.linalg.eigvalsh(part).max(axis=1))
    return still, fast


def _search(open_modes: Modes, g: Floats, step: float, ask: Callable[[], None]) -> Floats:
    """The factors (Q,) that one walk finds, from the conductances ``g`` (Q, N) [S]."""
    loop = open_modes.loop
    w = _walk(open_modes.values, loop.tau, step)
    level = np.full(len(g), 0.5 / MOST)
    whole = w.size * loop.tau.size**2 <= _WHOLE
    best = _at_once(open_modes, g, w, level) if whole else _one_by_one(open_modes, g, w, level, ask)
    for ends in _ends(loop, g):
        rows = np.flatnonzero(ends > np.maximum(best, level))
        if rows.size:
            rows = rows[_unstable(loop, g[rows], (1.0 + _BELOW) / ends[rows], ask)]
            best[rows] = ends[rows]
    return np.where(best > 0.0, 1.0 / np.where(best > 0.0, best, 1.0), np.inf)


def _at_once(open_modes: Modes, g: Floats, w: Floats, level: Floats) -> Floats:
    """Greatest crossing (Q,) of the positive real axis, a ratio, above ``level`` (Q,); 0 if none. For small networks.

    The walk ``w`` (W,) [rad/s] is kept with all its impedances, and all corners go along it together.
    """
    loop, q = open_modes.loop, len(g)
    z = open_modes.impedances(w)
    # |T| <= Frobenius norm of root(G) Z root(G): a first bound, for all corners and frequencies at once.
    lag = 1.0 / np.sqrt(1.0 + (w[:, None] * loop.tau) ** 2)
    square = (z.real**2 + z.imag**2) * lag[:, :, None] * lag[:, None, :]
    weight = g[:, :, None] * g[:, None, :]
    bound = np.sqrt(np.einsum("wp,qp->qw", square.reshape(w.size, -1), weight.reshape(q, -1)))
    corner, place = np.nonzero(bound >= bound.max(axis=1, keepdims=True) / 30.0)
    bound[corner, place] = np.minimum(bound[corner, place], _greatest_real(loop, g[corner], w[place], z[place]))

    best = np.zeros(q)
    target = np.maximum(bound.max(axis=1) / 4.0, level)
    done = np.zeros(q, dtype=np.bool_)
    while not done.all():
        rows = np.flatnonzero(~done)
        found = _crossings(open_modes, g[rows], w, z, bound[rows], target[rows])
        best[rows] = np.maximum(best[rows], found)
        done |= (best >= target) | (target <= level)
        target = np.maximum(target / 8.0, np.maximum(best, level))
    return best


def _one_by_one(open_modes: Modes, g: Floats, w: Floats, level: Floats, ask: Callable[[], None]) -> Floats:
    """As ``_at_once``, one step of the walk and one corner after the other: for networks of many loads.

    With any tilt t, lambda <= max eig (P - t Q): x* (P - t Q) x is lambda for its eigenvector. That holds all along a
    step if it holds at both ends, but for how far T bends in between. And as every corner's G is that of the greatest
    conductances with each load scaled down, a bound above zero for these holds for all corners. So a few frequencies
    need all their eigenvalues, the most promising first.
    """
    loop = open_modes.loop
    most = g.max(axis=0)
    share = (g / most).max(axis=1)
    top = np.zeros((len(_TILTS), w.size))
    for k in range(w.size):
        ask()
        t = _scaled(loop, most, float(w[k]), open_modes.impedances(w[k : k + 1])[0])
        top[:, k] = _tilted(t, 0.0)
        if top[0, k] >= 0.03 * top[0].max():
            top[1:, k] = [_tilted(t, tilt) for tilt in _TILTS[1:]]
    ends = np.maximum(top[:, :-1], top[:, 1:])
    bound, tilts = _BENT * ends.min(axis=0), ends.argmin(axis=0)  # of each step
    found = np.zeros(len(g))
    known: dict[tuple[int, int], Complex] = {}

    def loci(corner: int, k: int, z: Complex) -> Complex:
        if (corner, k) not in known:
            ask()
            known[corner, k] = _loci(loop, g[corner : corner + 1], w[k : k + 1], z[None])[0]
        return known[corner, k]

    for k in np.argsort(-bound, kind="stable").tolist():
        rows = np.flatnonzero(bound[k] * share > np.maximum(found, level))
        if not rows.size:
            break
        z = open_modes.impedances(w[k : k + 2])
        for corner in rows.tolist():
            ask()
            pair = (_scaled(loop, g[corner], float(w[k + i]), z[i]) for i in range(2))
            reach = _BENT * max(_tilted(t, _TILTS[int(tilts[k])]) for t in pair)
            if reach <= max(float(found[corner]), float(level[corner])):
                continue
            # What lies far below may be left for its own turn: the ends of this step may lie far above.
            target = np.maximum(np.maximum(found, level), 0.25 * reach / _BENT)
            own = slice(corner, corner + 1)
            best = found[own].copy()
            _steps(
                open_modes,
                g[own],
                np.zeros(1, dtype=np.intp),
                *(w[k : k + 1], w[k + 1 : k + 2]),
                *(loci(corner, k, z[0])[None], loci(corner, k + 1, z[1])[None]),
                target[own],
                best,
            )
            found[own] = best
    return found


def _scaled(loop: Loop, g: Floats, w: float, z: Complex) -> Complex:
    """T (N, N), a ratio, of the conductances ``g`` (N,) [S] at ``w`` [rad/s] and the impedances ``z`` (N, N) [ohm]."""
    root = _root(loop, g[None], np.array([w]))[0]
    return np.asarray(root[:, None] * z * root, dtype=np.complex128)


def _tilted(t: Complex, tilt: float) -> float:
    """max eig (P - tilt Q) of T (N, N), a ratio, or zero if that is greater."""
    return max(0.0, float(np.linalg.eigvalsh(t.real - tilt * t.imag if tilt else t.real)[-1]))


def _greatest_real(loop: Loop, g: Floats, w: Floats, z: Complex) -> Floats:
    """max eig P (M,), a ratio, for matching rows of g (M, N) [S], w (M,) [rad/s] and z (M, N, N) [ohm]."""
    if not w.size:
        return np.zeros(0)
    root = _root(loop, g, w)
    real = (root[:, :, None] * z * root[:, None, :]).real
    return np.asarray(np.linalg.eigvalsh(real)[:, -1])


def _loci(loop: Loop, g: Floats, w: Floats, z: Complex) -> Complex:
    """Eigenvalues of T (M, N), ratios, for matching rows of g (M, N) [S], w (M,) [rad/s] and z (M, N, N) [ohm]."""
    root = _root(loop, g, w)
    return np.linalg.eigvals(root[:, :, None] * z * root[:, None, :]).astype(np.complex128)


def _nearest(loop: Loop, g: Floats, w: Floats, z: Complex, guess: Complex) -> Complex:
    """The eigenvalue of T nearest to the ``guess`` (M,), a ratio, for matching rows as in ``_loci``; shape (M,)."""
    if g.shape[1] <= _MANY:
        loci = _loci(loop, g, w, z)
        return np.asarray(loci[np.arange(len(g)), np.abs(loci - guess[:, None]).argmin(axis=1)])
    root = _root(loop, g, w)
    t = root[:, :, None] * z * root[:, None, :]
    return np.array([_by_iteration(t[k], complex(guess[k])) for k in range(len(g))], dtype=np.complex128)


def _by_iteration(t: Complex, guess: complex) -> complex:
    """The eigenvalue of the complex symmetric ``t`` (N, N) nearest to ``guess``, ratios, by inverse iteration.

    Two turns with the guess find the nearest vector, then its own quotient x^T t x / x^T x takes the place of the
    guess. Where that does not settle close by, all eigenvalues are found.
    """
    eye = np.eye(len(t))
    x: Complex = (1.0 + 0.1 * np.cos(np.arange(len(t)) * 1.7)).astype(np.complex128)
    shift, last = guess, guess
    with suppress(np.linalg.LinAlgError):  # a shift that is an eigenvalue to all digits
        inverse = np.linalg.inv(t - shift * eye)
        for turn in range(7):
            moved = inverse @ x if turn < 3 else np.linalg.solve(t - shift * eye, x)
            x = np.asarray(moved / np.abs(moved).max(), dtype=np.complex128)
            value = complex((x @ (t @ x)) / (x @ x))
            if turn >= 2 and abs(value - last) <= 1e-13 * abs(value):
                if abs(value - guess) <= 0.1 * abs(guess):
                    return value
                break
            if turn >= 2:
                shift = value
            last = value
    values = np.linalg.eigvals(t)
    return complex(values[np.abs(values - guess).argmin()])


def _crossings(open_modes: Modes, g: Floats, w: Floats, z: Complex, bound: Floats, target: Floats) -> Floats:
    """Greatest crossing of the positive real axis found at or above ``target`` (Q,), shape (Q,), ratios; 0 if none."""
    loop = open_modes.loop
    found = np.zeros(len(g))
    if w.size < 2:
        return found
    near = bound >= 0.4 * target[:, None]
    steps = near[:, :-1] | near[:, 1:]
    corner, left = np.nonzero(steps)
    if not corner.size:
        return found
    needed = np.zeros_like(near)
    needed[:, :-1] |= steps
    needed[:, 1:] |= steps
    rows, places = np.nonzero(needed)
    index = np.zeros(near.shape, dtype=np.intp)
    index[rows, places] = np.arange(rows.size)
    loci = _loci(loop, g[rows], w[places], z[places])
    e0, e1 = loci[index[corner, left]], loci[index[corner, left + 1]]
    _steps(open_modes, g, corner, w[left], w[left + 1], e0, e1, target, found)
    return found


def _steps(
    open_modes: Modes,
    g: Floats,
    corner: Indices,
    w0: Floats,
    w1: Floats,
    e0: Complex,
    e1: Complex,
    target: Floats,
    found: Floats,
) -> None:
    """Raise ``found`` (Q,) to the crossings at or above ``target`` (Q,), ratios, within steps of the walk.

    Each step of the ``corner`` (M,), an index, leads from ``w0`` to ``w1`` (M,) [rad/s], with the loci ``e0`` and
    ``e1`` (M, N) there, which are matched, and the step halved where that is not plain.
    """
    loop = open_modes.loop
    for depth in range(_HALVINGS + 1):
        f0, f1, plain = _matched(e0, e1, target[corner])
        split = ~plain if depth < _HALVINGS else np.zeros(corner.size, dtype=np.bool_)
        _note(open_modes, g, corner[~split], w0[~split], w1[~split], f0[~split], f1[~split], target, found)
        if not split.any():
            break
        corner, w0, w1, e0, e1 = corner[split], w0[split], w1[split], e0[split], e1[split]
        middle = 0.5 * (w0 + w1)
        between = _loci(loop, g[corner], middle, open_modes.impedances(middle))
        corner = np.concatenate((corner, corner))
        w0, w1 = np.concatenate((w0, middle)), np.concatenate((middle, w1))
        e0, e1 = np.concatenate((e0, between)), np.concatenate((between, e1))


def _matched(e0: Complex, e1: Complex, target: Floats) -> tuple[Complex, Complex, Bools]:
    """The loci ``e0`` and ``e1`` (M, N) in the same order, ratios, and whether the match is plain (M,).

    Closest pairs first. It is plain if no locus that may reach ``target`` (M,) has moved by much of itself. Of many,
    those that are far from reaching it are left out.
    """
    if e0.shape[1] > _MANY:
        least = 0.1 * target[:, None]
        count = int(max(np.sum(np.abs(e0) >= least, axis=1).max(), np.sum(np.abs(e1) >= least, axis=1).max(), 1))
        e0, e1 = (np.take_along_axis(e, np.argsort(-np.abs(e), axis=1)[:, :count], axis=1) for e in (e0, e1))
    count, n = e0.shape
    distance = np.abs(e0[:, :, None] - e1[:, None, :])
    worst = np.zeros(count)
    sorted_e1 = np.empty_like(e1)
    each = np.arange(count)
    for _ in range(n):
        flat = distance.reshape(count, -1).argmin(axis=1)
        i, j = flat // n, flat % n
        moved = distance[each, i, j]
        sorted_e1[each, i] = e1[each, j]
        size = np.maximum(np.abs(e0[each, i]), np.abs(e1[each, j]))
        counts = (size >= 0.4 * target) & (moved > _CLOSE * size)
        worst = np.where(counts, 1.0, worst)
        distance[each, i, :] = np.inf
        distance[each, :, j] = np.inf
    return e0, sorted_e1, worst == 0.0


def _note(
    open_modes: Modes,
    g: Floats,
    corner: Indices,
    w0: Floats,
    w1: Floats,
    e0: Complex,
    e1: Complex,
    target: Floats,
    found: Floats,
) -> None:
    """Raise ``found`` (Q,), a ratio, to the crossings within the steps from ``w0`` to ``w1`` (M,) [rad/s]."""
    noise = 1e-11 * np.maximum(np.abs(e0), np.abs(e1))
    crosses = (e0.imag > 0.0) != (e1.imag > 0.0)
    crosses &= np.maximum(np.abs(e0.imag), np.abs(e1.imag)) > noise
    crosses &= np.maximum(e0.real, e1.real) >= np.maximum(target, found)[corner][:, None] * 0.7
    m, which = np.nonzero(crosses)
    high = 1.2 * np.maximum(e0.real, e1.real)[m, which]  # about the most that the locus may reach where it crosses
    share = e0.imag[m, which] / (e0.imag - e1.imag)[m, which]
    guess = e0.real[m, which] + share * (e1.real - e0.real)[m, which]
    order = np.argsort(-guess, kind="stable")
    m, which, high = m[order], which[order], high[order]
    while m.size:  # the most promising of each corner; then what may still beat it
        rows, first = np.unique(corner[m], return_index=True)
        steps, loci = m[first], which[first]
        ends = e0[steps, loci], e1[steps, loci]
        value = _polished(open_modes, g[rows], w0[steps], w1[steps], *ends, found[rows])
        found[rows] = np.maximum(found[rows], value)
        left = high > found[corner[m]]
        left[first] = False
        m, which, high = m[left], which[left], high[left]


def _polished(open_modes: Modes, g: Floats, a: Floats, b: Floats, fa: Complex, fb: Complex, least: Floats) -> Floats:
    """Where a locus crosses the positive real axis between ``a`` and ``b`` (M,) [rad/s]; shape (M,), a ratio, 0 if not.

    ``fa``, ``fb`` (M,) are its ends. One that stays below ``least`` (M,) is given up. Regula falsi with Illinois'
    weights (Dowell & Jarratt, BIT 11, 1971), and now and then a halving.
    """
    result = np.zeros(a.size)
    rows = np.arange(a.size)
    ya, yb = fa.imag, fb.imag
    last = np.zeros(a.size)
    for turn in range(80):
        whole = np.where(ya == yb, 1.0, ya - yb)
        share = np.full(ya.shape, 0.5) if turn % 8 == 7 else np.clip(np.where(ya == yb, 0.5, ya / whole), 0.0, 1.0)
        at = a + share * (b - a)
        guess = fa + share * (fb - fa)
        value = _nearest(open_modes.loop, g[rows], at, open_modes.impedances(at), guess)
        done = (np.abs(value.imag) <= 1e-11 * np.abs(value)) | (b - a <= 4e-16 * b)
        # Between its ends it strays from the chord by less than half of that.
        below = np.maximum(fa.real, fb.real) + 0.5 * np.abs(fb - fa) < least[rows]
        real = done & (np.abs(value.imag) <= 1e-6 * np.abs(value)) & (value.real > 0.0)
        result[rows[real]] = value.real[real]
        same = (value.imag > 0.0) == (ya > 0.0)
        weight = np.where(np.where(same, 1.0, -1.0) == last, 0.5, 1.0)
        last = np.where(same, 1.0, -1.0)
        ya, yb = np.where(same, value.imag, weight * ya), np.where(same, weight * yb, value.imag)
        a, fa = np.where(same, at, a), np.where(same, value, fa)
        b, fb = np.where(same, b, at), np.where(same, fb, value)
        open_ = ~(done | below)
        rows, a, b, fa, fb = rows[open_], a[open_], b[open_], fa[open_], fb[open_]
        ya, yb, last = ya[open_], yb[open_], last[open_]
        if not rows.size:
            break
    return result


def _unstable(loop: Loop, g: Floats, factors: Floats, ask: Callable[[], None]) -> Bools:
    """Whether the loop is unstable with the finite ``factors`` (Q,), ratios, on the conductances ``g`` (Q, N) [S]."""
    found = np.full(len(g), np.nan)
    for row, matrix, values in each_spectrum(loop, factors[:, None] * g):
        ask()
        found[row] = least_damped(matrix, values, accuracy=0.1)[0]
    return np.asarray(found < -1e-9)


def _proved(loop: Loop, g: Floats, factors: Floats, ask: Callable[[], None]) -> Bools:
    """Whether the loop is stable just below the factors (Q,), ratios; at 10^6 where there is none."""
    stable: Bools = ~_unstable(loop, g, np.minimum(factors * (1.0 - _BELOW), MOST), ask)
    return stable
