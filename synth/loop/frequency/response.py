"""Polynomials on the imaginary axis, split into even and odd halves so that all arithmetic is real.

p(jω) = e(x) + jω o(x) with x = ω². Everything is stored coefficient-major, (coefficients, ..., M), so that
one operation runs over all loops. Derivatives are taken in u = ln ω, where d/du multiplies the term s^k by k:
the stack holds p, dp/du and d²p/du² side by side and one Horner scheme serves all of them.

Letters: h degree of the halves, M loops, F points (each belonging to a loop).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops

_ONE_THREAD = 8192  # numbers
_LARGE = 1e150  # values whose products with each other stay finite
# places of the polynomials in the stack
N, D, CLOSED, CONTROL = 0, 1, 2, 3


@dataclass(frozen=True, slots=True)
class Response:
    """N, D, N + D and C's share of the control path, of M loops, on the imaginary axis.

    halves   (h + 1, 3, 2, 4 M): ascending powers of x; p, dp/du, d²p/du²; even and odd half; polynomial-major
        columns
    squares  (n + 1, 4, M): |p(jω)|² in ascending powers of x
    ends     (2, 4, M): the coefficients of s^0 and s^n, n each loop's own order
    dead_time  (M,)
    """

    halves: FloatArray
    squares: FloatArray
    ends: FloatArray
    dead_time: FloatArray

    @property
    def loops(self) -> int:
        """M."""
        return int(self.ends.shape[2])

    def columns(self, polynomial: int | IntArray, row: IntArray, derivatives: int) -> FloatArray:
        """Coefficients of F points, (h + 1, derivatives + 1, 2, F), for `evaluate`."""
        out: FloatArray = self.halves[:, : derivatives + 1].take(polynomial * self.loops + row, axis=3)
        return out

    def rows(self, index: IntArray) -> Response:
        """The loops named by `index`."""
        halves = self.halves.reshape(*self.halves.shape[:3], 4, self.loops)[..., index]
        return Response(
            halves.reshape(*self.halves.shape[:3], -1),
            self.squares[..., index],
            self.ends[..., index],
            self.dead_time[index],
        )


def response_of(loops: Loops) -> Response:
    """The stack of `loops`."""
    n, m = loops.order, len(loops)
    h = n // 2
    stack = np.empty((4, m, n + 1))
    stack[N], stack[D], stack[CLOSED] = loops.numerator, loops.denominator, loops.closed
    stack[CONTROL] = loops.control
    ascending = np.ascontiguousarray(np.moveaxis(stack, 2, 0)[::-1])  # (n + 1, 4, M)
    halves = np.zeros((h + 1, 3, 2, 4 * m))
    for half in (0, 1):
        part = ascending[half::2].reshape(-1, 1, 4 * m)
        np.multiply(part, _factors(n)[half::2], out=halves[: len(part), :, half])
    squares = square(halves[:, 0], n).reshape(n + 1, 4, m)
    ends = np.empty((2, 4, m))
    ends[0], ends[1] = ascending[0], [loops.leading(part) for part in stack]
    return Response(halves, squares, ends, loops.dead_time)


@cache
def _factors(n: int) -> FloatArray:
    """Of the coefficient of s^k in p, dp/du and d²p/du², (n + 1, 3, 1): s^k = j^k ω^k, the j left to the odd
    half.
    """
    k = np.arange(n + 1.0)[:, None, None]
    out: FloatArray = k ** np.arange(3)[:, None] * np.where(k % 4 < 2, 1.0, -1.0)
    return out


def square(halves: FloatArray, n: int) -> FloatArray:
    """e² + x o² of (h + 1, 2, R) halves: (n + 1, R), ascending powers of x."""
    even, odd = halves[:, 0], halves[:, 1]
    return cross(even, even, odd, odd, 1.0, 1, n)


def cross(
    a: FloatArray, b: FloatArray, c: FloatArray, d: FloatArray, sign: float, shift: int, n: int
) -> FloatArray:
    """a b + sign x^shift c d for (h + 1, R) polynomials, cut to n + 1 coefficients (the rest is zero)."""
    h = len(a) - 1
    out = np.zeros((2 * h + 2, a.shape[1]))
    for i in range(h + 1):
        out[i : i + h + 1] += a[i] * b
        out[i + shift : i + shift + h + 1] += (sign * c[i]) * d
    return out[: n + 1]


def evaluate(columns: FloatArray, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Real and imaginary parts, each (derivatives + 1, F), at the F frequencies w."""
    x = w * w
    value = columns[-1].copy()
    for k in range(len(columns) - 2, -1, -1):
        value *= x
        value += columns[k]
    return value[:, 0], value[:, 1] * w


def complex_values(re: FloatArray, im: FloatArray) -> ComplexArray:
    """One complex array of both; its quotients keep within the number range where squares would not."""
    out = np.empty(re.shape, dtype=complex)
    out.real, out.imag = re, im
    return out


def tamed(re: FloatArray, im: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The same values of several polynomials, (derivatives + 1, polynomials, F), over a power of two common
    to each point where their squares would leave the number range; ratios and logarithmic rates do not feel
    it.
    """
    if not re.size:
        return re, im
    if re.size > _ONE_THREAD:  # a scalar product of more is handed to several threads, at ten times the cost
        small = max(re.max(), -re.min(), im.max(), -im.min()) < _LARGE
    else:
        small = bool(np.vdot(re, re) + np.vdot(im, im) < _LARGE * _LARGE)
    if small:
        return re, im
    size = np.maximum(np.abs(re), np.abs(im)).max(axis=(0, 1))
    _, exponent = np.frexp(size)
    power = np.where(np.isfinite(size) & (size >= _LARGE), -exponent, 0)
    return np.ldexp(re, power), np.ldexp(im, power)


def log_rates(re: FloatArray, im: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """|p|² and the logarithmic derivative p'/p (d/du): (|p|², real part, imaginary part)."""
    size = re[0] * re[0] + im[0] * im[0]
    with np.errstate(divide="ignore", invalid="ignore"):  # NaN at a root of p on the axis
        return size, (re[1] * re[0] + im[1] * im[0]) / size, (im[1] * re[0] - re[1] * im[0]) / size


def polynomial(coefficients: FloatArray, x: FloatArray) -> FloatArray:
    """Horner's scheme: (m + 1, F) ascending coefficients at x (F,) or (G, F)."""
    value = np.broadcast_to(coefficients[-1], x.shape)
    for k in range(len(coefficients) - 2, -1, -1):
        value = value * x + coefficients[k]
    return value
