"""Every quantity of B compensators on K plants: poles first, then frequency, then time.

A stage runs only for the loops and the quantities that need it. Loops are sorted into stacks of one order, with or
without dead time; each stack is closed, scaled and sent through the stages in one go.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops, Rational, close, exact_degree
from synth.loop.frequency.stage import frequency_stage
from synth.loop.poles.stage import pole_stage
from synth.loop.quantities import EVERY_QUANTITY, QUANTITIES, Measure
from synth.loop.time.stage import time_stage

# Loops handled at once: large enough to drown the cost of a call, small enough to stay in cache and in memory.
CHUNK = 1024


@dataclass(frozen=True, slots=True)
class Screen:
    """When to stop looking at a loop: later stages are skipped for it.

    least_damping   damping ratio below this ends the loop after its poles
    most_peak       sensitivity peak above this ends it after its frequencies
    """

    least_damping: float = 0.0
    most_peak: float = np.inf


@dataclass(frozen=True, slots=True)
class Evaluation:
    """What the core found.

    measures     the Q measures asked for, in order
    values       (B, K, Q) or (M, Q); NaN is absent (or not looked at, see `reached`), ±inf is meant
    approximate  same shape: True where the error bound of the quantity was not reached
    stable       (B, K) or (M,)
    abscissa     (B, K) or (M,) largest real part of the poles [1/s]; the negative of the decay rate
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


def evaluate(
    plants: Rational,
    compensators: Rational,
    *,
    measures: tuple[Measure, ...] = EVERY_QUANTITY,
    reference_step: float = 1.0,
    screen: Screen | None = None,
    pairs: tuple[IntArray, IntArray] | None = None,
) -> Evaluation:
    """Score every compensator on every plant, exactly.

    Parameters
    ----------
    plants : K rows; compensators : B rows. SI units, rad/s, seconds.
    measures : what to compute; the default is every quantity of the table.
    reference_step : size of the reference step that control_peak is judged for.
    screen : thresholds below which a loop is not looked at further.
    pairs : (compensator row, plant row) of M chosen pairs; the result is then flat, (M, ...).

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
    for rows in stacks(plants, compensators, plant_of, compensator_of):
        loops = close(plants, compensators, plant_of[rows], compensator_of[rows])
        _fill(out, rows, loops, screen or Screen())
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


def stacks(
    plants: Rational, compensators: Rational, plant_of: IntArray, compensator_of: IntArray
) -> Iterator[IntArray]:
    """Row sets that can be closed together: same orders of plant and compensator, dead time in all or in none."""
    finite_plant = np.isfinite(plants.numerator).all(1) & np.isfinite(plants.denominator).all(1)
    finite_comp = np.isfinite(compensators.numerator).all(1) & np.isfinite(compensators.denominator).all(1)
    usable = finite_plant[plant_of] & finite_comp[compensator_of]
    delayed = (plants.dead_time[plant_of] + compensators.dead_time[compensator_of]) > 0.0
    width = plants.denominator.shape[1] + compensators.denominator.shape[1] + 2
    dp, dc = exact_degree(plants.denominator)[plant_of], exact_degree(compensators.denominator)[compensator_of]
    usable &= (dp >= 0) & (dc >= 0)
    kind = np.where(usable, (dp * width + dc) * 2 + delayed, -1)
    for one in np.unique(kind[usable]):
        rows = np.flatnonzero(kind == one)
        for start in range(0, len(rows), CHUNK):
            yield rows[start : start + CHUNK]


def _fill(out: Evaluation, rows: IntArray, loops: Loops, screen: Screen) -> None:
    """Run one stack through the stages and write what each yields into its rows."""
    wanted = out.measures
    names = frozenset(w.quantity for w in wanted)

    stage = pole_stage(loops, wanted)  # stability, poles, and what needs no more than coefficients
    out.stable[rows] = stage.stable
    out.abscissa[rows] = stage.abscissa / loops.time_scale
    _write(out, rows, loops, stage.values, None)
    alive = np.flatnonzero(stage.stable)
    if alive.size == 0:
        return
    rows, loops, stage = rows[alive], loops.rows(alive), stage.rows(alive)

    needs_falls = bool(names & {"damping_ratio", "natural_frequency"})
    needs_frequency = needs_falls or any(QUANTITIES[n].stage == "frequency" for n in names) or screen.most_peak < np.inf
    keep = np.ones(len(rows), dtype=bool)
    if needs_frequency:
        asked = names | ({"sensitivity_peak"} if screen.most_peak < np.inf else set())
        found = frequency_stage(loops, stage.poles, asked | ({"highest_fall"} if needs_falls else set()))
        _write(out, rows, loops, {w: found[w.quantity] for w in wanted if w.quantity in found}, None)
        counted = stage.count(loops, wanted, found.get("highest_fall"))
        _write(out, rows, loops, counted, None)
        out.reached[rows] = 1
        for measure, values in counted.items():
            if measure.quantity == "damping_ratio":
                keep &= ~(values < screen.least_damping)
        if screen.most_peak < np.inf:
            keep &= ~(found["sensitivity_peak"] > screen.most_peak)
    if any(QUANTITIES[n].stage == "time" for n in names) and keep.any():
        rows, loops, stage = rows[keep], loops.rows(keep), stage.rows(keep)
        response = time_stage(loops, stage.poles, wanted)
        _write(out, rows, loops, response.values, response.approximate)
        out.reached[rows] = 2


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
