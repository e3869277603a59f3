"""Areas between signals and zero, from the exact integrals of their panels and the zeros refined.

B panels.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import WHOLE, primitive_coefficients
from synth.loop.time.panels import Panels
from synth.loop.time.trace import SLOPES, VALUES, X, passing, turning


def panel_areas(panels: Panels) -> FloatArray:
    """∫ abs(signal) over each panel, (B,).

    Every zero counts: those between two looks of unlike sign, and both of a pair between two looks of one
    sign where the tangents meet beyond zero.
    """
    signal = panels.values[0]
    looks = signal @ VALUES
    positive = looks > 0.0
    panel, cell = np.nonzero(positive[:, :-1] != positive[:, 1:])
    a, b = looks[panel, cell], looks[panel, cell + 1]
    x = X[cell] + (X[cell + 1] - X[cell]) * (a / (a - b))
    falls = positive[panel, cell]
    pair, both, falls_first = _pairs(signal, looks)
    panel, x = np.concatenate([panel, np.tile(pair, 2)]), np.concatenate([x, both.ravel()])
    falls = np.concatenate([falls, falls_first, ~falls_first])
    # the primitive F counts with the signal's sign: at the end once, and at each zero between two signs twice
    twice = 2.0 * _primitive_at_zero(signal[panel], x)
    whole = signal @ WHOLE
    out: FloatArray = np.where(positive[:, -1], whole, -whole)
    out += np.bincount(panel, np.where(falls, twice, -twice), len(out))
    return out * panels.length


def _primitive_at_zero(signal: FloatArray, x: FloatArray) -> FloatArray:
    """The integral from 0 to the zero near x: one step of Newton's method, and what is left of the way taken
    from the parabola. (E, 13), (E,) -> (E,).

    From a straight line between looks the step errs by 3e-5 of a radian, and F, flat in it, by nothing.
    """
    coefficients = np.ascontiguousarray(primitive_coefficients(signal).T)
    near = 2.0 * x - 1.0
    _, value, slope = _horner(coefficients, near)
    with np.errstate(all="ignore"):
        step = value / slope
        near = np.clip(near - np.where(np.abs(step) < 0.5 / len(X), step, 0.0), -1.0, 1.0)
        primitive, value, slope = _horner(coefficients, near)
        rest = 0.5 * value * value / slope
    out: FloatArray = primitive - np.where(np.isfinite(rest), rest, 0.0)
    return out


def _horner(coefficients: FloatArray, at: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Value and first two derivatives of polynomials (k, E), ascending powers."""
    value = coefficients[-1].copy()
    first, second = np.zeros_like(at), np.zeros_like(at)
    for one in coefficients[-2::-1]:
        second *= at
        second += first
        first *= at
        first += value
        value *= at
        value += one
    return value, first, 2.0 * second


def _pairs(signal: FloatArray, looks: FloatArray) -> tuple[IntArray, FloatArray, BoolArray]:
    """Pairs of zeros between two looks of one sign: panels (E,), places (2, E), whether the first one
    falls."""
    panel, cell = _dips(signal, looks)
    a, b = looks[panel, cell], looks[panel, cell + 1]
    p, q = ((signal[panel] * SLOPES.T[cell + i]).sum(axis=1) for i in (0, 1))
    # the tangents of a signal above zero meet at (a q - b p + p q width) / (q - p)
    meet = (a * q - b * p + p * q * X[1]) * np.sign(a) * (q - p)
    down = (a * b > 0.0) & (a * p < 0.0) & (b * q > 0.0) & (meet < 0.0)
    panel, cell = panel[down], cell[down]
    middle, least = turning(signal[panel], X[cell], X[cell + 1], p[down], q[down])
    beyond = least * a[down] < 0.0
    panel, cell, middle, least = panel[beyond], cell[beyond], middle[beyond], least[beyond]
    a, b = looks[panel, cell], looks[panel, cell + 1]
    left = passing(signal[panel], X[cell], middle, a, least)
    right = passing(signal[panel], middle, X[cell + 1], least, b)
    return panel, np.stack([left, right]), a > 0.0


def _dips(signal: FloatArray, looks: FloatArray) -> tuple[IntArray, IntArray]:
    """Cells that may hold two zeros: on both sides of a look nearer to zero than its neighbours, and at the
    panel's ends where the signal comes from there or goes there."""
    size = np.abs(looks)
    near = (size[:, 1:-1] <= size[:, :-2]) & (size[:, 1:-1] <= size[:, 2:])
    near &= (looks[:, :-2] > 0.0) == (looks[:, 2:] > 0.0)
    panel, look = np.nonzero(near)
    ends = signal @ SLOPES[:, [0, -1]]
    first = np.flatnonzero((size[:, 0] <= size[:, 1]) & (ends[:, 0] * looks[:, 0] < 0.0))
    last = np.flatnonzero((size[:, -1] <= size[:, -2]) & (ends[:, 1] * looks[:, -1] > 0.0))
    panels = np.concatenate([panel, panel, first, last])
    cells = np.concatenate([look, look + 1, np.zeros_like(first), np.full_like(last, len(X) - 2)])
    return panels, cells
