"""Every quantity of B compensators on K plants: poles first, then frequency, then time.

A stage runs only for the loops and the quantities that need it. Loops are sorted into stacks of one order,
with or without dead time; each stack is closed, scaled and sent through the stages in one go.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops, Rational, close, exact_degree, together
from synth.loop.frequency.stage import frequency_stage
from synth.loop.poles.doubt import doubts
from synth.loop.poles.stage import PoleStage, needs_counting, pole_stage, statics
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.loop.stand_in import StandIns, damping, responses, truly_stable, worthwhile
from synth.loop.time.stage import time_stage

# Loops handled at once: large enough to drown the cost of a call, small enough to stay in cache and in
# memory.
CHUNK = 2048
# Stacks of fewer loops go on together once their poles are known, whatever their orders: what a few loops
# cost is calls, not arithmetic.
FEW = 256
USUAL_DAMPING = Measure("damping_ratio")


@dataclass(frozen=True, slots=True)
class Screen:
    """When to stop looking at a loop: later stages are skipped for it.

    least_damping   damping ratio below this ends the loop: after its poles where a pole that is sure to
                    count (its share in the step is 2 % or more) is damped less, else after its frequencies
    most_peak       sensitivity peak above this ends it after its frequencies
    """

    least_damping: float = 0.0
    most_peak: float = np.inf


@dataclass(frozen=True, slots=True)
class Evaluation:
    """What the core found.

    measures     the Q measures asked for, in order
    values       (B, K, Q) or (M, Q); NaN is absent (or not looked at, see `reached`), ±inf is meant. Of a
                 loop that the screen ended after its poles, damping_ratio is that of the poles sure to
                 count: an upper bound of the true one
    approximate  same shape: True where the error bound of the quantity was not reached
    stable       (B, K) or (M,)
    abscissa     (B, K) or (M,) largest real part of the poles [1/s]; the negative of the decay rate. NaN for
                 a stable loop with dead time where no measure asks for a pole
    reached      (B, K) or (M,) last stage run: 0 poles, 1 frequency, 2 time
    """

    measures: tuple[Measure, ...]
    values: FloatArray
    approximate: BoolArray
    stable: BoolArray
    abscissa: FloatArray
    reached: IntArray

    def __getitem__(self, measure: str | Measure) -> FloatArray:
        """Values of one measure, or of the first measure on a quantity of that name."""
        for i, m in enumerate(self.measures):
            if measure in (m, m.quantity):
                out: FloatArray = self.values[..., i]
                return out
        raise KeyError(measure)


@np.errstate(over="ignore")  # what leaves the number range is inf or NaN, and what rests on it is absent
def evaluate(
    plants: Rational,
    compensators: Rational,
    *,
    measures: tuple[Measure, ...] = EVERY_QUANTITY,
    reference_step: float = 1.0,
    screen: Screen | None = None,
    pairs: tuple[IntArray, IntArray] | None = None,
    rational: bool = False,
) -> Evaluation:
    """Score every compensator on every plant, exactly.

    Parameters
    ----------
    plants : K rows; compensators : B rows. SI units, rad/s, seconds.
    measures : what to compute; the default is every quantity of the table.
    reference_step : size of the reference step that control_peak is judged for.
    screen : thresholds below which a loop is not looked at further.
    pairs : (compensator row, plant row) of M chosen pairs; the result is then flat, (M, ...).
    rational : let time responses with dead time come from a rational stand-in (synth.loop.stand_in). Two to
        six times faster: for a search on its way, never for a figure that is reported.

    Returns
    -------
    Evaluation; a loop that is not stable has poles' quantities alone. One bad row never stops the others.
    """
    compensator_of, plant_of = pairs if pairs is not None else _cross(len(compensators), len(plants))
    m = len(compensator_of)
    out = Evaluation(
        measures=measures,
        values=np.full((m, len(measures)), np.nan),
        approximate=np.zeros((m, len(measures)), dtype=bool),
        stable=np.zeros(m, dtype=bool),
        abscissa=np.full(m, np.nan),
        reached=np.zeros(m, dtype=np.intp),
    )
    # a natural frequency needs the shares of true poles
    replaced = rational and all(m.quantity != "natural_frequency" for m in measures)
    until = screen or Screen()
    for rows in _batches(plants, compensators, plant_of, compensator_of):
        loops = close(plants, compensators, plant_of[rows], compensator_of[rows])
        if replaced and loops.delayed:
            rows, loops = _fill_by_stand_in(out, rows, loops, until)
        parts = [_fill_poles(out, rows[at], some, until) for at, some in loops.by_order()]
        if len(parts) > 1 and not loops.delayed:
            parts = [_together(parts)]
        for part in parts:
            _fill_responses(out, *part, until)
    for i, measure in enumerate(measures):
        if measure.quantity == "control_peak":
            out.values[:, i] *= abs(reference_step)
    if pairs is not None:
        return out
    shape = (len(compensators), len(plants))
    return Evaluation(
        measures,
        out.values.reshape(*shape, -1),
        out.approximate.reshape(*shape, -1),
        out.stable.reshape(shape),
        out.abscissa.reshape(shape),
        out.reached.reshape(shape),
    )


def _cross(compensators: int, plants: int) -> tuple[IntArray, IntArray]:
    pair = np.arange(compensators * plants)
    return pair // plants, pair % plants


def _batches(
    plants: Rational, compensators: Rational, plant_of: IntArray, compensator_of: IntArray
) -> list[IntArray]:
    """Row sets that are closed in one go: large stacks, and the small ones together."""
    out: list[IntArray] = []
    few: dict[bool, list[IntArray]] = {}
    for rows in stacks(plants, compensators, plant_of, compensator_of):
        if len(rows) < FEW:
            one = rows[0]
            delayed = plants.dead_time[plant_of[one]] + compensators.dead_time[compensator_of[one]] > 0.0
            few.setdefault(bool(delayed), []).append(rows)
        else:
            out.append(rows)
    return out + [np.concatenate(parts) for parts in few.values()]


def stacks(
    plants: Rational, compensators: Rational, plant_of: IntArray, compensator_of: IntArray
) -> Iterator[IntArray]:
    """Row sets that can be closed together: same orders of plant and compensator, dead time in all or in
    none.

    Rows that are not finite, have no denominator or are not proper belong to none.
    """
    plant_degree, comp_degree = _order(plants)[plant_of], _order(compensators)[compensator_of]
    delayed = (plants.dead_time[plant_of] + compensators.dead_time[compensator_of]) > 0.0
    width = compensators.denominator.shape[1]
    kind = (plant_degree * width + comp_degree) * 2 + delayed
    kind[(plant_degree < 0) | (comp_degree < 0)] = -1
    for one in np.unique(kind[kind >= 0]):
        rows = np.flatnonzero(kind == one)
        for start in range(0, len(rows), CHUNK):
            yield rows[start : start + CHUNK]


def _order(rationals: Rational) -> IntArray:
    """Degree of the denominator of each row, -1 where the row cannot be used. (R,)."""
    top, bottom = exact_degree(rationals.numerator), exact_degree(rationals.denominator)
    finite = np.isfinite(rationals.numerator).all(axis=1) & np.isfinite(rationals.denominator).all(axis=1)
    out: IntArray = np.where(finite & (top <= bottom), bottom, -1)
    return out


Stack = tuple[IntArray, Loops, PoleStage]
"""Rows of the result, their loops and what is known of their poles."""


def _together(parts: list[Stack]) -> Stack:
    """Small stacks as one; poles are padded with NaN."""
    parts = [part for part in parts if part[0].size] or parts[:1]
    if len(parts) == 1:
        return parts[0]
    rows, loops, stages = (list(kind) for kind in zip(*parts, strict=True))
    poles = np.full((sum(map(len, rows)), max(s.poles.shape[1] for s in stages)), np.nan, dtype=complex)
    done = 0
    for stage in stages:
        poles[done : done + len(stage.poles), : stage.poles.shape[1]] = stage.poles
        done += len(stage.poles)
    known = PoleStage(
        stable=np.concatenate([s.stable for s in stages]),
        abscissa=np.concatenate([s.abscissa for s in stages]),
        poles=poles,
        values={m: np.concatenate([s.values[m] for s in stages]) for m in stages[0].values},
        reach=np.concatenate([s.reach for s in stages]),
    )
    return np.concatenate(rows), together(loops), known


def _fill_poles(out: Evaluation, rows: IntArray, loops: Loops, screen: Screen) -> Stack:
    """Write what the poles of one stack say; returns the loops that are looked at further."""
    wanted = out.measures
    stage = pole_stage(loops, wanted)  # stability, poles, and what needs no more than coefficients
    out.stable[rows] = stage.stable
    out.abscissa[rows] = stage.abscissa / loops.time_scale
    _write(out, rows, loops, stage.values, None)
    rows, loops, stage = _kept(rows, loops, stage, stage.stable)
    _write_doubts(out, rows, loops, stage, stage.values)
    if rows.size and screen.least_damping > 0.0:
        stage = stage.with_shares(loops)
        sure = stage.surely_counted_damping(loops)
        early = sure < screen.least_damping
        for i, measure in enumerate(wanted):
            if measure.quantity == "damping_ratio" and measure.below is None:
                out.values[rows[early], i] = sure[early]
        rows, loops, stage = _kept(rows, loops, stage, ~early)
    return rows, loops, stage


def _fill_responses(out: Evaluation, rows: IntArray, loops: Loops, stage: PoleStage, screen: Screen) -> None:
    """Run loops with known poles through the further stages and write what each yields."""
    if rows.size == 0:
        return
    wanted = out.measures
    stages = {m.row.stage for m in wanted}
    names = {m.quantity for m in wanted if m.row.stage == "frequency"}
    counting = tuple(m for m in wanted if needs_counting(m))
    if screen.least_damping > 0.0 and USUAL_DAMPING not in counting:
        counting = (*counting, USUAL_DAMPING)
    if screen.most_peak < np.inf:
        names.add("sensitivity_peak")
    if counting:
        names.add("highest_fall")
    if names:
        found = frequency_stage(loops, stage.poles, frozenset(names))
        _write(out, rows, loops, {w: found[w.quantity] for w in wanted if w.quantity in found}, None)
        counted = stage.count(loops, counting, found.get("highest_fall"))
        _write(out, rows, loops, counted, None)
        _write_doubts(out, rows, loops, stage, counted)
        out.reached[rows] = 1
        keep = np.ones(len(rows), dtype=bool)
        if screen.least_damping > 0.0:
            keep &= ~(counted[USUAL_DAMPING] < screen.least_damping)
        if screen.most_peak < np.inf:
            keep &= ~(found["sensitivity_peak"] > screen.most_peak)
        rows, loops, stage = _kept(rows, loops, stage, keep)
    if "time" in stages and rows.size:
        with np.errstate(invalid="ignore"):  # a response beyond the number range is absent
            response = time_stage(loops, stage.poles, wanted)
        _write(out, rows, loops, response.values, response.approximate)
        out.reached[rows] = 2


def _fill_by_stand_in(
    out: Evaluation, rows: IntArray, loops: Loops, screen: Screen
) -> tuple[IntArray, Loops]:
    """The stages with a rational stand-in for the dead time; returns the loops that need the exact way."""
    wanted = out.measures
    fit = worthwhile(loops)
    near = StandIns.of(loops if fit.all() else loops.rows(fit))
    served = rows[fit]
    stable = truly_stable(near.loops)
    abscissa = near.abscissa()
    # the count is exact, so here the stand-in is wrong, or beyond the number range
    astray = stable & ~(np.isfinite(abscissa) & (abscissa < 0.0))
    out.stable[served] = stable
    out.abscissa[served] = np.where(stable, abscissa, np.maximum(abscissa, 1e-3)) / near.loops.time_scale
    fit[fit] = ~astray
    left = np.flatnonzero(~fit)
    rest = rows[left], loops.rows(left)
    keep = np.flatnonzero(stable & ~astray)
    if keep.size == 0:
        return rest
    rows, near = served[keep], near.rows(keep)
    found: dict[Measure, FloatArray] = {}
    names = {m.quantity for m in wanted if m.row.stage == "frequency"}
    if any(needs_counting(m) for m in wanted):
        names.add("highest_fall")
    values = frequency_stage(near.loops, near.poles, frozenset(names)) if names else {}
    found |= {w: values[w.quantity] for w in wanted if w.quantity in values}
    found |= damping(near, wanted, values.get("highest_fall"))
    still = statics(near.loops, np.ones(len(rows), dtype=bool), {m.quantity for m in wanted})
    found |= {w: still[w.quantity] for w in wanted if w.quantity in still}
    found |= {w: -abscissa[keep] for w in wanted if w.quantity == "decay_rate"}
    _write(out, rows, near.loops, found, None)
    out.reached[rows] = 1
    on = np.ones(len(rows), dtype=bool)
    for measure, value in found.items():
        if measure.quantity == "damping_ratio":
            on &= ~(value < screen.least_damping)
        elif measure.quantity == "sensitivity_peak":
            on &= ~(value > screen.most_peak)
    if on.any() and any(m.row.stage == "time" for m in wanted):
        if not on.all():
            rows, near = rows[on], near.rows(np.flatnonzero(on))
        _write(out, rows, near.loops, responses(near, wanted), None)
        out.reached[rows] = 2
    return rest


def _kept(
    rows: IntArray, loops: Loops, stage: PoleStage, keep: BoolArray
) -> tuple[IntArray, Loops, PoleStage]:
    """The loops still looked at; nothing is copied when all of them are."""
    if keep.all():
        return rows, loops, stage
    index = np.flatnonzero(keep)
    return rows[index], loops.rows(index), stage.rows(index)


def _write(
    out: Evaluation,
    rows: IntArray,
    loops: Loops,
    found: dict[Measure, FloatArray],
    approximate: dict[Measure, BoolArray] | None,
) -> None:
    """Scaled values to SI, into the columns that asked for them."""
    for i, measure in enumerate(out.measures):
        if measure in found:
            row = measure.row
            value = found[measure]
            if row.time_power:
                value = value * loops.time_scale**row.time_power
            if row.gain_power:
                value = value * loops.plant_gain**row.gain_power
            out.values[rows, i] = value
            if approximate is not None and measure in approximate:
                out.approximate[rows, i] = approximate[measure]


def _write_doubts(
    out: Evaluation, rows: IntArray, loops: Loops, stage: PoleStage, values: dict[Measure, FloatArray]
) -> None:
    """Mark quantities of the poles that rounding leaves open."""
    if rows.size and not loops.delayed:
        for measure, doubt in doubts(loops, stage.poles, values).items():
            for i in (i for i, wanted in enumerate(out.measures) if wanted == measure):
                out.approximate[rows, i] = doubt
