"""What one pass over the blocks tells, which cells it leaves in doubt, and how these are settled.

M loops. Questions are numbered: the V views of suprema, then the passages, then the areas; the number times M
plus the loop is the key of a cell.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.time.areas import Zeros, areas
from synth.loop.time.cells import Cells, joined
from synth.loop.time.crossings import Edges
from synth.loop.time.events import solve
from synth.loop.time.outlook import AREA_RESOLUTION, Outlook
from synth.loop.time.peaks import Peaks
from synth.loop.time.plan import Plan
from synth.loop.time.questions import Answers, Area, Passage, Questions
from synth.loop.time.scan import Scan
from synth.loop.time.signals import CELLS, Profile, Signals


class Survey:
    """The questions of one batch, what is known about them, and the cells still in doubt."""

    def __init__(self, modes: Signals, profile: Profile, unit: FloatArray, asked: Questions) -> None:
        self.modes, self.m = modes, len(modes)
        self.passages, self.areas = asked.passages, asked.areas
        self.outlook = outlook = Outlook(modes, profile, unit, asked)
        self.start = profile.deviation[:, :, 0]
        self.best = outlook.best
        self.negligible = 1e-2 * AREA_RESOLUTION * outlook.about
        # of every key: when it is settled; of those of views, in what terms their cells are seen
        ends = [outlook.supremum_ends[outlook.answer], outlook.passage_ends, outlook.area_ends]
        self.end = np.concatenate(ends).ravel()
        self.borders = len(ends[0]) * self.m, (len(ends[0]) + len(self.passages)) * self.m
        self.sign, self.offset = outlook.sign.repeat(self.m), outlook.offset.ravel()
        self.doubt: list[Cells] = []

    def _seen(self, cells: Cells) -> Cells:
        """The cells, those of views, which come first, in terms of their question, sign * (x + offset)."""
        views = int(np.count_nonzero(cells.key < self.borders[0]))
        key = cells.key[:views]
        sign = self.sign[key]
        cells.data[2:6, :views] *= sign
        cells.data[2:4, :views] += self.offset[key]
        cells.turn[:views] *= sign
        return cells

    def look(self, s: Scan) -> None:
        """Take from one pass what it tells, and keep the cells that need more."""
        doubtful = s.doubtful()
        border = doubtful.searchsorted(np.arange(len(s.value) + 1) * (CELLS * len(s.loop)))
        own = [s.passing(p.signal, p.low, p.high, p.last) for p in self.passages]
        own += [s.changing(r.signal) for r in self.areas]
        cells = s.cells(np.concatenate([doubtful, *own]))
        low, high = cells.range()
        number, view = self._peaks(s, cells, border, low, high)
        numbers, questions = [number], [view]
        stop = len(doubtful)
        asked: list[Passage | Area] = [*self.passages, *self.areas]
        for k, q in enumerate(asked):
            start, stop = stop, stop + len(own[k])
            part = slice(border[q.signal], border[q.signal + 1])
            loop = cells.loop[part]
            if isinstance(q, Passage):
                # doubtful cells on the side where a passage would matter more
                limit = np.full(self.m, -np.inf if q.last else np.inf)
                limit[cells.loop[start:stop]] = cells.t[start:stop]
                t, limit = cells.t[part], limit[loop]
                more = ((high[part] > q.high) | (low[part] < q.low)) & (t > limit if q.last else t < limit)
            else:
                fine = self.negligible[k - len(self.passages)][loop]
                more = np.minimum(-low[part], high[part]) * cells.h[part] > fine
                more &= (cells.a[part] > 0.0) == (cells.b[part] > 0.0)
            number = np.concatenate([part.start + more.nonzero()[0], np.arange(start, stop)])
            numbers.append(number)
            questions.append(np.full(len(number), len(self.outlook.sign) + k))
        number = np.concatenate(numbers)
        key = np.concatenate(questions) * self.m + cells.loop[number]
        counts = (cells.t[number] < self.end[key]).nonzero()[0]
        few = cells.rows(number[counts])
        few.key[:] = key[counts]
        if self.outlook.since is not None:
            few = self._later(few)
        self.doubt.append(self._seen(few))

    def _peaks(
        self, s: Scan, cells: Cells, border: IntArray, low: FloatArray, high: FloatArray
    ) -> tuple[IntArray, IntArray]:
        """Raise the suprema to the nodes; returns the doubtful cells that may hold more, and their views."""
        outlook = self.outlook
        if len(outlook.sign) == 0:
            return np.zeros(0, dtype=np.intp), np.zeros(0, dtype=np.intp)
        up = outlook.sign > 0.0
        value, signal = s.value, outlook.signal
        if outlook.since is not None:
            early = s.t + s.h * np.arange(CELLS + 1)[:, None] < outlook.since[:, None, s.loop]
            value = np.where(early, -np.inf * outlook.sign[:, None, None], value[signal])
            signal = np.arange(len(up))
        node = np.where(up[:, None], value.max(axis=1)[signal], -value.min(axis=1)[signal])
        node = np.maximum.reduceat(node, s.first, axis=1) + outlook.offset[:, s.owner]
        node = np.maximum.reduceat(node, outlook.first, axis=0)
        # somewhat less than the node, so that the cell beside it stays in and gives the place too
        node -= 2.0 * outlook.tolerance[:, s.owner]
        self.best[:, s.owner] = np.maximum(self.best[:, s.owner], node)

        need = (self.best + outlook.tolerance)[outlook.answer] - outlook.offset
        start = border[outlook.signal]
        count = border[outlook.signal + 1] - start
        view = np.arange(len(up)).repeat(count)
        number = np.arange(len(view)) + (start - count.cumsum() + count)[view]
        reached = np.where(up[view], high[number], -low[number])
        matters = (reached > need[view, cells.loop[number]]).nonzero()[0]
        return number[matters], view[matters]

    def _later(self, cells: Cells) -> Cells:
        """The cells of views that begin later without what lies before."""
        assert self.outlook.since is not None
        whole = np.zeros((3, len(self.end)))
        whole[:, : self.borders[0]] = [v.ravel() for v in (self.outlook.since, *self.outlook.entry)]
        since, value, slope = whole
        cells = cells.rows(cells.t + cells.h > since[cells.key])
        return cells.since(since[cells.key], value[cells.key], slope[cells.key])

    def finish(self, plan: Plan) -> Answers:
        """Settle what is in doubt."""
        m, outlook = self.m, self.outlook
        seen = np.zeros(m)
        if len(plan.loop):
            last = np.append(plan.first[1:], len(plan.loop)) - 1
            seen[plan.owner] = plan.t[last] + CELLS * plan.h[last]
        seen[seen > (1.0 - 1e-9) * outlook.ends.max(axis=1)] = np.inf
        peaks = Peaks(
            self.best.ravel(),
            outlook.place.ravel(),
            outlook.tolerance.ravel(),
            (outlook.answer[:, None] * m + np.arange(m)).ravel(),
        )
        edges = Edges(
            np.repeat([p.low for p in self.passages], m),
            np.repeat([p.high for p in self.passages], m),
            np.repeat(np.array([p.last for p in self.passages], dtype=bool), m),
        )
        zeros = Zeros(self.negligible.ravel())
        self._settle(peaks, edges, zeros)
        time = self._events(peaks, edges)

        shape = outlook.known.shape
        best, place = peaks.best.reshape(shape), peaks.place.reshape(shape)
        place = np.where(outlook.known > best, outlook.when, place)
        best = np.maximum(best, outlook.known)
        more = best > outlook.floor + outlook.tolerance  # less than that is rounding
        total = doubt = outlook.about
        if self.areas:
            end = np.minimum(outlook.area_ends, seen)
            total, doubt = areas(self.modes, [r.signal for r in self.areas], end, zeros.cells())
        return Answers(
            suprema=list(np.where(more, best, outlook.floor)),
            times=list(np.where(more, place, np.nan)),
            passages=[self._time(p, t) for p, t in zip(self.passages, time.reshape(-1, m), strict=True)],
            areas=list(total),
            doubts=list(doubt),
            seen=seen,
            supremum_ends=list(outlook.supremum_ends),
            passage_ends=list(outlook.passage_ends),
            open_suprema=list(peaks.dropped.reshape(shape)),
            open_passages=list(edges.dropped.reshape(-1, m)),
        )

    def _settle(self, peaks: Peaks, edges: Edges, zeros: Zeros) -> None:
        """Cut the cells in doubt until none is left that matters. Those of a kind stand together."""
        cells = joined(self.doubt) if self.doubt else Cells.none()
        if len(self.doubt) > 1:
            cells = cells.rows(np.searchsorted(self.borders, cells.key, side="right").argsort(kind="stable"))
        round_ = 0
        while len(cells):
            one, two = (int(np.count_nonzero(cells.key < border)) for border in self.borders)
            rest = []
            if one:
                rest.append(peaks.sort(cells.part(0, one, 0), round_))
            if two > one:
                rest.append(one + edges.sort(cells.part(one, two, self.borders[0]), round_))
            if two < len(cells):
                rest.append(two + zeros.sort(cells.part(two, len(cells), self.borders[1]), round_))
            left = np.concatenate(rest)
            if left.size == 0:
                return
            cells = self._seen(cells.rows(left).split(self.modes))
            round_ += 1

    def _events(self, peaks: Peaks, edges: Edges) -> FloatArray:
        """Refine all that was found at once: the summits go to `peaks`, the times of the passages are
        returned; NaN where there is none.
        """
        summits, near = peaks.summits()
        passing, place, level = edges.passages()
        count = len(summits)
        brackets = joined([summits, passing])
        turning = np.arange(len(brackets)) < count
        sign = self.sign[summits.key]
        time, value = solve(
            self.modes,
            brackets,
            np.concatenate([near, place]),
            np.concatenate([np.zeros(count), level]),
            turning,
            np.concatenate([sign < 0.0, passing.b > passing.a]),
        )
        peaks.close(summits.key, sign * value[:count] + self.offset[summits.key], time[:count])
        out = np.full(len(edges.low), np.nan)
        out[passing.key] = time[count:]
        return out

    def _time(self, p: Passage, time: FloatArray) -> FloatArray:
        """(M,) the answer from the passage found, NaN where there is none."""
        if p.last:
            return np.where(np.isnan(time), 0.0, time)
        start = self.start[:, p.signal]
        time = np.where(np.isnan(time), np.inf, time)
        return np.where((start > p.high) | (start < p.low), 0.0, time)
