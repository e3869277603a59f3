"""A panel of time as 13 values: the Radau points, and the exact algebra of polynomials through them.

Nodes: x = 0 and the 12 Radau points of (0, 1], the last of which is 1. A signal on a panel of length h is the
polynomial of degree 12 through its values there. Matrices act from the right on rows of such values.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.polynomial import chebyshev, legendre
from numpy.typing import NDArray

from synth.loop.arrays import ComplexArray, FloatArray

STAGES = 12
NODES = STAGES + 1
LongArray = NDArray[Any]


_Long = np.longdouble  # where it is no longer than a double, about a digit of the responses is lost


def _legendre(x: LongArray, degree: int) -> LongArray:
    """P_0 .. P_degree at x, (len(x), degree + 1), in extended precision."""
    values = [np.ones_like(x), x]
    for k in range(2, degree + 1):
        values.append(((2 * k - 1) * x * values[-1] - (k - 1) * values[-2]) / _Long(k))
    return np.stack(values, axis=1)


def _radau_points() -> LongArray:
    """Zeros of P_c - P_(c-1) on [-1, 1]; the last is 1. Hairer and Wanner, Solving ODEs II, sec. IV.5."""
    weights = np.zeros(STAGES + 1)
    weights[-1], weights[-2] = 1.0, -1.0
    x = np.sort(legendre.legroots(weights).real).astype(_Long)
    x[-1] = _Long(1)
    inner = x[:-1]
    for _ in range(4):
        p = _legendre(inner, STAGES)
        # (1 - x²) P_k' = k (P_(k-1) - x P_k)
        slopes = [k * (p[:, k - 1] - inner * p[:, k]) / (1 - inner * inner) for k in (STAGES - 1, STAGES)]
        inner -= (p[:, STAGES] - p[:, STAGES - 1]) / (slopes[1] - slopes[0])
    return x


def _integration(x: LongArray) -> LongArray:
    """(c, c): integrals over [0, point] of the polynomial through the values at the points, [0, 1] for [-1,
    1]."""
    p = _legendre(x, STAGES)
    # ∫ P_k = (P_(k+1) - P_(k-1)) / (2k + 1) from -1
    parts = [x + 1] + [(p[:, k + 1] - p[:, k - 1]) / _Long(2 * k + 1) for k in range(1, STAGES)]
    return _Long(0.5) * np.stack(parts, axis=1) @ _inverse(p[:, :STAGES])


def _inverse(matrix: LongArray) -> LongArray:
    """Inverse in extended precision: the double one, improved by Newton's iteration (Schulz, 1933)."""
    kind = np.complex128 if np.iscomplexobj(matrix) else np.float64
    found = np.linalg.inv(matrix.astype(kind)).astype(matrix.dtype)
    for _ in range(4):
        found = found @ (2 * np.eye(len(matrix), dtype=matrix.dtype) - matrix @ found)
    return found


def _eigen(matrix: LongArray) -> tuple[LongArray, LongArray]:
    """Eigenvalues and vectors, each pair improved by Newton's method with residuals in extended precision.

    The vectors are far from orthogonal (condition 7e5), so what doubles leave uncertain would show in the
    responses.
    """
    values, vectors = np.linalg.eig(matrix.astype(np.float64))
    values, vectors = values.astype(np.clongdouble), vectors.astype(np.clongdouble)
    size = len(matrix)
    for i in range(size):
        v, value = vectors[:, i], values[i]
        anchor = int(np.argmax(np.abs(v)))
        for _ in range(4):
            jacobian = np.zeros((size + 1, size + 1), dtype=np.complex128)
            jacobian[:size, :size] = (matrix - value * np.eye(size)).astype(np.complex128)
            jacobian[:size, size] = -v.astype(np.complex128)
            jacobian[size, anchor] = 1.0
            residual = np.append((matrix @ v - value * v).astype(np.complex128), 0.0)
            step = np.linalg.solve(jacobian, residual).astype(np.clongdouble)
            v, value = v - step[:size], value - step[size]
        vectors[:, i], values[i] = v, value
    return values, vectors


_points = _radau_points()
POINTS: FloatArray = (0.5 * (_points + 1)).astype(np.float64)
GRID: FloatArray = np.concatenate([[0.0], POINTS])
"""All 13 nodes of a panel."""

_eigenvalues, _vectors = _eigen(_integration(_points))
_upper = np.flatnonzero(_eigenvalues.imag > 0.0)
SPREAD: ComplexArray = _eigenvalues[_upper].astype(np.complex128)
"""(6,) eigenvalues of the integration matrix, upper half: integration over a panel of length h is
h·SPREAD."""
TO_NODES: ComplexArray = (2 * _vectors[:, _upper]).astype(np.complex128)
"""(12, 6): values at the points are the real part of TO_NODES times what is known of the upper half."""
FROM_NODES: ComplexArray = _inverse(_vectors)[_upper].astype(np.complex128)
"""(6, 12)."""

TO_CHEBYSHEV: FloatArray = np.linalg.inv(chebyshev.chebvander(2.0 * GRID - 1.0, STAGES).astype(float)).T
"""(13, 13): values @ TO_CHEBYSHEV are the coefficients."""


def _matrix(of_chebyshev: NDArray[Any]) -> FloatArray:
    out: FloatArray = TO_CHEBYSHEV @ of_chebyshev
    return out


def value_matrix(x: FloatArray) -> FloatArray:
    """(13, len(x)): values @ matrix are the values at x in [0, 1]."""
    return _matrix(chebyshev.chebvander(2.0 * x - 1.0, STAGES).T)


def slope_matrix(x: FloatArray) -> FloatArray:
    """(13, len(x)): values @ matrix are the derivatives to x, at x."""
    rows = [2.0 * chebyshev.chebval(2.0 * x - 1.0, chebyshev.chebder(unit)) for unit in np.eye(NODES)]
    return _matrix(np.array(rows))


def _power_matrix() -> FloatArray:
    """(13, 14): values to coefficients in powers of 2x - 1, ascending, of the integral from x = 0."""
    rows = [chebyshev.cheb2poly(chebyshev.chebint(unit, lbnd=-1)) for unit in np.eye(NODES)]
    wide = np.array([np.pad(row, (0, NODES + 1 - len(row))) for row in rows])
    return 0.5 * _matrix(wide)


TO_PRIMITIVE: FloatArray = _power_matrix()
WHOLE: FloatArray = TO_PRIMITIVE @ np.ones(NODES + 1)
"""(13,): values @ WHOLE is the integral over x in [0, 1]."""


def primitive_coefficients(values: FloatArray) -> FloatArray:
    """Rows of values (E, 13) to (14, E): coefficients, ascending powers of 2x - 1, of the integral from x =
    0."""
    return np.ascontiguousarray((values @ TO_PRIMITIVE).T)


def polynomial(values: FloatArray) -> FloatArray:
    """Rows of values (E, 13) to (13, E): coefficients, ascending powers of 2x - 1."""
    return derivative(primitive_coefficients(values))


def powers(x: FloatArray) -> FloatArray:
    """(14, E): the powers 0 to 13 of 2x - 1."""
    out = np.empty((NODES + 1, len(x)))
    out[0], out[1] = 1.0, 2.0 * x - 1.0
    for k in range(2, NODES + 1):  # np.multiply.accumulate takes five times as long
        np.multiply(out[k - 1], out[1], out=out[k])
    return out


def derivative(coefficients: FloatArray) -> FloatArray:
    """Coefficients (k, E), ascending powers of 2x - 1, of the derivative to x: (k - 1, E)."""
    out: FloatArray = coefficients[1:] * (2.0 * np.arange(1, len(coefficients)))[:, None]
    return out


def total(coefficients: FloatArray, of_x: FloatArray) -> FloatArray:
    """Values of the polynomials (k, E) where the powers are `of_x` (14, E). (E,)."""
    out: FloatArray = (coefficients * of_x[: len(coefficients)]).sum(axis=0)
    return out
