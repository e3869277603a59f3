"""The whole line of loop gains: where a closed-loop pole crosses the axis, and which gains are stable.

The loop is 1 + k L(s) = 0 with L = N/D e^(-sθ), k any real number, of either sign. Everything comes from
polynomials, not from a sweep: on the axis D/N e^(sθ) must be real.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops, product
from synth.loop.poles.gain_intervals import Interval, intervals_between, without_rounding
from synth.loop.poles.gain_line_delayed import delayed_intervals
from synth.loop.poles.roots import closed_roots, routh_stable

# Roots this near to the real axis, relative to their size, are taken as real: a double root splits by about
# 1e-8.
NEARLY_REAL = 1e-6


@dataclass(frozen=True, slots=True)
class Crossing:
    """A closed-loop pole on the imaginary axis at ±j `frequency` when the loop gain is `gain`.

    frequency is inf where a pole passes through infinity (1 + gain · L(∞) = 0).
    """

    frequency: float
    gain: float


def stable_gain_intervals(loops: Loops) -> list[tuple[Interval, ...]]:
    """For each loop, all the factors k on its gain for which it is stable, as disjoint intervals in order.

    With C of unit gain in `loops`, k is the gain of C itself. Exact up to rounding: the ends are gains at
    which a pole lies on the axis (or at infinity), and each gap between such gains is judged at a point
    within it.
    """
    if loops.delayed:
        return delayed_intervals(loops)
    roots = closed_roots(_axis_polynomials(loops.numerator, loops.denominator))
    out = []
    for numerator, denominator, squares in zip(loops.numerator, loops.denominator, roots, strict=True):
        gains = np.array([c.gain for c in _crossings(numerator, denominator, squares)])
        out.append(intervals_between(gains, partial(_stable_at, numerator, denominator)))
    return out


def axis_crossings(numerator: FloatArray, denominator: FloatArray) -> tuple[Crossing, ...]:
    """Every gain, of either sign, at which a root of D + k N lies on the imaginary axis or at infinity.

    numerator, denominator : (n + 1,) or shorter, descending powers, any unit of time. Ordered by gain. Where
    roots only touch the axis the gain is listed too.
    """
    width = max(len(numerator), len(denominator))
    num = np.pad(np.asarray(numerator, float), (width - len(numerator), 0))
    den = np.pad(np.asarray(denominator, float), (width - len(denominator), 0))
    (roots,) = closed_roots(_axis_polynomials(num[None, :], den[None, :]))
    return _crossings(num, den, roots)


def _stable_at(numerator: FloatArray, denominator: FloatArray, gains: FloatArray) -> BoolArray:
    closed = denominator + gains[:, None] * numerator
    verdict: BoolArray = routh_stable(closed) & (closed[:, 0] * denominator[0] > 0.0)
    return verdict


def _axis_polynomials(numerator: FloatArray, denominator: FloatArray) -> FloatArray:
    """Im(D conj(N)) / ω on s = jω as polynomials in x = ω². (M, n + 1) twice -> (M, n + 1 or less)."""
    even_n, odd_n = _halves(numerator)
    even_d, odd_d = _halves(denominator)
    plus, minus = product(odd_d, even_n), product(even_d, odd_n)
    size = product(np.abs(odd_d), np.abs(even_n)) + product(np.abs(even_d), np.abs(odd_n))
    return without_rounding(plus - minus, size)


def _halves(polynomials: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Even and odd part: p(jω) = e(x) + jω o(x), x = ω²; descending powers of x, of equal width."""
    ascending = polynomials[:, ::-1]
    even, odd = ascending[:, 0::2].copy(), ascending[:, 1::2].copy()
    even[:, 1::2] *= -1.0
    odd[:, 1::2] *= -1.0
    odd = np.pad(odd, ((0, 0), (0, even.shape[1] - odd.shape[1])))
    return even[:, ::-1], odd[:, ::-1]


def _crossings(numerator: FloatArray, denominator: FloatArray, squares: ComplexArray) -> tuple[Crossing, ...]:
    """Crossings of one loop from the roots x of its axis polynomial, with ω = 0 and ω = ∞."""
    x = squares[~np.isnan(squares)]
    frequencies = [0.0]
    real = np.abs(x.imag) <= NEARLY_REAL * np.abs(x)
    frequencies += sorted({float(np.sqrt(v)) for v in x.real[real] if v > 0.0})
    found = []
    for w in frequencies:
        n, d = np.polyval(numerator, 1j * w), np.polyval(denominator, 1j * w)
        size = float(abs(n)) ** 2
        if size > (1e-14 * np.polyval(np.abs(numerator), w)) ** 2:  # else a zero of L: the gain is infinite
            found.append(Crossing(w, 0.0 - float((d * n.conjugate()).real / size)))
    if numerator[0] != 0.0:
        found.append(Crossing(float("inf"), float(-denominator[0] / numerator[0])))
    return tuple(sorted(found, key=lambda c: c.gain))
