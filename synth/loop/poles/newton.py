"""Newton's method on D(s) + N(s) e^(-s θ), from each seed by itself.

M loops, q seeds. Scaled time.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Loops


def upper_half(seeds: ComplexArray) -> ComplexArray:
    """The real ones and those of the upper half plane, in as few columns as hold them. (M, q), NaN padded."""
    there = (seeds.imag >= 0.0) & np.isfinite(seeds.real)
    order = np.argsort(~there, axis=1, kind="stable")[:, : int(there.sum(axis=1).max(initial=0))]
    return np.take_along_axis(np.where(there, seeds, np.nan), order, axis=1)


def by_newton(loops: Loops, seeds: ComplexArray, radius: FloatArray) -> ComplexArray:
    """Newton's method from each seed by itself; several may end in one root, and a real one stays real.

    Loops stand along the last axis here, which is twice as fast as the other way round.
    """
    roots = np.ascontiguousarray(seeds.T)
    above, below = np.ascontiguousarray(loops.numerator.T), np.ascontiguousarray(loops.denominator.T)
    above = above[int((above != 0.0).any(axis=1).argmax()) :]
    delay, near = loops.dead_time, 1.5 * radius
    active, last = np.arange(len(loops)), 9
    for turn in range(last + 1):
        if turn == last:
            active = np.arange(len(loops))  # one more step for all: it squares what is left
        here = roots if active.size == len(loops) else roots[:, active]
        value, slope = _characteristic(above[:, active], below[:, active], delay[active], here)
        step = value / slope
        size, long = np.abs(here), np.abs(step)
        step *= np.minimum(1.0, (0.5 * size + 0.5 / delay[active]) / np.maximum(long, 1e-300))
        step[~np.isfinite(step)] = 0.0
        roots[:, active] = here - step
        moving = ((long > 1e-6 * size + 1e-12) & (size < near[active])).any(axis=0)
        if turn == last:
            break
        if not moving.any():
            last = turn + 1
        elif 2 * np.count_nonzero(moving) < active.size:
            active = active[moving]
    np.abs(roots.imag, out=roots.imag)  # the mirror image of a root that was left for its other half
    return roots.T


def _characteristic(
    above: FloatArray, below: FloatArray, delay: FloatArray, s: ComplexArray
) -> tuple[ComplexArray, ComplexArray]:
    """Δ and dΔ/ds, coefficients first and loops last: (·, M), (n + 1, M), (M,), (q, M) -> (q, M) twice."""
    d, slope_d = _value_and_slope(below, s)
    n, slope_n = _value_and_slope(above, s)
    late = np.exp(-s * delay)
    n *= late
    slope_n *= late
    return d + n, slope_d + slope_n - delay * n


def _value_and_slope(coefficients: FloatArray, s: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    value = np.empty_like(s)
    value[:] = coefficients[0]
    slope = np.zeros_like(s)
    for one in coefficients[1:]:
        slope *= s
        slope += value
        value *= s
        value += one
    return value, slope
