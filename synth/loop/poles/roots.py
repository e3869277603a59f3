"""Roots of the characteristic polynomials of a stack, and the verdict on stability without them.

M loops, n order. Rows of coefficients in descending powers, padded with leading zeros.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import exact_degree
from synth.loop.polynomials import horner_slope, magnitude_sum

# A root that a step moved by more than this part of its size is polished again: the iteration is cubic.
ROUGH = 1e-5


def routh_stable(closed: FloatArray) -> BoolArray:
    """Whether every root of each row lies strictly in the left half plane.

    closed : (M, n + 1). Returns (M,). A root on the axis, a leading coefficient of 0 (a root at infinity,
    which any lag would bring into view on either side) and a row that is not finite are not stable; a nonzero
    constant is.

    Routh's array: the roots are all in the left half plane exactly when no entry of the first column is 0 or
    changes sign. A zero there needs none of the usual repairs, since it already tells that the row is not
    strictly stable.
    Source: E. J. Routh, A Treatise on the Stability of a Given State of Motion (1877).
    """
    with np.errstate(all="ignore"):  # rows that have failed run on with what they have; their verdict stands
        upper = closed * np.sign(closed[:, :1])
        stable: BoolArray = np.all((upper > 0.0) & np.isfinite(upper), axis=1, keepdims=True)[:, 0]
        degree = closed.shape[1] - 1
        a, b = upper[:, 0::2], upper[:, 1::2]
        for _ in range(degree - 1):
            ratio = a[:, :1] / b[:, :1]
            following = a[:, 1:].copy()
            following[:, : b.shape[1] - 1] -= ratio * b[:, 1:]
            stable &= following[:, 0] > 0.0
            a, b = b, following
    return stable


def closed_roots(closed: FloatArray, *, polish: bool = True) -> ComplexArray:
    """All roots of each row.

    closed : (M, n + 1); polish : False for roots that are but a start, as LAPACK gives them.
    Returns (M, n), ordered by decreasing real part; complex pairs stand together, upper half first, exactly
    conjugate; a real root has imaginary part exactly 0. Where the leading coefficient is 0 the roots that are
    missing, and in a row that is not finite all of them, are NaN (at the end of the row).

    Eigenvalues of the companion stack, balanced by LAPACK, then a step of Aberth's iteration, more where it
    moved far. Relative error about 10 × eps × condition: below 1e-12 for simple roots in the loops of
    tests/loop/poles/test_roots.py, eps^(1/m) for a root of multiplicity m.
    Source: O. Aberth, Iteration methods for finding all zeros of a polynomial simultaneously, Math. Comp. 27
    (1973).
    """
    rows, degree = closed.shape[0], closed.shape[1] - 1
    found = np.full((rows, degree), np.nan, dtype=complex)
    if rows == 0 or degree == 0:
        return found
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        monic = closed / closed[:, :1]
    full = np.isfinite(monic).all(axis=1)
    if full.all():
        rough = _companion_roots(monic)
        return _sorted(_polished(monic, rough)) if polish else rough
    if full.any():
        found[full] = closed_roots(closed[full], polish=polish)
    short = exact_degree(closed)
    for d in np.unique(short[~full]):
        if 0 < d < degree:
            at = np.flatnonzero((short == d) & ~full)
            found[at, :d] = closed_roots(closed[at, degree - d :], polish=polish)
    return found


def rightmost(roots: ComplexArray) -> FloatArray:
    """(M,) largest real part in each row of (M, q) roots, NaN padded; -inf where there is none."""
    out: FloatArray = np.where(np.isnan(roots.real), -np.inf, roots.real).max(axis=1, initial=-np.inf)
    return out


def _companion_roots(monic: FloatArray) -> ComplexArray:
    """Eigenvalues of the companion matrices; LAPACK puts pairs side by side, upper half first, conjugate."""
    rows, degree = monic.shape[0], monic.shape[1] - 1
    matrix = np.zeros((rows, degree, degree))
    matrix[:, 0, :] = -monic[:, 1:]
    index = np.arange(degree - 1)
    matrix[:, index + 1, index] = 1.0
    found: ComplexArray = np.linalg.eigvals(matrix).astype(complex)
    return found


def _polished(monic: FloatArray, roots: ComplexArray) -> ComplexArray:
    """One Aberth step from good roots, or up to four where roots many decades apart were not good enough."""
    better, moved = _aberth_step(monic, roots)
    for _ in range(3):
        rough = (moved > ROUGH).nonzero()[0]
        if rough.size == 0:
            break
        better[rough], moved[rough] = _aberth_step(monic[rough], better[rough])
    return better


def _aberth_step(monic: FloatArray, roots: ComplexArray) -> tuple[ComplexArray, FloatArray]:
    """Better roots and the largest relative move of each row, (M,).

    No step is taken that is not finite or exceeds half the way to a neighbour, and none where the value is
    rounding alone: there the roots are those of a polynomial within rounding of the given one already, and
    steps inside the uncertainty of a repeated root would tear its copies apart (the product over them off by
    1e-2 at eight copies; see test_a_repeated_root_stays_a_root_of_nearly_the_same_polynomial).
    """
    value, slope = horner_slope(monic, roots)
    noise = roots.shape[1] * np.finfo(float).eps * magnitude_sum(monic, np.abs(roots))
    columns = np.ascontiguousarray(roots.T)  # loops along the last axis: contiguous sums over the neighbours
    apart = columns[:, None, :] - columns[None, :, :]
    diagonal = np.arange(len(columns))
    with np.errstate(all="ignore"):  # 0/0 at roots that coincide: such a step is dropped
        squared = apart.real**2 + apart.imag**2
        squared[diagonal, diagonal] = np.inf
        repulsion = (apart.conj() / squared).sum(axis=1).T
        newton = value / slope
        step = newton / (1.0 - newton * repulsion)
        step[~(np.abs(step) <= 0.5 * np.sqrt(squared.min(axis=1).T)) | (np.abs(value) <= noise)] = 0.0
        moved: FloatArray = np.fmax.reduce(np.abs(step / roots), axis=1)  # 0/0 at a root at 0: no move
    better: ComplexArray = roots - step
    # the two halves of a pair see the same arithmetic but for the order of sums: make them conjugate again
    lower = roots.imag < 0.0
    better[:, 1:][lower[:, 1:]] = np.conj(better[:, :-1][lower[:, 1:]])
    better.imag[roots.imag == 0.0] = 0.0
    return better, moved


def _sorted(roots: ComplexArray) -> ComplexArray:
    """By decreasing real part. A stable sort keeps pairs together, their halves having the same real part."""
    order = np.argsort(-roots.real, axis=1, kind="stable")
    return roots[np.arange(len(roots))[:, None], order]
