"""Horner's rule on stacks against numpy's, row by row."""

import numpy as np

from synth.loop.polynomials import coefficient, horner, horner_slope, in_strips, magnitude_sum


def test_values_slopes_and_sizes():
    rng = np.random.default_rng(0)
    rows, points = rng.normal(size=(6, 5)), rng.normal(size=(6, 3)) + 1j * rng.normal(size=(6, 3))
    value, slope = horner_slope(rows, points)
    np.testing.assert_allclose(horner(rows, points), value, rtol=1e-15)
    for row, at, v, d in zip(rows, points, value, slope, strict=True):
        np.testing.assert_allclose(v, np.polyval(row, at), rtol=1e-13)
        np.testing.assert_allclose(d, np.polyval(np.polyder(row), at), rtol=1e-13)
    sizes = magnitude_sum(rows, np.abs(points))
    np.testing.assert_allclose(sizes[0], np.polyval(np.abs(rows[0]), np.abs(points[0])), rtol=1e-14)
    assert (sizes >= np.abs(value) * (1.0 - 1e-14)).all()


def test_constants_and_coefficients_beyond_the_width():
    rows = np.array([[2.0], [-3.0]])
    points = np.array([[1.0 + 1.0j], [5.0]])
    value, slope = horner_slope(rows, points)
    assert value.tolist() == [[2.0], [-3.0]]
    assert (slope == 0.0).all()
    assert coefficient(rows, 0).tolist() == [2.0, -3.0]
    assert coefficient(rows, 1).tolist() == [0.0, 0.0]


def test_products_in_strips_are_products():
    rng = np.random.default_rng(0)
    matrix, columns = rng.normal(size=(300, 7)), rng.normal(size=(7, 1000))
    np.testing.assert_allclose(in_strips(matrix, columns), matrix @ columns, rtol=1e-13, atol=1e-13)
    assert in_strips(matrix, columns[:, :0]).shape == (300, 0)
