"""The whole gain line of a one-parameter structure: exact stable intervals, and points that cover them."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import stacks
from synth.loop.poles.gain_line import stable_gain_intervals

FURTHEST = 16.0  # ln of the gain, in units of the plant's own; an end at infinity is walked as far as this
EDGE = np.array(
    [1e-6, 1e-4, 1e-3, 1e-2]
)  # distance from an end, relative to the interval: optima like to sit there

Intervals = tuple[tuple[float, float], ...]


def stable_gains(plants: Rational) -> Intervals:
    """Open intervals of K in u = K e that stabilise every plant, in ascending order; none where nothing does."""
    unit = Rational.of([1.0], [1.0])
    count = len(plants)
    plant_of, ones = np.arange(count), np.zeros(count, dtype=np.intp)
    common: Intervals = ((-np.inf, np.inf),)
    for rows in stacks(plants, unit, plant_of, ones):
        loops = close(plants, unit, plant_of[rows], ones[rows])
        # the loops have the plant's gain divided out of P and multiplied into C: k is still the gain of C itself
        for intervals in stable_gain_intervals(loops):
            common = _intersection(common, tuple((i.low, i.high) for i in intervals))
    return common


def _intersection(a: Intervals, b: Intervals) -> Intervals:
    pairs = ((max(x[0], y[0]), min(x[1], y[1])) for x in a for y in b)
    return tuple(sorted((low, high) for low, high in pairs if low < high))


def covering(intervals: Intervals, sign: int, gain_scale: float, count: int) -> FloatArray:
    """Magnitudes of gains of one sign, in the intervals: log-uniform, and closer near every end. (n,)

    gain_scale : abs(P) that makes K · gain_scale near 1.
    """
    parts: list[FloatArray] = []
    least, most = np.exp(-FURTHEST) / gain_scale, np.exp(FURTHEST) / gain_scale
    for low, high in intervals:
        a, b = (low, high) if sign > 0 else (-high, -low)
        a, b = max(a, 0.0), b
        if b <= 0.0 or a >= b:
            continue
        start = max(a, min(least, 1e-6 * b)) if np.isfinite(b) else max(a, least)
        end = b if np.isfinite(b) else max(most, 1e6 * start)
        inner = np.exp(np.linspace(np.log(start), np.log(end), count + 2))[1:-1]
        ends = [
            start * (1.0 + EDGE) if a > 0.0 else np.zeros(0),
            b * (1.0 - EDGE) if np.isfinite(b) else np.zeros(0),
        ]
        parts.append(np.concatenate([inner, *ends]))
    if not parts:
        return np.zeros(0)
    gains = np.unique(np.concatenate(parts))
    out: FloatArray = gains[(gains > 0.0) & np.isfinite(gains)]
    return out
