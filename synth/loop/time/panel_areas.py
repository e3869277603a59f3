"""Areas between signals and zero, from the exact integrals of their panels and the zeros refined.

B panels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import WHOLE, primitive_coefficients
from synth.loop.time.panels import Panels
from synth.loop.time.trace import SLOPES, VALUES, X, passing, turning

# Panels gone over at once: few enough to stay in the cache of a core.
BLOCK = 4096
# Values taken on the way to a zero; parts of a panel within which the parabola is the signal.
STEPS, NEAR = 3, 5e-4


def panel_areas(panels: Panels) -> FloatArray:
    """∫ abs(signal) over each panel, (B,).

    Every zero counts: those between two looks of unlike sign, and both of a pair between two looks of one
    sign where the tangents meet beyond zero.
    """
    signal = panels.values
    parts = [_areas(signal[begin : begin + BLOCK]) for begin in range(0, len(signal), BLOCK)]
    return np.concatenate([np.zeros(0), *parts]) * panels.length


def _areas(signal: FloatArray) -> FloatArray:
    """(B, 13) -> (B,), for panels of length 1."""
    looks = signal @ VALUES
    positive = looks > 0.0
    panel, cell = np.nonzero(positive[:, :-1] != positive[:, 1:])
    zeros = _Zeros(panel, X[cell], X[cell + 1], looks[panel, cell], looks[panel, cell + 1])
    zeros = zeros.with_pairs(signal, looks)
    # the primitive F counts with the signal's sign: at the end once, and at each zero between two signs twice
    twice = 2.0 * zeros.primitive(signal)
    whole = signal @ WHOLE
    out: FloatArray = np.where(positive[:, -1], whole, -whole)
    out += np.bincount(zeros.panel, np.where(zeros.a > 0.0, twice, -twice), len(out))
    return out


@dataclass(frozen=True, slots=True)
class _Zeros:
    """Brackets of one zero each, (E,): panel, places on either side, and the signal a and b there."""

    panel: IntArray
    low: FloatArray
    high: FloatArray
    a: FloatArray
    b: FloatArray

    def with_pairs(self, signal: FloatArray, looks: FloatArray) -> _Zeros:
        """These, and the pairs of zeros between two looks of one sign."""
        panel, cell = _dips(signal, looks)
        a, b = looks[panel, cell], looks[panel, cell + 1]
        p, q = ((signal[panel] * SLOPES.T[cell + i]).sum(axis=1) for i in (0, 1))
        # the tangents of a signal above zero meet at (a q - b p + p q width) / (q - p)
        meet = (a * q - b * p + p * q * X[1]) * np.sign(a) * (q - p)
        down = (a * b > 0.0) & (a * p < 0.0) & (b * q > 0.0) & (meet < 0.0)
        if not down.any():
            return self
        panel, cell, a, b = panel[down], cell[down], a[down], b[down]
        middle, least = turning(signal[panel], X[cell], X[cell + 1], p[down], q[down])
        beyond = least * a < 0.0
        before = _Zeros(panel, X[cell], middle, a, least).chosen(beyond)
        after = _Zeros(panel, middle, X[cell + 1], least, b).chosen(beyond)
        parts = (self, before, after)
        return _Zeros(
            np.concatenate([z.panel for z in parts]),
            *(np.concatenate([getattr(z, name) for z in parts]) for name in ("low", "high", "a", "b")),
        )

    def chosen(self, index: BoolArray | IntArray) -> _Zeros:
        """Those named by `index`."""
        return _Zeros(self.panel[index], self.low[index], self.high[index], self.a[index], self.b[index])

    def primitive(self, signal: FloatArray) -> FloatArray:
        """The integral from 0 to each zero, (E,): steps of Newton's method from the straight line, and the
        rest of the way, which counts by its square, from the parabola. Where it is long, as beside an
        extremum, the zero is found out first."""
        coefficients = primitive_coefficients(signal[self.panel])
        x = self.low + (self.high - self.low) * (self.a / (self.a - self.b))
        with np.errstate(all="ignore"):
            for step in range(STEPS):
                out, value, slope = _horner(coefficients, x)
                left = value / slope
                if step < STEPS - 1:
                    x = np.clip(x - left, self.low, self.high)
        out -= 0.5 * value * left
        far = np.flatnonzero(~(np.abs(left) < NEAR))
        if far.size:
            z = self.chosen(far)
            exact, _ = passing(signal[z.panel], z.low, z.high, z.a, z.b)
            out[far] = _horner(coefficients[:, far], exact)[0]
        return out


def _horner(coefficients: FloatArray, x: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Value and first two derivatives to x of polynomials (k, E), ascending powers of 2x - 1."""
    at = 2.0 * x - 1.0
    value = coefficients[-1].copy()
    first, second = np.zeros_like(at), np.zeros_like(at)
    for one in coefficients[-2::-1]:
        second *= at
        second += first
        first *= at
        first += value
        value *= at
        value += one
    return value, 2.0 * first, 8.0 * second


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
