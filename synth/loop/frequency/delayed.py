"""Frequency quantities of loops with dead time, exactly: L = N/D e^(-jωθ), rotated, never approximated.

Gain crossovers do not feel the dead time and stay roots of a polynomial. All else is a sign of a function of
the angle ωθ, and signs are proven on cells of it in Bernstein form (cells.py):
  - γ bounds |P/Δ| where γ² |Δ|² - |P|² is nowhere negative. A first γ is climbed to from the most promising
    place; where the form leaves room for more there is a climb from there, and the test is repeated: the
    level test of N. A. Bruinsma and M. Steinbuch (Systems & Control Letters 14, 1990, 287-293);
  - crossings of the negative axis and passages of |T| through its level are changes of sign, each isolated;
    Newton's method on the exact expression refines them.

The upper end: |S| <= 1/(1 - |L|), |T| <= |L|/(1 - |L|), |C S| <= |C|/(1 - |L|), and a gain margin is |L|; so
beyond the frequency where all bounds stay under what has been found there is nothing left to find.

Letters: M loops, F crossings or climbs, c cells. y = (ωθ)².
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.cells import SHARED_EDGES, STEP, AngleForm, cell_tables, shared_tables
from synth.loop.frequency.crossings import FALL, PHASE, Crossings, fall_level, loop_at
from synth.loop.frequency.delayed_curves import refined
from synth.loop.frequency.delayed_peaks import PLACE, Levels
from synth.loop.frequency.isolation import Brackets
from synth.loop.frequency.response import D, N, Response, polynomial
from synth.loop.frequency.survey import Open, begun, joined, open_cells, sign_changes
from synth.loop.frequency.upper_end import fall_range, last_with_gain, noise_ranges

_FARTHEST = 20_000.0  # rad: where the search for ever smaller ripples ends
_BLURRED = 1e12  # rad: from where on a turn is no more than some digits of ω
_ROUNDS = 12
_CELLS = 64  # looked at in one go for far falls, and where |C S| has its far top
_ZOOMS = 6  # that find the top of its bound
_MOST_CELLS = 2048  # looked at in one go anywhere else


class _Findings:
    """What has been found so far, and what could still be."""

    def __init__(self, response: Response, kinds: tuple[int, ...], keys: tuple[str, ...]) -> None:
        self.response, self.kinds, self.keys = response, kinds, keys
        self.form = AngleForm(response)
        self.levels = Levels(response, self.form, keys)
        self.level = fall_level(response)
        self.m = response.loops
        none = np.zeros(0, dtype=np.intp)
        nowhere = np.zeros(0), np.zeros(0, dtype=bool), np.zeros(0, dtype=complex)
        self.found = [Crossings(none, none, *nowhere)]
        self.fallen, self.last_fall = np.zeros(self.m, dtype=bool), np.zeros(self.m)
        ends = np.abs(response.ends)
        self.gain_end = ends[1, N] / ends[1, D]
        # |L| of the nearest crossing below 1; the circle |L(∞)| is one
        self.largest_up = self.gain_end.copy()

    def recurring(self) -> BoolArray:
        """(M,) where |T| passes its level for ever: the circle |L(∞)| lies across it."""
        gain, size = self.gain_end, np.sqrt(self.level)
        with np.errstate(divide="ignore"):
            out: BoolArray = gain / np.maximum(1.0 - gain, 0.0) > size
        out &= (size > gain / (1.0 + gain)) & (gain > 0.0)
        return out

    def look(self, edges: FloatArray, tables: FloatArray, rows: IntArray, kinds: tuple[int, ...]) -> None:
        """The peaks and the crossings of `kinds` that loops `rows` have on the cells between `edges`."""
        self.levels.climb_most_promising(edges, tables, rows)
        targets = (np.arange(len(self.keys))[:, None] * self.m + rows).ravel()
        self._prove(edges, tables, targets, self._crossings(tables, rows, kinds))

    def _prove(self, edges: FloatArray, tables: FloatArray, targets: IntArray, crossings: list[Open]) -> None:
        """Raise the levels of `targets` until the cells exceed none; with them isolate `crossings`."""
        for _ in range(_ROUNDS):
            level = self.levels.of_proof()
            above = self.levels.above(tables, targets, level)
            if not above and not crossings:
                break
            hint = np.zeros((len(self.keys) + 2, self.m))
            hint[: len(self.keys)] = (self.levels.at.reshape(-1, self.m) * self.response.dead_time) ** 2
            brackets = sign_changes(joined([*above, *crossings]), edges, hint.ravel())
            self._take_crossings(brackets)
            self.levels.climb_between([brackets, *(begun(part, edges) for part in above)], edges[-1], level)
            targets, crossings = targets[self.levels.best[targets] > level[targets]], []

    def _crossings(self, tables: FloatArray, rows: IntArray, kinds: tuple[int, ...]) -> list[Open]:
        """Cells on which |T| may pass its level, or L the real axis."""
        out = []
        first = len(self.keys) * self.m
        if FALL in kinds:
            passing = self.form.below(PLACE[N], self.level[rows], rows)
            out.append(open_cells(tables, passing, first + rows, below=False))
        if PHASE in kinds:
            out.append(open_cells(tables, self.form.turned[:, rows], first + self.m + rows, below=False))
        return out

    def _take_crossings(self, brackets: Brackets) -> None:
        number = brackets.row // self.m - len(self.keys)
        for place, kind in enumerate((FALL, PHASE)):
            mine = number == place
            if mine.any():
                some = brackets.rows(mine, (len(self.keys) + place) * self.m)
                self._note(kind, *refined(self.response, kind, some, self.level))

    def _note(self, kind: int, row: IntArray, w: FloatArray, down: BoolArray) -> None:
        kinds = np.full(len(row), kind, dtype=np.intp)
        found = Crossings(kinds, row, w, down, loop_at(self.response, row, w))
        self.found.append(found)
        if kind == PHASE:
            size = np.where(found.loop.real < 0.0, -found.loop.real, 0.0)
            below = size <= 1.0
            np.maximum.at(self.largest_up, row[below], size[below])
        else:
            self.fallen[row[down]] = True
            np.maximum.at(self.last_fall, row[down], w[down])

    def end(self, floor: float, rows: IntArray) -> FloatArray:
        """Angle beyond `floor` above which |L| is so small that nothing found of the loops `rows` can be
        bettered; 0 where there is none. Falls and |C S| are left out, and looked for below."""
        level = self.levels.of_proof().reshape(-1, self.m)[:, rows]
        limits = [np.full(len(rows), np.inf)]
        for i, p in enumerate(self.levels.curves):
            if p == D:
                limits.append(1.0 - 1.0 / np.maximum(level[i], 1.0))
            elif p == N:
                limits.append(level[i] / (1.0 + level[i]))
        if PHASE in self.kinds:
            limits.append(self.largest_up[rows])
        # a limit that |L| only tends to is passed for ever: the circle |L(∞)| itself is among the findings
        limit = np.maximum(np.min(limits, axis=0), self.gain_end[rows]) * (1.0 + 1e-9)
        squares = self.form.squares[:2, :, rows]
        x = last_with_gain(squares, np.minimum(limit, 1e9), np.full(len(rows), floor * floor))
        alone = ~squares[0].any(axis=0)  # no loop at all
        return np.where(alone, 0.0, np.minimum(np.sqrt(x), _FARTHEST))

    def look_further(self, start: float) -> None:
        """Beyond the angle `start`, for as long as something may be found."""
        rows = np.arange(self.m)
        while rows.size and start < _FARTHEST:
            end = self.end(start, rows)
            rows = rows[end > start]
            if rows.size:
                count = min(float(end.max()) - start, start) / STEP  # twice as far each time
                # a peak that lies across the start is seen as a whole
                edges: FloatArray = (start + STEP * np.arange(-1.0, min(int(count), _MOST_CELLS) + 2.0)) ** 2
                self.look(
                    edges, cell_tables(edges, self.form.n), rows, (PHASE,) if PHASE in self.kinds else ()
                )
                start = float(np.sqrt(edges[-1]))

    def look_for_falls(self, floor: float) -> None:
        """Passages of |T| through its level beyond the angle `floor`: up to the first fall, where there is
        none so far, and down to the last."""
        x = np.full(self.m, floor * floor)
        first, last = (np.sqrt(v) for v in fall_range(self.form.squares, self.level, x))
        recurring = self.recurring()
        last[recurring] = _FARTHEST
        # ripples closer together than the digits of ω: the range itself tells, to the 1e-9 that it is wider
        for edge in (first, last):
            rows = np.flatnonzero((first < last) & (edge > _BLURRED))
            self._note(FALL, rows, edge[rows] / self.response.dead_time[rows], np.ones(len(rows), dtype=bool))
        last[last > _BLURRED] = 0.0
        place, todo = first.copy(), (first < last) & ~self.fallen
        while todo.any():
            start = float(place[todo].min())
            rows = np.flatnonzero(todo & (place < start + _CELLS * STEP))
            place[rows] = self._falls(start, rows)
            todo &= (place < last) & ~self.fallen
        place, todo = last.copy(), (first < last) & ~recurring
        while todo.any():
            stop = float(place[todo].max())
            start = max(stop - _CELLS * STEP, STEP)
            rows = np.flatnonzero(todo & (place > start))
            self._falls(start, rows)
            place[rows] = start
            todo &= (place > first) & ~(self.last_fall * self.response.dead_time > place)

    def _falls(self, start: float, rows: IntArray) -> float:
        """Passages of loops `rows` from an angle on; returns to where they have been looked for."""
        edges = (start + STEP * np.arange(_CELLS + 1.0)) ** 2
        tables = cell_tables(edges, self.form.n)
        self._prove(edges, tables, np.zeros(0, dtype=np.intp), self._crossings(tables, rows, (FALL,)))
        return float(np.sqrt(edges[-1]))

    def look_for_noise(self, floor: float) -> None:
        """|C S| beyond the angle `floor`, where it ripples round |C|.

        |C|/(1 - |L|), which bounds it, is touched once a turn: climbs on either side of the bound's top leave
        little more than a turn to be proven.
        """
        i = self.keys.index("noise_gain")
        rows, first, last = self._noisy(i, np.arange(self.m), floor)
        if rows.size:
            self._climb_turns(i, rows, first, last)
            rows, first, last = self._noisy(i, np.unique(rows), floor)
            last = np.minimum(last, first + _FARTHEST)
        start = floor
        while (last > start).any():
            start = max(start, first[last > start].min())
            edges = (start + STEP * np.arange(-1.0, _CELLS + 1.0)) ** 2
            stop = float(np.sqrt(edges[-1]))
            some = np.unique(rows[(first < stop) & (last > start)])
            self._prove(edges, cell_tables(edges, self.form.n), i * self.m + some, [])
            start = stop

    def _noisy(self, i: int, rows: IntArray, floor: float) -> tuple[IntArray, FloatArray, FloatArray]:
        """Those of `rows`, repeated, where |C S| may exceed what is known, and between which angles."""
        level = self.levels.of_proof().reshape(-1, self.m)[i, rows]
        at, low, high = noise_ranges(self.form.squares[:, :, rows], level, np.full(len(rows), floor * floor))
        return rows[at], np.sqrt(low), np.sqrt(high)

    def _climb_turns(self, i: int, rows: IntArray, first: FloatArray, last: FloatArray) -> None:
        """Climb where |C S| touches |C|/(1 - |L|) next to the top of that."""
        squares = self.form.squares[:, :, rows]
        angle, ratio = np.sqrt(first * last), np.sqrt(last / first)
        for _ in range(_ZOOMS):
            place = angle * ratio ** np.linspace(-1.0, 1.0, 33)[:, None]
            n2, d2, c2 = (polynomial(p, place * place) for p in squares)
            with np.errstate(divide="ignore", invalid="ignore"):
                bound = np.sqrt(c2) / (np.sqrt(d2) - np.sqrt(n2))
            top = np.where(np.isfinite(bound) & (bound > 0.0), bound, 0.0).argmax(axis=0)
            angle, ratio = place[top, np.arange(len(rows))], ratio**0.1
        turn = np.angle(-loop_at(self.response, rows, angle / self.response.dead_time[rows]))
        target = i * self.m + rows
        for other in (0.0, 2.0 * np.pi):
            near = angle + turn - np.copysign(other, turn)
            for some in _each_once(target):
                self.levels.climb(target[some], np.maximum(near, first)[some])


def _each_once(target: IntArray) -> list[IntArray]:
    """Places in `target` in groups that name none twice."""
    out, left = [], np.arange(len(target))
    while left.size:
        _, first = np.unique(target[left], return_index=True)
        out.append(left[first])
        left = np.delete(left, first)
    return out


def delayed_quantities(
    response: Response, kinds: tuple[int, ...], keys: tuple[str, ...]
) -> tuple[list[Crossings], dict[str, FloatArray], BoolArray]:
    """FALL and PHASE crossings that matter, suprema of the curves in `keys`, and whether falls recur for
    ever.

    response : M stable loops, every dead time positive. Crossings beyond the frequency where they could be
        the nearest are left out; PHASE crossings of the positive axis may be among them.
    Further out than 20,000 rad of ωθ nothing is followed but falls and |C S|.
    Error: a supremum is a value met; the test excludes a higher one by more than 1e-8 relative (2e-7 where
        light damping leaves |Δ|² no more digits). Two crossings closer than 1e-10 (relative) may be missed.
    """
    findings = _Findings(response, kinds, keys)
    findings.look(SHARED_EDGES, shared_tables(findings.form.n), np.arange(response.loops), kinds)
    last = float(np.sqrt(SHARED_EDGES[-1]))
    findings.look_further(last)
    if FALL in kinds:
        findings.look_for_falls(last)
    if "noise_gain" in keys:
        findings.look_for_noise(last)
    return findings.found, {k: findings.levels.values[i] for i, k in enumerate(keys)}, findings.recurring()
