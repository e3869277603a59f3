"""Quantities of the step responses of loops with dead time, exact from the first delay to the end.

M loops. Nothing here approximates e^(-s θ): see steps.py for the early response and true_modes.py for the
late one.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.roots import closed_roots
from synth.loop.quantities import Measure
from synth.loop.time import last_mode
from synth.loop.time.collocation import WHOLE, jet, primitive_coefficients
from synth.loop.time.panels import Outline, Trace
from synth.loop.time.responses import LONG, Responses, responses
from synth.loop.time.result import TimeStage
from synth.loop.time.steps import ladder, march, resolution
from synth.loop.time.true_modes import true_modes

_OF_U = {"control_peak"}
_OF_D = {"disturbance_peak", "disturbance_area"}
# The most delays marched for a curve before the modes take over.
MOST_DRAWN = 200
# A change of sign within a panel is looked for where more than this part of the area may hang on it.
NO_AREA = 1e-8


def delayed_time_stage(loops: Loops, poles: ComplexArray, measures: tuple[Measure, ...]) -> TimeStage:
    """The time-stage measures among `measures`, for M stable loops with dead time.

    poles : (M, q) true roots, NaN padded, the rightmost among them. Values are scaled; NaN where absent; y is
    counted from the step of r, so every time includes the dead time.
    """
    asked = tuple(m for m in measures if m.row.stage == "time")
    if not asked or len(loops) == 0:
        return TimeStage({m: np.zeros(len(loops)) for m in asked}, {})
    return _Reading(loops, poles, asked).stage()


class _Reading:
    """One batch of responses and the measures read off it."""

    def __init__(self, loops: Loops, poles: ComplexArray, asked: tuple[Measure, ...]) -> None:
        names = {m.quantity for m in asked}
        self.loops, self.asked = loops, asked
        rows = [loops.numerator]
        self.u = len(rows) if names & _OF_U else None
        if self.u is not None:
            rows.append(loops.control)
        self.d = len(rows) if names & _OF_D else None
        if self.d is not None:
            rows.append(loops.load)
        self.found: Responses = responses(loops, poles, np.stack(rows, axis=1))
        self.late = loops.dead_time
        final = self.found.final[:, 0]
        self.has_end = loops.numerator[:, -1] != 0.0
        # z - 1 where y has a final value, y itself where it returns to 0
        self.per = np.where(self.has_end, final, 1.0)
        if names - _OF_U - _OF_D:
            self._prepare(final)

    def _prepare(self, final: FloatArray) -> None:
        """z - 1, looked at closely in the panels where one of the measures may be decided."""
        panels = self.found.panels
        error = (panels.values[:, 0] - final[panels.owner, None]) / self.per[panels.owner, None]
        unit = self.found.unit[:, 0] / np.abs(self.per)
        outline = Outline.of(panels, error)
        self.whole = np.abs(error @ WHOLE) * panels.length
        about = np.add.reduceat(self.whole, panels.first) + self.late
        chosen = np.zeros(len(error), dtype=bool)
        for m in self.asked:
            name = m.quantity
            if name in ("overshoot", "peak_time"):
                chosen |= outline.may_be_largest(1.0, 0.0)
            elif name == "undershoot":
                chosen |= outline.may_be_largest(-1.0, 1.0)
            elif name == "rise_time":
                for level in m.span:
                    chosen |= outline.may_reach_first(level - 1.0)
            elif name == "settling_time":
                chosen |= outline.may_leave_last(m.band)
            elif name == "tracking_area":
                chosen |= outline.may_change_sign(NO_AREA * about)
            elif name == "late_deviation":
                after = (m.after / self.loops.time_scale - self.late)[panels.owner]
                chosen |= panels.start + panels.length >= after
        self.close = panels.only(chosen)
        self.z = Trace.of(panels.rows(self.close), error[self.close], self.late, unit)
        self.tail = self.found.amplitude[:, 0] / self.per

    def stage(self) -> TimeStage:
        """Values and flags of every measure asked for."""
        values = {m: self._value(m) for m in self.asked}
        doubtful: BoolArray = self.found.doubtful
        return TimeStage(values, {m: doubtful & np.isfinite(values[m]) for m in self.asked})

    def _value(self, m: Measure) -> FloatArray:
        name = m.quantity
        if name == "control_peak":
            return self._peak(self.u, np.zeros(len(self.loops)))
        if name == "disturbance_peak":
            return self._peak(self.d, self.late)
        if name == "disturbance_area":
            return self._disturbance_area()
        if name == "tracking_area":
            return self._tracking_area()
        if name in ("overshoot", "peak_time"):
            out = self._overshoot(name)
        elif name == "undershoot":
            out = self._undershoot()
        elif name == "rise_time":
            out = self._arrival(m.span[1]) - self._arrival(m.span[0])
        elif name == "settling_time":
            out = self._settling(m.band)
        elif name == "late_deviation":
            out = self._late_deviation(m.after / self.loops.time_scale)
        else:
            raise ValueError(f"no reading of {name!r}")
        return np.where(self.has_end, out, np.nan)

    def _tail_extremes(
        self, amplitude: ComplexArray
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        return last_mode.extremes(amplitude, self.found.pole)

    def _peak(self, signal: int | None, offset: FloatArray) -> FloatArray:
        """sup of abs of the signal: panels, the last mode's own extremes, and the value at infinity."""
        assert signal is not None
        f = self.found
        values = f.panels.values[:, signal]
        outline = Outline.of(f.panels, values)
        close = f.panels.only(outline.may_be_largest(1.0, 0.0) | outline.may_be_largest(-1.0, 0.0))
        trace = Trace.of(f.panels.rows(close), values[close], offset, f.unit[:, signal])
        top, _, bottom, _ = self._tail_extremes(f.amplitude[:, signal])
        final = f.final[:, signal]
        late = np.maximum(np.abs(final + top), np.abs(final + bottom))
        nodes = np.maximum.reduceat(np.maximum(outline.most, -outline.least), f.panels.first)
        looked = np.maximum(trace.largest(1.0)[0], trace.largest(-1.0)[0])
        out: FloatArray = np.maximum(np.maximum(nodes, looked), late)
        return out

    def _overshoot(self, name: str) -> FloatArray:
        best, when = self.z.largest(1.0)
        top, at, _, _ = self._tail_extremes(self.tail)
        later = top > best
        best, when = np.where(later, top, best), np.where(later, self._after_end(at), when)
        over = best > 1e-10  # less is rounding of a response that comes to rest
        if name == "overshoot":
            return np.where(over, 100.0 * best, 0.0)
        return np.where(over, when, np.nan)

    def _undershoot(self) -> FloatArray:
        deepest = np.maximum(self.z.largest(-1.0)[0], -self._tail_extremes(self.tail)[2])
        below = deepest - 1.0
        return np.where(below > 1e-10, 100.0 * below, 0.0)

    def _after_end(self, time: FloatArray) -> FloatArray:
        out: FloatArray = self.found.end + self.late + time
        return out

    def _arrival(self, level: float) -> FloatArray:
        """First time at that part of the final value; 0 is where y leaves 0, after the dead time."""
        if level <= 0.0:
            return self.late.copy()
        early = self.z.first_reach(level - 1.0)
        out = early.copy()
        left = np.flatnonzero(~np.isfinite(early))
        if left.size:
            levels = np.full(len(left), level - 1.0)
            late = last_mode.first_reach(self.tail[left], self.found.pole[left], levels)
            out[left] = self.found.end[left] + self.late[left] + late
        return np.where(np.isfinite(out), out, np.nan)

    def _settling(self, band: float) -> FloatArray:
        early = self.z.last_exit(band)
        late = last_mode.last_exit(self.tail, self.found.pole, np.full(len(self.loops), band))
        out = np.where(np.isfinite(late), self._after_end(late), early)
        # y is 0, so outside any band below 100 %, until the dead time has passed
        return np.where(np.isnan(out), self.late if band < 1.0 else 0.0, out)

    def _late_deviation(self, after: FloatArray) -> FloatArray:
        seen = self.z.largest_after(after)
        rest = np.maximum(after - self.found.end - self.late, 0.0)
        top, _, bottom, _ = self._tail_extremes(self.tail * np.exp(self.found.pole * rest))
        out = np.maximum(seen, np.maximum(top, -bottom))
        return 100.0 * np.where(after < self.late, np.maximum(out, 1.0), out)

    def _tracking_area(self) -> FloatArray:
        """∫ abs(r - y) dt; y is 0 until θ. Where L has no pole at 0 the error stays, and so does the area."""
        piece = self.whole.copy()
        piece[self.close] = self.z.area()
        area = self.late + np.add.reduceat(piece, self.found.panels.first)
        area += last_mode.area(self.tail, self.found.pole)
        return np.where(self.loops.denominator[:, -1] == 0.0, area, np.inf)

    def _disturbance_area(self) -> FloatArray:
        assert self.d is not None
        f = self.found
        values = f.panels.values[:, self.d]
        piece = np.abs(values @ WHOLE) * f.panels.length
        about = np.add.reduceat(piece, f.panels.first)
        close = f.panels.only(Outline.of(f.panels, values).may_change_sign(NO_AREA * about))
        trace = Trace.of(f.panels.rows(close), values[close], self.late, f.unit[:, self.d])
        piece[close] = trace.area()
        area = np.add.reduceat(piece, f.panels.first) + last_mode.area(f.amplitude[:, self.d], f.pole)
        return np.where(self.loops.load[:, -1] == 0.0, area, np.inf)


def delayed_step_curves(loops: Loops, t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """y and u of a unit reference step and y of a unit step at the plant's input, stable or not.

    t : (M, T) or (T,) scaled times. At a jump the value after it is given. Returns (y, u, d), (M, T) each.
    """
    t = np.broadcast_to(np.asarray(t, dtype=float), (len(loops), np.shape(t)[-1]))
    delay = loops.dead_time[:, None]
    numerators = np.stack([loops.numerator, loops.control, loops.load], axis=1)
    horizon = np.maximum(t.max(axis=1, initial=0.0) / loops.dead_time, 0.0)
    poles = delayed_poles(loops, np.zeros(len(loops)))
    modes = true_modes(loops, numerators, poles)
    out = np.zeros((3, len(loops), t.shape[1]))
    fine, coarse, hold = resolution(loops, closed_roots(loops.denominator), modes.pole)
    own = np.stack([t - delay, t, t - delay])
    for row in range(len(loops)):
        one = np.array([row])
        count = int(np.floor(horizon[row])) + 1
        marched = min(count, MOST_DRAWN if count <= MOST_DRAWN else LONG)
        sizes = ladder(int(fine[row]) + 1, int(coarse[row]) + 1, int(hold[row]))
        leg = march(loops.rows(one), numerators[one], np.array([marched]), sizes, sizes, marched)[0]
        values = leg.values[0]
        edges = np.concatenate([[0.0], np.cumsum(sizes)])
        for s, signal in enumerate((0, 1, 2)):
            time = own[s, row]
            place = time / loops.dead_time[row]
            early = np.flatnonzero((time >= 0.0) & (place < marched))
            k = np.floor(place[early]).astype(np.intp)
            part = place[early] - k
            i = np.clip(np.searchsorted(edges, part, side="right") - 1, 0, len(sizes) - 1)
            x = (part - edges[i]) / sizes[i]
            out[s, row, early] = jet(primitive_coefficients(values[k, i, signal]), x)[1]
            late = np.flatnonzero(place >= marched)
            if late.size:
                out[s, row, late] = modes.rows(one).at(time[None, late])[0, signal]
    return out[0], out[1], out[2]
