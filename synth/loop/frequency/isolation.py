"""Every positive root of many polynomials at once, each in a bracket of its own: a certificate, not a search.

A polynomial written in Bernstein form on an interval has at most as many roots there as its coefficients have
sign changes, and the parity is right: no change proves that there is none, one change that there is exactly
one. The positive axis is cut into octaves, which one matrix product turns into Bernstein form for all rows;
octaves with two changes or more are halved until the count decides.

Sources: J. M. Lane and R. F. Riesenfeld, Bounds on a polynomial, BIT 21 (1981); F. Rouillier and P.
Zimmermann, Efficient isolation of polynomial's real roots, J. Comput. Appl. Math. 162 (2004).

Letters: m degree, R polynomials (rows of the batch, here columns of the arrays), F intervals.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from math import comb

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.polynomials import in_strips

_OCTAVES = 40  # of one window: x from 2^-20 to 2^20, three decades of ω to either side
_RANGE = 480  # most powers of two that x^m may span on one side of a window
_WINDOWS = 400  # windows to either side before giving up: beyond any double
_NARROW = 1e-10  # relative width below which two roots are one touch
_BLOCK = 150_000  # doubles of one matrix product: it stays in the second-level cache


@dataclass(frozen=True, slots=True)
class Brackets:
    """F intervals low < x <= high of the polynomials `row`, each with exactly one root.

    negative : the polynomial is negative just above `low` (and positive above the root).
    """

    row: IntArray
    low: FloatArray
    high: FloatArray
    negative: BoolArray

    def rows(self, index: BoolArray, first: int) -> Brackets:
        """The brackets named by `index`, polynomials counted from `first`."""
        return Brackets(self.row[index] - first, self.low[index], self.high[index], self.negative[index])


def isolate(polynomials: FloatArray, hint: FloatArray | None = None) -> Brackets:
    """Brackets of all positive roots.

    Parameters
    ----------
    polynomials : (m + 1, R), ascending powers of x. A zero polynomial has no roots here.
    hint : (R,) where an octave that cannot be decided is cut first, instead of in the middle: a point where
        the polynomial is known to come close to zero. 0 for none.

    Returns
    -------
    Brackets in no order. Roots closer together than 1e-10 (relative) may be reported as none or one.
    """
    found: list[tuple[IntArray, FloatArray, FloatArray, BoolArray]] = []
    _search(polynomials, hint, found)
    if not found:
        nothing = np.empty(0)
        return Brackets(np.empty(0, dtype=np.intp), nothing, nothing, np.empty(0, dtype=bool))
    row, low, high, negative = (np.concatenate(part) for part in zip(*found, strict=True))
    return Brackets(row, low, high, negative)


def _search(
    polynomials: FloatArray,
    hint: FloatArray | None,
    found: list[tuple[IntArray, FloatArray, FloatArray, BoolArray]],
) -> None:
    """All windows that hold roots, beginning with the central one."""
    signs = _filled_signs(polynomials)
    count = changes(signs)  # Descartes on the whole axis: often there is nothing to do
    _single(polynomials, signs, np.flatnonzero(count == 1), found)
    rows = np.flatnonzero(count > 1)
    work = [(rows, 0, 0)] if rows.size else []
    while work:
        which, shift, side = work.pop()
        below, above = _scan(polynomials, signs, hint, which, shift, found)
        if side <= 0 and below.size and shift > -_WINDOWS:
            work.append((below, shift - 1, -1))
        if side >= 0 and above.size and shift < _WINDOWS:
            work.append((above, shift + 1, 1))


def _single(
    polynomials: FloatArray,
    signs: BoolArray,
    rows: IntArray,
    found: list[tuple[IntArray, FloatArray, FloatArray, BoolArray]],
) -> None:
    """Brackets for polynomials with one positive root: the signs at the octaves are enough."""
    m = len(polynomials) - 1
    octaves = _octaves(m)
    exponent = np.arange(-(octaves // 2), octaves // 2 + 1)
    powers = np.ldexp(1.0, (exponent[:, None] * np.arange(m + 1)).astype(np.int32))
    work = [(rows, 0, 0)] if rows.size else []
    while work:
        which, shift, side = work.pop()
        p = polynomials[:, which]
        if shift:
            p = _moved(p, octaves * shift)
        negative, first = in_strips(powers, p) < 0.0, signs[0, which]
        passed = negative != first
        before, after = passed[0], ~passed[-1]
        inside = np.flatnonzero(~before & ~after)
        if inside.size:
            low = np.ldexp(1.0, exponent[passed[:, inside].argmax(axis=0) - 1] + octaves * shift)
            found.append((which[inside], low, 2.0 * low, first[inside]))
        if side <= 0 and before.any() and shift > -_WINDOWS:
            work.append((which[before], shift - 1, -1))
        if side >= 0 and after.any() and shift < _WINDOWS:
            work.append((which[after], shift + 1, 1))


def changes(negative: BoolArray) -> FloatArray:
    """Sign changes along the first axis of an array that is True where a coefficient is negative."""
    out: FloatArray = (negative[1:] ^ negative[:-1]).sum(axis=0, dtype=np.uint8)
    return out


def _filled_signs(polynomials: FloatArray) -> BoolArray:
    """True where a coefficient is negative; a zero takes the sign of a neighbour, so it never counts."""
    signs: BoolArray = polynomials < 0.0
    zero = polynomials == 0.0
    if zero.any():
        for k in range(len(signs) - 2, -1, -1):
            signs[k] = np.where(zero[k], signs[k + 1], signs[k])
        for k in range(1, len(signs)):
            signs[k] = np.where(zero[k], signs[k - 1], signs[k])
    return signs


def _octaves(m: int) -> int:
    """Octaves of one window for degree m: fewer for high ones, so that no power leaves the number range."""
    return max(2, min(_OCTAVES, 2 * (_RANGE // max(m, 1))))


@cache
def _window(m: int) -> FloatArray:
    """From powers of x to Bernstein coefficients, ((m + 1) cells, m + 1), cells ascending.

    The cells are the octaves of the window and the two ends, to 0 and to infinity.
    """
    octaves = _octaves(m)
    out = np.zeros((m + 1, octaves + 2, m + 1))
    first, last = 2.0 ** (-octaves // 2), 2.0 ** (octaves // 2)
    for j in range(m + 1):
        for k in range(m + 1):
            octave = sum(comb(j, i) * comb(k, i) / comb(m, i) for i in range(min(j, k) + 1))
            out[j, 1:-1, k] = octave * (first * 2.0 ** np.arange(octaves)) ** k
            out[j, 0, k] = comb(j, k) / comb(m, k) * first**k
            out[m - j, -1, m - k] = comb(j, k) / comb(m, k) * last ** (m - k)
    return out.reshape(-1, m + 1)


def _scan(
    polynomials: FloatArray,
    signs: BoolArray,
    hint: FloatArray | None,
    which: IntArray,
    shift: int,
    found: list[tuple[IntArray, FloatArray, FloatArray, BoolArray]],
) -> tuple[IntArray, IntArray]:
    """One window, 2^(octaves · shift) times the central one, into `found`; returns rows with roots below and
    above it.
    """
    m = len(polynomials) - 1
    matrix, octaves = _window(m), _octaves(m)
    below, above = [], []
    block = max(1, _BLOCK // len(matrix))
    for start in range(0, len(which), block):
        row = which[start : start + block]
        p = polynomials[:, row]
        if shift:
            p = _moved(p, octaves * shift)
        coefficients = in_strips(matrix, p).reshape(m + 1, octaves + 2, -1)
        negative = coefficients < 0.0
        negative[0, 1:] = negative[m, :-1]  # one value, one sign: a root on a node is counted once
        for end, place in ((0, 0), (m, octaves + 1)):
            exact_zero = coefficients[:, place] == 0.0
            if exact_zero[end].any():  # a root at 0 or at infinity is none: the sign next to it counts
                negative[:, place] = np.where(exact_zero, signs[end, row], negative[:, place])
        count = changes(negative)
        below.append(row[count[0] > 0])
        above.append(row[count[-1] > 0])
        cell, column = np.nonzero(count[1:-1])
        low = np.ldexp(1.0, cell - octaves // 2 + octaves * shift)
        single = count[1:-1][cell, column] == 1
        one, many = np.flatnonzero(single), np.flatnonzero(~single)
        found.append((row[column[one]], low[one], 2.0 * low[one], negative[0, 1 + cell[one], column[one]]))
        if many.size:
            at = row[column[many]]
            cut = np.zeros(len(many)) if hint is None else hint[at] / low[many] - 1.0
            halve(
                coefficients[:, 1 + cell[many], column[many]],
                at,
                low[many],
                2.0 * low[many],
                cut,
                found,
            )
    return np.concatenate(below), np.concatenate(above)


def _moved(p: FloatArray, power: int) -> FloatArray:
    """Coefficients of p(2^power x), each row divided by a power of two so that the largest is near 1."""
    mantissa, exponent = np.frexp(p)
    exponent = exponent + (power * np.arange(len(p)))[:, None]
    largest = np.where(mantissa != 0.0, exponent, -(2**30)).max(axis=0)
    out: FloatArray = np.ldexp(mantissa, np.clip(exponent - largest, -1100, 0).astype(np.int32))
    return out


def split(coefficients: FloatArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bernstein forms on [0, t] and [t, 1] of (m + 1, F) coefficients (de Casteljau)."""
    left, right = np.empty_like(coefficients), np.empty_like(coefficients)
    rest, m = coefficients, len(coefficients) - 1
    left[0], right[m] = rest[0], rest[m]
    for r in range(1, m + 1):
        rest = rest[:-1] + t * (rest[1:] - rest[:-1])
        left[r], right[m - r] = rest[0], rest[-1]
    return left, right


def halve(
    coefficients: FloatArray,
    row: IntArray,
    low: FloatArray,
    high: FloatArray,
    cut: FloatArray,
    found: list[tuple[IntArray, FloatArray, FloatArray, BoolArray]],
) -> None:
    """Cut intervals until each holds one root or none. cut : (F,) where to cut first, 0..1 of the width."""
    cut = np.where((cut > 1e-9) & (cut < 1.0 - 1e-9), cut, 0.5)
    while row.size:
        middle = low + cut * (high - low)
        left, right = split(coefficients, cut)
        coefficients = np.concatenate((left, right), axis=1)
        row = np.concatenate((row, row))
        low, high = np.concatenate((low, middle)), np.concatenate((middle, high))
        negative = coefficients < 0.0
        count = changes(negative)
        narrow = high - low <= _NARROW * high
        done = (count == 1) | ((count % 2 == 1) & narrow)
        found.append((row[done], low[done], high[done], negative[0, done]))
        keep = np.flatnonzero((count > 1) & ~narrow)
        coefficients, row, low, high = coefficients[:, keep], row[keep], low[keep], high[keep]
        cut = np.full(len(row), 0.5)
