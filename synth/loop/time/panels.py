"""Signals cut into panels, and what is read off them: extremes, passages and areas, each refined.

M loops, B panels in order of loop and time, S signals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.collocation import (
    TO_CHEBYSHEV,
    WHOLE,
    derivative,
    jet,
    powers,
    primitive_coefficients,
    slope_matrix,
    total,
    value_matrix,
)

# Points at which a panel is looked at; between two neighbours a resolved signal turns by about a quarter
# radian.
LOOKS = 17
_X = np.linspace(0.0, 1.0, LOOKS)
_VALUES, _SLOPES = value_matrix(_X), slope_matrix(_X)
# Extrema whose height over their neighbours is below this part of the unit are rounding.
RIPPLE = 1e-12
# Heights this close, relative to the unit, are one height.
LEVEL = 1e-14
# A place on a panel is found when it moves by less than this part of the panel.
SETTLED = 1e-13


@dataclass(frozen=True, slots=True)
class Panels:
    """owner (B,) loop of each panel; start, length (B,); values (B, S, 13); first (M,) number of its first
    panel."""

    owner: IntArray
    start: FloatArray
    length: FloatArray
    values: FloatArray
    first: IntArray

    def only(self, chosen: BoolArray) -> IntArray:
        """Numbers of the chosen panels (B,), and of the first and last of each loop, which never go
        missing."""
        keep = chosen.copy()
        keep[self.first] = True
        keep[np.append(self.first[1:], len(keep)) - 1] = True
        return np.flatnonzero(keep)

    def rows(self, number: IntArray) -> Panels:
        """The numbered panels, some of every loop, without their values."""
        owner = self.owner[number]
        none = np.zeros((len(number), 0, 0))
        return Panels(
            owner,
            self.start[number],
            self.length[number],
            none,
            np.searchsorted(owner, np.arange(len(self.first))),
        )


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
    def of(cls, panels: Panels, signal: FloatArray) -> Outline:
        """signal (B, 13). Each Chebyshev polynomial is between -1 and 1."""
        weights = signal @ TO_CHEBYSHEV
        spread = np.abs(weights[:, 1:]) @ np.ones(weights.shape[1] - 1)
        by_node = np.ascontiguousarray(signal.T)
        least, most = by_node[0].copy(), by_node[0].copy()
        for values in by_node[1:]:
            np.minimum(least, values, out=least)
            np.maximum(most, values, out=most)
        # rounding must not put a bound inside the nodes: a panel that jumps to its extreme would go unseen
        low, high = np.minimum(weights[:, 0] - spread, least), np.maximum(weights[:, 0] + spread, most)
        return cls(panels, low, high, least, most)

    def may_be_largest(self, sign: float, floor: float) -> BoolArray:
        """Panels that may hold the sup of sign · signal, where that is above floor."""
        most, high = (self.most, self.high) if sign > 0.0 else (-self.least, -self.low)
        best = np.maximum.reduceat(most, self.panels.first)
        return (high >= best[self.panels.owner]) & (high > floor)

    def may_reach_first(self, level: float) -> BoolArray:
        """Panels in which signal >= level may come first."""
        number = np.arange(len(self.high))
        sure = np.where(self.most >= level, number, len(number))
        last = np.minimum.reduceat(sure, self.panels.first)
        return (self.high >= level) & (number <= last[self.panels.owner])

    def may_leave_last(self, band: float) -> BoolArray:
        """Panels in which abs(signal) > band may come last."""
        number = np.arange(len(self.high))
        sure = np.where((self.most > band) | (self.least < -band), number, -1)
        first = np.maximum.reduceat(sure, self.panels.first)
        return ((self.high > band) | (self.low < -band)) & (number >= first[self.panels.owner])

    def may_change_sign(self, negligible: FloatArray) -> BoolArray:
        """Panels with a change of sign that matters: both signs enclose more area than `negligible` (M,)."""
        over = np.minimum(self.high, -self.low) * self.panels.length
        return over > negligible[self.panels.owner]


@dataclass(frozen=True, slots=True)
class Trace:
    """One signal of all panels, with its knots: the looks and, between them, every extremum. Monotone from
    knot to knot.

    signal (B, 13); place, height (B, 2·17 - 1): where a look is followed by no extremum the odd entry is NaN.
    """

    panels: Panels
    offset: FloatArray
    signal: FloatArray
    place: FloatArray
    height: FloatArray
    unit: FloatArray

    @classmethod
    def of(cls, panels: Panels, signal: FloatArray, offset: FloatArray, unit: FloatArray) -> Trace:
        """signal : (B, 13); offset (M,) what is added to panel times; unit (M,) size that rounding is
        relative to."""
        looks, slopes = signal @ _VALUES, signal @ _SLOPES
        place = np.full((len(signal), 2 * LOOKS - 1), np.nan)
        height = np.full_like(place, np.nan)
        place[:, ::2], height[:, ::2] = _X, looks
        before, after = slopes[:, :-1], slopes[:, 1:]
        turning = (before > 0.0) != (after > 0.0)
        turning &= np.maximum(np.abs(before), np.abs(after)) > (RIPPLE * LOOKS * unit)[panels.owner, None]
        panel, cell = np.nonzero(turning)
        if panel.size:
            low, high = _X[cell], _X[cell + 1]
            a, b = before[panel, cell], after[panel, cell]
            x = low + (high - low) * a / (a - b)
            value = _polynomial(signal[panel])
            slope = derivative(value)
            bend = derivative(slope)
            for _ in range(5):
                at = powers(x)
                with np.errstate(all="ignore"):
                    step = total(slope, at) / total(bend, at)
                moved = np.clip(np.where(np.isfinite(step), x - step, x), low, high)
                done = np.abs(moved - x).max() < 1e-9  # flat there: the height is good to the square
                x = moved
                if done:
                    break
            place[panel, 2 * cell + 1] = x
            height[panel, 2 * cell + 1] = total(value, powers(x))
        return cls(panels, offset, signal, place, height, unit)

    def time(self, panel: IntArray, x: FloatArray) -> FloatArray:
        """Time of places x on the named panels."""
        p = self.panels
        out: FloatArray = p.start[panel] + x * p.length[panel] + self.offset[p.owner[panel]]
        return out

    def largest(self, sign: float) -> tuple[FloatArray, FloatArray]:
        """sup of sign · signal and its first time, (M,) each."""
        height = np.where(np.isnan(self.height), -np.inf, sign * self.height)
        best_of_panel = height.max(axis=1)
        best = np.maximum.reduceat(best_of_panel, self.panels.first)
        # a level stretch is taken at its start: what differs by rounding is alike
        near = best - LEVEL * np.maximum(np.abs(best), self.unit)
        number = np.where(best_of_panel >= near[self.panels.owner], np.arange(len(height)), len(height))
        panel = np.minimum.reduceat(number, self.panels.first)
        knot = (height[panel] >= near[:, None]).argmax(axis=1)
        return best, self.time(panel, self.place[panel, knot])

    def largest_after(self, time: FloatArray) -> FloatArray:
        """sup of abs(signal) at or after the given times (M,); -inf where the panels end before."""
        p = self.panels
        begin = p.start + self.offset[p.owner]
        x = np.clip((time[p.owner] - begin) / p.length, 0.0, 1.0)
        inside = (self.place >= x[:, None]) & (begin + p.length >= time[p.owner])[:, None]
        best = np.where(inside, np.abs(self.height), -np.inf).max(axis=1)
        cut = np.flatnonzero((x > 0.0) & (x < 1.0))
        if cut.size:
            edge = np.abs(jet(primitive_coefficients(self.signal[cut]), x[cut])[1])
            best[cut] = np.maximum(best[cut], edge)
        out: FloatArray = np.maximum.reduceat(best, p.first)
        return out

    def first_reach(self, level: float) -> FloatArray:
        """First time at which signal >= level; inf where it is not reached. (M,)."""
        width = self.height.shape[1]
        with np.errstate(invalid="ignore"):
            flat = (self.height >= level).ravel()
        number = np.where(flat, np.arange(flat.size), flat.size).reshape(-1, width).min(axis=1)
        first = np.minimum.reduceat(number, self.panels.first)
        out = np.full(len(first), np.inf)
        some = np.flatnonzero(first < flat.size)
        panel, knot = first[some] // width, first[some] % width
        before = self._neighbour(panel, knot, -1)
        out[some] = self._passage(panel, before, knot, np.full(len(some), level))
        return out

    def last_exit(self, band: float) -> FloatArray:
        """Last time at which abs(signal) > band, NaN where never. (M,)."""
        width = self.height.shape[1]
        with np.errstate(invalid="ignore"):
            flat = (np.abs(self.height) > band).ravel()
        number = np.where(flat, np.arange(flat.size), -1).reshape(-1, width).max(axis=1)
        last = np.maximum.reduceat(number, self.panels.first)
        out = np.full(len(last), np.nan)
        some = np.flatnonzero(last >= 0)
        panel, knot = last[some] // width, last[some] % width
        after = self._neighbour(panel, knot, 1)
        level = np.where(self.height[panel, knot] > 0.0, band, -band)
        out[some] = self._passage(panel, knot, after, level)
        return out

    def area(self) -> FloatArray:
        """Integral of abs(signal) over each panel of this trace. (B,)."""
        p = self.panels
        whole = np.abs(self.signal @ WHOLE)
        panel, left, right = self._zeros()
        if panel.size:
            x = self._root(panel, self.place[panel, left], self.place[panel, right], np.zeros(len(panel)))
            inside = jet(primitive_coefficients(self.signal[panel]), x)[0]
            cut = np.unique(panel)
            where = np.concatenate([cut, panel, cut])
            at = np.concatenate([np.zeros(len(cut)), x, np.ones(len(cut))])
            primitive = np.concatenate([np.zeros(len(cut)), inside, self.signal[cut] @ WHOLE])
            order = np.lexsort((at, where))
            piece = np.abs(np.diff(primitive[order]))
            same = np.diff(where[order]) == 0
            whole[cut] = 0.0
            np.add.at(whole, where[order][1:][same], piece[same])
        out: FloatArray = whole * p.length
        return out

    def _zeros(self) -> tuple[IntArray, IntArray, IntArray]:
        """Panels and neighbouring knots between which the signal changes sign."""
        positive = self.height > 0.0
        looks, middle = positive[:, ::2], positive[:, 1::2]
        there = ~np.isnan(self.height[:, 1::2])
        first = np.where(there, looks[:, :-1] != middle, looks[:, :-1] != looks[:, 1:])
        second = there & (middle != looks[:, 1:])
        panel_a, cell_a = np.nonzero(first)
        panel_b, cell_b = np.nonzero(second)
        right = np.where(there[panel_a, cell_a], 2 * cell_a + 1, 2 * cell_a + 2)
        return (
            np.concatenate([panel_a, panel_b]),
            np.concatenate([2 * cell_a, 2 * cell_b + 1]),
            np.concatenate([right, 2 * cell_b + 2]),
        )

    def _neighbour(self, panel: IntArray, knot: IntArray, way: int) -> IntArray:
        """The knot next to each, within the panel (itself at the panel's end)."""
        width = self.height.shape[1]
        near = np.clip(knot + way, 0, width - 1)
        far = np.clip(knot + 2 * way, 0, width - 1)
        return np.where(np.isnan(self.height[panel, near]), far, near)

    def _passage(self, panel: IntArray, left: IntArray, right: IntArray, level: FloatArray) -> FloatArray:
        low, high = self.place[panel, left], self.place[panel, right]
        return self.time(panel, self._root(panel, low, high, level))

    def _root(self, panel: IntArray, low: FloatArray, high: FloatArray, level: FloatArray) -> FloatArray:
        """Where the signal, monotone from low to high, takes the level: Newton, halving where it leaves the
        bracket."""
        value = _polynomial(self.signal[panel])
        slope = derivative(value)
        rising = total(value, powers(high)) > total(value, powers(low))
        low, high = low.copy(), high.copy()
        x = 0.5 * (low + high)
        for _ in range(60):
            at = powers(x)
            error = total(value, at) - level
            above = (error > 0.0) == rising
            high, low = np.where(above, x, high), np.where(above, low, x)
            with np.errstate(all="ignore"):
                newton = x - error / total(slope, at)
            # rounding may put a converged step just beyond its bracket: no reason to start over
            good = (newton >= low - SETTLED) & (newton <= high + SETTLED)
            better = np.where(good, np.clip(newton, low, high), 0.5 * (low + high))
            moved = np.abs(better - x).max(initial=0.0)
            x = better
            if moved < SETTLED:
                break
        return x


def _polynomial(signal: FloatArray) -> FloatArray:
    """(E, 13) values to (13, E) coefficients, ascending powers of 2x - 1."""
    return derivative(np.ascontiguousarray(primitive_coefficients(signal).T))
