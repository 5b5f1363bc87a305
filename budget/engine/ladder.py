"""Branches and ladders at given frequencies.

A ladder runs from the bus side to the converter side. With v the voltage across the line and i the current towards the
converters, a series element adds Z i to v on the way back to the bus and a shunt adds Y v to i; that is all a ladder
does (the chain form of two-ports, e.g. Pozar, Microwave Engineering, 4th ed., section 4.4). Arrays have one entry for
each angular frequency ``w`` [rad/s], shape (K,).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Branch, Ladder, Lead

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

SMALLEST = 1e-60  # siemens or ohm: a lossless resonance met exactly stays finite, and so does a product of several


def impedance(branch: Branch, w: Floats) -> Complex:
    """R + (jwL || Rp || 1/jwCp) + 1/jwC of one element [ohm], shape (K,); absent parts drop out."""
    z: Complex = impedances((branch,), w.ravel())[0].reshape(w.shape)
    return z


def admittance(branch: Branch, w: Floats) -> Complex:
    """The inverse of ``impedance`` [S], shape (K,)."""
    return inverse(impedance(branch, w))


def impedances(branches: Sequence[Branch], w: Floats) -> Complex:
    """``impedance`` of several elements at once [ohm], shape (B, K)."""
    found = np.empty((len(branches), w.size), dtype=np.complex128)
    tanks = [k for k, b in enumerate(branches) if b.Rp or b.Cp]
    plain = [k for k, b in enumerate(branches) if not (b.Rp or b.Cp)]
    if plain:
        z = np.empty((len(plain), w.size), dtype=np.complex128)
        z.real = np.array([branches[k].R for k in plain])[:, None]
        z.imag = np.multiply.outer(np.array([branches[k].L for k in plain]), w)
        found[plain] = z
    if tanks:
        some = [branches[k] for k in tanks]
        conductance = np.array([1.0 / b.Rp if b.Rp else 0.0 for b in some])[:, None]
        susceptance = np.multiply.outer(np.array([b.Cp or 0.0 for b in some]), w)
        susceptance -= np.multiply.outer(np.array([1.0 / b.L if b.L else 0.0 for b in some]), 1.0 / w)
        square = conductance * conductance + susceptance * susceptance
        open_circuit = square < SMALLEST * SMALLEST
        square[open_circuit] = 1.0
        z = np.empty(square.shape, dtype=np.complex128)
        z.real = np.array([b.R for b in some])[:, None] + conductance / square
        z.imag = -susceptance / square
        z[open_circuit] = 1.0 / SMALLEST
        found[tanks] = z
    blocked = [k for k, b in enumerate(branches) if b.C]
    if blocked:
        elastance = np.array([1.0 / (branches[k].C or 1.0) for k in blocked])
        found.imag[blocked] -= np.multiply.outer(elastance, 1.0 / w)
    return found


def elements(branches: Sequence[Branch], w: Floats) -> list[Complex]:
    """Impedance [ohm] of each series branch, admittance [S] of each shunt, each (K,).

    The same as ``impedance`` and ``admittance``; capacitors with ESR and ESL, which are many, go through real numbers.
    """
    found: list[Complex] = [np.zeros(0, dtype=np.complex128)] * len(branches)
    simple = [k for k, b in enumerate(branches) if b.place == "shunt" and b.C and not (b.Rp or b.Cp)]
    if simple:
        some = [branches[k] for k in simple]
        resistance = np.array([b.R for b in some])[:, None]
        reactance = np.multiply.outer(np.array([b.L for b in some]), w)
        reactance -= np.multiply.outer(np.array([1.0 / b.C if b.C else 0.0 for b in some]), 1.0 / w)
        square = reactance * reactance
        square += resistance * resistance
        short = None if square.all() else square == 0.0
        if short is not None:
            square[short] = 1.0
        y = np.empty(square.shape, dtype=np.complex128)
        np.divide(resistance, square, out=y.real)
        np.divide(reactance, square, out=y.imag)
        np.negative(y.imag, out=y.imag)
        if short is not None:
            y[short] = 1.0 / SMALLEST
        for k, row in zip(simple, y, strict=True):
            found[k] = row
    rest = sorted(set(range(len(branches))) - set(simple))
    if rest:
        for k, row in zip(rest, impedances([branches[k] for k in rest], w), strict=True):
            found[k] = row if branches[k].place == "series" else inverse(row)
    return found


def inverse(z: Complex) -> Complex:
    """1/z of each entry, shape (K,), in ohm or S; what is zero counts as the smallest impedance there is, 1e-60."""
    if not z.all():
        z = np.where(z == 0.0, SMALLEST, z)
    return 1.0 / z


def seen(ladder: Ladder, w: Floats, behind: Complex) -> Complex:
    """Admittance [S] seen from the bus side of a ladder with ``behind`` [S] at its other end, shape (K,)."""
    y = behind
    for branch in reversed(ladder):
        y = y * inverse(1.0 + impedance(branch, w) * y) if branch.place == "series" else y + admittance(branch, w)
    return y


def seen_through(lead: Lead, w: Floats, behind: Complex) -> Complex:
    """Admittance [S] seen through a lead, shape (K,)."""
    return behind * inverse(1.0 + (lead.R + 1j * w * lead.L) * behind)


def carry(ladder: Ladder, w: Floats, v: Complex, i: Complex) -> tuple[Complex, Complex]:
    """Voltage and current carried from the converter side of a ladder to its bus side, shapes (K,)."""
    for branch in reversed(ladder):
        if branch.place == "series":
            v = v + impedance(branch, w) * i
        else:
            i = i + admittance(branch, w) * v
    return v, i


def carry_through(lead: Lead, w: Floats, v: Complex, i: Complex) -> tuple[Complex, Complex]:
    """Voltage and current carried through a lead to its filter side, shapes (K,)."""
    return v + (lead.R + 1j * w * lead.L) * i, i
