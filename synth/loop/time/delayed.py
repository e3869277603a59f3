"""Quantities of the step responses of loops with dead time, exact from the first delay to the end.

M loops. Nothing here approximates e^(-s θ): see early.py for the early response and true_modes.py for the
late one.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.quantities import Measure
from synth.loop.time import last_mode
from synth.loop.time.collocation import WHOLE
from synth.loop.time.panel_areas import panel_areas
from synth.loop.time.panels import Outline
from synth.loop.time.proof import NEGLIGIBLE, Cells, Claim, unproven
from synth.loop.time.responses import Responses, responses
from synth.loop.time.result import READ_FROM, TimeStage
from synth.loop.time.trace import Passage, Trace

_AREAS = {"z": "tracking_area", "d": "disturbance_area"}
# A change of sign within a panel is looked for where more than this part of the area may hang on it.
NO_AREA = 1e-8
# A sup less than this over the final value is rounding of a response that comes to rest.
ROUNDING = 1e-10
# A peak lower than this over the final value is not placed to 1e-6.
PLACED = 1e-7
# Parts of the unit that a response is uncertain by; a time that they move by more than this part is flagged.
UNCERTAIN, SAME_TIME = 1e-10, 1e-6


def delayed_time_stage(loops: Loops, poles: ComplexArray, measures: tuple[Measure, ...]) -> TimeStage:
    """The time-stage measures among `measures`, for M stable loops with dead time.

    poles : (M, q) true roots, NaN padded, the rightmost among them. Values are scaled; NaN where absent; y is
    counted from the step of r, so every time includes the dead time.
    """
    asked = tuple(m for m in measures if m.row.stage == "time")
    if not asked or len(loops) == 0:
        return TimeStage({m: np.zeros(len(loops)) for m in asked}, {})
    return _Readings(loops, poles, asked).stage()


@dataclass(frozen=True, slots=True)
class Reading:
    """A measure's values (M,), of which loops they are in doubt, and what else has to hold for them."""

    value: FloatArray
    doubtful: BoolArray | bool = False
    claims: tuple[Claim, ...] = ()


class _Readings:
    """One batch of responses and the measures read off it. The first signal is z - 1, or y where it returns
    to 0."""

    def __init__(self, loops: Loops, poles: ComplexArray, asked: tuple[Measure, ...]) -> None:
        self.loops, self.asked, self.late = loops, asked, loops.dead_time
        self.names = {m.quantity for m in asked}
        read = {READ_FROM[name] for name in self.names}
        rows = {"z": loops.numerator}  # drives the loop, whether it is read or not
        rows |= {s: row for s, row in (("u", loops.control), ("d", loops.load)) if s in read}
        self.signals = list(rows)
        # of u, and of d where its area is not asked for, the sup alone matters
        whole = {"z": "y" in read, "u": False, "d": "disturbance_area" in self.names}
        throughout = np.array([whole[s] for s in self.signals])
        self.found: Responses = responses(loops, poles, np.stack(list(rows.values())), throughout)
        self.has_end = loops.numerator[:, -1] != 0.0
        self._relate()
        f = self.found
        self.panels = f.panels
        self.outline = Outline.of(self.panels)
        offset = np.stack([np.zeros_like(self.late) if s == "u" else self.late for s in self.signals])
        close = self.panels.rows(np.flatnonzero(self._decisive()))
        self.trace = Trace.of(close, offset.ravel(), f.unit.ravel())
        self.z = self.trace.signal(0, len(self.signals))
        poles_of_all = np.tile(f.pole, len(self.signals))
        tails = np.stack(last_mode.extremes(f.amplitude.ravel(), poles_of_all))
        # top, its time and bottom of what is left of each signal at the end, (3, S, M)
        self.tails = tails.reshape(3, len(self.signals), -1)
        self.cells = Cells.of(self.trace)
        self.cells_of_z = self.cells.signal(0, len(self.signals))
        self.uncertain = UNCERTAIN * f.unit[0]
        self._pass()

    def _relate(self) -> None:
        """y to z - 1 where it has a final value."""
        f = self.found
        per = np.where(self.has_end, f.final[0], 1.0)
        here, panels = f.panels.signal(0, len(self.signals))
        f.panels.values[here] -= f.final[0][panels.owner, None]
        f.panels.values[here] /= per[panels.owner, None]
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

    def _pass(self) -> None:
        """The first arrivals and last exits asked for, in the panels: passage, time and slope of each."""
        found: dict[tuple[str, float], Passage] = {}
        for m in self.asked:
            if m.quantity == "rise_time":
                found |= {
                    ("arrival", level): self.z.first_reach(level - 1.0) for level in m.span if level > 0.0
                }
            elif m.quantity == "settling_time":
                found["exit", m.band] = self.z.last_exit(m.band)
        times = self.z.times(list(found.values())) if found else []
        self.passage = found
        self.passed = dict(zip(found, times, strict=True))

    def stage(self) -> TimeStage:
        """Values and flags of every measure asked for."""
        read = {m: self._value(m) for m in self.asked}
        claims = {id(claim): claim for reading in read.values() for claim in reading.claims}
        found = unproven(list(claims.values()), len(self.loops)) if claims else []
        of_claim = dict(zip(claims, found, strict=True))
        flags: dict[Measure, BoolArray] = {}
        for m, reading in read.items():
            flag = self.found.doubtful | reading.doubtful
            for claim in reading.claims:
                flag = flag | of_claim[id(claim)]
            flags[m] = flag & np.isfinite(reading.value)
        return TimeStage({m: reading.value for m, reading in read.items()}, flags)

    def _value(self, m: Measure) -> Reading:
        name = m.quantity
        if name == "control_peak":
            return self._peak(self.signals.index("u"))
        if name == "disturbance_peak":
            return self._peak(self.signals.index("d"))
        if name == "disturbance_area":
            area = self.areas[self.signals.index("d")]
            return Reading(np.where(self.loops.load[:, -1] == 0.0, area, np.inf))
        if name == "tracking_area":
            # y is 0 until θ. Where L has no pole at 0 the error stays, and so does the area
            area = self.late + self.areas[0]
            return Reading(np.where(self.loops.denominator[:, -1] == 0.0, area, np.inf))
        if name in ("overshoot", "peak_time"):
            out = self._overshoot(name)
        elif name == "undershoot":
            out = self._undershoot()
        elif name == "rise_time":
            low, high = (self._arrival(level) for level in m.span)
            doubtful, claims = low.doubtful | high.doubtful, low.claims + high.claims
            out = Reading(high.value - low.value, doubtful, claims)
        elif name == "settling_time":
            out = self._settling(m.band)
        elif name == "late_deviation":
            out = self._late_deviation(m.after / self.loops.time_scale)
        else:
            raise ValueError(f"no reading of {name!r}")
        return replace(out, value=np.where(self.has_end, out.value, np.nan))

    def _peak(self, signal: int) -> Reading:
        """sup of abs of the signal: panels, the last mode's own extremes, and the value at infinity."""
        f = self.found
        looked = self.trace.signal(signal, len(self.signals)).farthest()
        top, _, bottom = self.tails[:, signal]
        late = np.maximum(np.abs(f.final[signal] + top), np.abs(f.final[signal] + bottom))
        out: FloatArray = np.maximum(looked, late)
        limit = out + NEGLIGIBLE * f.unit[signal]
        return Reading(out, claims=(self.cells.signal(signal, len(self.signals)).within(-limit, limit),))

    @cached_property
    def highest(self) -> tuple[FloatArray, FloatArray, Claim]:
        """sup of z - 1, its time, and that nothing is higher."""
        best, when = self.z.largest(1.0)
        top, at, _ = self.tails[:, 0]
        later = top > best
        best, when = np.where(later, top, best), np.where(later, self._after_end(at), when)
        limit = np.maximum(best, 0.0) + NEGLIGIBLE * self.found.unit[0]
        return best, when, self.cells_of_z.within(np.full_like(limit, -np.inf), limit)

    def _overshoot(self, name: str) -> Reading:
        best, when, claim = self.highest
        over = best > ROUNDING
        if name == "overshoot":
            return Reading(np.where(over, 100.0 * best, 0.0), claims=(claim,))
        # where a peak lies hangs on more of its digits than how high it is
        return Reading(np.where(over, when, np.nan), best < PLACED, (claim,))

    def _undershoot(self) -> Reading:
        below = np.maximum(self.z.largest(-1.0)[0], -self.tails[2, 0]) - 1.0
        limit = -1.0 - np.maximum(below, 0.0) - NEGLIGIBLE * self.found.unit[0]
        claim = self.cells_of_z.within(limit, np.full_like(limit, np.inf))
        return Reading(np.where(below > ROUNDING, 100.0 * below, 0.0), claims=(claim,))

    def _after_end(self, time: FloatArray) -> FloatArray:
        out: FloatArray = self.found.end + self.late + time
        return out

    def _arrival(self, level: float) -> Reading:
        """First time at that part of the final value; 0 is where y leaves 0, after the dead time."""
        if level <= 0.0:
            return Reading(self.late.copy())
        f, uncertain = self.found, self.uncertain
        out, steep = self.passed["arrival", level]
        passage = self.passage["arrival", level]
        doubtful = self.z.grazes(level - 1.0, passage, uncertain, last=False)
        doubtful |= uncertain > SAME_TIME * steep * out
        left = np.flatnonzero(np.isnan(out))
        if left.size:
            twice, levels = np.tile(left, 2), np.full(len(left), level - 1.0)
            levels = np.append(levels, levels - uncertain[left])
            passed = last_mode.first_reach(f.amplitude[0, twice], f.pole[twice], levels)
            after, other = (f.end[twice] + self.late[twice] + passed).reshape(2, -1)
            out[left] = np.where(np.isfinite(after), after, np.nan)
            doubtful[left] |= _apart(after, other)
        return Reading(out, doubtful, self.cells_of_z.not_sooner(level - 1.0, passage))

    def _settling(self, band: float) -> Reading:
        f, uncertain = self.found, self.uncertain
        out, steep = self.passed["exit", band]
        passage = self.passage["exit", band]
        doubtful = self.z.grazes(band, passage, uncertain, last=True)
        doubtful |= uncertain > SAME_TIME * steep * out
        some = np.flatnonzero(np.maximum(self.tails[0, 0], -self.tails[2, 0]) > band - uncertain)
        if some.size:
            twice, bands = np.tile(some, 2), np.full(len(some), band)
            bands = np.append(bands, bands - uncertain[some])
            passed = last_mode.last_exit(f.amplitude[0, twice], f.pole[twice], bands)
            after, other = (f.end[twice] + self.late[twice] + passed).reshape(2, -1)
            out[some] = np.where(np.isfinite(after), after, out[some])
            doubtful[some] = _apart(after, other)
        # y is 0, so outside any band below 100 %, until the dead time has passed
        out = np.where(np.isnan(out), self.late if band < 1.0 else 0.0, out)
        return Reading(out, doubtful, self.cells_of_z.not_later(band, passage))

    def _late_deviation(self, after: FloatArray) -> Reading:
        f = self.found
        seen = self.z.farthest_after(after)
        rest = np.maximum(after - f.end - self.late, 0.0)
        top, _, bottom = last_mode.extremes(f.amplitude[0] * np.exp(f.pole * rest), f.pole)
        out = np.maximum(seen, np.maximum(top, -bottom))
        limit = out + NEGLIGIBLE * f.unit[0]
        claim = self.cells_of_z.within(-limit, limit, since=after)
        return Reading(100.0 * np.where(after < self.late, np.maximum(out, 1.0), out), claims=(claim,))

    @cached_property
    def areas(self) -> FloatArray:
        """∫ abs(signal) of every signal asked for throughout, from its own time 0 on, (S, M)."""
        f, p, shape = self.found, self.panels, self.found.final.shape
        whole = np.abs(p.values @ WHOLE) * p.length
        negligible = NO_AREA * p.over(np.add, whole, 0.0).reshape(shape)
        negligible[[_AREAS.get(s) not in self.names for s in self.signals]] = np.inf
        cut = np.flatnonzero(self.outline.may_change_sign(negligible.ravel()))
        whole[cut] = panel_areas(p.rows(cut))
        early = p.over(np.add, whole, 0.0).reshape(shape)
        return early + np.stack([last_mode.area(a, f.pole) for a in f.amplitude])


def _apart(one: FloatArray, other: FloatArray) -> BoolArray:
    """Whether two times differ by more than what counts as one; NaN is never."""
    near = np.abs(one - other) <= SAME_TIME * np.abs(one)
    out: BoolArray = ~(near | (one == other) | (np.isnan(one) & np.isnan(other)))
    return out
