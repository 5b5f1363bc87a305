"""Branches and ladders at given frequencies.

A ladder runs from the bus side to the converter side. With v the voltage across the line and i the current towards the
converters, a series element adds Z i to v on the way back to the bus and a shunt adds Y v to i; that is all a ladder
does (the chain form of two-ports, e.g. Pozar, Microwave Engineering, 4th ed., section 4.4). Arrays have one entry for
each angular frequency ``w`` [rad/s], shape (K,).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from budget.engine.model import Branch, Ladder, Lead

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]

_TINY = 1e-300  # siemens or ohm; keeps a lossless resonance that is met exactly finite


def impedance(branch: Branch, w: Floats) -> Complex:
    """R + (jwL || Rp || 1/jwCp) + 1/jwC of one element [ohm], shape (K,); absent parts drop out."""
    s = 1j * w
    total = np.full(w.shape, complex(branch.R))
    across = np.zeros(w.shape, dtype=np.complex128)
    if branch.L:
        across += 1.0 / (s * branch.L)
    if branch.Rp:
        across += 1.0 / branch.Rp
    if branch.Cp:
        across += s * branch.Cp
    if branch.L or branch.Rp or branch.Cp:
        total += 1.0 / np.where(np.abs(across) < _TINY, _TINY, across)
    if branch.C:
        total += 1.0 / (s * branch.C)
    return total


def admittance(branch: Branch, w: Floats) -> Complex:
    """The inverse of ``impedance`` [S], shape (K,)."""
    z = impedance(branch, w)
    return 1.0 / np.where(np.abs(z) < _TINY, _TINY, z)


def seen(ladder: Ladder, w: Floats, behind: Complex) -> Complex:
    """Admittance [S] seen from the bus side of a ladder with ``behind`` [S] at its other end, shape (K,)."""
    y = behind
    for branch in reversed(ladder):
        y = y / (1.0 + impedance(branch, w) * y) if branch.place == "series" else y + admittance(branch, w)
    return y


def seen_through(lead: Lead, w: Floats, behind: Complex) -> Complex:
    """Admittance [S] seen through a lead, shape (K,)."""
    return behind / (1.0 + (lead.R + 1j * w * lead.L) * behind)


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
