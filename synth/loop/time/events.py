"""One stacked iteration for all events: crossings of levels and extrema, each in a bracket that holds just
one.

E events. Halley's step (E. Halley, 1694) on the exact modal sums, kept inside the bracket: from the cubic's
guess one evaluation is mostly enough.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.time.cells import Cells
from synth.loop.time.signals import Signals

NEAR = 1e-3
"""Step (in bracket widths) and curvature ratio below which Halley's error is of the order of their cube."""

ROUNDS = 60


def solve(
    modes: Signals,
    brackets: Cells,
    guess: FloatArray,
    level: FloatArray,
    turning: BoolArray,
    rising: BoolArray,
) -> tuple[FloatArray, FloatArray]:
    """Times of the events, and values of the signals at the extrema among them, (E,) each.

    turning : an extremum is sought, and level is 0; else where the signal meets the level. rising : whether
    what vanishes there, the slope or the signal less the level, goes from below to above 0.
    Error of a time about 1e-9 of the width; that of an extremum's value is of higher order.
    """
    loop, signal, low, width = brackets.loop, brackets.signal, brackets.t, brackets.h
    times, values = np.empty(len(guess)), np.empty(len(guess))
    high, t, open_ = low + width, guess, np.arange(len(guess))
    for _ in range(ROUNDS):
        x = modes.jet(loop, signal, t, 0, 4)
        x[0] -= level
        f, f1, f2 = np.where(turning, x[1:], x[:-1])
        below = (f < 0.0) == rising
        low, high = np.where(below, t, low), np.where(below, high, t)
        ratio = f * f2 / (f1 * f1)
        aim = t - f / (f1 * (1.0 - 0.5 * ratio))
        near, zero = NEAR * width, f == 0.0
        done = (np.abs(aim - t) <= near) & (np.abs(ratio) <= NEAR)
        # a zero at an end may be aimed at from just outside
        inside = (aim >= low - near) & (aim <= high + near)
        done = (done & inside) | zero | (high - low <= 4e-16 * high)
        aim = np.where(inside, np.minimum(np.maximum(aim, low), high), 0.5 * (low + high))
        aim = np.where(zero, t, aim)
        step = aim - t
        times[open_] = aim
        values[open_] = x[0] + step * (f + step * (0.5 * f1 + step * f2 / 6.0))
        left = (~done).nonzero()[0]
        if left.size == 0:
            break
        loop, signal, open_, rising, turning = (v[left] for v in (loop, signal, open_, rising, turning))
        t, low, high, width, level = (v[left] for v in (aim, low, high, width, level))
    return times, values
