"""x' = A x + b v over a panel, exactly, for a v that is a polynomial there.

The exponential and the part that v adds are built for a very short panel from a few terms of their series,
and then doubled: two panels of a length make one of twice that length, v being restricted to its two halves.
All lengths of a ladder come out on the way. What is doubled is exp(A h) - 1, so slow modes keep their digits
beside fast ones.

Source: C. Moler and C. Van Loan, Nineteen dubious ways to compute the exponential of a matrix, SIAM Review 20
(1978) 801-836, method 3 (scaling and squaring); the doubling of the driven part follows from the same rule.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from synth.loop.arrays import FloatArray
from synth.verify.panels import NODES, POINTS, basis

_TERMS = 15
_SHORT = 0.5  # |A| times the first length


@dataclass(frozen=True, slots=True)
class Rung:
    """One length h of panel: x at the 16 nodes is x0 + growth @ x0 + driven @ v.

    growth (16, n, n); driven (16, n, 16), v by its values at the nodes; None where nothing drives.
    """

    growth: FloatArray
    driven: FloatArray | None


def ladder(a: FloatArray, b: FloatArray | None, shortest: float, count: int) -> list[Rung]:
    """The panels of length shortest · 2^i, i = 0 ... count - 1. a (n, n), b (n,) or None."""
    norm = float(np.abs(a).sum(axis=1).max(initial=0.0)) * shortest
    before = max(0, int(np.ceil(np.log2(max(norm / _SHORT, 1e-300)))))
    h = shortest * 2.0**-before
    scaled = a * h
    growth = np.zeros((NODES, *a.shape))
    term = np.eye(len(a))
    moved = None if b is None else [b * h]
    for k in range(1, _TERMS + 1):
        term = term @ scaled / k
        growth += POINTS[:, None, None] ** k * term
        if moved is not None:
            moved.append(scaled @ moved[-1] / k)
    driven = None
    halves, moments, restricted = _halves(), _moments(), _restricted()
    if moved is not None:
        series = POINTS[:, None, None] ** np.arange(1, _TERMS + 2) * np.array(moved).T
        driven = series @ moments
    out = []
    for level in range(before + count):
        if level:
            if driven is not None:
                left = driven @ halves[0]
                driven = left + growth @ left + driven @ halves[1]
            growth = 2.0 * growth + growth @ growth
        if level >= before:
            out.append(Rung(growth, None if driven is None else driven @ restricted))
    return out


@cache
def _halves() -> tuple[FloatArray, FloatArray]:
    return basis(0.5 * POINTS), basis(0.5 + 0.5 * POINTS)


@cache
def _restricted() -> FloatArray:
    """(16, 16, 16): a panel's values to those on [0, node j]."""
    return basis(POINTS[:, None] * POINTS)


@cache
def _moments() -> FloatArray:
    """(terms, 16): ∫ (1 - x)^k of the polynomial with the given values, by Gauss's rule."""
    # Golub and Welsch (1969): nodes and weights from the eigenvalues of the recurrence
    k = np.arange(1, 20)
    off = k / np.sqrt(4.0 * k * k - 1.0)
    x, vectors = np.linalg.eigh(np.diag(off, 1) + np.diag(off, -1))
    weight, x = vectors[0] ** 2, 0.5 + 0.5 * x
    out: FloatArray = ((1.0 - x) ** np.arange(_TERMS + 1)[:, None] * weight) @ basis(x)
    return out
