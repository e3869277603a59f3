"""Quantities of the step responses of loops with dead time, exact from the first delay to the end.

M loops. Nothing here approximates e^(-s θ): see early.py for the early response and true_modes.py for the
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
from synth.loop.time.panel_areas import panel_areas
from synth.loop.time.panels import Outline
from synth.loop.time.responses import Responses, responses
from synth.loop.time.result import TimeStage
from synth.loop.time.steps import Walk, ladder, resolution
from synth.loop.time.trace import Trace
from synth.loop.time.true_modes import true_modes

_OF_U = {"control_peak"}
_OF_D = {"disturbance_peak", "disturbance_area"}
# The most delays marched for a curve before the modes take over, and how many where there are more.
MOST_DRAWN, LONG = 200, 48
# A change of sign within a panel is looked for where more than this part of the area may hang on it.
NO_AREA = 1e-8
# A sup less than this over the final value is rounding of a response that comes to rest.
ROUNDING = 1e-10


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
    """One batch of responses and the measures read off it. The first signal is z - 1, or y where it returns
    to 0."""

    def __init__(self, loops: Loops, poles: ComplexArray, asked: tuple[Measure, ...]) -> None:
        self.loops, self.asked, self.late = loops, asked, loops.dead_time
        self.names = {m.quantity for m in asked}
        self.signals = ["z"]
        rows = [loops.numerator]
        if self.names & _OF_U:
            self.signals.append("u")
            rows.append(loops.control)
        if self.names & _OF_D:
            self.signals.append("d")
            rows.append(loops.load)
        self.found: Responses = responses(loops, poles, np.stack(rows))
        self.has_end = loops.numerator[:, -1] != 0.0
        self._relate()
        f = self.found
        self.panels = f.panels.stacked()
        self.outline = Outline.of(self.panels)
        self.whole = (f.panels.values @ WHOLE) * f.panels.length
        offset = np.stack([np.zeros_like(self.late) if s == "u" else self.late for s in self.signals])
        close = self.panels.rows(np.flatnonzero(self._decisive()))
        self.trace = Trace.of(close, offset.ravel(), f.unit.ravel())
        self.z = self.trace.signal(0, len(self.signals))
        self.tail = last_mode.extremes(f.amplitude[0], f.pole)
        self.passed = self._passages()

    def _relate(self) -> None:
        """y to z - 1 where it has a final value."""
        f = self.found
        per = np.where(self.has_end, f.final[0], 1.0)
        f.panels.values[0] -= f.final[0][f.panels.owner, None]
        f.panels.values[0] /= per[f.panels.owner, None]
        f.amplitude[0] /= per
        f.unit[0] /= np.abs(per)

    def _decisive(self) -> BoolArray:
        """Stacked panels in which one of the measures may be decided."""
        loops, signals = len(self.loops), len(self.signals)
        never = np.full((signals, loops), np.inf)
        up, down, far = never.copy(), never.copy(), never
        if self.names & {"overshoot", "peak_time"}:
            up[0] = 0.0
        if "undershoot" in self.names:
            down[0] = 1.0
        for name, peak in (("u", "control_peak"), ("d", "disturbance_peak")):
            if peak in self.names:
                far[self.signals.index(name)] = -np.inf
        out = self.outline.may_be_largest(1.0, up.ravel()) | self.outline.may_be_largest(-1.0, down.ravel())
        out |= self.outline.may_be_farthest(far.ravel())
        z = self.outline.signal(0, signals)
        chosen = out[: len(z.low)]
        for m in self.asked:
            if m.quantity == "rise_time":
                for level in m.span:
                    chosen |= z.may_reach_first(level - 1.0)
            elif m.quantity == "settling_time":
                chosen |= z.may_leave_last(m.band)
            elif m.quantity == "late_deviation":
                after = (m.after / self.loops.time_scale - self.late)[z.panels.owner]
                chosen |= z.panels.start + z.panels.length >= after
        return out

    def _passages(self) -> dict[tuple[str, float], FloatArray]:
        """Times of the first arrivals and last exits asked for, NaN where there is none in the panels."""
        found = {}
        for m in self.asked:
            if m.quantity == "rise_time":
                for level in m.span:
                    if level > 0.0:
                        found["arrival", level] = self.z.first_reach(level - 1.0)
            elif m.quantity == "settling_time":
                found["exit", m.band] = self.z.last_exit(m.band)
        return dict(zip(found, self.z.times(list(found.values())), strict=True)) if found else {}

    def stage(self) -> TimeStage:
        """Values and flags of every measure asked for."""
        values = {m: self._value(m) for m in self.asked}
        doubtful: BoolArray = self.found.doubtful
        return TimeStage(values, {m: doubtful & np.isfinite(values[m]) for m in self.asked})

    def _value(self, m: Measure) -> FloatArray:
        name = m.quantity
        if name == "control_peak":
            return self._peak(self.signals.index("u"))
        if name == "disturbance_peak":
            return self._peak(self.signals.index("d"))
        if name == "disturbance_area":
            return np.where(self.loops.load[:, -1] == 0.0, self._area(self.signals.index("d")), np.inf)
        if name == "tracking_area":
            # y is 0 until θ. Where L has no pole at 0 the error stays, and so does the area
            return np.where(self.loops.denominator[:, -1] == 0.0, self.late + self._area(0), np.inf)
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

    def _peak(self, signal: int) -> FloatArray:
        """sup of abs of the signal: panels, the last mode's own extremes, and the value at infinity."""
        f = self.found
        looked = self.trace.signal(signal, len(self.signals)).farthest()
        top, _, bottom, _ = last_mode.extremes(f.amplitude[signal], f.pole)
        late = np.maximum(np.abs(f.final[signal] + top), np.abs(f.final[signal] + bottom))
        out: FloatArray = np.maximum(looked, late)
        return out

    def _overshoot(self, name: str) -> FloatArray:
        best, when = self.z.largest(1.0)
        top, at, _, _ = self.tail
        later = top > best
        best, when = np.where(later, top, best), np.where(later, self._after_end(at), when)
        over = best > ROUNDING
        if name == "overshoot":
            return np.where(over, 100.0 * best, 0.0)
        return np.where(over, when, np.nan)

    def _undershoot(self) -> FloatArray:
        below = np.maximum(self.z.largest(-1.0)[0], -self.tail[2]) - 1.0
        return np.where(below > ROUNDING, 100.0 * below, 0.0)

    def _after_end(self, time: FloatArray) -> FloatArray:
        out: FloatArray = self.found.end + self.late + time
        return out

    def _arrival(self, level: float) -> FloatArray:
        """First time at that part of the final value; 0 is where y leaves 0, after the dead time."""
        if level <= 0.0:
            return self.late.copy()
        out = self.passed["arrival", level].copy()
        left = np.flatnonzero(np.isnan(out))
        if left.size:
            levels = np.full(len(left), level - 1.0)
            late = last_mode.first_reach(self.found.amplitude[0, left], self.found.pole[left], levels)
            out[left] = self.found.end[left] + self.late[left] + late
        return np.where(np.isfinite(out), out, np.nan)

    def _settling(self, band: float) -> FloatArray:
        early = self.passed["exit", band]
        late = last_mode.last_exit(self.found.amplitude[0], self.found.pole, np.full(len(self.loops), band))
        out = np.where(np.isfinite(late), self._after_end(late), early)
        # y is 0, so outside any band below 100 %, until the dead time has passed
        return np.where(np.isnan(out), self.late if band < 1.0 else 0.0, out)

    def _late_deviation(self, after: FloatArray) -> FloatArray:
        f = self.found
        seen = self.z.farthest_after(after)
        rest = np.maximum(after - f.end - self.late, 0.0)
        top, _, bottom, _ = last_mode.extremes(f.amplitude[0] * np.exp(f.pole * rest), f.pole)
        out = np.maximum(seen, np.maximum(top, -bottom))
        return 100.0 * np.where(after < self.late, np.maximum(out, 1.0), out)

    def _area(self, signal: int) -> FloatArray:
        """∫ abs(signal) from its own time 0 on."""
        f = self.found
        piece = np.abs(self.whole[signal])
        outline = self.outline.signal(signal, len(self.signals))
        about = outline.panels.over(np.add, piece, 0.0)
        cut = np.flatnonzero(outline.may_change_sign(NO_AREA * about))
        piece[cut] = panel_areas(outline.panels.rows(cut))
        out: FloatArray = outline.panels.over(np.add, piece, 0.0)
        return out + last_mode.area(f.amplitude[signal], f.pole)


def delayed_step_curves(loops: Loops, t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """y and u of a unit reference step and y of a unit step at the plant's input, stable or not.

    t : (M, T) or (T,) scaled times. At a jump the value after it is given. Returns (y, u, d), (M, T) each.
    """
    t = np.broadcast_to(np.asarray(t, dtype=float), (len(loops), np.shape(t)[-1]))
    delay = loops.dead_time[:, None]
    numerators = np.stack([loops.numerator, loops.control, loops.load])
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
        walk = Walk.start(loops.rows(one), numerators[:, one], sizes)
        values = np.stack([walk.over()[:, 0] for _ in range(marched)])
        edges = np.concatenate([[0.0], np.cumsum(sizes)])
        for s, signal in enumerate((0, 1, 2)):
            time = own[s, row]
            place = time / loops.dead_time[row]
            early = np.flatnonzero((time >= 0.0) & (place < marched))
            k = np.floor(place[early]).astype(np.intp)
            part = place[early] - k
            i = np.clip(np.searchsorted(edges, part, side="right") - 1, 0, len(sizes) - 1)
            x = (part - edges[i]) / sizes[i]
            out[s, row, early] = jet(primitive_coefficients(values[k, signal, i]), x)[1]
            late = np.flatnonzero(place >= marched)
            if late.size:
                out[s, row, late] = modes.rows(one).at(time[None, late])[0, signal]
    return out[0], out[1], out[2]
