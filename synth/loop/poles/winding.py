"""A count of roots inside a circle, to prove a list of roots complete, and where missing ones must be.

M loops, q roots, K points on the upper half of the circle. Scaled time.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.newton import upper_half
from synth.loop.poles.roots import closed_roots
from synth.loop.polynomials import horner

# Largest turn of the divided function between neighbouring points that is trusted; half a turn would be
# ambiguous.
LARGEST_STEP = 1.5
MOST_POINTS = 1 << 15
# At most this many missing roots are located at a time; the rest show up in the next round.
MOST_MISSING = 8


def missing_roots(loops: Loops, roots: ComplexArray, radius: FloatArray) -> ComplexArray:
    """Seeds for the roots of D + N e^(-s θ) inside abs(s) = radius that `roots` lacks; NaN where none is
    missing.

    roots : (M, q), NaN padded, conjugate; radius : (M,). Returns (M, 8).

    Argument principle on h = Δ / Π (s - p), whose winding is the number that is missing. The circle is
    widened a little where a known root lies close to it. The missing roots z follow from their power sums,
    Σ z^k = -(k R^k / 2π) ∫ e^(jkφ) ln(h (s/R)^(-m)) dφ, by Newton's identities.
    Source: L. M. Delves and J. N. Lyness, A numerical method for locating the zeros of an analytic function,
    Math. Comp. 21 (1967) 543-560.
    """
    circle = _clear_radius(roots, radius)
    out = np.full((len(loops), MOST_MISSING), np.nan, dtype=complex)
    active = np.flatnonzero(np.isfinite(loops.closed).all(axis=1) & np.isfinite(circle))
    reach = float((circle * loops.dead_time)[active].max(initial=0.0))
    points = 32
    while points < 2.0 * reach:
        points *= 2
    while active.size and points <= MOST_POINTS:
        block = max(1, (1 << 20) // points)
        unclear = []
        for start in range(0, active.size, block):
            at = active[start : start + block]
            some = loops.rows(at)
            unit, size = _divided(some, roots[at], circle[at], points)
            phase, rough = _turning(unit, (~np.isnan(roots[at].real)).sum(axis=1))
            missing = np.where(rough, 0, np.round(phase[:, -1] / np.pi)).astype(np.intp)
            unclear.append(at[rough])
            for m in np.unique(missing[missing > 0]):
                which = np.flatnonzero(missing == m)
                out[at[which]] = _located(size[which] + 1j * phase[which], int(m), circle[at[which]])
        active = np.concatenate(unclear)
        points *= 4
    return out


def _clear_radius(roots: ComplexArray, radius: FloatArray) -> FloatArray:
    """Up to 1.3 times the radius, where it is farthest from the size of any known root, in ratio. (M,)."""
    trial = radius[:, None] * np.linspace(1.0, 1.3, 13)[None, :]
    with np.errstate(all="ignore"):
        apart = np.abs(np.log(np.abs(roots)[:, None, :] / trial[:, :, None]))
    nearest = np.where(np.isnan(apart), np.inf, apart).min(axis=2, initial=np.inf)
    best = np.argmax(nearest, axis=1)
    out: FloatArray = trial[np.arange(len(trial)), best]
    return out


def _divided(
    loops: Loops, roots: ComplexArray, radius: FloatArray, points: int
) -> tuple[ComplexArray, FloatArray]:
    """h along the upper half circle, each value up to a positive factor of its row and point, and its
    logarithm.

    Returns unit (M, points + 1), h / abs(h), and size (M, points + 1), ln abs(h), both with each root p
    divided out as 1 - p/s.
    """
    s = radius[:, None] * np.exp(1j * np.linspace(0.0, np.pi, points + 1))
    delay = loops.dead_time[:, None]
    # e^(-sθ) is taken out where it is large, so that nothing overflows
    left = s.real < 0.0
    small = np.exp(np.where(left, s, -s) * delay)
    d, n = horner(loops.denominator, s), horner(loops.numerator, s)
    value = np.where(left, d * small + n, d + n * small)
    value /= _product(roots, 1.0 / s)
    size = np.abs(value)
    turned = np.exp(np.where(left, -1j * s.imag * delay, 0.0))
    return value / size * turned, np.log(size) - np.where(left, s.real * delay, 0.0)


def _product(roots: ComplexArray, inverse: ComplexArray) -> ComplexArray:
    """Π (1 - p/s) over the known roots, conjugate and NaN padded. (M, q), 1/s (M, K) -> (M, K).

    A pair is 1 - 2 Re p/s + abs(p)²/s²: half as many products.
    """
    upper = upper_half(roots)
    upper = np.where(np.isnan(upper.real), 0.0, upper)
    pair = upper.imag > 0.0
    first = np.where(pair, -2.0, -1.0) * upper.real
    second = np.where(pair, upper.real**2 + upper.imag**2, 0.0)
    out = np.ones_like(inverse)
    for k in range(upper.shape[1]):
        factor = inverse * second[:, k, None]
        factor += first[:, k, None]
        factor *= inverse
        factor += 1.0
        out *= factor
    return out


def _turning(unit: ComplexArray, known: IntArray) -> tuple[FloatArray, BoolArray]:
    """Argument of h along the half circle, starting at 0, (M, points + 1), and the rows whose steps are too
    long.

    known : (M,) roots divided out; each left a factor s to divide by, whose turning is one angle apiece.
    """
    back = np.exp(-1j * np.pi / (unit.shape[1] - 1) * known)
    turn = np.angle(unit[:, 1:] * np.conj(unit[:, :-1]) * back[:, None])
    rough: BoolArray = ~(np.abs(turn) <= LARGEST_STEP).all(axis=1)
    return np.concatenate([np.zeros((len(unit), 1)), turn.cumsum(axis=1)], axis=1), rough


def _located(log: ComplexArray, missing: int, radius: FloatArray) -> ComplexArray:
    """Roots from ln h on the upper half circle, (rows, points + 1) -> (rows, MOST_MISSING)."""
    points = log.shape[1] - 1
    angle = np.linspace(0.0, np.pi, points + 1)
    smooth = log - 1j * missing * angle
    weight = np.full(points + 1, 1.0)
    weight[[0, -1]] = 0.5
    sought = min(missing, MOST_MISSING)
    sums = []
    for k in range(1, sought + 1):
        integral = 2.0 * ((np.exp(1j * k * angle) * smooth).real * weight).sum(axis=1) * (np.pi / points)
        sums.append(-k * integral / (2.0 * np.pi))
    # Newton's identities, in units of the radius
    coefficients = [np.ones(len(radius))]
    for k in range(1, sought + 1):
        total = sum((coefficients[k - i] * sums[i - 1] for i in range(1, k + 1)), np.zeros(len(radius)))
        coefficients.append(-total / k)
    out = np.full((len(radius), MOST_MISSING), np.nan, dtype=complex)
    out[:, :sought] = closed_roots(np.stack(coefficients, axis=1)) * radius[:, None]
    return out
