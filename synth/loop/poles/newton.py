"""D(s) + N(s) e^(-s θ) at many points, and Newton's method on it, from each seed by itself.

M loops, q points of each, F seeds. Scaled time. Loops stand along the last axis inside, which is twice as
fast as the other way round.
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Loops

# Steps, of which the last is taken by all seeds: it squares what is left.
STEPS = 10

# real or complex, as they come
Points = TypeVar("Points", FloatArray, ComplexArray)


def characteristic(loops: Loops, s: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Δ = D + N e^(-s θ) and dΔ/ds at each row's points, (M, q) twice."""
    columns = np.ascontiguousarray(s.T)
    above, below = columnwise(loops.numerator), columnwise(loops.denominator)
    value, slope = _characteristic(above, below, loops.dead_time, columns)
    return value.T, slope.T


def columnwise(polynomials: FloatArray) -> FloatArray:
    """Coefficients first and loops last: (M, n + 1) -> (n + 1, M), less what is 0 at the top of all rows."""
    used = (polynomials != 0.0).any(axis=0)
    return np.ascontiguousarray(polynomials[:, int(used.argmax()) :].T)


def upper_half(seeds: ComplexArray) -> ComplexArray:
    """The real ones and those of the upper half plane, in as few columns as hold them. (M, q), NaN padded."""
    there = (seeds.imag >= 0.0) & np.isfinite(seeds.real)
    order = np.argsort(~there, axis=1, kind="stable")[:, : int(there.sum(axis=1).max(initial=0))]
    return np.take_along_axis(np.where(there, seeds, np.nan), order, axis=1)


def by_newton(loops: Loops, seeds: ComplexArray, radius: FloatArray) -> ComplexArray:
    """Newton's method from each seed by itself; several may end in one root, and a real one stays real.

    seeds : (M, q), NaN padded. A seed that leaves 1.5 times the circle is left alone. Returns (M, q).
    """
    out = seeds.copy()
    row, place = np.nonzero(np.isfinite(seeds.real))
    above, below = columnwise(loops.numerator)[:, row], columnwise(loops.denominator)[:, row]
    delay, near = loops.dead_time[row], 1.5 * radius[row]
    found = seeds[row, place]
    s, active, moving = found, np.arange(len(found)), np.ones(len(found), dtype=bool)
    part = (above, below, delay, near)
    for _ in range(STEPS - 1):
        s, long, size = _stepped(part[0], part[1], part[2], s)
        still = moving & (long > 1e-6 * size + 1e-12) & (size < part[3])
        # at once, so that a seed ends in the same place whatever the others do
        ended = moving & ~still
        found[active[ended]] = s[ended]
        moving = still
        count = np.count_nonzero(moving)
        if count == 0:
            break
        if count < 0.7 * len(s):
            s, active, moving = s[moving], active[moving], moving[moving]
            part = (above[:, active], below[:, active], delay[active], near[active])
    found[active[moving]] = s[moving]
    found, _, _ = _stepped(above, below, delay, found)
    # the mirror image of a root that was left for its other half
    out[row, place] = found.real + 1j * np.abs(found.imag)
    return out


def _stepped(
    above: FloatArray, below: FloatArray, delay: FloatArray, s: ComplexArray
) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Points one step further, how far the step would have gone, and the size of the points before it."""
    value, slope = _characteristic(above, below, delay, s)
    step = value / slope
    size, long = np.abs(s), np.abs(step)
    step *= np.minimum(1.0, (0.5 * size + 0.5 / delay) / np.maximum(long, 1e-300))
    step[~np.isfinite(step)] = 0.0
    return s - step, long, size


def _characteristic(
    above: FloatArray, below: FloatArray, delay: FloatArray, s: ComplexArray
) -> tuple[ComplexArray, ComplexArray]:
    """Δ and dΔ/ds, coefficients first and loops last: (·, M), (n + 1, M), (M,), (.., M) -> (.., M) twice."""
    d, slope_d = value_and_slope(below, s)
    n, slope_n = value_and_slope(above, s)
    late = np.exp(-s * delay)
    n *= late
    slope_n *= late
    return d + n, slope_d + slope_n - delay * n


def value_and_slope(coefficients: FloatArray, s: Points) -> tuple[Points, Points]:
    """p(s) and p'(s) at s (.., M) by Horner's rule; coefficients (n + 1, M), descending."""
    value = np.empty_like(s)
    value[:] = coefficients[0]
    slope = np.zeros_like(s)
    for one in coefficients[1:]:
        slope *= s
        slope += value
        value *= s
        value += one
    return value, slope


def value_at(coefficients: FloatArray, s: ComplexArray) -> ComplexArray:
    """p(s) alone."""
    value = np.empty_like(s)
    value[:] = coefficients[0]
    for one in coefficients[1:]:
        value *= s
        value += one
    return value
