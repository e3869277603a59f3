"""Values of many polynomials at many points: Horner's rule, a row of points for each row of coefficients."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray

ONE_THREAD = 250_000
"""Multiplications in a matrix product up to which the usual libraries keep to one thread."""


def horner(polynomials: FloatArray, points: ComplexArray) -> ComplexArray:
    """Values of each row at its own points.

    polynomials : (M, n + 1), descending powers; points : (M, q). Returns (M, q).
    Relative rounding error of a value: about 2 n eps × sum of abs(a_k s^k) / abs(value).
    """
    columns = polynomials[:, :, None]
    value = columns[:, 0].astype(complex).repeat(points.shape[1], axis=1)
    for k in range(1, polynomials.shape[1]):
        value *= points
        value += columns[:, k]
    return value


def horner_slope(polynomials: FloatArray, points: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """Values and first derivatives at the same points, (M, q) each."""
    columns = polynomials[:, :, None]
    value = columns[:, 0].astype(complex).repeat(points.shape[1], axis=1)
    slope = np.zeros_like(value)
    for k in range(1, polynomials.shape[1]):
        slope *= points
        slope += value
        value *= points
        value += columns[:, k]
    return value, slope


def magnitude_sum(polynomials: FloatArray, radius: FloatArray) -> FloatArray:
    """Sum of abs(a_k) r^k, the yardstick of rounding in a value. (M, n + 1), (M, q) -> (M, q)."""
    size = np.abs(polynomials)[:, :, None]
    out: FloatArray = size[:, 0].repeat(radius.shape[1], axis=1)
    for k in range(1, size.shape[1]):
        out *= radius
        out += size[:, k]
    return out


def in_strips(matrix: FloatArray, columns: FloatArray) -> FloatArray:
    """matrix @ columns, (a, b) and (b, R) -> (a, R), in strips of columns narrow enough for one thread.

    Handing products as small as these to several threads costs three times what it saves.
    """
    out = np.empty((matrix.shape[0], columns.shape[1]))
    strip = max(1, ONE_THREAD // matrix.size)
    for start in range(0, columns.shape[1], strip):
        part = slice(start, start + strip)
        np.matmul(matrix, columns[:, part], out=out[:, part])
    return out


def coefficient(polynomials: FloatArray, power: int) -> FloatArray:
    """Coefficient of s^power of each row, 0 beyond the width. (M, n + 1) -> (M,)."""
    width = polynomials.shape[1]
    if power >= width:
        return np.zeros(polynomials.shape[0])
    out: FloatArray = polynomials[:, width - 1 - power]
    return out
