"""Whether a trace can have missed an extremum: what a signal does between two knots, proven or not.

M loops, B panels, 16 cells to a panel from look to look, E cells in question.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import NODES, STAGES, TO_CHEBYSHEV, value_matrix
from synth.loop.time.trace import LOOKS, Passage, Trace, X

# A cell is halved at most so often before it is given up.
HALVINGS = 10
# A sup is proven where nothing can be higher by more than this part of the unit.
NEGLIGIBLE = 1e-8

_K2: FloatArray = np.square(np.arange(float(NODES)))
# Largest slope and curvature of each Chebyshev polynomial on [-1, 1]: k² and k² (k² - 1) / 3, at the ends.
_SLOPE: FloatArray = _K2
_BEND: FloatArray = _K2 * (_K2 - 1.0) / 3.0
# Between two looks a signal is from the straight line at most width²/8 times its largest curvature.
_OFF_LINE = (4.0 / 8.0) * X[1] ** 2 * _BEND
_NODES = np.cos(np.pi * (np.arange(NODES) + 0.5) / NODES)
_FROM_VALUES = np.linalg.inv(chebyshev.chebvander(_NODES, STAGES)).T


def _part(begin: float, end: float) -> FloatArray:
    """(13, 13): values on a panel to the Chebyshev coefficients on the part of it from begin to end."""
    out: FloatArray = value_matrix(begin + (end - begin) * 0.5 * (_NODES + 1.0)) @ _FROM_VALUES
    return out


_OF_CELL = np.stack([_part(begin, end) for begin, end in pairwise(X)])
_BACK = np.linalg.inv(TO_CHEBYSHEV)
_HALVES = np.stack([_BACK @ _part(0.0, 0.5), _BACK @ _part(0.5, 1.0)])


@dataclass(frozen=True, slots=True)
class Cells:
    """low, high (B, 16) enclose the signal of a trace from look to look."""

    trace: Trace
    low: FloatArray
    high: FloatArray

    @classmethod
    def of(cls, trace: Trace) -> Cells:
        """From the looks and a bound on the curvature."""
        looks = trace.height[:, ::2]
        off = (np.abs(trace.panels.values[0] @ TO_CHEBYSHEV) @ _OFF_LINE)[:, None]
        low, high = np.minimum(looks[:, :-1], looks[:, 1:]), np.maximum(looks[:, :-1], looks[:, 1:])
        return cls(trace, low - off, high + off)

    def signal(self, number: int, signals: int) -> Cells:
        """What belongs to one signal of stacked panels."""
        here, _ = self.trace.panels.signal(number, signals)
        return Cells(self.trace.signal(number, signals), self.low[here], self.high[here])

    def may_exceed(self, low: FloatArray, high: FloatArray) -> BoolArray:
        """Whether the signal may leave the range (M,) to (M,) of its loop, except at a knot. (M,)."""
        low, high = self._of_panels(low), self._of_panels(high)
        return self._open((self.low < low) | (self.high > high), low[:, 0], high[:, 0])

    def may_reach_sooner(self, level: float, passage: Passage, uncertain: FloatArray) -> BoolArray:
        """Whether signal >= level may come before that first passage, or a knot is so near the level, to
        `uncertain` (M,), that it may not be the first. (M,)."""
        end = self._numbers_of(passage, self.low.size)
        sooner = self._before(end, self.low)
        limit = np.full(len(self.low), level)
        out = self._open(sooner & (self.high >= level), np.full_like(limit, -np.inf), limit)
        knots = self.trace.height
        last = np.full(len(out), knots.size)
        last[passage.loop] = passage.panel * knots.shape[1] + passage.right + 1
        with np.errstate(invalid="ignore"):
            near = np.abs(knots - level) < self._of_panels(uncertain)
        return out | self._bent(passage) | self._any(near & self._before(last, knots))

    def may_leave_later(self, band: float, passage: Passage, uncertain: FloatArray) -> BoolArray:
        """Whether abs(signal) > band may come after that last passage, or a knot is so near the band's edge,
        to `uncertain` (M,), that it may not be the last. (M,)."""
        begin = self._numbers_of(passage, -1)
        later = ~self._before(begin + 1, self.low)
        limit = np.full(len(self.low), band)
        out = self._open(later & ((self.high > band) | (self.low < -band)), -limit, limit)
        knots = self.trace.height
        first = np.full(len(out), 0)
        first[passage.loop] = passage.panel * knots.shape[1] + passage.left
        with np.errstate(invalid="ignore"):
            near = np.abs(np.abs(knots) - band) < self._of_panels(uncertain)
        return out | self._bent(passage) | self._any(near & ~self._before(first, knots))

    def _numbers_of(self, passage: Passage, absent: int) -> IntArray:
        """Number of the cell of each loop's passage, of all cells in order. (M,)."""
        out = np.full(len(self.trace.panels.first), absent)
        cell = np.minimum(np.minimum(passage.left, passage.right) // 2, LOOKS - 2)
        out[passage.loop] = passage.panel * (LOOKS - 1) + cell
        return out

    def _before(self, number: IntArray, like: FloatArray) -> BoolArray:
        """Entries of (B, k), numbered in order, before that number (M,) of their loop."""
        out: BoolArray = np.arange(like.size).reshape(like.shape) < self._of_panels(number)
        return out

    def _any(self, where: BoolArray) -> BoolArray:
        """Loops (M,) with any of (B, k)."""
        out = np.zeros(len(self.trace.panels.first), dtype=bool)
        out[self.trace.panels.owner[where.any(axis=1)]] = True
        return out

    def _of_panels(self, of_loops: NDArray[Any]) -> NDArray[Any]:
        out: NDArray[Any] = of_loops[self.trace.panels.owner][:, None]
        return out

    def _open(self, cells: BoolArray, low: FloatArray, high: FloatArray) -> BoolArray:
        """Loops (M,) with a cell among those named in which the signal may leave low to high (B,) unseen."""
        panel, cell = np.nonzero(cells)
        weights = _on_cells(self.trace.panels.values[0, panel], cell)
        left = np.flatnonzero(~_simple(weights))
        panel, weights = panel[left], weights[left]
        for _ in range(HALVINGS):
            if panel.size == 0:
                break
            panel = np.tile(panel, 2)
            weights = np.concatenate([weights @ half for half in _HALVES])
            spread = np.abs(weights[:, 1:]).sum(axis=1)
            ends = weights.sum(axis=1), weights[:, ::2].sum(axis=1) - weights[:, 1::2].sum(axis=1)
            # a signal that only rises or only falls stays between its ends
            level = _one_sign(weights, 1, _SLOPE)
            least = np.where(level, np.minimum(*ends), weights[:, 0] - spread)
            most = np.where(level, np.maximum(*ends), weights[:, 0] + spread)
            left = np.flatnonzero((least < low[panel]) | (most > high[panel]))
            panel, weights = panel[left], weights[left]
        out = np.zeros(len(self.trace.panels.first), dtype=bool)
        out[self.trace.panels.owner[panel]] = True
        return out

    def _bent(self, passage: Passage) -> BoolArray:
        """Loops (M,) whose passage lies in a cell that is not simple, so that it may not be the only one
        there."""
        inside = np.flatnonzero(passage.left != passage.right)
        panel, cell = passage.panel[inside], np.minimum(passage.left, passage.right)[inside] // 2
        bad = ~_simple(_on_cells(self.trace.panels.values[0, panel], cell))
        out = np.zeros(len(self.trace.panels.first), dtype=bool)
        out[passage.loop[inside[bad]]] = True
        return out


def _on_cells(signal: FloatArray, cell: IntArray) -> FloatArray:
    """Chebyshev coefficients of signals (E, 13) on one cell each."""
    out: FloatArray = (signal[:, None, :] @ _OF_CELL[cell])[:, 0]
    return out


def _simple(weights: FloatArray) -> BoolArray:
    """Whether the slope keeps its sign, or the curvature does: then a trace knows every extremum."""
    return _one_sign(weights, 1, _SLOPE) | _one_sign(weights, 2, _BEND)


def _one_sign(weights: FloatArray, order: int, size: FloatArray) -> BoolArray:
    """Whether the derivative of that order keeps its sign: its first coefficient outweighs all others."""
    most = np.abs(weights[:, order:]) * size[order:]
    out: BoolArray = most[:, 0] > most[:, 1:].sum(axis=1)
    return out
