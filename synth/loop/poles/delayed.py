"""True roots of D(s) + N(s) e^(-s θ), all of them within a circle, counted to be sure that none is missing.

M loops, q roots. Scaled time. Seeds come from a rational stand-in of the delay near the origin and from the
chain of far roots beyond; every root returned solves the transcendental equation itself.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.encirclement import (
    chain_abscissa,
    moved,
    roots_right_of,
    unit_crossings,
)
from synth.loop.poles.newton import by_newton, characteristic, upper_half
from synth.loop.poles.roots import rightmost
from synth.loop.poles.seeds import seeds_of
from synth.loop.poles.winding import missing_roots
from synth.loop.polynomials import magnitude_sum

# Radius, in units of 1/θ, within which every root is always sought; it holds the first chain pair.
NEAREST = 7.0
# Radius, in units of 1/θ, beyond which no roots are returned: the chain has long settled on its asymptote
# there, and its damping is read from `far`.
FARTHEST = 400.0
# So many of the rightmost are returned however far out they lie.
RIGHTMOST = 6
# Rows up to which a call is dearer than the numbers in it.
FEW = 128
# Where seeds that do not exist are put, in units of 1/θ: too far to push anything.
FAR_AWAY = 1e9


def delayed_poles(loops: Loops, reach: FloatArray) -> ComplexArray:
    """All roots with abs(p) <= reach, and never fewer than the rightmost one or pair.

    Parameters
    ----------
    loops : dead_time (M,) > 0, scaled.
    reach : (M,) scaled 1/time; 0 for the nearest ones alone. Beyond 400/θ it is taken as 400/θ (see `far`).

    Returns
    -------
    (M, q), NaN at the end of a row; ordered by decreasing real part, pairs side by side, upper half first,
    exactly conjugate; real roots have imaginary part exactly 0. Relative error about eps × condition
    (test_delayed_poles).

    Notes
    -----
    Seeds: roots of D Q + N P, P/Q the diagonal Padé quotient of e^(-s θ), and s = (ln(-N/D) + 2πjk)/θ on the
    chain. Newton's method takes each to a root of the transcendental function. The number within the circle
    is then checked by the argument principle, which also says where roots are missing; where that does not
    help, all seeds are moved together by Aberth's iteration (Math. Comp. 27, 1973), which keeps two from
    meeting in one root. The rightmost is checked by the count right of a line just beyond it.
    """
    poles, _ = proven_poles(loops, reach)
    return poles


def proven_poles(loops: Loops, reach: FloatArray) -> tuple[ComplexArray, BoolArray]:
    """The same, and where the count has proven that no root lies more than 1e-6/θ right of the rightmost one
    (or of the far chain), (M,)."""
    if len(loops) == 0:
        return np.zeros((0, 0), dtype=complex), np.zeros(0, dtype=bool)
    delay = loops.dead_time
    asked = np.clip(np.nan_to_num(reach), NEAREST / delay, FARTHEST / delay)
    radius = asked.copy()
    found = _within(loops, radius)
    proven, sure = _rightmost_proven(loops, found)
    short = np.flatnonzero(~sure)
    while short.size:
        radius[short] = np.minimum(3.0 * radius[short], FARTHEST / delay[short])
        found = joined(found, short, _within(loops.rows(short), radius[short]))
        proven[short], sure = _rightmost_proven(loops.rows(short), found[short])
        lacking = short[~sure]
        short = lacking[radius[lacking] * delay[lacking] < 0.999 * FARTHEST]
        astray = np.setdiff1d(lacking, short)
        if astray.size:
            found = joined(found, astray, _with_rightmost(loops.rows(astray), found[astray]))
    return _trimmed(found, asked), proven


def further_poles(loops: Loops, known: ComplexArray, reach: FloatArray) -> ComplexArray:
    """`known` (M, q), the rightmost among them, and all others with abs(p) <= reach: as `delayed_poles`."""
    delay = loops.dead_time
    circle = np.clip(np.nan_to_num(reach), NEAREST / delay, FARTHEST / delay)[:, None] * (1.0 + 1e-12)
    found = _within(loops, circle[:, 0])
    with np.errstate(invalid="ignore"):
        inside = np.where(np.abs(found) <= circle, found, np.nan)
        outside = np.where(np.abs(known) > circle, known, np.nan)
    return _ordered(np.concatenate([inside, outside], axis=1))


def _within(loops: Loops, radius: FloatArray) -> ComplexArray:
    """All roots of each row with abs(p) <= radius; rows of like size are worked on together."""
    pairs = np.ceil(1.5 * radius * loops.dead_time / (2.0 * np.pi)).astype(np.intp)
    size = np.ceil(np.log2(pairs)).astype(np.intp)
    if len(loops) <= FEW:  # a few rows: longer lists for all cost less than more calls
        size = np.where(size <= 3, size.max(initial=0, where=size <= 3), size)
    found = np.full((len(loops), 0), np.nan, dtype=complex)
    for one in np.unique(size):
        at = np.flatnonzero(size == one)
        some, far = (loops, radius) if len(at) == len(loops) else (loops.rows(at), radius[at])
        with np.errstate(all="ignore"):  # rows that are not finite and seeds that run away end as NaN
            seeds = seeds_of(some, int(pairs[at].max()))
            roots = _kept(some, by_newton(some, upper_half(seeds), far), apart=False)
            wanting, part, reach = np.arange(len(some)), some, far
            for attempt in range(6):
                lacking = missing_roots(part, roots[wanting], reach)
                still = np.flatnonzero(np.isfinite(lacking.real).any(axis=1))
                if still.size == 0:
                    break
                wanting, part, reach = wanting[still], part.rows(still), reach[still]
                more = np.concatenate([roots[wanting], lacking[still]], axis=1)
                if attempt == 0:
                    better = _kept(part, by_newton(part, upper_half(more), reach), apart=False)
                else:
                    # from the beginning, and with care
                    better = _kept(part, _refined(part, seeds[wanting] if attempt == 1 else more, reach))
                roots = joined(roots, wanting, better)
            outside = ~(np.abs(roots) <= far[:, None] * (1.0 + 1e-12))
            best = np.where(outside, -np.inf, roots.real).max(axis=1, initial=-np.inf)
            outside &= ~(roots.real > best[:, None])
        roots[outside] = np.nan
        found = joined(found, at, _ordered(roots))
    return found


def _refined(loops: Loops, seeds: ComplexArray, radius: FloatArray) -> ComplexArray:
    """Aberth's iteration from all seeds at once, then Newton's on each root.

    A row is done when every root near or within its circle stands still: seeds that wander outside concern
    nobody.
    """
    lost = ~np.isfinite(seeds)
    # a pair that starts exactly conjugate could never split into two reals
    tilt = 1.0 + 1e-4j * (1.0 + np.arange(seeds.shape[1]) % 3)
    roots = np.where(lost, FAR_AWAY / loops.dead_time[:, None], seeds) * tilt
    active, some = np.arange(len(loops)), loops
    index = np.arange(seeds.shape[1])
    for _ in range(12):
        here = roots[active]
        value, slope = characteristic(some, here)
        apart = here[:, :, None] - here[:, None, :]
        apart[:, index, index] = 1.0
        np.reciprocal(apart, out=apart)
        apart[:, index, index] = 0.0
        newton = value / slope
        step = newton / (1.0 - newton * apart.sum(axis=2))
        size, long = np.abs(here), np.abs(step)
        limit = 0.5 * size + 0.5 / some.dead_time[:, None]
        step = np.where(long > limit, step * (limit / np.maximum(long, 1e-300)), step)
        step[~np.isfinite(step) | lost[active]] = 0.0
        roots[active] = here - step
        moving = ((long > 1e-5 * size + 1e-12) & (size < 1.5 * radius[active, None])).any(axis=1)
        if not moving.any():
            break
        active = active[moving]
        some = loops.rows(active)
    for _ in range(2):
        value, slope = characteristic(loops, roots)
        step = value / slope
        fine = np.abs(step) < 1e-3 * np.abs(roots) + 1e-12
        roots = np.where(fine, roots - step, roots)
    roots[lost] = np.nan
    out: ComplexArray = roots
    return out


def _kept(loops: Loops, roots: ComplexArray, *, apart: bool = True) -> ComplexArray:
    """Converged roots, each once, made conjugate: upper half and reals first found, lower half by
    reflection.

    apart : the roots were kept from meeting, so two that lie close are two; else they are one found twice.
    """
    with np.errstate(all="ignore"):
        value, slope = characteristic(loops, roots)
        late = np.exp(-roots.real * loops.dead_time[:, None])
        size = np.abs(roots)
        rounding = magnitude_sum(loops.denominator, size) + magnitude_sum(loops.numerator, size) * late
        good = (np.abs(value) <= 1e-11 * rounding) & np.isfinite(value)
        # the distance to the true root that rounding and the last step leave open, as for a double root where
        # the slope is small
        left = 1e-15 * rounding if apart else 2e-15 * rounding + 4.0 * np.abs(value)
        if not apart:  # Newton's method is slow at a double root: it is left to Aberth's
            good &= np.abs(value) <= 1e-9 * size * np.abs(slope)
        fuzz = np.sqrt(np.finfo(float).eps) * 1e-3 * size + left / np.abs(slope)
        fuzz = np.minimum(fuzz, 1e-4 * size) + 1e-300
    upper = np.where(good, roots.real + 1j * np.abs(roots.imag), np.nan)
    real = upper.imag <= np.minimum(1e-9 * size, fuzz)
    upper.imag[real] = 0.0
    order = np.argsort(np.where(np.isnan(upper.real), np.inf, np.abs(upper)), axis=1)
    upper = np.take_along_axis(upper, order, axis=1)
    below = np.take_along_axis(roots.imag < 0.0, order, axis=1)
    fuzz = np.take_along_axis(fuzz, order, axis=1)
    # the two halves of one pair, or one root found twice: the same half may not occur twice within rounding
    place, near, lower = (np.ascontiguousarray(part.T) for part in (upper, fuzz, below))
    real = place.imag == 0.0
    twice = np.zeros(upper.shape, dtype=bool)
    for k in range(1, len(place)):
        twin = np.abs(place[k] - place[:k]) <= (near[k] if apart else near[k] + near[:k])
        # of reals that coincide a double root keeps two, told apart by the halves they came in from
        twin &= ~(real[k] & real[:k]) | (lower[k] == lower[:k])
        twice[:, k] = twin.any(axis=0)
    upper[twice] = np.nan
    both = np.concatenate([upper, np.where(upper.imag > 0.0, np.conj(upper), np.nan)], axis=1)
    return _ordered(both)


def _ordered(roots: ComplexArray) -> ComplexArray:
    """By decreasing real part, upper half of a pair before its lower half, NaN last, empty columns
    dropped."""
    bad = np.isnan(roots.real)
    keys = (
        np.where(bad, 0.0, -roots.imag),
        np.where(bad, 0.0, -np.abs(roots.imag)),
        np.where(bad, np.inf, -roots.real),
    )
    out = np.take_along_axis(roots, np.lexsort(keys, axis=1), axis=1)
    width = int((~bad).sum(axis=1).max(initial=0))
    return out[:, :width]


def joined(whole: ComplexArray, at: IntArray, part: ComplexArray) -> ComplexArray:
    """`whole` with its rows `at` replaced by `part`, widened with NaN as needed."""
    width = max(whole.shape[1], part.shape[1])
    out = np.full((whole.shape[0], width), np.nan, dtype=complex)
    out[:, : whole.shape[1]] = whole
    out[at] = np.nan
    out[at, : part.shape[1]] = part
    return out


def _trimmed(found: ComplexArray, asked: FloatArray) -> ComplexArray:
    """Drop what a wider search for the rightmost root brought in: outside `asked` a few rightmost ones
    stay."""
    with np.errstate(invalid="ignore"):
        keep = np.abs(found) <= asked[:, None] * (1.0 + 1e-12)
    keep[:, :RIGHTMOST] = True
    # a pair is kept or dropped as one
    if found.shape[1] > RIGHTMOST:
        keep[:, RIGHTMOST] |= found[:, RIGHTMOST] == np.conj(found[:, RIGHTMOST - 1])
    return _ordered(np.where(keep, found, np.nan))


def _with_rightmost(loops: Loops, found: ComplexArray) -> ComplexArray:
    """`found` with the rightmost root or pair added, from the count right of a line alone.

    The line is bisected to where the last root leaves its right side; the crossing frequency where L is
    nearest -1 there is the root's imaginary part.
    """
    low = np.fmax(rightmost(found), -FARTHEST / loops.dead_time)
    step = 1.0 / loops.dead_time
    high = low + step
    for _ in range(60):
        right, _ = roots_right_of(loops, high)
        more = right > 0.0
        if not more.any():
            break
        step = 2.0 * step
        high = np.where(more, high + step, high)
    for _ in range(45):
        middle = 0.5 * (low + high)
        right, _ = roots_right_of(loops, middle)
        low, high = np.where(right > 0.0, middle, low), np.where(right > 0.0, high, middle)
    with np.errstate(all="ignore"):
        shrink = np.exp(-low * loops.dead_time)[:, None]
        crossing = unit_crossings(moved(loops.denominator, low), moved(loops.numerator, low) * shrink)
        places = np.concatenate([np.zeros((len(low), 1)), crossing], axis=1)
        points = np.where(np.isfinite(places), low[:, None] + 1j * places, np.nan)
        value, _ = characteristic(loops, points)
        scale = magnitude_sum(loops.denominator, np.abs(points))
        best = np.nan_to_num(np.abs(value) / scale, nan=np.inf).argmin(axis=1)
        seed = np.take_along_axis(points, best[:, None], axis=1)
        seeds = np.concatenate([seed, np.where(seed.imag > 0.0, np.conj(seed), np.nan)], axis=1)
        everywhere = np.full(len(low), np.inf)
        return _kept(loops, _refined(loops, np.concatenate([found, seeds], axis=1), everywhere))


def _rightmost_proven(loops: Loops, found: ComplexArray) -> tuple[BoolArray, BoolArray]:
    """Whether the count right of a line just beyond the rightmost root found (or the far chain) is 0, and
    whether nothing more can be expected of a wider circle. (M,) twice."""
    best = rightmost(found)
    line = np.maximum(best, chain_abscissa(loops)) + 1e-6 / loops.dead_time
    readable = np.isfinite(line)
    count, _ = roots_right_of(loops, np.where(readable, line, 0.0))
    proven: BoolArray = readable & (count == 0.0)
    sure = readable & ~(count > 0.0)
    empty = np.flatnonzero(~np.isfinite(best))
    if empty.size:  # without N, or where the row is not finite, there may be nothing to find
        alone = ~np.any(loops.numerator[empty], axis=1, keepdims=True)[:, 0]
        broken = ~np.isfinite(loops.closed[empty].sum(axis=1))
        sure[empty] = alone | broken
    return proven, sure
