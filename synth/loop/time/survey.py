"""How far to look for an answer, what one pass over the blocks tells, and which cells are left in doubt."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.time import areas, crossings, peaks
from synth.loop.time.cells import Cells, joined, no_cells
from synth.loop.time.plan import Plan, onset, reach
from synth.loop.time.questions import Answers, Area, Passage, Supremum
from synth.loop.time.scan import Scan
from synth.loop.time.signals import CELLS, Profile, Signals

RESOLUTION = 1e-9
"""Suprema are proven to this part of the signal's size; less than that above the floor is rounding."""

AREA_RESOLUTION = 3e-7
"""Part of an area that may be left to the slowest mode alone."""


class Survey:
    """The questions of one batch, what is known about them, and the cells still in doubt."""

    def __init__(
        self,
        modes: Signals,
        profile: Profile,
        unit: FloatArray,
        suprema: list[Supremum],
        passages: list[Passage],
        integrals: list[Area],
    ) -> None:
        self.modes, self.unit, self.m = modes, unit, len(modes)
        self.suprema, self.passages, self.integrals = suprema, passages, integrals
        self.profile = profile
        self.ends = np.zeros(unit.shape)
        self.steady = [self._steady(s) for s in range(unit.shape[1])]
        self.peak_end: list[FloatArray] = []
        self.peaks = self._known_peaks()
        self.passage_end = [self._extend(p.signal, self._passage_end(p)) for p in passages]
        self.area_end: list[FloatArray] = []
        self.weight = [self._area_end(q) for q in integrals]
        self.doubt_peaks: list[Cells] = []
        self.doubt_edges: list[Cells] = []
        self.doubt_zeros: list[Cells] = []
        self.edges = crossings.Edges(
            np.repeat([p.low for p in passages], self.m),
            np.repeat([p.high for p in passages], self.m),
            np.repeat(np.array([p.last for p in passages], dtype=bool), self.m),
            np.zeros(len(passages) * self.m, dtype=bool),
        )

    def _extend(self, signal: int, end: FloatArray) -> FloatArray:
        np.maximum(self.ends[:, signal], end, out=self.ends[:, signal])
        return end

    def _steady(self, signal: int) -> FloatArray:
        """(M,) time from which the signal is monotone for ever; inf where that is not known."""
        rivals = self.profile.rivals[:, signal]
        return np.where(rivals[:, -1] < 0.9, reach(self.profile, rivals, np.full(self.m, 0.9)), np.inf)

    def _known_peaks(self) -> peaks.Peaks:
        """Suprema over the samples, and when nothing larger can come."""
        best: list[FloatArray] = []
        places: list[FloatArray] = []
        tolerance: list[FloatArray] = []
        answer_of: list[int] = []
        signs: list[float] = []
        offsets: list[FloatArray] = []
        self.question: list[list[int]] = []
        self.sampled: list[tuple[FloatArray, FloatArray]] = []
        row = np.arange(self.m)
        self.entry: dict[int, tuple[FloatArray, FloatArray]] = {}  # value and slope at `since`
        for w, q in enumerate(self.suprema):
            x = self.profile.deviation[:, q.signal]
            first, begin = x[:, 0], self.profile.time[:, 0]
            if q.since is not None:
                value, slope = self.modes.jet(row, np.full(self.m, q.signal), q.since, 0, 2)
                self.entry[w] = value, slope
                first, begin = value, q.since
                x = np.where(self.profile.time < begin[:, None], first[:, None], x)
            known, when = q.floor.copy(), np.full(self.m, np.nan)
            top = np.full(self.m, -np.inf)
            numbers = []
            for sign in q.signs:
                number = x.argmax(axis=1) if sign > 0.0 else x.argmin(axis=1)
                extreme = sign * (x[row, number] + q.offset)
                when = np.where(extreme > known, self.profile.time[row, number], when)
                np.maximum(known, extreme, out=known)
                np.maximum(top, sign * q.offset, out=top)
                numbers.append(len(signs))
                signs.append(sign)
                offsets.append(q.offset)
                answer_of.append(w)
            self.question.append(numbers)
            self.sampled.append((known, when))
            fine = RESOLUTION * self.unit[:, q.signal]
            level = np.maximum(known - top, fine)
            quiet = reach(self.profile, self.profile.envelope[:, q.signal], level)
            self.peak_end.append(self._extend(q.signal, np.minimum(quiet, self.steady[q.signal])))
            start = first + q.offset
            start = np.maximum.reduce([sign * start for sign in q.signs])
            best.append(np.maximum(q.floor, start))
            places.append(np.where(start > q.floor, begin, np.nan))
            tolerance.append(fine)
        loops = np.arange(self.m)
        empty = np.zeros(0)
        return peaks.Peaks(
            np.concatenate([*best, empty]),
            np.concatenate([*places, empty]),
            np.concatenate([*tolerance, empty]),
            np.concatenate([*[w * self.m + loops for w in answer_of], empty]).astype(np.intp),
            np.repeat(signs, self.m),
            np.concatenate([*offsets, empty]),
            np.zeros(len(best) * self.m, dtype=bool),
        )

    def _passage_end(self, p: Passage) -> FloatArray:
        time, envelope = self.profile.time, self.profile.envelope[:, p.signal]
        if p.last:
            return reach(self.profile, envelope, np.full(self.m, 0.98 * min(-p.low, p.high)))
        seen = onset(time, self.profile.deviation[:, p.signal] > p.high)
        if p.high < -RESOLUTION:
            return np.minimum(1.001 * seen, reach(self.profile, envelope, np.full(self.m, -0.98 * p.high)))
        fine = np.full(self.m, max(p.high, RESOLUTION))
        return np.minimum(
            1.001 * seen, np.minimum(reach(self.profile, envelope, fine), self.steady[p.signal])
        )

    def _area_end(self, q: Area) -> FloatArray:
        """Looks until the tail is a single mode or nothing; returns about the area, (M,)."""
        assert self.profile.area is not None
        assert self.profile.others is not None
        time = self.profile.time
        x = np.abs(self.profile.deviation[:, q.signal])
        about: FloatArray = np.sum(0.5 * (x[:, 1:] + x[:, :-1]) * np.diff(time, axis=1), axis=1) + 1e-300
        fine = AREA_RESOLUTION * about
        end = np.minimum(
            reach(self.profile, self.profile.area[:, q.signal], fine),
            reach(self.profile, self.profile.others[:, q.signal], fine),
        )
        self.area_end.append(self._extend(q.signal, np.minimum(end, self.steady[q.signal])))
        return about

    def look(self, s: Scan) -> None:
        """Take from one pass what it tells, and keep the cells that need more."""
        asked: list[Supremum | Passage | Area] = [*self.suprema, *self.passages, *self.integrals]
        signals = sorted({q.signal for q in asked})
        for signal in signals:
            doubtful = s.doubtful(signal)
            block = doubtful % len(s.loop)
            cells = s.cells(signal, doubtful, s.loop[block])  # key: loop, for now
            low, high = cells.range()
            top, bottom = s.top(signal), s.bottom(signal)
            for w, q in enumerate(self.suprema):
                if q.signal == signal:
                    self._look_for_peaks(s, w, q, cells, low, high, top, bottom)
            for v, p in enumerate(self.passages):
                if p.signal == signal:
                    self._look_for_passage(s, v, p, cells, doubtful, low, high, top, bottom)
            for k, r in enumerate(self.integrals):
                if r.signal == signal:
                    self._look_for_zeros(s, k, cells, doubtful, low, high)

    def _look_for_peaks(
        self,
        s: Scan,
        w: int,
        q: Supremum,
        cells: Cells,
        low: FloatArray,
        high: FloatArray,
        top: FloatArray,
        bottom: FloatArray,
    ) -> None:
        best = self.peaks.best[w * self.m : (w + 1) * self.m]
        counts = cells.t < self.peak_end[w][cells.loop]
        if q.since is not None:
            since = q.since[s.loop]
            early = s.t + s.h * np.arange(CELLS + 1)[:, None] < since
            top = np.where(early, -np.inf, s.value[q.signal]).max(axis=0)
            bottom = np.where(early, np.inf, s.value[q.signal]).min(axis=0)
            counts &= cells.t + cells.h > q.since[cells.loop]
        for sign in q.signs:
            node = np.maximum.reduceat(top, s.first) if sign > 0.0 else -np.minimum.reduceat(bottom, s.first)
            node += sign * q.offset[s.owner]
            # somewhat less than the node, so that the cell beside it stays in and gives the place too
            node -= 2.0 * RESOLUTION * self.unit[s.owner, q.signal]
            best[s.owner] = np.maximum(best[s.owner], node)
        for number, sign in zip(self.question[w], q.signs, strict=True):
            reachable = (high if sign > 0.0 else -low) + sign * q.offset[cells.loop]
            matters = reachable > best[cells.loop] + RESOLUTION * self.unit[cells.loop, q.signal]
            few = cells.rows(matters & counts)
            if q.since is not None:
                few = few.since(q.since[few.loop], *(part[few.loop] for part in self.entry[w]))
            self.doubt_peaks.append(self.peaks.seen(few.keyed(few.loop + number * self.m)))

    def _look_for_passage(
        self,
        s: Scan,
        v: int,
        p: Passage,
        cells: Cells,
        doubtful: IntArray,
        low: FloatArray,
        high: FloatArray,
        top: FloatArray,
        bottom: FloatArray,
    ) -> None:
        blocks_here = len(s.loop)
        outside = (top > p.high) | (bottom < p.low)
        number = np.arange(blocks_here)
        if p.last:
            chosen = np.maximum.reduceat(np.where(outside, number, -1), s.first)
            some = chosen >= 0
        else:
            chosen = np.minimum.reduceat(np.where(outside, number, blocks_here), s.first)
            some = chosen < blocks_here
        order = np.full(len(s.owner), -1.0 if p.last else np.inf)
        block = chosen[some]
        nodes = s.value[p.signal][:, block]
        out = (nodes > p.high) | (nodes < p.low)
        if p.last:
            cell = CELLS - out[::-1].argmax(axis=0)
            onward = (cell == CELLS) & (block < s.last[some])
            block, cell = np.where(onward, block + 1, block), np.where(onward, 0, cell)
            valid = cell < CELLS
        else:
            cell = out.argmax(axis=0) - 1
            back = (cell < 0) & (block > s.first[some])
            block, cell = np.where(back, block - 1, block), np.where(back, CELLS - 1, cell)
            valid = cell >= 0
        order[some] = block * CELLS + cell
        # doubtful cells on the side where a passage would matter more
        at_cell, at_block = np.divmod(doubtful, blocks_here)
        mine = order.take(s.local.take(at_block))
        place = at_block * CELLS + at_cell
        touching = ((high > p.high) | (low < p.low)) & ((place > mine) if p.last else (place < mine))
        few = cells.rows(touching)
        passing = s.cells(p.signal, (cell * blocks_here + block)[valid], s.owner[some][valid])
        few = joined([few, passing])
        few = few.rows(few.t < self.passage_end[v][few.loop])
        self.doubt_edges.append(few.keyed(few.loop + v * self.m))

    def _look_for_zeros(
        self, s: Scan, k: int, cells: Cells, doubtful: IntArray, low: FloatArray, high: FloatArray
    ) -> None:
        signal = self.integrals[k].signal
        positive = s.value[signal] > 0.0
        changes = np.flatnonzero(positive[1:] != positive[:-1])
        plain = s.cells(signal, changes, s.loop[changes % len(s.loop)])
        wide = (np.minimum(-low, high) * cells.h > 1e-2 * AREA_RESOLUTION * self.weight[k][cells.loop]) & (
            (cells.a > 0.0) == (cells.b > 0.0)
        )
        few = joined([plain, cells.rows(wide)])
        few = few.rows(few.t < self.area_end[k][few.loop])
        self.doubt_zeros.append(few.keyed(few.loop + k * self.m))

    def finish(self, plan: Plan) -> Answers:
        """Resolve what is in doubt."""
        out = Answers(supremum_ends=self.peak_end, passage_ends=self.passage_end)
        m = self.m
        last = np.append(plan.first[1:], len(plan.loop)) - 1
        out.seen = np.zeros(m)
        if len(plan.loop):
            out.seen[plan.owner] = plan.t[last] + CELLS * plan.h[last]
        out.seen[out.seen > (1.0 - 1e-9) * self.ends.max(axis=1)] = np.inf
        if self.doubt_peaks:
            peaks.resolve(self.modes, self.peaks, joined(self.doubt_peaks))
        for w in range(len(self.suprema)):
            mine, floor = slice(w * m, (w + 1) * m), self.suprema[w].floor
            best, place = self.peaks.best[mine], self.peaks.place[mine]
            known, when = self.sampled[w]
            best, place = np.maximum(best, known), np.where(known > best, when, place)
            more = best > floor + self.peaks.tolerance[mine]  # less than that is rounding
            out.suprema.append(np.where(more, best, floor))
            out.times.append(np.where(more, place, np.nan))
            out.open_suprema.append(self.peaks.dropped[mine])
        if self.passages:
            cells = joined(self.doubt_edges) if self.doubt_edges else no_cells()
            time = crossings.resolve(self.modes, self.edges, cells).reshape(len(self.passages), m)
            for v, p in enumerate(self.passages):
                if p.last:
                    out.passages.append(np.where(np.isnan(time[v]), 0.0, time[v]))
                else:
                    first = np.where(np.isnan(time[v]), np.inf, time[v])
                    start = self.profile.deviation[:, p.signal, 0]
                    out.passages.append(np.where((start > p.high) | (start < p.low), 0.0, first))
        out.open_passages = list(self.edges.dropped.reshape(len(self.passages), m))
        if self.integrals:
            cells = joined(self.doubt_zeros) if self.doubt_zeros else no_cells()
            weight = np.concatenate(self.weight) * (1e-2 * AREA_RESOLUTION)
            cells = areas.zeros(self.modes, cells, weight)
            for k, q in enumerate(self.integrals):
                held = cells.rows(cells.key // m == k)
                held = held.keyed(held.loop)
                total, doubt = areas.area(
                    self.modes, q.signal, np.arange(m), np.minimum(self.area_end[k], out.seen), held
                )
                out.areas.append(total)
                out.doubts.append(doubt)
        return out
