"""The whole gain line of a one-parameter structure: exact stable intervals, and points that cover them."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import stacks
from synth.loop.poles.gain_line import stable_gain_intervals
from synth.search.archive import Rows
from synth.search.objective import Objective

FURTHEST = 16.0  # ln of the gain, in units of the plant's own; an end at infinity is walked as far as this
EDGE = np.array(
    [1e-6, 1e-4, 1e-3, 1e-2]
)  # distance from an end, relative to the interval: optima like to sit there

SUBDIVISIONS, PARTS = 6, 4

Intervals = tuple[tuple[float, float], ...]


def stable_gains(plants: Rational) -> Intervals:
    """Open intervals of K in u = K e that stabilise every plant, in ascending order; none where nothing
    does."""
    unit = Rational.of([1.0], [1.0])
    count = len(plants)
    plant_of, ones = np.arange(count), np.zeros(count, dtype=np.intp)
    common: Intervals = ((-np.inf, np.inf),)
    for rows in stacks(plants, unit, plant_of, ones):
        loops = close(plants, unit, plant_of[rows], ones[rows])
        # the loops have the plant's gain divided out of P and multiplied into C: k is still the gain of C
        # itself
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


def refined(objective: Objective, rows: Rows, guide: FloatArray, count: int = 3) -> tuple[Rows, FloatArray]:
    """The best points of a dense line, each narrowed down between its neighbours by repeated subdivision.

    rows of one structure of one parameter, guide (S,). Returns `count` rows at most, and their guides.
    """
    x, best = rows.x[:, 0], np.argsort(-guide, kind="stable")[:count]
    spacing = np.array([_gap(x[rows.sign == rows.sign[i]], float(x[i])) for i in best])
    centre, score = rows.take(best), guide[best]
    low, high = (float(end[0]) for end in objective.boxes[int(rows.structure[0])])
    for _ in range(SUBDIVISIONS):
        offsets = np.linspace(-1.0, 1.0, 2 * PARTS + 1)
        points = centre.take(np.repeat(np.arange(len(best)), offsets.size))
        moved = points.x.copy()
        moved[:, 0] = np.clip(moved[:, 0] + (spacing[:, None] * offsets).ravel(), low, high)
        points = points.at(moved)
        reached = objective.score(points).guide().reshape(len(best), -1)
        choice = reached.argmax(axis=1) + np.arange(len(best)) * offsets.size
        better = reached.max(axis=1) > score
        x_new = np.where(better[:, None], points.x[choice], centre.x)
        centre, score = centre.at(x_new), np.maximum(score, reached.max(axis=1))
        spacing = spacing / PARTS
    return centre, score


def _gap(x: FloatArray, at: float) -> float:
    """Distance to the further of the two neighbours of `at` among x."""
    below, above = x[x < at], x[x > at]
    gaps = [at - float(below.max())] if below.size else []
    gaps += [float(above.min()) - at] if above.size else []
    return max(gaps, default=0.1)
