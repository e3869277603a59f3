"""A panel of time as 13 values: the Radau points, and the exact algebra of polynomials through them.

Nodes: x = 0 and the 12 Radau points of (0, 1], the last of which is 1. A signal on a panel of length h is the polynomial
of degree 12 through its values there. Matrices act from the right on rows of such values.
"""

from __future__ import annotations

import numpy as np
from numpy.polynomial import chebyshev, legendre

from synth.loop.arrays import ComplexArray, FloatArray

STAGES = 12
NODES = STAGES + 1


def _radau_points() -> FloatArray:
    """Zeros of P_c - P_(c-1), moved to (0, 1]; the last is 1. Hairer and Wanner, Solving ODEs II, sec. IV.5."""
    weights = np.zeros(STAGES + 1)
    weights[-1], weights[-2] = 1.0, -1.0
    points = np.sort(legendre.legroots(weights).real)
    slope = legendre.legder(weights)
    for _ in range(3):
        points[:-1] -= legendre.legval(points[:-1], weights) / legendre.legval(points[:-1], slope)
    points[-1] = 1.0
    out: FloatArray = 0.5 * (points + 1.0)
    return out


def _integration() -> FloatArray:
    """(c, c): integrals from 0 to each point of the polynomial through the values at the points."""
    grid = 2.0 * POINTS - 1.0
    rows = [legendre.legval(grid, legendre.legint(unit, lbnd=-1)) for unit in np.eye(STAGES)]
    out: FloatArray = 0.5 * np.linalg.solve(legendre.legvander(grid, STAGES - 1).T, np.array(rows)).T
    return out


POINTS: FloatArray = _radau_points()
GRID: FloatArray = np.concatenate([[0.0], POINTS])
"""All 13 nodes of a panel."""

_eigenvalues, _vectors = np.linalg.eig(_integration())
_upper = np.flatnonzero(_eigenvalues.imag > 0.0)
SPREAD: ComplexArray = _eigenvalues[_upper]
"""(6,) eigenvalues of the integration matrix, upper half: integration over a panel of length h is h·SPREAD."""
TO_NODES: ComplexArray = 2.0 * _vectors[:, _upper]
"""(12, 6): values at the points are the real part of TO_NODES times what is known of the upper half."""
FROM_NODES: ComplexArray = np.linalg.inv(_vectors)[_upper]
"""(6, 12)."""

_cheb = chebyshev.chebvander(2.0 * GRID - 1.0, STAGES)
TO_CHEBYSHEV: FloatArray = np.linalg.inv(_cheb).T
"""(13, 13): values @ TO_CHEBYSHEV are the coefficients."""


def _matrix(of_chebyshev: FloatArray) -> FloatArray:
    return TO_CHEBYSHEV @ of_chebyshev


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
    """Rows of values (E, 13) to (E, 14): coefficients, ascending powers of 2x - 1, of the integral from x = 0."""
    out: FloatArray = values @ TO_PRIMITIVE
    return out


def jet(coefficients: FloatArray, x: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Integral from 0, value, slope and curvature at x of each row. (E, 14), (E,) -> four (E,)."""
    g = 2.0 * x - 1.0
    zero = np.zeros_like(g)
    f, d1, d2, d3 = zero, zero, zero, zero
    for k in range(coefficients.shape[1] - 1, -1, -1):
        d3 = d3 * g + 3.0 * d2
        d2 = d2 * g + 2.0 * d1
        d1 = d1 * g + f
        f = f * g + coefficients[:, k]
    return f, 2.0 * d1, 4.0 * d2, 8.0 * d3
