"""What each pole carries of the reference step, and how well damped it is.

Poles that rounding cannot tell apart are one repeated pole: they share one residue (the sum of theirs, which
is the coefficient of 1/(s - p) of the repeated pole), and a repeated real pole that came out as a pair is
real.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.polynomials import horner, horner_slope, magnitude_sum


@dataclass(frozen=True, slots=True)
class Spacing:
    """How the poles of M loops lie to each other; worked out once, used by every function below.

    product  (M, q) Π over j ≠ i of (p_i - p_j); ones with dead time, where nothing needs it
    rows     (R,) loops that have repeated poles; empty for nearly every stack
    groups   (R, q, q) which poles of such a loop are one; transitive, true on the diagonal
    folded   (R, q) complex poles of such a loop that are one with their own conjugate, so truly real
    """

    product: ComplexArray
    rows: IntArray
    groups: BoolArray
    folded: BoolArray


def spaced(loops: Loops, poles: ComplexArray) -> Spacing:
    """Spacing of poles (M, q), NaN-padded.

    Two poles are one when they lie closer than the error that rounding of the coefficients can have given
    them, 10 × 2 n eps Σ abs(a_k p^k) / abs(Δ'(p)). With dead time the poles were found one by one and are
    simple.
    """
    count = poles.shape[1]
    none = Spacing(
        np.ones_like(poles),
        np.zeros(0, dtype=np.intp),
        np.zeros((0, count, count), dtype=bool),
        np.zeros((0, count), dtype=bool),
    )
    if loops.delayed or count < 2:
        return none
    with np.errstate(all="ignore"):
        product, nearest = _product_and_nearest(poles)
        slope = np.abs(loops.leading(loops.closed)[:, None] * product)
        noise = 20.0 * count * np.finfo(float).eps * magnitude_sum(loops.closed, np.abs(poles))
        rows = np.flatnonzero((nearest * slope <= noise).any(axis=1))
        if rows.size == 0:
            return Spacing(product, none.rows, none.groups, none.folded)
        distance = np.abs(poles[rows][:, :, None] - poles[rows][:, None, :])
        groups: BoolArray = distance * slope[rows][:, :, None] <= noise[rows][:, :, None]
    groups |= groups.transpose(0, 2, 1)
    diagonal = np.arange(count)
    groups[:, diagonal, diagonal] = True
    for _ in range(int(np.ceil(np.log2(count)))):  # friends of friends
        groups = np.matmul(groups, groups)
    return Spacing(product, rows, groups, _folded(poles[rows], groups))


def share_in_step(loops: Loops, poles: ComplexArray, spacing: Spacing | None = None) -> FloatArray:
    """Share of each pole in the reference step: abs(residue of T(s)/s) / abs(T(0)), doubled for a pair.

    poles : (M, q) scaled, NaN-padded; spacing : theirs, where it is known already. Returns (M, q); where
    T(0) = 0 the residue is not divided; NaN at padding. Error: eps × condition of the pole for simple poles;
    a repeated one is measured in test_share.py.
    """
    spacing = spacing or spaced(loops, poles)
    residue = residues(loops, poles, spacing)
    factor = np.where(poles.imag != 0.0, 2.0, 1.0)
    factor[spacing.rows] = np.where(spacing.folded, 1.0, factor[spacing.rows])
    with np.errstate(all="ignore"):
        final = np.abs(loops.numerator[:, -1] / loops.closed[:, -1])
        out: FloatArray = factor * np.abs(residue) / np.where(final == 0.0, 1.0, final)[:, None]
    out[np.isnan(poles)] = np.nan
    return out


def residues(loops: Loops, poles: ComplexArray, spacing: Spacing | None = None) -> ComplexArray:
    """Residues of T(s)/s, (M, q); of a repeated pole the coefficient of 1/(s - p), the same for each of it.

    Without dead time by the product over the computed poles, N(p) / (p a Π (p - p_j)): the computed poles are
    the exact poles of a nearby loop, so their errors cancel in sums. With dead time by the slope of the
    characteristic function, N e^(-pθ) / (p Δ'(p)).
    """
    with np.errstate(all="ignore"):
        if loops.delayed:
            theta = loops.dead_time[:, None]
            top, top_slope = horner_slope(loops.numerator, poles)
            _, slope = horner_slope(loops.denominator, poles)
            turn = np.exp(-poles * theta)
            return top * turn / (poles * (slope + (top_slope - theta * top) * turn))
        spacing = spacing or spaced(loops, poles)
        leading = loops.leading(loops.closed)[:, None]
        found = horner(loops.numerator, poles) / (poles * leading * spacing.product)
        some = spacing.rows
        if some.size:
            found[some] = _group_residues(loops.rows(some), poles[some], spacing.groups, found[some])
        return found


def _group_residues(
    loops: Loops, poles: ComplexArray, groups: BoolArray, residue: ComplexArray
) -> ComplexArray:
    """Residues with those of repeated poles replaced by the integral of T(s)/s round the whole group.

    The trapezoid rule on a circle half way to the nearest pole outside (s = 0 among them); its error falls as
    2^-64.
    """
    members = groups.sum(axis=2)
    centre = (groups @ np.where(np.isnan(poles), 0.0, poles)[:, :, None])[:, :, 0] / members
    away = np.where(groups, np.inf, np.abs(centre[:, :, None] - poles[:, None, :]))
    radius = 0.5 * np.fmin(np.fmin.reduce(away, axis=2), np.abs(centre))
    arm = radius[:, :, None] * np.exp(2j * np.pi * (np.arange(64) + 0.5) / 64)
    points = (centre[:, :, None] + arm).reshape(len(loops), -1)
    value = horner(loops.numerator, points) / (horner(loops.closed, points) * points)
    integral = (value.reshape(arm.shape) * arm).mean(axis=2)
    out: ComplexArray = np.where(members > 1, integral, residue)
    return out


def damping_of(loops: Loops, poles: ComplexArray, spacing: Spacing | None = None) -> FloatArray:
    """-Re p / abs(p) of each pole, (M, q): 1 for a real negative pole, repeated or not; 0 at s = 0."""
    spacing = spacing or spaced(loops, poles)
    with np.errstate(invalid="ignore"):
        ratio: FloatArray = -poles.real / np.abs(poles)
    ratio[poles == 0.0] = 0.0
    real = spacing.folded & (poles[spacing.rows].real < 0.0)
    ratio[spacing.rows] = np.where(real, 1.0, ratio[spacing.rows])
    return ratio


def _folded(poles: ComplexArray, groups: BoolArray) -> BoolArray:
    """Complex poles in one group with their own conjugate, which stands beside them. (R, q)."""
    out = np.zeros(poles.shape, dtype=bool)
    column = np.arange(poles.shape[1] - 1)
    joined = (poles.imag[:, :-1] > 0.0) & groups[:, column, column + 1]
    out[:, :-1] |= joined
    out[:, 1:] |= joined
    return out


def _product_and_nearest(poles: ComplexArray) -> tuple[ComplexArray, FloatArray]:
    """Π over j ≠ i of (p_i - p_j) and min abs(p_i - p_j), padding left out. (M, q) twice.

    Loops stand along the last axis here: six times faster than the other way round at 1024 loops of order 6.
    """
    columns = np.ascontiguousarray(poles.T)
    apart = columns[:, None, :] - columns[None, :, :]
    diagonal = np.arange(len(columns))
    apart[diagonal, diagonal] = 1.0
    padding = np.isnan(apart)
    if padding.any():
        apart[padding] = 1.0
    product = apart[:, 0].copy()
    for j in range(1, len(columns)):
        product *= apart[:, j]
    squared = apart.real**2 + apart.imag**2
    squared[diagonal, diagonal] = np.inf
    squared[padding] = np.inf
    return product.T, np.sqrt(squared.min(axis=1)).T
