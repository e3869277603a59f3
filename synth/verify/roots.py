"""Closed-loop poles again, to 50 digits: whole numbers instead of floating point.

Without dead time the characteristic polynomial is formed exactly and its roots are refined by Aberth's
iteration in fixed point on Python's integers. With dead time the poles come from a matrix: the infinitesimal
generator of the delay equation on Chebyshev points, each eigenvalue refined by Newton's method on the
characteristic equation.

Sources: O. Aberth, Iteration methods for finding all zeros of a polynomial simultaneously, Math. Comp. 27
(1973) 339-344; D. Breda, S. Maset and R. Vermiglio, Pseudospectral differencing methods for characteristic
roots of delay differential equations, SIAM J. Sci. Comput. 27 (2005) 482-495.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.verify.subject import Exact, Subject

_BITS = 180  # 54 digits
_MOST = 40
_POINTS = 24
_CHAIN = 40  # roots of the chain beyond those of the matrix

Fixed = tuple[int, int]  # real and imaginary part in units of 2^-_BITS


def poles(subject: Subject) -> ComplexArray | None:
    """All poles [1/s]; with dead time those nearest the origin; None where it is of neutral type."""
    above, below = subject.exact
    if subject.dead_time == 0.0:
        return refined([a + b for a, b in zip(above, below, strict=True)])
    if above[0] != 0:
        return None
    return _delayed(above, below, subject.dead_time)


def refined(closed: list[Fraction]) -> ComplexArray:
    """Roots of a polynomial with exact coefficients, descending; right to rounding of the result."""
    while closed and closed[0] == 0:
        closed = closed[1:]
    degree = len(closed) - 1
    if degree < 1:
        return np.empty(0, dtype=complex)
    zeros = 0
    while closed[-1] == 0:
        closed, zeros = closed[:-1], zeros + 1
    degree -= zeros
    if degree < 1:
        return np.zeros(zeros, dtype=complex)
    # the variable is stretched by a power of two so that the roots lie round 1
    power = round((_log2(closed[-1]) - _log2(closed[0])) / degree)
    monic = [c / closed[0] / Fraction(2) ** (power * k) for k, c in enumerate(closed)]
    start = np.roots([float(c) for c in monic])
    digits = [_to_fixed(c) for c in monic]
    out = [
        _polish(digits, complex(r), [complex(q) for i, q in enumerate(start) if i != k])
        for k, r in enumerate(start)
    ]
    return np.concatenate((np.array(out) * 2.0**power, np.zeros(zeros)))


def _log2(value: Fraction) -> float:
    value = abs(value)
    return (value.numerator.bit_length() - value.denominator.bit_length()) + 0.0


def _to_fixed(value: Fraction) -> int:
    return (value.numerator << _BITS) // value.denominator if value >= 0 else -_to_fixed(-value)


def _polish(coefficients: list[int], start: complex, others: list[complex]) -> complex:
    """Aberth's iteration for one root; the others stand where double precision put them."""
    re, im = int(start.real * 2.0**60) << (_BITS - 60), int(start.imag * 2.0**60) << (_BITS - 60)
    for _ in range(_MOST):
        p, q, dp, dq = coefficients[0], 0, 0, 0
        for c in coefficients[1:]:
            dp, dq = ((dp * re - dq * im) >> _BITS) + p, ((dp * im + dq * re) >> _BITS) + q
            p, q = ((p * re - q * im) >> _BITS) + c, (p * im + q * re) >> _BITS
        if p == 0 and q == 0:
            break
        size = dp * dp + dq * dq
        if size == 0:
            break
        step_re, step_im = ((p * dp + q * dq) << _BITS) // size, ((q * dp - p * dq) << _BITS) // size
        step = complex(step_re / (1 << _BITS), step_im / (1 << _BITS))
        here = complex(re / (1 << _BITS), im / (1 << _BITS))
        repulsion = sum((1.0 / (here - o) for o in others if o != here), 0j)
        factor = 1.0 - step * repulsion
        # the repulsion matters while roots crowd; once the step is small plain Newton keeps all digits
        if abs(step) > 1e-9 * abs(here) and abs(factor) > 0.1:
            step /= factor
            step_re, step_im = (
                int(step.real * 2.0**100) << (_BITS - 100),
                int(step.imag * 2.0**100) << (_BITS - 100),
            )
        re, im = re - step_re, im - step_im
        if abs(step) < 1e-30 * max(abs(here), 1e-9):
            break
    return complex(re / (1 << _BITS), im / (1 << _BITS))


def _delayed(above: Exact, below: Exact, delay: float) -> ComplexArray:
    """Roots of D(s) + N(s) e^(-sθ) nearest the origin, N strictly proper."""
    lead = below[0]
    n = len(below) - 1
    # in units of the delay: s = p/θ
    theta = Fraction(delay)
    d = np.array([float(c / lead * theta**k) for k, c in enumerate(below)])
    b = np.array([float(c / lead * theta**k) for k, c in enumerate(above)])
    if n == 0:
        return np.empty(0, dtype=complex)
    now = np.diag(np.ones(n - 1), 1)
    now[-1] = -d[1:][::-1]
    past = np.zeros((n, n))
    past[-1] = -b[1:][::-1]
    points, difference = _chebyshev(_POINTS)
    matrix = np.kron(difference, np.eye(n))
    matrix[:n] = 0.0
    matrix[:n, :n], matrix[:n, -n:] = now, past
    assert points[0] == 0.0
    with np.errstate(all="ignore"):
        roots = np.linalg.eigvals(matrix)
        roots = roots[(roots.imag >= 0.0) & (np.abs(roots) < 2.0 * _POINTS)]
        # far roots repeat about every 2π along the chain: continue it upwards from the outermost
        outer = roots[np.argsort(roots.imag)[-2:]]
        chain = (outer[:, None] + 2j * np.pi * np.arange(1, _CHAIN)).ravel()
        roots, good = _newton(d, b, np.concatenate((roots, chain)))
    out: list[complex] = []
    for r in roots[good]:
        r = complex(r.real, abs(r.imag) if abs(r.imag) > 1e-9 * abs(r) else 0.0)
        if all(abs(r - o) > 1e-7 * (1.0 + abs(r)) for o in out):
            out.append(r)
    upper = np.array(out, dtype=complex) / delay
    return np.concatenate((upper, upper[upper.imag > 0.0].conj()))


def _newton(d: FloatArray, b: FloatArray, roots: ComplexArray) -> tuple[ComplexArray, BoolArray]:
    """Newton's method on D(p) + N(p) e^(-p), and which have settled."""
    dd, db = np.polyder(d), np.polyder(b)
    step = np.full(len(roots), np.inf, dtype=complex)
    for _ in range(14):
        e = np.exp(-roots)
        value = np.polyval(d, roots) + np.polyval(b, roots) * e
        slope = np.polyval(dd, roots) + (np.polyval(db, roots) - np.polyval(b, roots)) * e
        step = value / slope
        roots = roots - step
    good: BoolArray = np.isfinite(roots) & (np.abs(step) < 1e-9 * (1.0 + np.abs(roots)))
    return roots, good


def _chebyshev(count: int) -> tuple[FloatArray, FloatArray]:
    """Chebyshev points on [-1, 0], from 0 downwards, and the differentiation matrix on them."""
    k = np.arange(count + 1)
    x = 0.5 * (np.cos(np.pi * k / count) - 1.0)
    weight = np.where((k == 0) | (k == count), 2.0, 1.0) * (-1.0) ** k
    gap = x[:, None] - x[None, :] + np.eye(count + 1)
    matrix = weight[:, None] / weight[None, :] / gap
    matrix -= np.diag(matrix.sum(axis=1))
    return x, matrix
