"""What each pole carries of the reference step, and how well damped it is.

Poles that rounding cannot tell apart are one repeated pole: they share one residue (the sum of theirs, which
is the coefficient of 1/(s - p) of the repeated pole), and a repeated real pole that came out as a pair is
real.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.polynomials import horner, horner_slope, magnitude_sum


def share_in_step(loops: Loops, poles: ComplexArray) -> FloatArray:
    """Share of each pole in the reference step: abs(residue of T(s)/s) / abs(T(0)), doubled for a pair.

    poles : (M, q) scaled, NaN-padded. Returns (M, q); where T(0) = 0 the residue is not divided; NaN at
    padding. Error: eps × condition of the pole for simple poles; a repeated one is measured in test_share.py.
    """
    with np.errstate(all="ignore"):
        final = np.abs(loops.numerator[:, -1] / loops.closed[:, -1])
        residue = residues(loops, poles)
        groups = alike(loops, poles)
        paired = poles.imag != 0.0
        if groups is not None:
            some = np.flatnonzero((groups.sum(axis=2) > 1).any(axis=1))
            residue[some] = _group_residues(loops.rows(some), poles[some], groups[some], residue[some])
            paired = paired & ~folded(poles, groups)
        share = np.abs(residue) / np.where(final == 0.0, 1.0, final)[:, None]
    out: FloatArray = np.where(paired, 2.0, 1.0) * share
    out[np.isnan(poles)] = np.nan
    return out


def residues(loops: Loops, poles: ComplexArray) -> ComplexArray:
    """Residues of T(s)/s, (M, q).

    Without dead time by the product over the computed poles, N(p) / (p a Π (p - p_j)): the computed poles are
    the exact poles of a nearby loop, so their errors cancel in sums. With dead time by the slope of the
    characteristic function, N e^(-pθ) / (p Δ'(p)).
    """
    with np.errstate(all="ignore"):
        if _delayed(loops):
            theta = loops.dead_time[:, None]
            top, top_slope = horner_slope(loops.numerator, poles)
            _, slope = horner_slope(loops.denominator, poles)
            turn = np.exp(-poles * theta)
            return top * turn / (poles * (slope + (top_slope - theta * top) * turn))
        return horner(loops.numerator, poles) / (poles * loops.closed[:, :1] * _product_apart(poles))


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


def damping_of(loops: Loops, poles: ComplexArray) -> FloatArray:
    """-Re p / abs(p) of each pole, (M, q): 1 for a real negative pole, repeated or not; 0 at s = 0."""
    with np.errstate(invalid="ignore"):
        ratio = -poles.real / np.abs(poles)
    ratio[poles == 0.0] = 0.0
    groups = alike(loops, poles)
    if groups is not None:
        ratio[folded(poles, groups) & (poles.real < 0.0)] = 1.0
    return ratio


def alike(loops: Loops, poles: ComplexArray) -> BoolArray | None:
    """Which poles are one: (M, q, q), transitive, true on the diagonal; None when all are simple.

    Two poles are one when they lie closer than the error that rounding of the coefficients can have given
    them, 10 × 2 n eps Σ abs(a_k p^k) / abs(Δ'(p)). With dead time the poles were found one by one and are
    simple.
    """
    if _delayed(loops) or poles.shape[1] < 2:
        return None
    count = poles.shape[1]
    with np.errstate(all="ignore"):
        slope = np.abs(loops.closed[:, :1] * _product_apart(poles))
        noise = 20.0 * count * np.finfo(float).eps * magnitude_sum(loops.closed, np.abs(poles))
        distance = np.abs(poles[:, :, None] - poles[:, None, :])
        near: BoolArray = distance * slope[:, :, None] <= noise[:, :, None]
    near |= near.transpose(0, 2, 1)
    diagonal = np.arange(count)
    near[:, diagonal, diagonal] = False
    if not near.any():
        return None
    near[:, diagonal, diagonal] = True
    for _ in range(int(np.ceil(np.log2(count)))):  # friends of friends
        near = np.matmul(near, near)
    return near


def folded(poles: ComplexArray, groups: BoolArray) -> BoolArray:
    """Complex poles that are one with their own conjugate, so truly real. (M, q)."""
    out = np.zeros(poles.shape, dtype=bool)
    upper = poles.imag[:, :-1] > 0.0
    column = np.arange(poles.shape[1] - 1)
    joined = upper & groups[:, column, column + 1]
    out[:, :-1] |= joined
    out[:, 1:] |= joined
    return out


def _product_apart(poles: ComplexArray) -> ComplexArray:
    """Π over j ≠ i of (p_i - p_j), NaN padding left out. (M, q)."""
    apart = poles[:, :, None] - poles[:, None, :]
    diagonal = np.arange(poles.shape[1])
    apart[:, diagonal, diagonal] = 1.0
    apart = np.where(np.isnan(apart), 1.0, apart)
    out: ComplexArray = apart.prod(axis=2)
    return out


def _delayed(loops: Loops) -> bool:
    return len(loops) > 0 and bool(loops.dead_time[0] > 0.0)
