"""One stacked iteration for all events: crossings of levels and extrema, each in a bracket that holds just
one.

E events. Halley's step (E. Halley, 1694) on the exact modal sums, kept inside the bracket: from the cubic's
guess one evaluation is mostly enough.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.signals import Signals

NEAR = 1e-3
"""Step (in bracket widths) and curvature ratio below which Halley's error is of the order of their cube."""

ROUNDS = 60


def crossing(
    modes: Signals,
    loop: IntArray,
    signal: IntArray,
    low: FloatArray,
    width: FloatArray,
    guess: FloatArray,
    level: FloatArray,
    rising: BoolArray,
) -> FloatArray:
    """Times at which the signals meet their levels, (E,). Error about 1e-9 of the width."""
    t, _ = _solve(modes, loop, signal, low, width, guess, level, rising)
    return t


def extremum(
    modes: Signals,
    loop: IntArray,
    signal: IntArray,
    low: FloatArray,
    width: FloatArray,
    guess: FloatArray,
    maximum: BoolArray,
) -> tuple[FloatArray, FloatArray]:
    """Times and values of extrema, (E,) each. The value's error is of higher order than the time's."""
    return _solve(modes, loop, signal, low, width, guess, None, ~maximum)


def _solve(
    modes: Signals,
    loop: IntArray,
    signal: IntArray,
    low: FloatArray,
    width: FloatArray,
    guess: FloatArray,
    level: FloatArray | None,
    rising: BoolArray,
) -> tuple[FloatArray, FloatArray]:
    """Zero of x - level, or of x' without level; `rising` where that function goes from below to above 0."""
    left, right = low.copy(), low + width
    t = guess.copy()
    value = np.empty(len(t))
    open_ = np.arange(len(t))
    for _ in range(ROUNDS):
        if open_.size == 0:
            break
        now = t[open_]
        x, *slopes = modes.jet(loop[open_], signal[open_], now, 0, 3 if level is not None else 4)
        f, f1, f2 = (x - level[open_], *slopes) if level is not None else slopes
        below = (f < 0.0) == rising[open_]
        left[open_] = np.where(below, now, left[open_])
        right[open_] = np.where(below, right[open_], now)
        with np.errstate(all="ignore"):
            ratio = f * f2 / (f1 * f1)
            step = -f / (f1 * (1.0 - 0.5 * ratio))
        size, low_end, high_end = width[open_], left[open_], right[open_]
        aim = now + step
        inside = (aim >= low_end - NEAR * size) & (aim <= high_end + NEAR * size)
        aim = np.minimum(
            np.maximum(aim, low_end), high_end
        )  # a zero at an end may be aimed at from just outside
        done = inside & (np.abs(step) <= NEAR * size) & (np.abs(ratio) <= NEAR)
        done |= (f == 0.0) | (high_end - low_end <= 4e-16 * high_end)
        aim = np.where(f == 0.0, now, np.where(inside, aim, 0.5 * (low_end + high_end)))
        step = aim - now
        if level is None:
            x = x + step * (f + step * (0.5 * f1 + step * f2 / 6.0))
        t[open_] = aim
        value[open_] = x
        open_ = open_[~done]
    return t, value
