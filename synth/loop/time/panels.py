"""Signals cut into panels of 13 values each, and what can be said of them without looking between the nodes.

M loops, B panels in order of loop and time. S signals of M loops are stacked as S M loops.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import TO_CHEBYSHEV

_TO_CHEBYSHEV = np.ascontiguousarray(TO_CHEBYSHEV.T)
# Panels gone over at once: few enough to stay in the cache of a core.
BLOCK = 2048


@dataclass(frozen=True, slots=True)
class Panels:
    """owner (B,) loop of each panel; start, length (B,); values (B, 13); first (M,) number of its first
    panel."""

    owner: IntArray
    start: FloatArray
    length: FloatArray
    values: FloatArray
    first: IntArray

    def signal(self, number: int, signals: int) -> tuple[slice, Panels]:
        """Where in these stacked panels one of the signals stands, and its panels."""
        loops = len(self.first) // signals
        edges = np.append(self.first, len(self.owner))[::loops]
        here = slice(int(edges[number]), int(edges[number + 1]))
        return here, Panels(
            self.owner[here] - loops * number,
            self.start[here],
            self.length[here],
            self.values[here],
            self.first[loops * number : loops * (number + 1)] - edges[number],
        )

    def rows(self, number: IntArray) -> Panels:
        """The numbered panels, ascending; a loop may have none of them."""
        owner = self.owner[number]
        return Panels(
            owner,
            self.start[number],
            self.length[number],
            self.values[number],
            np.searchsorted(owner, np.arange(len(self.first))),
        )

    def over(self, reduce: np.ufunc, values: FloatArray, empty: float) -> FloatArray:
        """minimum, maximum or add of values (B,) over the panels of each loop; `empty` where it has none.
        (M,)."""
        # one more value, which changes no result, so that the last loops too may begin where the panels end
        out: FloatArray = reduce.reduceat(np.append(values, empty), self.first)
        # where a loop has no panel the value is another's
        out[:-1][self.first[1:] == self.first[:-1]] = empty
        return out


@dataclass(frozen=True, slots=True)
class Outline:
    """What can be said of one signal without looking between nodes. All (B,): low and high enclose it on its
    panel, least and most are its extremes over the nodes."""

    panels: Panels
    low: FloatArray
    high: FloatArray
    least: FloatArray
    most: FloatArray

    @classmethod
    def of(cls, panels: Panels) -> Outline:
        """Each Chebyshev polynomial is between -1 and 1."""
        signal = panels.values
        low, high, least, most = np.empty((4, len(signal)))
        for begin in range(0, len(signal), BLOCK):
            here = slice(begin, begin + BLOCK)
            by_node = np.ascontiguousarray(signal[here].T)
            by_node.min(axis=0, out=least[here])
            by_node.max(axis=0, out=most[here])
            weights = _TO_CHEBYSHEV @ by_node
            middle, spread = weights[0], np.abs(weights[1:]).sum(axis=0)
            # rounding must not put a bound inside the nodes: a panel that jumps to its extreme would go
            # unseen
            np.minimum(middle - spread, least[here], out=low[here])
            np.maximum(middle + spread, most[here], out=high[here])
        return cls(panels, low, high, least, most)

    def may_be_largest(self, sign: float, floor: FloatArray) -> BoolArray:
        """Panels that may hold the sup of sign · signal, where that is above floor (M,)."""
        most, high = (self.most, self.high) if sign > 0.0 else (-self.least, -self.low)
        return self._not_below(most, high, floor)

    def may_be_farthest(self, floor: FloatArray) -> BoolArray:
        """Panels that may hold the sup of abs(signal), where that is above floor (M,)."""
        return self._not_below(np.maximum(self.most, -self.least), np.maximum(self.high, -self.low), floor)

    def _not_below(self, most: FloatArray, high: FloatArray, floor: FloatArray) -> BoolArray:
        p = self.panels
        best = p.over(np.maximum, most, -np.inf)
        return (high >= best[p.owner]) & (high > floor[p.owner])

    def may_reach_first(self, level: float) -> BoolArray:
        """Panels in which signal >= level may come first."""
        number = np.arange(len(self.high))
        sure = np.where(self.most >= level, number, len(number))
        last = self.panels.over(np.minimum, sure, len(number))
        return (self.high >= level) & (number <= last[self.panels.owner])

    def may_leave_last(self, band: float) -> BoolArray:
        """Panels in which abs(signal) > band may come last."""
        number = np.arange(len(self.high))
        sure = np.where((self.most > band) | (self.least < -band), number, -1)
        first = self.panels.over(np.maximum, sure, -1)
        return ((self.high > band) | (self.low < -band)) & (number >= first[self.panels.owner])

    def may_change_sign(self, negligible: FloatArray) -> BoolArray:
        """Panels with a change of sign that matters: both signs enclose more area than `negligible` (M,)."""
        over = np.minimum(self.high, -self.low) * self.panels.length
        return over > negligible[self.panels.owner]

    def signal(self, number: int, signals: int) -> Outline:
        """What belongs to one signal of stacked panels."""
        here, panels = self.panels.signal(number, signals)
        return Outline(panels, self.low[here], self.high[here], self.least[here], self.most[here])
