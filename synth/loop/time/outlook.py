"""What the coarse profile tells before any cell is looked at: suprema over its samples, and how far each
question must be followed.

M loops, S signals, K times of the profile. W suprema, each of one view or of two, from above and from below:
V views. P passages, A areas.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.time.plan import onset, reach
from synth.loop.time.questions import Passage, Questions, Supremum
from synth.loop.time.signals import Profile, Signals

RESOLUTION = 1e-9
"""Suprema are proven to this part of the signal's size; less than that above the floor is rounding."""

AREA_RESOLUTION = 3e-7
"""Part of an area that may be left to the slowest mode alone."""

STEADY = 0.9
"""Slope of all other modes over that of the slowest, below which a signal counts as monotone for ever."""


class Outlook:
    """Arrays of what is known, one row a question.

    answer, sign, signal   (V,) of each view: its supremum, its sign, its signal
    offset                 (V, M) sign times the supremum's offset
    since                  (V, M) time from which the view counts; None where all count from 0 on
    entry                  (2, V, M) signals and slopes at `since`
    floor                  (W, M) what each supremum is at least
    known, when            (W, M) largest sample, and its time; NaN where the floor is no less
    best, place            (W, M) the same of the start alone
    tolerance              (W, M) a gain below this does not count
    supremum_ends, passage_ends, area_ends   (W, M), (P, M), (A, M) when nothing can change the answer
    about                  (A, M) the areas, roughly
    ends                   (M, S) when each signal has been seen enough
    """

    def __init__(self, modes: Signals, profile: Profile, unit: FloatArray, asked: Questions) -> None:
        m, s = unit.shape
        suprema, passages = asked.suprema, asked.passages
        self._ask(modes, suprema, m)
        signals = [q.signal for q in suprema]
        self.tolerance = RESOLUTION * unit.T[signals]
        held = [q.signal for q in asked.areas]
        # everything that is read off a decreasing curve is read in one go
        curves = [profile.rivals, profile.envelope[:, signals + [p.signal for p in passages]]]
        levels = [np.full((m, s), STEADY), self._samples(profile, suprema).T]
        levels += [np.full((m, 1), _level(p)) for p in passages]
        self.about = np.zeros((0, m))
        if profile.area is not None and profile.others is not None:
            size = np.abs(profile.deviation[:, held])
            steps = profile.time[:, 1:] - profile.time[:, :-1]
            about = (0.5 * (size[:, :, 1:] + size[:, :, :-1]) * steps[:, None]).sum(axis=2) + 1e-300
            self.about = about.T
            curves += [profile.area[:, held], profile.others[:, held]]
            levels += [AREA_RESOLUTION * about] * 2
        sure = reach(profile, np.concatenate(curves, axis=1), np.concatenate(levels, axis=1)).T

        steady = np.where(profile.rivals[:, :, -1].T < STEADY, sure[:s], np.inf)
        w, p = len(suprema), len(passages)
        self.supremum_ends = np.minimum(sure[s : s + w], steady[signals])
        self.passage_ends = sure[s + w : s + w + p]
        for v, q in enumerate(passages):
            if not q.last:
                self.passage_ends[v] = self._arrival(profile, q, self.passage_ends[v], steady[q.signal])
        areas, others = sure[s + w + p :].reshape(2, -1, m)
        self.area_ends = np.minimum(np.minimum(areas, others), steady[held])
        ends = np.zeros((s, m))
        read = signals + [q.signal for q in passages] + held
        for signal, end in zip(read, [*self.supremum_ends, *self.passage_ends, *self.area_ends], strict=True):
            np.maximum(ends[signal], end, out=ends[signal])
        self.ends = ends.T

    def _ask(self, modes: Signals, suprema: Sequence[Supremum], m: int) -> None:
        views = [(w, sign) for w, q in enumerate(suprema) for sign in q.signs]
        self.answer = np.array([w for w, _ in views], dtype=np.intp)
        self.sign = np.array([sign for _, sign in views])
        self.signal = np.array([suprema[w].signal for w, _ in views], dtype=np.intp)
        self.offset = np.array([sign * suprema[w].offset for w, sign in views]).reshape(-1, m)
        self.first = self.answer.searchsorted(np.arange(len(suprema)))  # view of each supremum
        self.since: FloatArray | None = None
        self.entry = np.zeros((2, len(views), m))
        for v, (w, _) in enumerate(views):
            since = suprema[w].since
            if since is not None:
                self.since = np.zeros((len(views), m)) if self.since is None else self.since
                self.since[v] = since
                self.entry[:, v] = modes.jet(np.arange(m), np.full(m, self.signal[v]), since, 0, 2)

    def _samples(self, profile: Profile, suprema: Sequence[Supremum]) -> FloatArray:
        """Takes the suprema over the samples; returns (W, M) how far signals must fall to matter no more."""
        m = len(profile.time)
        self.floor = floor = np.array([q.floor for q in suprema]).reshape(-1, m)
        self.known, self.when = floor.copy(), np.full(floor.shape, np.nan)
        if not suprema:
            self.best, self.place = floor, self.when
            return floor
        x = profile.deviation.transpose(1, 0, 2)[self.signal]
        begin = np.zeros((len(self.sign), m))
        if self.since is not None:
            begin = self.since
            x = np.where(profile.time < begin[:, :, None], self.entry[0][:, :, None], x)
        x *= self.sign[:, None, None]
        x += self.offset[:, :, None]
        extreme, when = x.max(axis=2), profile.time[np.arange(m), x.argmax(axis=2)]
        for v, w in enumerate(self.answer):
            np.copyto(self.when[w], when[v], where=extreme[v] > self.known[w])
            np.maximum(self.known[w], extreme[v], out=self.known[w])
        start = np.maximum.reduceat(x[:, :, 0], self.first, axis=0)
        self.best = np.maximum(floor, start)
        self.place = np.where(start > floor, begin[self.first], np.nan)
        top = np.maximum.reduceat(self.offset, self.first, axis=0)
        out: FloatArray = np.maximum(self.known - top, self.tolerance)
        return out

    @staticmethod
    def _arrival(profile: Profile, p: Passage, quiet: FloatArray, steady: FloatArray) -> FloatArray:
        """(M,) when a first passage has surely been seen, or can come no more."""
        seen = 1.001 * onset(profile.time, profile.deviation[:, p.signal] > p.high)
        end = np.minimum(seen, quiet)
        return end if p.high < -RESOLUTION else np.minimum(end, steady)


def _level(p: Passage) -> float:
    """The envelope at which a passage is settled."""
    if p.last:
        return 0.98 * min(-p.low, p.high)
    return -0.98 * p.high if p.high < -RESOLUTION else max(p.high, RESOLUTION)
