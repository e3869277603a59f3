"""Above which frequency nothing can be found any more, whatever the dead time turns: polynomials alone.

Letters: M loops, n degree. Polynomials (n + 1, M), ascending powers of x = ω².
"""

from __future__ import annotations

from functools import cache
from math import comb

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.frequency.isolation import Brackets, isolate
from synth.loop.frequency.response import polynomial

_BISECTIONS = 12  # an octave down to a five-thousandth of it
_TO_THE_END = 52  # and to the last digit


def roots_above(polynomials: FloatArray, floor: FloatArray, bisections: int = _BISECTIONS) -> Brackets:
    """Brackets of the roots above `floor` (M,), an octave halved that often; a bracket may begin below it.

    Most often there is none, and the Bernstein form on the whole of [floor, ∞) shows it.
    """
    n = len(polynomials) - 1
    powers = floor ** np.arange(n + 1)[:, None]
    form = _to_tail(n) @ (polynomials * powers)[::-1]
    rows = np.flatnonzero(~(form > 0.0).all(axis=0))
    brackets = isolate(polynomials[:, rows])
    row = rows[brackets.row]
    if not row.size:
        return brackets
    keep = brackets.high > floor[row]
    row, low, high, negative = row[keep], brackets.low[keep], brackets.high[keep], brackets.negative[keep]
    for _ in range(bisections if row.size else 0):
        middle = 0.5 * (low + high)
        before = (polynomial(polynomials[:, row], middle) < 0.0) == negative
        low, high = np.where(before, middle, low), np.where(before, high, middle)
    keep = high > floor[row]
    return Brackets(row[keep], low[keep], high[keep], negative[keep])


@cache
def _to_tail(n: int) -> FloatArray:
    """From powers of t = floor/x to the Bernstein form of degree n on 0 <= t <= 1."""
    return np.array([[comb(i, j) / comb(n, j) for j in range(n + 1)] for i in range(n + 1)])


def last_with_gain(squares: FloatArray, limit: FloatArray, floor: FloatArray) -> FloatArray:
    """(M,) the x above which |L| stays below `limit` (M,), 0 where that is `floor` or lower, inf where it
    never does.

    squares : (2, n + 1, M), |N|² and |D|².
    """
    level = limit * limit * squares[1] - squares[0]
    out = np.zeros(len(limit))
    brackets = roots_above(level, floor)
    np.maximum.at(out, brackets.row, brackets.high)
    lead = len(level) - 1 - (level[::-1] != 0.0).argmax(axis=0)
    out[level[lead, np.arange(len(limit))] < 0.0] = np.inf
    return out


def noise_ranges(
    squares: FloatArray, peak: FloatArray, floor: FloatArray
) -> tuple[IntArray, FloatArray, FloatArray]:
    """(row, x from, x to): where above `floor` |C S| may exceed `peak` (M,), were L turned at will.

    squares : (3, n + 1, M), |N|², |D|² and |control|². That is where peak ||D| - |N|| <= |control|: with A =
    peak² (|N|² + |D|²) - |control|² not above 2 peak² |N| |D|, so between roots of A² - 4 peak⁴ |N|² |D|².
    """
    n2, d2, c2 = squares
    a = n2 + d2 - c2 / np.maximum(peak * peak, 1e-300)
    brackets = roots_above(_product(a, a) - 4.0 * _product(n2, d2), floor)
    order = np.lexsort((brackets.low, brackets.row))
    row, low, high = brackets.row[order], brackets.low[order], brackets.high[order]
    # an odd number of roots: within it already at the floor
    odd = np.flatnonzero(np.bincount(row, minlength=len(peak)) % 2 == 1)
    row = np.concatenate([odd, row])
    low, high = np.concatenate([floor[odd], low]), np.concatenate([floor[odd], high])
    order = np.lexsort((low, row))
    row, low, high = row[order][::2], low[order][::2], high[order][1::2]
    # between two such ranges the curve exceeds the peak whatever the angle, or it cannot: A tells
    between = np.sqrt(high[:-1] * low[1:])
    apart = (row[1:] != row[:-1]) | (polynomial(a[:, row[1:]], between) > 0.0)
    begins, ends = np.append(True, apart), np.append(apart, True)
    begins, ends = begins[: len(row)], ends[: len(row)]
    return row[begins], np.maximum(low[begins], floor[row[begins]]), high[ends]


def fall_range(squares: FloatArray, level: FloatArray, floor: FloatArray) -> tuple[FloatArray, FloatArray]:
    """(M,) lowest and highest x above `floor` where |T|² may pass `level`; an empty range is (inf, 0).

    |T| lies between |L|/(1 + |L|) and |L|/(1 - |L|), so |L| lies between s/(1 + s) and s/(1 - s) where it
    passes s = √level.
    """
    size = np.sqrt(level)
    low = size / (1.0 + size)
    high = np.where(size < 1.0, size / np.maximum(1.0 - size, 1e-300), np.inf)
    first, last = np.full(len(level), np.inf), np.zeros(len(level))
    for limit in (low * (1.0 - 1e-9), high * (1.0 + 1e-9)):
        rows = np.flatnonzero(np.isfinite(limit) & (limit > 0.0))
        level_of = limit[rows] ** 2 * squares[1][:, rows] - squares[0][:, rows]
        found = roots_above(level_of, floor[rows], _TO_THE_END)
        np.minimum.at(first, rows[found.row], found.low)
        np.maximum.at(last, rows[found.row], found.high)
    gain = np.sqrt(polynomial(squares[0], floor) / polynomial(squares[1], floor))
    inside = (gain >= low) & (gain <= high) & (level > 0.0)
    return np.where(inside, floor, np.maximum(first, floor)), np.where(inside, np.maximum(last, floor), last)


def _product(a: FloatArray, b: FloatArray) -> FloatArray:
    """Of polynomials (n + 1, M): (2 n + 1, M)."""
    out = np.zeros((2 * len(a) - 1, a.shape[1]))
    for i in range(len(a)):
        out[i : i + len(b)] += a[i] * b
    return out
