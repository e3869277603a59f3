"""A count of roots inside a circle, to prove a list of roots complete, and where missing ones must be.

M loops, q roots, K points on the upper half of the circle. Scaled time.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.newton import upper_half
from synth.loop.poles.roots import closed_roots
from synth.loop.polynomials import in_strips

# Largest turn of the divided function between neighbouring points that is trusted; half a turn would be
# ambiguous.
LARGEST_STEP = 1.5
MOST_POINTS = 1 << 15
# At most this many missing roots are located at a time; the rest show up in the next round.
MOST_MISSING = 8
# Known pairs multiplied out into one polynomial: their coefficients stay below 4^PAIRS, so a value keeps its
# digits.
PAIRS = 6


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
            divided = _divided(some, roots[at], circle[at], points)
            turn, rough = _turning(divided, (~np.isnan(roots[at].real)).sum(axis=1))
            missing = np.where(rough, 0, np.round(turn.sum(axis=0) / np.pi)).astype(np.intp)
            unclear.append(at[rough])
            for m in np.unique(missing[missing > 0]):
                which = np.flatnonzero(missing == m)
                phase = np.pad(turn[:, which].cumsum(axis=0), ((1, 0), (0, 0)))
                size = _log_size(divided[:, which], some.rows(which), circle[at[which]])
                out[at[which]] = _located((size + 1j * phase).T, int(m), circle[at[which]])
        active = np.concatenate(unclear)
        points *= 4
    return out


def _clear_radius(roots: ComplexArray, radius: FloatArray) -> FloatArray:
    """Up to 1.3 times the radius, where it is farthest from the size of any known root, in ratio. (M,)."""
    step = np.linspace(1.0, 1.3, 13)
    with np.errstate(all="ignore"):
        place = np.log(np.abs(roots.T) / radius)
    apart = np.abs(place[:, None, :] - np.log(step)[:, None])
    nearest = np.fmin.reduce(apart, axis=0, initial=np.inf)
    out: FloatArray = radius * step[np.argmax(nearest, axis=0)]
    return out


def _on_circle(polynomials: FloatArray, radius: FloatArray, angle: FloatArray) -> ComplexArray:
    """Values at abs(s) = radius, (K, M), each row over the sum of the sizes of its terms there.

    The angles are the same for all loops, so a product with a table of cosines and sines does it.
    polynomials : (M, n + 1), descending.
    """
    powers = np.arange(polynomials.shape[1] - 1.0, -1.0, -1.0)
    terms = (polynomials * radius[:, None] ** powers).T
    turn = angle[:, None] * powers
    return in_strips(np.cos(turn), terms) + 1j * in_strips(np.sin(turn), terms)


def _divided(loops: Loops, roots: ComplexArray, radius: FloatArray, points: int) -> ComplexArray:
    """h along the upper half circle, (points + 1, M), each value up to a positive factor: in the left half
    plane h e^(-abs(Re s) θ), so that nothing overflows. Each root p is divided out as 1 - p/s."""
    angle = np.linspace(0.0, np.pi, points + 1)
    reach = radius * loops.dead_time
    rise = np.sin(angle)[:, None] * reach
    late = np.cos(rise) - 1j * np.sin(rise)
    small = np.exp(-np.abs(np.cos(angle))[:, None] * reach)
    largest = 1.0 / (np.abs(loops.denominator) * radius[:, None] ** np.arange(loops.order, -1, -1)).sum(
        axis=1
    )
    d = _on_circle(loops.denominator * largest[:, None], radius, angle)
    n = _on_circle(loops.numerator * largest[:, None], radius, angle) * late
    left = angle > 0.5 * np.pi
    d[left] *= small[left]
    n[~left] *= small[~left]
    d += n
    d /= _product(roots, radius, angle)
    return d


def _log_size(divided: ComplexArray, loops: Loops, radius: FloatArray) -> FloatArray:
    """ln abs(h) from the values of `_divided`, up to a constant of each loop."""
    angle = np.linspace(0.0, np.pi, len(divided))
    out: FloatArray = np.log(np.abs(divided))
    out += np.maximum(-np.cos(angle), 0.0)[:, None] * (radius * loops.dead_time)
    return out


def _product(roots: ComplexArray, radius: FloatArray, angle: FloatArray) -> ComplexArray:
    """Π (1 - p/s) over the known roots, conjugate and NaN padded. (M, q) -> (K, M).

    A pair is 1 - 2 Re p/s + abs(p)²/s²; a few at a time are multiplied out.
    """
    upper = upper_half(roots).T / radius
    upper = np.where(np.isnan(upper.real), 0.0, upper)
    pair = upper.imag > 0.0
    first = np.where(pair, -2.0, -1.0) * upper.real
    second = np.where(pair, upper.real**2 + upper.imag**2, 0.0)
    out = np.ones((len(angle), len(radius)), dtype=complex)
    for start in range(0, len(upper), PAIRS):
        some = range(start, min(start + PAIRS, len(upper)))
        whole = np.zeros((2 * len(some) + 1, len(radius)))
        whole[0] = 1.0
        for k, at in enumerate(some):
            width = 2 * k + 1
            earlier = whole[:width].copy()
            whole[1 : width + 1] += first[at] * earlier
            whole[2 : width + 2] += second[at] * earlier
        turn = angle[:, None] * np.arange(len(whole))
        out *= in_strips(np.cos(turn), whole) - 1j * in_strips(np.sin(turn), whole)
    return out


def _turning(divided: ComplexArray, known: IntArray) -> tuple[FloatArray, BoolArray]:
    """Change of the argument of h from point to point of the half circle, (points, M), and the loops where
    one is too long.

    known : (M,) roots divided out; each left a factor s to divide by, whose turning is one angle apiece.
    """
    back = np.exp(-1j * np.pi / (len(divided) - 1) * known)
    step = divided[:-1].conj()
    step *= divided[1:]
    step *= back
    turn = np.arctan2(step.imag, step.real)
    rough: BoolArray = ~np.all(np.abs(turn) <= LARGEST_STEP, axis=0, keepdims=True)[0]
    return turn, rough


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
