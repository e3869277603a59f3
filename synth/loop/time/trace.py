"""Signals looked at closely: their extremes, and where they pass a level.

M loops, B panels in order of loop and time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import (
    derivative,
    polynomial,
    powers,
    slope_matrix,
    total,
    value_matrix,
)
from synth.loop.time.panels import Panels

# Points at which a panel is looked at; between two neighbours a resolved signal turns by about a quarter
# radian.
LOOKS = 17
X = np.linspace(0.0, 1.0, LOOKS)
VALUES, SLOPES = value_matrix(X), slope_matrix(X)
# Extrema whose height over their neighbours is below this part of the unit are rounding.
RIPPLE = 1e-12
# Heights this close, relative to the unit, are one height.
LEVEL = 1e-14
# A place on a panel is found when it moves by less than this part of the panel.
SETTLED = 1e-13


@dataclass(frozen=True, slots=True)
class Passage:
    """Where signals pass a level: the loops (E,), the panel and the knots on either side of the passage, the
    level. The signal is monotone from knot to knot."""

    loop: IntArray
    panel: IntArray
    left: IntArray
    right: IntArray
    level: FloatArray


@dataclass(frozen=True, slots=True)
class Trace:
    """Panels with their knots: the looks and, between them, every extremum. Monotone from knot to knot.

    offset (M,) is added to panel times; unit (M,) is what rounding is relative to.
    place, height (B, 2·17 - 1): where a look is followed by no extremum the odd entry is NaN.
    """

    panels: Panels
    offset: FloatArray
    unit: FloatArray
    place: FloatArray
    height: FloatArray

    @classmethod
    def of(cls, panels: Panels, offset: FloatArray, unit: FloatArray) -> Trace:
        """Look at every panel of the one signal."""
        signal = panels.values
        looks, slopes = signal @ VALUES, signal @ SLOPES
        place = np.full((len(signal), 2 * LOOKS - 1), np.nan)
        height = np.full_like(place, np.nan)
        place[:, ::2], height[:, ::2] = X, looks
        falls = slopes <= 0.0
        panel, cell = np.nonzero(falls[:, :-1] != falls[:, 1:])
        a, b = slopes[panel, cell], slopes[panel, cell + 1]
        real = np.maximum(np.abs(a), np.abs(b)) > RIPPLE * LOOKS * unit[panels.owner[panel]]
        panel, cell, a, b = panel[real], cell[real], a[real], b[real]
        if panel.size:
            x, value = turning(signal[panel], X[cell], X[cell + 1], a, b)
            place[panel, 2 * cell + 1], height[panel, 2 * cell + 1] = x, value
        return cls(panels, offset, unit, place, height)

    def signal(self, number: int, signals: int) -> Trace:
        """What belongs to one signal of stacked panels."""
        here, panels = self.panels.signal(number, signals)
        loops = slice(number * len(panels.first), (number + 1) * len(panels.first))
        return Trace(panels, self.offset[loops], self.unit[loops], self.place[here], self.height[here])

    def time(self, panel: IntArray, x: FloatArray) -> FloatArray:
        """Time of places x on the named panels."""
        p = self.panels
        out: FloatArray = p.start[panel] + x * p.length[panel] + self.offset[p.owner[panel]]
        return out

    def largest(self, sign: float) -> tuple[FloatArray, FloatArray]:
        """sup of sign · signal and its first time, (M,) each; -inf and NaN where there is no panel."""
        height = np.where(np.isnan(self.height), -np.inf, sign * self.height)
        best_of_panel = height.max(axis=1)
        best = self.panels.over(np.maximum, best_of_panel, -np.inf)
        # a level stretch is taken at its start: what differs by rounding is alike
        near = best - LEVEL * np.maximum(np.abs(best), self.unit)
        number = np.where(best_of_panel >= near[self.panels.owner], np.arange(len(height)), len(height))
        panel = self.panels.over(np.minimum, number, len(height)).astype(np.intp)
        some = np.flatnonzero(panel < len(height))
        when = np.full(len(best), np.nan)
        knot = (height[panel[some]] >= near[some, None]).argmax(axis=1)
        when[some] = self.time(panel[some], self.place[panel[some], knot])
        return best, when

    def farthest(self) -> FloatArray:
        """sup of abs(signal), (M,); 0 where there is no panel."""
        out: FloatArray = self.panels.over(np.maximum, np.fmax.reduce(np.abs(self.height), axis=1), 0.0)
        return out

    def farthest_after(self, time: FloatArray) -> FloatArray:
        """sup of abs(signal) at or after the given times (M,); -inf where the panels end before."""
        p = self.panels
        begin = p.start + self.offset[p.owner]
        x = np.clip((time[p.owner] - begin) / p.length, 0.0, 1.0)
        inside = (self.place >= x[:, None]) & (begin + p.length >= time[p.owner])[:, None]
        best = np.where(inside, np.abs(self.height), -np.inf).max(axis=1)
        cut = np.flatnonzero((x > 0.0) & (x < 1.0))
        if cut.size:
            edge = np.abs(total(polynomial(p.values[cut]), powers(x[cut])))
            best[cut] = np.maximum(best[cut], edge)
        out: FloatArray = p.over(np.maximum, best, -np.inf)
        return out

    def first_reach(self, level: float) -> Passage:
        """Where signal >= level first, of the loops that reach it."""
        with np.errstate(invalid="ignore"):
            reached = self.height >= level
        number = np.where(reached.any(axis=1), np.arange(len(reached)), len(reached))
        panel = self.panels.over(np.minimum, number, len(reached)).astype(np.intp)
        loop = np.flatnonzero(panel < len(reached))
        panel = panel[loop]
        knot = reached[panel].argmax(axis=1)
        return Passage(loop, panel, self._neighbour(panel, knot, -1), knot, np.full(len(loop), level))

    def last_exit(self, band: float) -> Passage:
        """Where abs(signal) > band last, of the loops where it ever is."""
        width = self.height.shape[1]
        with np.errstate(invalid="ignore"):
            outside = np.abs(self.height) > band
        number = np.where(outside.any(axis=1), np.arange(len(outside)), -1)
        panel = self.panels.over(np.maximum, number, -1).astype(np.intp)
        loop = np.flatnonzero(panel >= 0)
        panel = panel[loop]
        knot = width - 1 - outside[panel, ::-1].argmax(axis=1)
        level = np.where(self.height[panel, knot] > 0.0, band, -band)
        return Passage(loop, panel, knot, self._neighbour(panel, knot, 1), level)

    def grazes(self, level: float, passage: Passage, uncertain: FloatArray, *, last: bool) -> BoolArray:
        """Whether a knot is so near the level, to `uncertain` (M,), that it may pass it before that first
        passage, or with `last` pass the band of that half width after that last one. (M,)."""
        p, knots = self.panels, self.height
        with np.errstate(invalid="ignore"):
            off = np.abs((np.abs(knots) if last else knots) - level)
            number = np.flatnonzero(off < uncertain[p.owner, None])
        loop = p.owner[number // knots.shape[1]]
        until = np.full(len(p.first), 0 if last else knots.size)
        until[passage.loop] = passage.panel * knots.shape[1] + (passage.left if last else passage.right)
        counts = number >= until[loop] if last else number <= until[loop]
        out = np.zeros(len(p.first), dtype=bool)
        out[loop[counts]] = True
        return out

    def _neighbour(self, panel: IntArray, knot: IntArray, way: int) -> IntArray:
        """The knot next to each, within the panel (itself at the panel's end)."""
        width = self.height.shape[1]
        near = np.clip(knot + way, 0, width - 1)
        far = np.clip(knot + 2 * way, 0, width - 1)
        return np.where(np.isnan(self.height[panel, near]), far, near)

    def times(self, passages: list[Passage]) -> list[tuple[FloatArray, FloatArray]]:
        """Time of each passage and abs(slope) there, (M,) each; NaN where a loop has none. All are refined
        together."""
        panel, left, right = (
            np.concatenate([getattr(p, name) for p in passages]) for name in ("panel", "left", "right")
        )
        level = np.concatenate([p.level for p in passages])
        low, high = self.place[panel, left], self.place[panel, right]
        a, b = self.height[panel, left], self.height[panel, right]
        x, slope = passing(self.panels.values[panel], low, high, a - level, b - level)
        # a jump passes every level at one time
        slope = np.where(left == right, np.inf, np.abs(slope) / self.panels.length[panel])
        when = self.time(panel, x)
        edges = np.cumsum([len(p.loop) for p in passages])[:-1]
        out = []
        for p, *of_loops in zip(passages, np.split(when, edges), np.split(slope, edges), strict=True):
            both = np.full((2, len(self.panels.first)), np.nan)
            both[:, p.loop] = of_loops
            out.append((both[0], both[1]))
        return out


def turning(
    signal: FloatArray, low: FloatArray, high: FloatArray, a: FloatArray, b: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Place and height of the extremum between low and high, where the slopes are a and b. (E,) each."""
    x = low + (high - low) * a / (a - b)
    value = polynomial(signal)
    slope = derivative(value)
    bend = derivative(slope)
    for _ in range(5):
        at = powers(x)
        with np.errstate(all="ignore"):
            step = total(slope, at) / total(bend, at)
        moved = np.clip(np.where(np.isfinite(step), x - step, x), low, high)
        done = np.abs(moved - x).max(initial=0.0) < 1e-9  # flat there: the height is good to the square
        x = moved
        if done:
            break
    return x, total(value, powers(x))


def passing(
    signal: FloatArray, low: FloatArray, high: FloatArray, a: FloatArray, b: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Where the signal, monotone from low to high, passes the level that it is a above at low and b above at
    high, and its slope there: Newton from the straight line, halving where it leaves the bracket. (E,)
    each."""
    value = polynomial(signal)
    slope = derivative(value)
    rising = b > a
    with np.errstate(all="ignore"):
        x = low + (high - low) * np.clip(a / (a - b), 0.0, 1.0)
    x = np.where(np.isfinite(x), x, high)
    level = total(value, powers(high)) - b
    steep = np.zeros_like(x)
    for _ in range(60):
        at = powers(x)
        error, steep = total(value, at) - level, total(slope, at)
        above = (error > 0.0) == rising
        high, low = np.where(above, x, high), np.where(above, low, x)
        with np.errstate(all="ignore"):
            newton = x - error / steep
        # rounding may put a converged step just beyond its bracket: no reason to start over
        good = (newton >= low - SETTLED) & (newton <= high + SETTLED)
        better = np.where(good, np.clip(newton, low, high), 0.5 * (low + high))
        moved = np.abs(better - x).max(initial=0.0)
        x = better
        if moved < SETTLED:
            break
    return x, steep
