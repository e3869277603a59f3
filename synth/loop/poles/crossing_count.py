"""Roots right of the axis as the delay grows: each crosses at a frequency where abs(N) = abs(D), or never.

M loops, n order, F crossing frequencies. Polynomials (M, n + 1), descending powers.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.frequency.isolation import Brackets, isolate
from synth.loop.frequency.response import polynomial
from synth.loop.poles.newton import columnwise, value_and_slope, value_at

# Turns and rad within which a crossing is too near to the delay at hand, or to none, to be told by rounding.
CLOSE = 1e-8
# Relative error of a crossing frequency, squared, that goes with it.
SETTLED = 1e-10
# Rounding of an entry of Routh's array in units of the terms it is a difference of; some twenty times what
# was seen.
NOISE = 1e-14


@np.errstate(all="ignore")  # what is not finite is not sure
def count_by_crossings(denominator: FloatArray, numerator: FloatArray, delay: FloatArray) -> FloatArray:
    """Number of roots of D + N e^(-s θ) with positive real part, (M,); NaN where rounding may decide it.

    abs(N/D) < 1 at infinity: then every root comes in from the far left as the delay leaves 0, and the count
    begins with that of D + N, by Routh's array. A root crosses the axis at a frequency ω where abs(N) =
    abs(D), to the right where abs(D)² - abs(N)² rises with ω and to the left where it falls, whenever ω times
    the delay comes to the angle of -N/D plus whole turns.
    Source: K. Walton and J. E. Marshall, Direct method for TDS stability analysis, IEE Proc. D 134 (1987)
    101-107.
    """
    squares = squared_on_axis(denominator) - squared_on_axis(numerator)
    ascending = np.ascontiguousarray(squares[:, ::-1].T)
    brackets = isolate(ascending)
    row = brackets.row
    x, off = _bracketed(ascending[:, row], brackets)
    w = np.sqrt(x)
    above, below = (value_at(columnwise(p)[:, row], 1j * w) for p in (numerator, denominator))
    angle = np.mod(np.angle(-above / below), 2.0 * np.pi)
    turns = (w * delay[row] - angle) / (2.0 * np.pi)
    times = np.maximum(np.floor(turns) + 1.0, 0.0)
    count, sure = _right_of_axis(denominator + numerator)
    np.add.at(count, row, np.where(brackets.negative, 2.0, -2.0) * times)
    near = np.minimum(angle, 2.0 * np.pi - angle) < CLOSE
    near |= np.abs(turns - np.round(turns)) < CLOSE * (1.0 + np.abs(turns))
    sure[row[near | ~(off < SETTLED) | ~np.isfinite(turns)]] = False
    # isolation takes two roots in one place for none, and no sum of crossings is negative
    return np.where(sure & (count >= 0.0), count, np.nan)


def squared_on_axis(polynomials: FloatArray) -> FloatArray:
    """abs(p(jω))² as a polynomial in x = ω²: (M, n + 1) -> (M, n + 1), descending powers of x."""
    ascending = np.ascontiguousarray(polynomials[:, ::-1].T)
    # s^k = j^k ω^k: the even half is e(x), the odd one jω o(x), and the square e² + x o²
    even, odd = ascending[0::2].copy(), ascending[1::2].copy()
    even[1::2] *= -1.0
    odd[1::2] *= -1.0
    out = np.zeros_like(ascending)
    for shift, half in ((0, even), (1, odd)):
        for i in range(len(half)):
            out[i + shift : i + shift + len(half)] += half[i] * half
    return out[::-1].T


def _bracketed(polynomials: FloatArray, brackets: Brackets) -> tuple[FloatArray, FloatArray]:
    """The root in each bracket, (F,), by Newton's method kept inside it, and the relative error that rounding
    may leave. polynomials : (n + 1, F), ascending."""
    low, high = brackets.low, brackets.high
    x = 0.5 * (low + high)
    for _ in range(60):
        value, slope = value_and_slope(polynomials[::-1], x)
        before = (value < 0.0) == brackets.negative
        low, high = np.where(before, x, low), np.where(before, high, x)
        new = x - value / slope
        new = np.where((new >= low) & (new <= high), new, 0.5 * (low + high))
        done = np.abs(new - x) <= 1e-12 * x
        x = new
        if done.all():
            break
    size = polynomial(np.abs(polynomials), x)
    return x, 4.0 * np.finfo(float).eps * len(polynomials) * size / np.abs(slope * x)


def _right_of_axis(polynomials: FloatArray) -> tuple[FloatArray, BoolArray]:
    """Roots with positive real part by the sign changes of Routh's first column, (M,), and whether no entry
    of it may be rounding alone.

    Beside the entries runs a bound of what each is a difference of, the rounding of the quotients included.
    """
    columns = np.ascontiguousarray(polynomials.T)
    a, b = columns[0::2], columns[1::2]
    size_a, size_b = np.abs(a), np.abs(b)
    count = np.zeros(columns.shape[1])
    sure: BoolArray = np.abs(a[0]) > 0.0
    for step in range(len(columns) - 1):
        sure &= np.abs(b[0]) > NOISE * size_b[0]
        count += (a[0] < 0.0) != (b[0] < 0.0)
        if step == len(columns) - 2:
            break
        ratio = a[0] / b[0]
        doubt = size_a[0] / np.abs(a[0]) + size_b[0] / np.abs(b[0])
        following, size = a[1:].copy(), size_a[1:].copy()
        following[: len(b) - 1] -= ratio * b[1:]
        size[: len(b) - 1] += np.abs(ratio) * (size_b[1:] + doubt * np.abs(b[1:]))
        a, b, size_a, size_b = b, following, size_b, size
    return count, sure & np.isfinite(size_b[0])
