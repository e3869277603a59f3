"""A signal as polynomials on panels of time, and what is read off it: tops, passages, areas.

Each panel carries the signal's values at the same 16 Chebyshev points, ends included, so a jump between two
panels is told by their two values. Sources for the interpolation and the quadrature: C. W. Clenshaw and
A. R. Curtis, A method for numerical integration on an automatic computer, Numer. Math. 2 (1960) 197-205.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from synth.loop.arrays import FloatArray, IntArray

NODES = 16
PER_PANEL = 5.0  # radians, or time constants, of the fastest mode alive in a panel
POINTS: FloatArray = 0.5 - 0.5 * np.cos(np.pi * np.arange(NODES, dtype=float) / (NODES - 1))
_ORDERS: FloatArray = np.arange(NODES, dtype=float)
_UNSEEN = 0.03  # what a panel may do beyond its nodes, relative to what it does at them
_PLATEAU = 1e-13
_MOST_LOOKED_AT = 4000  # panels that may hold the top


def _vandermonde(x: FloatArray) -> FloatArray:
    out: FloatArray = np.cos(np.arccos(np.clip(2.0 * x - 1.0, -1.0, 1.0))[..., None] * _ORDERS)
    return out


TO_COEFFICIENTS: FloatArray = np.linalg.inv(_vandermonde(POINTS)).astype(np.float64)


def basis(x: FloatArray) -> FloatArray:
    """(..., 16): the weights of a panel's values in the value at x of its length, 0 <= x <= 1."""
    out: FloatArray = _vandermonde(x) @ TO_COEFFICIENTS
    return out


def _differentiation() -> FloatArray:
    """(16, 16): a panel's values to those of its slope, per panel length."""
    angle = np.arccos(np.clip(2.0 * POINTS - 1.0, -1.0, 1.0))[1:-1, None]
    inner = 2.0 * _ORDERS * np.sin(_ORDERS * angle) / np.sin(angle)
    end = 2.0 * _ORDERS**2.0
    out: FloatArray = np.vstack((end * (-1.0) ** (_ORDERS + 1), inner, end)) @ TO_COEFFICIENTS
    return out


_SLOPE = _differentiation()
_EVEN = np.linspace(0.0, 1.0, 65)
_ZOOM = np.linspace(0.0, 1.0, 33)
# a node on the even grid counts once
_CLOSE: FloatArray = np.unique(np.round(np.concatenate((_EVEN, POINTS)), 12))
_ON_CLOSE = basis(_CLOSE)
_HALVES = np.linspace(0.0, 1.0, 129)  # ends and middles of 64 cells
_ON_HALVES = basis(_HALVES)
# ∫ T_k over the panel
_MEANS = np.array([1.0 / (1.0 - k * k) if k % 2 == 0 else 0.0 for k in range(NODES)]) @ TO_COEFFICIENTS


@dataclass(frozen=True)
class Trace:
    """start (P,) and length (P,) of the panels [s], in order and without gaps; values (P, 16)."""

    start: FloatArray
    length: FloatArray
    values: FloatArray

    @cached_property
    def range(self) -> tuple[FloatArray, FloatArray]:
        """(P,) least and largest value at the nodes of each panel."""
        return self.values.min(axis=1), self.values.max(axis=1)

    def peak(self) -> float:
        """Largest size at the nodes."""
        return float(max(-self.range[0].min(), self.range[1].max(), 0.0))

    def unresolved(self) -> float:
        """Largest of the last two Chebyshev coefficients, relative to the peak."""
        last = np.abs(self.values @ TO_COEFFICIENTS[-2:].T).max(initial=0.0)
        return float(last / max(self.peak(), 1e-300))

    def at(self, t: float) -> float:
        """The signal at a time."""
        panel = max(int(np.searchsorted(self.start, t, side="right")) - 1, 0)
        x = (t - self.start[panel]) / self.length[panel]
        return float(basis(np.array(x)) @ self.values[panel])

    def top(self, sign: float) -> tuple[float, float]:
        """Supremum of sign · signal, and when."""
        low, high = self.range
        highest = high if sign > 0.0 else -low
        might = highest + _UNSEEN * (high - low)
        look = np.flatnonzero(might >= highest.max())
        if len(look) > _MOST_LOOKED_AT:
            look = look[np.argsort(-might[look])[:_MOST_LOOKED_AT]]
        v = sign * self.values[look]
        close = v @ _ON_CLOSE.T
        best, when = -np.inf, 0.0
        for i in np.argsort(-close.max(axis=1))[:3]:
            panel = look[i]
            x, value = _summit(v[i], close[i], int(close[i].argmax()))
            if value > best:
                best, when = value, float(self.start[panel] + self.length[panel] * x)
        # a plateau is reached where it begins
        level = np.flatnonzero(v[:, 0] >= best - _PLATEAU * abs(best))
        return best, min(when, float(self.start[look[level]].min(initial=np.inf)))

    def first(self, level: float) -> float:
        """First time at which the signal has come from 0 to the level; NaN where it never does."""
        low, high = self.range
        sign = np.sign(level) or 1.0
        highest = high if sign > 0.0 else -low
        for panel in np.flatnonzero(highest + _UNSEEN * (high - low) >= abs(level)):
            v = (self.values[panel] - level) * sign
            reached = _ON_CLOSE @ v >= 0.0
            reached[0], reached[-1] = v[0] >= 0.0, v[-1] >= 0.0
            if reached.any():
                return self._passage(int(panel), v, int(reached.argmax()))
        return np.nan

    def last_outside(self, final: float, band: float) -> float:
        """Last time at which |signal/final - 1| > band; 0 where it never is."""
        low, high = self.range
        largest = np.maximum(np.abs(low / final - 1.0), np.abs(high / final - 1.0))
        for panel in np.flatnonzero(largest + _UNSEEN * (high - low) / abs(final) > band)[::-1]:
            z = self.values[panel] / final - 1.0
            close = _ON_CLOSE @ z
            size = np.abs(close)
            if size[-1] > band:
                return float(self.start[panel] + self.length[panel])
            # a summit between two points looked at may be outside where they are not
            inner = (size[1:-1] >= size[:-2]) & (size[1:-1] >= size[2:]) & (size[1:-1] > band * (1.0 - 2e-3))
            for j in np.flatnonzero((size > band) | np.concatenate(([False], inner, [False])))[::-1]:
                side = np.sign(close[j])
                x, height = (_CLOSE[j], size[j]) if size[j] > band else _summit(side * z, side * close, j)
                if height > band:
                    x = _upward(band - side * z, float(x), float(_CLOSE[j + 1]))
                    return float(self.start[panel] + self.length[panel] * x)
        return 0.0

    def _passage(self, panel: int, v: FloatArray, j: int) -> float:
        """Where v comes up through 0 within a panel, between _CLOSE[j - 1] and _CLOSE[j]."""
        x = _upward(v, _CLOSE[j - 1], _CLOSE[j]) if j else 0.0
        return float(self.start[panel] + self.length[panel] * x)

    def area(self, level: float) -> float:
        """∫ |signal - level| dt."""
        low, high = self.range[0] - level, self.range[1] - level
        whole = np.abs(self.values @ _MEANS - level) * self.length
        mixed = np.maximum(low, -high) < _UNSEEN * (high - low)
        most = np.maximum(-low, high) * self.length
        # what all the small ones hold together does not count
        mixed &= most * len(most) > 1e-9 * most.sum()
        index = np.flatnonzero(mixed)
        whole[index] = self.length[index] * _mean_size(self.values[index] - level)
        return float(whole.sum())


def _summit(v: FloatArray, close: FloatArray, j: int) -> tuple[float, float]:
    """Place and height of the summit near _CLOSE[j]; close : the panel's values at _CLOSE."""
    x, height = float(_CLOSE[j]), float(close[j])
    # where a top is flat its slope still tells the place
    fall = -(_SLOPE @ v)
    low, high = _CLOSE[max(j - 1, 0)], _CLOSE[min(j + 1, len(_CLOSE) - 1)]
    if (basis(np.array([low, high])) @ fall * [-1.0, 1.0] > 0.0).all():
        x = _upward(fall, low, high)
        height = max(height, float(basis(np.array(x)) @ v))
    return x, height


def _upward(v: FloatArray, low: float, high: float) -> float:
    """Where a panel's polynomial comes up through 0, negative at `low` and not at `high`."""
    for _ in range(5):
        t = low + (high - low) * _ZOOM
        up = basis(t) @ v >= 0.0
        up[0], up[-1] = False, True
        k = int(up.argmax())
        low, high = float(t[k - 1]), float(t[k])
    return 0.5 * (low + high)


def _mean_size(v: FloatArray) -> FloatArray:
    """(P,) means of |polynomial| over panels (P, 16): Simpson's rule on 64 cells, where the sign changes the
    parabola in two parts."""
    fine = v @ _ON_HALVES.T
    a, m, b = fine[:, :-2:2], fine[:, 1::2], fine[:, 2::2]
    cell = np.abs(a + 4.0 * m + b) / 6.0
    turned = a * b < 0.0
    a, m, b = a[turned], m[turned], b[turned]
    bend, rise = 2.0 * (a - 2.0 * m + b), 4.0 * m - 3.0 * a - b
    root = a / (a - b)
    with np.errstate(divide="ignore", invalid="ignore"):
        for _ in range(3):
            step = (a + root * (rise + root * bend)) / (rise + 2.0 * root * bend)
            root = np.clip(root - np.nan_to_num(step), 0.0, 1.0)
    before = root * (a + root * (rise / 2.0 + root * bend / 3.0))
    cell[turned] = np.abs(before) + np.abs((a + 4.0 * m + b) / 6.0 - before)
    out: FloatArray = cell.mean(axis=1)
    return out


def plan(
    sizes: FloatArray, decays: FloatArray, *, base: float, start: float, whole: int | None, dead: float
) -> list[tuple[int, int]]:
    """Panels for a sum of modes e^(pt), |p| = sizes, -Re p = decays: (level, how many) in order, a panel of a
    level being base · 2^level long.

    While a mode is alive (decay · t < dead) no panel is longer than PER_PANEL/|p|. A panel begins at a
    multiple of its own length after `start`. whole : where to stop, in units of base, a power of two; None:
    when all are dead.
    """
    out: list[tuple[int, int]] = []
    order = np.argsort(-sizes)
    dies = np.where(decays > 0.0, dead / np.maximum(decays, 1e-300), np.inf)
    t = 0
    for i in [*order, None]:
        if i is None:
            if whole is None:
                break
            until, level = whole, whole.bit_length() - 1
        else:
            until_time = (dies[i] - start) / base
            if whole is not None:
                until_time = min(until_time, float(whole))
            until = int(np.ceil(min(until_time, 2.0**60)))
            ratio = PER_PANEL / (sizes[i] * base) if sizes[i] > 0.0 else 2.0**60
            level = max(int(np.floor(np.log2(ratio))), 0)
            if whole is not None:
                level = min(level, whole.bit_length() - 1)
        while t < until:
            now = level if t == 0 else min(level, (t & -t).bit_length() - 1)
            count = 1 if now < level else -(-(until - t) // (1 << now))
            out.append((now, count))
            t += count << now
    return out


def edges(stages: list[tuple[int, int]]) -> tuple[IntArray, IntArray]:
    """Levels (P,) of the panels planned, and where they begin (P,), in units of the base."""
    levels = np.repeat([s[0] for s in stages], [s[1] for s in stages]).astype(np.int64)
    lengths = np.int64(1) << levels
    return levels, np.concatenate(([0], np.cumsum(lengths)[:-1])).astype(np.int64)
