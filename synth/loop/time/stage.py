"""Every quantity of the step responses that was asked for."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.quantities import Measure
from synth.loop.time.answers import AREA_ERROR, answer
from synth.loop.time.clusters import ClusterModes, cluster_modes
from synth.loop.time.questions import Answers, Area, Passage, Questions, Supremum
from synth.loop.time.residues import CROWDED, crowding, limits, step_modes
from synth.loop.time.result import READ_FROM, TimeStage
from synth.loop.time.signals import Signals

LOST = 3e-8
"""The modes must add up to the known value at 0+ to this part of the quantity; else they have lost digits."""


def time_stage(
    loops: Loops, poles: ComplexArray, measures: tuple[Measure, ...], *, crowded: float = CROWDED
) -> TimeStage:
    """The time-stage measures among `measures`, for M stable loops.

    poles : (M, n) scaled closed-loop poles, pairs adjacent, upper first, NaN-padded (with dead time: the
    roots found).
    crowded : crowding of the poles from which on close ones are taken together; more costs digits.
    """
    asked = tuple(m for m in measures if m.row.stage == "time")
    if loops.delayed:
        from synth.loop.time.delayed import delayed_time_stage

        return delayed_time_stage(loops, poles, asked)
    if not asked or len(loops) == 0:
        return TimeStage({m: np.zeros(0) for m in asked}, {})
    with np.errstate(all="ignore"):  # rows at the edge of the number range run on with what they have
        return _plain_stage(loops, poles, asked, crowding(poles) > crowded)


def _plain_stage(
    loops: Loops, poles: ComplexArray, asked: tuple[Measure, ...], close: BoolArray
) -> TimeStage:
    """Loops with simple poles by their modes, those with crowded ones, `close` (M,), by clusters."""
    needed = {READ_FROM[m.quantity] for m in asked}
    signals = tuple(s for s in ("y", "u", "d") if s in needed)
    if not close.any():
        modes = step_modes(loops, poles, signals)
        if modes.readable().all():
            return _Reading(loops, modes, signals, asked).read()
    values = {m: np.full(len(loops), np.nan) for m in asked}
    approximate: dict[Measure, BoolArray] = {}
    together, apart = np.flatnonzero(close), np.flatnonzero(~close)
    parts: list[tuple[IntArray, Signals]] = []
    if together.size:
        clusters = cluster_modes(loops.rows(together), poles[together], signals)
        whole = _in_range(clusters)
        parts.append((together[whole], clusters.rows(np.flatnonzero(whole))))
        apart = np.concatenate([apart, together[~whole]])
    single = step_modes(loops.rows(apart), poles[apart], signals)
    whole = single.readable()  # the others are absent
    parts.append((apart[whole], single.rows(np.flatnonzero(whole))))
    for rows, some in parts:
        if rows.size:
            part = _Reading(loops.rows(rows), some, signals, asked).read()
            for m in asked:
                values[m][rows] = part.values[m]
            for m, doubt in part.approximate.items():
                approximate.setdefault(m, np.zeros(len(loops), dtype=bool))[rows] = doubt
    return TimeStage(values, approximate)


def _in_range(clusters: ClusterModes) -> BoolArray:
    """(M,) whether the powers of t stay within the number range, from 0 to the end of the slowest mode.

    They leave it where one cluster is ten decades slower than the others; whether the sum of single modes
    has kept its digits then is asked of every loop.
    """
    end = 30.0 / -clusters.pole.real.max(axis=1)
    values = clusters.curves(end[:, None] * np.array([0.0, 0.1, 1.0]))
    return np.asarray(np.isfinite(values).all(axis=(1, 2)))


class _Reading:
    """Measures turned into questions and answers turned into values."""

    def __init__(
        self,
        loops: Loops,
        modes: Signals,
        signals: tuple[str, ...],
        asked: tuple[Measure, ...],
    ) -> None:
        self.loops, self.asked = loops, asked
        self.index = {name: i for i, name in enumerate(signals)}
        self.tracks = loops.denominator[:, -1] == 0.0  # L has a pole at 0: the static error is exactly 0
        self.has_end = np.ones(len(loops), dtype=bool)
        start, end = limits(loops, signals)
        unit = np.maximum(np.abs(start), np.abs(end))
        # twenty nearly equal poles under hardly any feedback: rounding in the numerator is all that is left
        off = np.abs(modes.curves(np.zeros((len(loops), 1)))[:, :, 0] - (start - end))
        if "y" in self.index:
            # y is counted in units of its final value: z = y / y(inf)
            y = self.index["y"]
            self.has_end = end[:, y] != 0.0
            final = np.where(self.has_end, end[:, y], 1.0)
            factor = np.ones(end.shape)
            factor[:, y] = np.where(self.has_end, 1.0 / final, 0.0)
            modes = modes.scaled(factor)
            unit[:, y] = np.maximum(1.0, np.abs(start[:, y] / final))
            off[:, y] /= np.abs(final)
        self.modes, self.unit, self.start, self.end, self.off = modes, unit, start, end, off
        self.suprema: dict[str | Measure, Supremum] = {}
        self.passages: dict[tuple[float, float, bool], Passage] = {}
        self.areas: dict[str, Area] = {}

    def read(self) -> TimeStage:
        """All values."""
        for m in self.asked:
            self._ask(m)
        suprema, passages, areas = self.suprema.values(), self.passages.values(), self.areas.values()
        found = answer(self.modes, self.unit, Questions(tuple(suprema), tuple(passages), tuple(areas)))
        self.approximate: dict[Measure, BoolArray] = {}
        values = {m: self._value(m, found) for m in self.asked}
        for m in self.asked:
            doubt = self.approximate.get(m, np.zeros(len(self.loops), dtype=bool)) | self._lost(m, values[m])
            self.approximate[m] = doubt & np.isfinite(values[m])
        return TimeStage(values, self.approximate)

    def _lost(self, m: Measure, value: FloatArray) -> BoolArray:
        """Where the modes do not add up at 0+; an area by the longest time the error could last."""
        name = m.quantity
        off = self.off[:, self.index[READ_FROM[name]]]
        size = np.abs(value) if name in ("control_peak", "disturbance_peak") else np.ones(len(self.loops))
        if name in ("tracking_area", "disturbance_area"):
            size = np.abs(value) * -self.modes.pole.real.max(axis=1) * (AREA_ERROR / 1e-6)
        out: BoolArray = ~(off <= LOST * size)
        return out

    def _ask(self, m: Measure) -> None:
        zero, one = np.zeros(len(self.loops)), np.ones(len(self.loops))
        name, signal = m.quantity, self.index[READ_FROM[m.quantity]]
        if name in ("overshoot", "peak_time"):
            self.suprema["overshoot"] = Supremum(signal, (1.0,), zero, zero)
        elif name == "undershoot":
            self.suprema[name] = Supremum(signal, (-1.0,), one, zero)
        elif name in ("control_peak", "disturbance_peak"):
            limit = self.end[:, signal]
            floor = np.maximum(np.abs(limit), np.abs(self.start[:, signal]))
            self.suprema[name] = Supremum(signal, (1.0, -1.0), limit, floor)
        elif name == "late_deviation":
            self.suprema[m] = Supremum(signal, (1.0, -1.0), zero, zero, m.after / self.loops.time_scale)
        elif name == "rise_time":
            for level in m.span:
                if level > 0.0:
                    self._passage(signal, -np.inf, np.nextafter(level - 1.0, -2.0), False)
        elif name == "settling_time":
            self._passage(signal, -m.band, m.band, True)
        elif name in ("tracking_area", "disturbance_area"):
            self.areas[name] = Area(signal)

    def _passage(self, signal: int, low: float, high: float, last: bool) -> None:
        self.passages[low, high, last] = Passage(signal, low, high, last)

    def _value(self, m: Measure, found: Answers) -> FloatArray:
        name = m.quantity
        if name in ("tracking_area", "disturbance_area"):
            k = list(self.areas).index(name)
            self.approximate[m] = found.doubts[k] > AREA_ERROR
            returns = self.tracks if name == "tracking_area" else self.end[:, self.index["d"]] == 0.0
            return np.where(returns, found.areas[k], np.inf)
        if name == "rise_time":
            value = self._arrival(m, found, m.span[1]) - self._arrival(m, found, m.span[0])
        elif name == "settling_time":
            k = list(self.passages).index((-m.band, m.band, True))
            value, self.approximate[m] = found.passages[k], found.open_passages[k].copy()
        else:
            key = m if name == "late_deviation" else "overshoot" if name == "peak_time" else name
            k = list(self.suprema).index(key)
            value, self.approximate[m] = found.suprema[k], found.open_suprema[k].copy()
            if name in ("control_peak", "disturbance_peak"):
                return value
            value = 100.0 * value if name != "peak_time" else np.where(value > 0.0, found.times[k], np.nan)
        return np.where(self.has_end, value, np.nan)

    def _arrival(self, m: Measure, found: Answers, level: float) -> FloatArray:
        """First time at that part of the final value; NaN where it is never reached."""
        if level <= 0.0:
            return np.zeros(len(self.loops))
        key = (-np.inf, float(np.nextafter(level - 1.0, -2.0)), False)
        k = list(self.passages).index(key)
        self.approximate[m] = self.approximate.get(m, False) | found.open_passages[k]
        return np.where(np.isfinite(found.passages[k]), found.passages[k], np.nan)
