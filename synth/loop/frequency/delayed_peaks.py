"""Suprema of |S|, |T| and |C S| of loops with dead time: levels that are climbed to, tested and raised.

Every curve of every loop is a target, numbered key · M + loop.
Letters: M loops, F targets, c cells. y = (ωθ)².
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.frequency.cells import AngleForm
from synth.loop.frequency.delayed_curves import DelayedCurve, climb_freely
from synth.loop.frequency.isolation import Brackets
from synth.loop.frequency.peaks import CURVES, climb
from synth.loop.frequency.response import CLOSED, CONTROL, D, N, Response, log_rates, polynomial, tamed
from synth.loop.frequency.survey import Open, open_cells, promising

_LEAST_MARGIN = 1e-8  # relative, of the level above the peak in the test
_MOST_MARGIN = 2e-7
_NOISE = 4e-13  # of a Bernstein coefficient, relative to the sum of its terms
_DEPTH = 1e-20  # of a bracket in y that begins at 0
_OCTAVES = 2.0**6  # ratio of y over which a climb is not left to itself ...
_POINTS = 65  # ... but begins at the best of so many points
_BISECTIONS = 50
PLACE = {N: 0, D: 1, CONTROL: 2}  # in the squares of the forms


class Levels:
    """The largest value met of each target, `best`, and the ω of the peak it lies on, `at`; (keys · M,) both.

    To begin with the larger of the limits at ω -> 0 and ω -> ∞.
    """

    def __init__(self, response: Response, form: AngleForm, keys: tuple[str, ...]) -> None:
        self.response, self.form, self.m = response, form, response.loops
        self.curves = np.array([CURVES[k] for k in keys], dtype=np.intp)
        self.places = [PLACE[CURVES[k]] for k in keys]
        ends = np.abs(response.ends)
        with np.errstate(divide="ignore"):
            largest = 1.0 / np.maximum(1.0 - ends[1, N] / ends[1, D], 0.0)
        at_zero = ends[0, self.curves] / np.abs(response.ends[0, CLOSED])
        self.best = np.maximum(at_zero, ends[1, self.curves] / ends[1, D] * largest).ravel()
        self.at = np.zeros_like(self.best)

    @property
    def values(self) -> FloatArray:
        """(keys, M) the largest values so far."""
        out: FloatArray = self.best.reshape(-1, self.m)
        return out

    def of_proof(self) -> FloatArray:
        """(keys · M,) what is known of each target, and as much more as the digits of |Δ|² ask for."""
        squares, x = self.response.squares, self.at.reshape(-1, self.m) ** 2
        terms = polynomial(squares[:, N] + squares[:, D], x)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            noise = _NOISE * terms * self.values**2 / polynomial(squares[:, self.curves], x)
        margin = np.clip(np.nan_to_num(noise, nan=0.0, posinf=1.0), _LEAST_MARGIN, _MOST_MARGIN)
        out: FloatArray = self.best * (1.0 + margin.ravel())
        return out

    def climb_most_promising(self, edges: FloatArray, tables: FloatArray, rows: IntArray) -> None:
        """The curves of loops `rows`, each from one place on the cells."""
        y = promising(self.form, self.places, tables, edges, rows, self.values[:, rows])
        key, column = np.nonzero(y)
        self.climb(key * self.m + rows[column], np.sqrt(y[key, column]))

    def climb(self, target: IntArray, angle: FloatArray) -> None:
        """Targets, each named once, from an angle ωθ."""
        row = target % self.m
        curve = DelayedCurve(self.response, self.curves[target // self.m], row)
        climb_freely(curve, target, angle / self.response.dead_time[row], self.best, self.at)

    def above(self, tables: FloatArray, targets: IntArray, level: FloatArray) -> list[Open]:
        """Cells on which curves may exceed their levels."""
        out = []
        for i, place in enumerate(self.places):
            mine = targets[targets // self.m == i]
            if mine.size:
                columns = self.form.below(place, level[mine] ** 2, mine - i * self.m)
                out.append(open_cells(tables, columns, mine, below=True))
        return out

    def climb_between(self, parts: list[Brackets], last: float, level: FloatArray) -> None:
        """Climb where a curve is above its level: from each place where it passes it upwards to the next
        downwards."""
        target, low, high, negative = (
            np.concatenate([getattr(part, name) for part in parts])
            for name in ("row", "low", "high", "negative")
        )
        some = np.flatnonzero(target < len(self.best))
        order = some[np.lexsort((low[some], target[some]))]
        target, low, high = target[order], low[order], high[order]
        up = np.flatnonzero(~negative[order])
        if not up.size:
            return
        follows = np.append(target[1:] == target[:-1], False)[up]
        after = np.minimum(up + 1, len(order) - 1)
        target, bottom, top = target[up], low[up], np.where(follows, high[after], 2.0 * last)
        start = np.sqrt(high[up] * np.where(follows, np.maximum(low[after], high[up]), last))
        bottom = np.maximum(bottom, _DEPTH * start)
        self._narrow(target, bottom, start, top)
        self._climb_within(target, bottom, start, top)
        stuck = np.flatnonzero(self.best[target] <= level[target])
        if stuck.size:  # Newton's method has left the place: to the ends of what lies above the level
            target, start = target[stuck], start[stuck]
            bottom = self._passage(target, bottom[stuck], start, level)
            top = self._passage(target, top[stuck], start, level)
            self._climb_within(target, bottom, np.sqrt(bottom * top), top)

    def _climb_within(self, target: IntArray, bottom: FloatArray, start: FloatArray, top: FloatArray) -> None:
        delay = self.response.dead_time[target % self.m]
        curve = DelayedCurve(self.response, self.curves[target // self.m], target % self.m)
        around = (np.sqrt(bottom) / delay, np.sqrt(start) / delay, np.sqrt(top) / delay)
        climb(curve, target, around, self.best, self.at)

    def _squared(self, target: IntArray, y: FloatArray) -> FloatArray:
        """|P/Δ|² of each target at y (.., F); 0 where it cannot be told."""
        row = np.broadcast_to(target % self.m, y.shape).ravel()
        curves = np.broadcast_to(self.curves[target // self.m], y.shape).ravel()
        w = np.sqrt(y).ravel() / self.response.dead_time[row]
        size, _, _ = log_rates(*tamed(*DelayedCurve(self.response, curves, row).at(w)))
        with np.errstate(divide="ignore", invalid="ignore"):
            out: FloatArray = np.nan_to_num(size[0] / size[1]).reshape(y.shape)
        return out

    def _narrow(self, target: IntArray, bottom: FloatArray, start: FloatArray, top: FloatArray) -> None:
        """Ranges of y over many octaves to those beside the best of some points, in place: a curve may be all
        but flat over most of such a range."""
        wide = np.flatnonzero(top > _OCTAVES * bottom)
        if not wide.size:
            return
        y = bottom[wide] * (top[wide] / bottom[wide]) ** np.linspace(0.0, 1.0, _POINTS)[:, None]
        best, each = self._squared(target[wide], y).argmax(axis=0), np.arange(len(wide))
        bottom[wide], start[wide] = y[np.maximum(best - 1, 0), each], y[best, each]
        top[wide] = y[np.minimum(best + 1, _POINTS - 1), each]

    def _passage(
        self, target: IntArray, outside: FloatArray, inside: FloatArray, level: FloatArray
    ) -> FloatArray:
        """y between `outside` and `inside`, which is above the level, where a curve passes it."""
        for _ in range(_BISECTIONS):
            middle = np.sqrt(outside * inside)
            above = self._squared(target, middle) > level[target] ** 2
            outside, inside = np.where(above, outside, middle), np.where(above, middle, inside)
        return outside
