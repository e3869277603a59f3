"""Whether a trace can have missed an extremum: what a signal does between two knots, proven or not.

M loops, B panels, 16 cells to a panel from look to look, E cells in question.
"""

from __future__ import annotations

from collections.abc import Sequence
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
class Claim:
    """That a signal stays between low and high (E,) all over the named cells, or at a knot alone leaves that
    range. `loop` (E,) is whose signal it is."""

    loop: IntArray
    signal: FloatArray
    cell: IntArray
    low: FloatArray
    high: FloatArray


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
        off = (np.abs(trace.panels.values @ TO_CHEBYSHEV) @ _OFF_LINE)[:, None]
        low, high = np.minimum(looks[:, :-1], looks[:, 1:]), np.maximum(looks[:, :-1], looks[:, 1:])
        return cls(trace, low - off, high + off)

    def signal(self, number: int, signals: int) -> Cells:
        """What belongs to one signal of stacked panels."""
        here, _ = self.trace.panels.signal(number, signals)
        return Cells(self.trace.signal(number, signals), self.low[here], self.high[here])

    def within(self, low: FloatArray, high: FloatArray, since: FloatArray | None = None) -> Claim:
        """That the signal is nowhere outside the range (M,) to (M,) of its loop, or not after times (M,)."""
        low, high = self._of_panels(low), self._of_panels(high)
        outside = (self.low < low) | (self.high > high)
        if since is not None:
            p = self.trace.panels
            begin = p.start + self.trace.offset[p.owner]
            outside &= begin[:, None] + p.length[:, None] * X[1:] > self._of_panels(since)
        return self._claim(np.flatnonzero(outside), low[:, 0], high[:, 0])

    def not_sooner(self, level: float, passage: Passage) -> tuple[Claim, Claim]:
        """That signal >= level nowhere before that first passage, which is the only one in its cell."""
        number = np.flatnonzero(self.high >= level)
        number = number[number < self._numbers_of(passage, self.low.size)[self._owner(number)]]
        limit = np.full(len(self.low), level)
        return self._claim(number, np.full_like(limit, -np.inf), limit), self._alone(passage)

    def not_later(self, band: float, passage: Passage) -> tuple[Claim, Claim]:
        """That abs(signal) <= band everywhere after that last passage, which is the only one in its cell."""
        number = np.flatnonzero((self.high > band) | (self.low < -band))
        number = number[number > self._numbers_of(passage, -1)[self._owner(number)]]
        limit = np.full(len(self.low), band)
        return self._claim(number, -limit, limit), self._alone(passage)

    def _owner(self, number: IntArray) -> IntArray:
        """Loops of the cells, numbered in order."""
        return self.trace.panels.owner[number // (LOOKS - 1)]

    def _claim(self, number: IntArray, low: FloatArray, high: FloatArray) -> Claim:
        """For the cells numbered; low, high (B,)."""
        panel, cell = np.divmod(number, LOOKS - 1)
        p = self.trace.panels
        return Claim(p.owner[panel], p.values[panel], cell, low[panel], high[panel])

    def _alone(self, passage: Passage) -> Claim:
        """No range would do: the cell of the passage must be simple."""
        inside = np.flatnonzero(passage.left != passage.right)
        cell = np.minimum(passage.left, passage.right)[inside] // 2
        never = np.full(len(inside), np.inf)
        signal = self.trace.panels.values[passage.panel[inside]]
        return Claim(passage.loop[inside], signal, cell, never, -never)

    def _of_panels(self, of_loops: NDArray[Any]) -> NDArray[Any]:
        out: NDArray[Any] = of_loops[self.trace.panels.owner][:, None]
        return out

    def _numbers_of(self, passage: Passage, absent: int) -> IntArray:
        """Number of the cell of each loop's passage, of all cells in order. (M,)."""
        out = np.full(len(self.trace.panels.first), absent)
        cell = np.minimum(np.minimum(passage.left, passage.right) // 2, LOOKS - 2)
        out[passage.loop] = passage.panel * (LOOKS - 1) + cell
        return out


def unproven(claims: Sequence[Claim], loops: int) -> list[BoolArray]:
    """Of each claim the loops (M,) of which it is not proven. All are looked into together."""
    edges = np.cumsum([0, *(len(c.loop) for c in claims)])
    signal, cell, low, high = (
        np.concatenate([getattr(c, name) for c in claims]) for name in ("signal", "cell", "low", "high")
    )
    weights = (signal[:, None, :] @ _OF_CELL[cell])[:, 0]
    left = np.flatnonzero(~(_one_sign(weights, 1, _SLOPE) | _one_sign(weights, 2, _BEND)))
    some = low[left] <= high[left]
    halved = _halved(left[some], weights[left[some]], low, high)
    left = np.append(left[~some], halved)  # no halving makes a cell simple that has to be so as a whole
    out = np.zeros((len(claims), loops), dtype=bool)
    out[np.searchsorted(edges, left, side="right") - 1, np.concatenate([c.loop for c in claims])[left]] = True
    return list(out)


def _halved(which: IntArray, weights: FloatArray, low: FloatArray, high: FloatArray) -> IntArray:
    """Those of the numbers `which` (E,) whose cell is left open: halved until the signal, with its Chebyshev
    coefficients (E, 13) there, is seen to stay between low and high (of all numbers), or given up."""
    for _ in range(HALVINGS):
        if which.size == 0:
            break
        which = np.tile(which, 2)
        weights = np.concatenate([weights @ half for half in _HALVES])
        spread = np.abs(weights[:, 1:]).sum(axis=1)
        ends = weights.sum(axis=1), weights[:, ::2].sum(axis=1) - weights[:, 1::2].sum(axis=1)
        # a signal that only rises or only falls stays between its ends
        level = _one_sign(weights, 1, _SLOPE)
        least = np.where(level, np.minimum(*ends), weights[:, 0] - spread)
        most = np.where(level, np.maximum(*ends), weights[:, 0] + spread)
        left = np.flatnonzero((least < low[which]) | (most > high[which]))
        which, weights = which[left], weights[left]
    return which


def _one_sign(weights: FloatArray, order: int, size: FloatArray) -> BoolArray:
    """Whether the derivative of that order keeps its sign: its first coefficient outweighs all others."""
    most = np.abs(weights[:, order:]) * size[order:]
    out: BoolArray = most[:, 0] > most[:, 1:].sum(axis=1)
    return out
