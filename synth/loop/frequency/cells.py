"""Functions of loops with dead time in Bernstein form on cells of the angle: signs that are proven.

With y = (ωθ)² everything asked of such a loop is A(y) + B(y) cos √y + Z(y) sin √y / √y with polynomials A, B
and Z. On a cell of y, short enough, the two rotations are polynomials too, to 1e-13 of their size; so is the
whole, and its Bernstein coefficients bound it: where all are positive so is the function. Cells are the same
for all loops, so one table turns the coefficients of many loops into those of many cells.

Source of the bound: J. M. Lane and R. F. Riesenfeld, Bounds on a polynomial, BIT 21 (1981).

Letters: n degree of the polynomials, m = n + ROTATION that of the Bernstein form, c cells, M loops.
"""

from __future__ import annotations

from functools import cache
from math import comb

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.frequency.response import CONTROL, D, N, Response, cross, square
from synth.loop.polynomials import ONE_THREAD

ROTATION = 8  # degree that cos √y and sin √y / √y are given on a cell: 4e-14 is left of them
STEP = 0.5  # rad, width of a cell; the error above is that of this width
_NOTHING = -(2**30)  # exponent of 0
_NUMBERS = 1100  # powers of two to either side that are worth writing down
# y: to the left a few wide cells, where the rotation is slow; then octaves; then steps of the angle
_LEFT = (0.0, *(2.0 ** np.arange(-20.0, -4.0, 4.0)), *(2.0 ** np.arange(-4.0, 0.0)))
SHARED_EDGES: FloatArray = np.concatenate((_LEFT, np.arange(1.0, 8.75, STEP) ** 2))


def cell_tables(edges: FloatArray, n: int) -> FloatArray:
    """(c, m + 1, 3 (n + 1)): Bernstein coefficients, on the cells between `edges`, of y^k, y^k cos √y and y^k
    sin √y / √y for k = 0 .. n."""
    low, high = edges[:-1], edges[1:]
    node = 0.5 - 0.5 * np.cos(np.pi * (np.arange(ROTATION + 1) + 0.5) / (ROTATION + 1))
    angle = np.sqrt(low + node[:, None] * (high - low))
    values = np.stack((np.ones_like(angle), np.cos(angle), np.sinc(angle / np.pi)), axis=1)
    form = np.tensordot(_from_values(), values, axes=1)  # (ROTATION + 1, 3, c)
    out = np.empty((len(low), n + ROTATION + 1, 3, n + 1))
    for k in range(n + 1):
        out[..., k] = np.tensordot(_elevation(ROTATION + k, n + ROTATION), form, axes=1).transpose(2, 0, 1)
        weight = (np.arange(ROTATION + k + 2.0) / (ROTATION + k + 1))[:, None, None]
        end = np.zeros((1, *form.shape[1:]))
        before, after = np.concatenate((form, end)), np.concatenate((end, form))
        form = (1.0 - weight) * low * before + weight * high * after
    return out.reshape(len(low), n + ROTATION + 1, -1)


@cache
def shared_tables(n: int) -> FloatArray:
    """The same for the cells that all loops share."""
    return cell_tables(SHARED_EDGES, n)


@cache
def _from_values() -> FloatArray:
    """From the values at Chebyshev's nodes to the Bernstein form of degree ROTATION."""
    node = 0.5 - 0.5 * np.cos(np.pi * (np.arange(ROTATION + 1) + 0.5) / (ROTATION + 1))
    basis = [comb(ROTATION, j) * node**j * (1.0 - node) ** (ROTATION - j) for j in range(ROTATION + 1)]
    out: FloatArray = np.linalg.inv(np.stack(basis, axis=1))
    return out


@cache
def _elevation(degree: int, to: int) -> FloatArray:
    """(to + 1, degree + 1): the same polynomial in a Bernstein form of higher degree."""
    out = np.zeros((to + 1, degree + 1))
    for i in range(to + 1):
        for j in range(max(0, i - to + degree), min(i, degree) + 1):
            out[i, j] = comb(degree, j) * comb(to - degree, i - j) / comb(to, i)
    return out


class AngleForm:
    """The polynomials of M loops in y: columns that the tables turn into Bernstein form.

    squares  (3, n + 1, M): |N|², |D|², |control|², ascending powers of y
    whole    (3 (n + 1), M): |Δ|²
    turned   (3 (n + 1), M): Im(N conj(D) e^(-jωθ)) / (ωθ), with the sign of Im L
    """

    def __init__(self, response: Response) -> None:
        m, n = response.loops, len(response.squares) - 1
        parts = response.halves[:, 0].reshape(-1, 2, 4, m)[:, :, [N, D, CONTROL]]
        # time in units of the power of two next to θ, and the largest coefficient next to 1, both exactly
        delay, power = np.frexp(response.dead_time)
        mantissa, exponent = np.frexp(parts)
        degree = 2 * np.arange(len(parts))[:, None] + np.arange(2)
        exponent = exponent - degree[:, :, None, None] * power
        largest = np.where(mantissa != 0.0, exponent, _NOTHING)[:, :, :2].max(axis=(0, 1, 2))
        halves = np.ldexp(mantissa, np.clip(exponent - largest, -_NUMBERS, _NUMBERS).astype(np.int32))

        scale = delay ** (-2.0 * np.arange(n + 1)[:, None])
        (e_n, e_d, _), (o_n, o_d, _) = halves.transpose(1, 2, 0, 3)
        real = cross(e_n, e_d, o_n, o_d, 1.0, 1, n) * scale
        imaginary = cross(o_n, e_d, e_n, o_d, -1.0, 0, n) * (scale / delay)  # degree n - 1
        raised = np.concatenate((np.zeros((1, m)), imaginary[:-1]))  # times y
        self.squares = (
            square(halves.reshape(len(halves), 2, -1), n).reshape(n + 1, 3, m).transpose(1, 0, 2) * scale
        )
        self.whole = np.concatenate((self.squares[0] + self.squares[1], 2.0 * real, 2.0 * raised))
        self.turned = np.concatenate((np.zeros((n + 1, m)), imaginary, -real))
        self.n = n

    def below(self, place: int, level: FloatArray, rows: IntArray) -> FloatArray:
        """level |Δ|² - |P|² of the loops `rows`, (3 (n + 1), rows); `place` of |P|² in the squares."""
        out: FloatArray = level * self.whole[:, rows]
        out[: self.n + 1] -= self.squares[place][:, rows]
        return out


def in_form(tables: FloatArray, columns: FloatArray, out: FloatArray) -> None:
    """Bernstein coefficients (c, m + 1, F) of F functions, from columns (3 (n + 1), F), into `out`.

    So many rows of the table at a time that one thread does it: several only wait for each other.
    """
    table, flat = tables.reshape(-1, len(columns)), out.reshape(-1, out.shape[2])
    strip = max(1, ONE_THREAD // max(columns.size, 1))
    for start in range(0, len(table), strip):
        part = slice(start, start + strip)
        np.matmul(table[part], columns, out=flat[part])
