"""Polynomials from roots and from state space, computed in whole numbers and rounded once.

Every double is a whole number over a power of two, so products and sums of doubles can be carried exactly;
at the orders of plants (30 at most) that costs milliseconds, and no pencil or eigenvalue routine decides
what is a zero.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from synth.loop.arrays import FloatArray

EPS = float(np.finfo(float).eps)

IntegerMatrix = NDArray[np.object_]


def polynomial_of_roots(roots: Sequence[complex]) -> FloatArray:
    """Coefficients of Π(s - root), descending, each correct to the last bit.

    Roots must be real or in exactly conjugate pairs, both given. Raises OverflowError beyond the number
    range.
    """
    out = [Fraction(1)]
    for root in roots:
        if root.imag < 0.0:
            continue
        re, im = Fraction(root.real), Fraction(root.imag)
        factor = [Fraction(1), -re] if im == 0 else [Fraction(1), -2 * re, re * re + im * im]
        longer = [Fraction(0)] * (len(out) + len(factor) - 1)
        for i, a in enumerate(out):
            for j, b in enumerate(factor):
                longer[i + j] += a * b
        out = longer
    return np.array([float(c) for c in out])


def transfer_function(a: FloatArray, b: FloatArray, c: FloatArray, d: float) -> tuple[FloatArray, FloatArray]:
    """C (sI - A)^-1 B + D over det(sI - A), nothing cancelled.

    a (n, n), b (n,), c (n,), d -> numerator (n + 1,), denominator (n + 1,), descending, leading zeros where
    the excess of poles is more than 0. Raises OverflowError beyond the number range.

    Leverrier's recursion with Faddeev's matrices, M_0 = I, c_k = -tr(A M_{k-1})/k, M_k = A M_{k-1} + c_k I,
    where adj(sI - A) = sum of s^(n-1-k) M_k (V. N. Faddeeva, Computational Methods of Linear Algebra,
    1959), in whole numbers. A leading coefficient, or one of s^0, that is 0 within the rounding of the
    entries themselves is made 0: an entry written 0.1 is not exactly that, and would leave a zero far out
    or a pole next to s = 0.
    """
    n = len(a)
    whole_a, unit_a = _integers(a)
    whole_b, unit_b = _integers(b)
    whole_c, unit_c = _integers(c)
    power: IntegerMatrix = np.array([[int(i == j) for j in range(n)] for i in range(n)], dtype=object)
    denominator = [Fraction(1)]
    numerator = [Fraction(d)]
    size = np.abs(b)  # abs(A)^(k-1) abs(B), for what rounding of the entries can do
    noise = [0.0]
    for k in range(1, n + 1):
        last = power
        product: IntegerMatrix = whole_a.dot(power)
        coefficient = (
            -sum(product[i, i] for i in range(n)) // k
        )  # exact: Newton's identities over the integers
        denominator.append(Fraction(coefficient, unit_a**k))
        markov = Fraction(int(whole_c.dot(last).dot(whole_b)), unit_b * unit_c * unit_a ** (k - 1))
        numerator.append(Fraction(d) * denominator[-1] + markov)
        noise.append(4.0 * n * EPS * float(np.abs(c) @ size))
        size = np.abs(a) @ size
        power = product + np.diag(np.array([coefficient] * n, dtype=object))
    if n:
        adjugate = np.array([[float(Fraction(v, unit_a ** (n - 1))) for v in row] for row in last])
        if abs(denominator[-1]) <= 2.0 * EPS * float((np.abs(a) * np.abs(adjugate.T)).sum()):
            numerator[-1] -= Fraction(d) * denominator[-1]
            denominator[-1] = Fraction(0)
        if abs(numerator[-1]) <= 4.0 * n * EPS * (
            float(np.abs(c) @ np.abs(adjugate) @ np.abs(b)) + abs(d * float(denominator[-1]))
        ):
            numerator[-1] = Fraction(0)
    for k in range(1, n + 1):
        if numerator[k - 1] != 0 or abs(numerator[k]) > noise[k]:
            break
        numerator[k] = Fraction(0)
    return np.array([float(v) for v in numerator]), np.array([float(v) for v in denominator])


def _integers(values: FloatArray) -> tuple[IntegerMatrix, int]:
    """Whole numbers and their one denominator: values = whole / denominator, exactly."""
    ratios = [float(v).as_integer_ratio() for v in values.ravel()]
    unit = max((below for _, below in ratios), default=1)
    whole = np.empty(values.size, dtype=object)
    whole[:] = [above * (unit // below) for above, below in ratios]
    return whole.reshape(values.shape), unit
