"""Fractions of polynomials in s, K plant cases at a time, striking only what the arithmetic itself brings in.

A sum of fractions is put over the LEAST common denominator and a quotient of fractions loses what both
denominators share, so 1/s + 1/s is 2/s and G/(1 + G) has no copy of G's poles. Nothing else is ever struck:
(s + 1)/(s + 1) keeps the pair, because the sheet wrote it and the mode is there, hidden.

Letters: K plant cases, w columns. Polynomials are (K, w), descending powers of s.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import exact_degree, product, trimmed

# Expanded polynomials of a higher degree say too little about their own roots in double precision.
MAX_DEGREE = 30

EQUAL = 1e-12  # two factors are one when their monic coefficients agree to this, relative
SAME_ROOT = 1e-9  # the same for roots, which are less well known


class DegreeTooHigh(Exception):
    """A polynomial went past MAX_DEGREE."""


class Split(Exception):
    """The cases differ in what two denominators share; evaluate the rows of `mask` and the others apart."""

    def __init__(self, mask: BoolArray) -> None:
        super().__init__("cases differ")
        self.mask = mask


@dataclass(frozen=True, slots=True)
class Fraction:
    """gain · Π above / Π below · e^(-s delay).

    gain, delay    (K,)
    above, below   polynomials with s in them, each (K, w); kept apart, so that sums see what they share
    """

    gain: FloatArray
    above: tuple[FloatArray, ...]
    below: tuple[FloatArray, ...]
    delay: FloatArray

    @property
    def constant(self) -> bool:
        """True when it is a number for each case."""
        return not (self.above or self.below or self.delay.any())

    @property
    def zero(self) -> BoolArray:
        """(K,) where it is nothing but 0."""
        out: BoolArray = self.gain == 0.0
        for factor in self.above:
            out = out | ~factor.any(axis=1)
        return out

    def numerator(self) -> FloatArray:
        """gain · Π above multiplied out, (K, w)."""
        return multiplied(self.gain[:, None], self.above)

    def denominator(self) -> FloatArray:
        """Π below multiplied out, (K, w)."""
        return multiplied(np.ones((len(self.gain), 1)), self.below)


def plain(polynomial: FloatArray) -> Fraction:
    """A polynomial (K, w) as a fraction."""
    ones, none = np.ones(len(polynomial)), np.zeros(len(polynomial))
    if polynomial.shape[1] == 1:
        return Fraction(polynomial[:, 0], (), (), none)
    return Fraction(ones, (polynomial,), (), none)


def multiplied(start: FloatArray, factors: tuple[FloatArray, ...] | list[FloatArray]) -> FloatArray:
    """start · Π factors. Raises DegreeTooHigh."""
    _check_degree(start, *factors)
    out = start
    for factor in factors:
        out = out * factor if out.shape[1] == 1 else product(out, factor)
    return out


def _check_degree(*factors: FloatArray) -> None:
    if sum(f.shape[1] - 1 for f in factors) > MAX_DEGREE:
        raise DegreeTooHigh


def summed(a: FloatArray, b: FloatArray) -> FloatArray:
    """a + b; a coefficient that is nothing but rounding error is exactly 0, or it would be a pole far out."""
    if a.shape[1] != b.shape[1]:
        a, b = (b, a) if a.shape[1] < b.shape[1] else (a, b)
        wider = np.zeros_like(a)
        wider[:, a.shape[1] - b.shape[1] :] = b
        b = wider
    total = a + b
    noise = np.abs(total) <= 8.0 * np.finfo(float).eps * np.minimum(np.abs(a), np.abs(b))
    return np.where(noise, 0.0, total) if noise.any() else total


def add(a: Fraction, b: Fraction) -> Fraction:
    """a + b over the least common denominator. Dead times must agree (the caller has checked)."""
    common, rest_a, rest_b = shared(a.below, b.below)
    total = summed(multiplied(a.numerator(), rest_b), multiplied(b.numerator(), rest_a))
    below = (*common, *rest_a, *rest_b)
    _check_degree(*below)
    out = plain(total)
    return Fraction(out.gain, out.above, below, a.delay)


def times(a: Fraction, b: Fraction) -> Fraction:
    """a · b; nothing is struck."""
    _check_degree(*a.above, *b.above)
    _check_degree(*a.below, *b.below)
    return Fraction(a.gain * b.gain, (*a.above, *b.above), (*a.below, *b.below), a.delay + b.delay)


def over(a: Fraction, b: Fraction) -> Fraction:
    """a / b, less what both denominators share. b must not be 0."""
    _, rest_a, rest_b = shared(a.below, b.below)
    return times(
        Fraction(a.gain, a.above, tuple(rest_a), a.delay),
        Fraction(1.0 / b.gain, tuple(rest_b), b.above, -b.delay),
    )


def shared(
    a: tuple[FloatArray, ...], b: tuple[FloatArray, ...]
) -> tuple[list[FloatArray], list[FloatArray], list[FloatArray]]:
    """Common factors of two products and what is left of each: (common, rest of a, rest of b).

    Raises Split where the cases do not agree on it.
    """
    if not a or not b:
        return [], list(a), list(b)
    common: list[FloatArray] = []
    left_b = list(b)
    left_a: list[FloatArray] = []
    for original in a:
        piece = original
        for j in range(len(left_b)):
            while piece.shape[1] > 1 and left_b[j].shape[1] > 1:
                if piece.shape == left_b[j].shape and np.array_equal(piece, left_b[j]):
                    common.append(piece)
                    piece = left_b[j] = np.ones((len(piece), 1))
                    break
                found = _common(piece, left_b[j])
                if found is None:
                    break
                part, piece, left_b[j] = found
                common.append(part)
        left_a.append(piece)
    return common, _tidy(left_a), _tidy(left_b)


def _tidy(factors: list[FloatArray]) -> list[FloatArray]:
    return [f for f in factors if f.shape[1] > 1 or (f != 1.0).any()]


def _common(a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray] | None:
    """A common factor g of positive degree with a/g and b/g, or None. Raises Split."""
    a, b = _uniform(a), _uniform(b)
    if a.shape[1] == 1 or b.shape[1] == 1:
        return None
    zeros = min(_zeros_at_origin(a), _zeros_at_origin(b))
    if zeros:
        power = np.zeros((a.shape[0], zeros + 1))
        power[:, 0] = 1.0
        return power, a[:, :-zeros], b[:, :-zeros]
    if a.shape[1] <= b.shape[1]:
        quotient, exact = _divided(b, a)
        if _agreed(exact):
            return a, np.ones((a.shape[0], 1)), quotient
    else:
        quotient, exact = _divided(a, b)
        if _agreed(exact):
            return b, quotient, np.ones((a.shape[0], 1))
    if min(a.shape[1], b.shape[1]) <= 2:
        return None
    return _common_by_roots(a, b)


def _agreed(flags: BoolArray) -> bool:
    if flags.any() and not flags.all():
        raise Split(flags)
    return bool(flags.all())


def _uniform(polynomials: FloatArray) -> FloatArray:
    """Leading zeros dropped; Split where the cases differ in degree."""
    degree = exact_degree(polynomials)
    _agreed(degree == degree[0])
    return trimmed(polynomials, max(int(degree[0]), 0))


def _zeros_at_origin(polynomials: FloatArray) -> int:
    nonzero = polynomials[:, ::-1] != 0.0
    count: IntArray = nonzero.argmax(axis=1)
    _agreed(count == count[0])
    return int(count[0])


def _divided(a: FloatArray, b: FloatArray) -> tuple[FloatArray, BoolArray]:
    """Quotient of a by b and, for each case, whether the remainder is rounding alone."""
    steps = a.shape[1] - b.shape[1] + 1
    rest, size = a.copy(), np.abs(a)
    quotient = np.empty((a.shape[0], steps))
    for i in range(steps):
        quotient[:, i] = rest[:, i] / b[:, 0]
        rest[:, i : i + b.shape[1]] -= quotient[:, i : i + 1] * b
        size[:, i : i + b.shape[1]] += np.abs(quotient[:, i : i + 1] * b)
    exact: BoolArray = np.all(np.abs(rest[:, steps:]) <= EQUAL * size[:, steps:], axis=1)
    return quotient, exact


def _common_by_roots(a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray] | None:
    """Both factors are multiplied out and share some roots only, such as s² + 3s + 2 and s² + 4s + 3."""
    roots_a, roots_b = _roots(a), _roots(b)
    parts = []
    for row_a, row_b in zip(roots_a, roots_b, strict=True):
        free = list(row_b)
        taken = []
        for root in row_a:
            gaps = [abs(root - other) for other in free]
            if gaps and min(gaps) <= SAME_ROOT * abs(root):
                taken.append(root)
                free.pop(int(np.argmin(gaps)))
        parts.append(np.atleast_1d(np.real(np.poly(taken))) if taken else np.ones(1))
    degree = np.array([len(p) for p in parts])
    _agreed(degree == degree[0])
    if degree[0] == 1:
        return None
    part = np.array(parts)
    return part, _divided(a, part)[0], _divided(b, part)[0]


def _roots(polynomials: FloatArray) -> ComplexArray:
    """Roots of each row by its companion matrix, (K, degree)."""
    cases, width = polynomials.shape
    matrix = np.zeros((cases, width - 1, width - 1))
    matrix[:, 0, :] = -polynomials[:, 1:] / polynomials[:, :1]
    rows = np.arange(1, width - 1)
    matrix[:, rows, rows - 1] = 1.0
    if not np.isfinite(matrix).all():
        return np.full((cases, width - 1), np.nan + 0j)
    return np.linalg.eigvals(matrix).astype(complex)
