"""Sequential linear programming on the maximin slack, all starts of all structures in lockstep.

S rows, V search coordinates (padded), C constraint values a row.

One iteration: forward differences of every slack, the step of a small linear programme inside a trust region, three
trial points along it, and the radius follows what was gained. A call of the core costs much the same for one row as
for a hundred, so the rows move together and each iteration is two calls.

Source of the method: R. Fletcher and E. Sainz de la Maza, "Nonlinear programming and nonsmooth optimization by
successive linear programming", Mathematical Programming 43 (1989) 235-256. Figures (steps, factors, limits) were
measured on the problem families of benchmarks/problems.py.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.search.archive import Rows, joined
from synth.search.goals import PENALTY, Goals, Terms, terms
from synth.search.linear_step import Step, maximin_step
from synth.search.objective import Objective

TRIALS = (1.0, 0.5, 0.2)
GROWTH = (1.8, 0.9, 0.45)  # of the radius when the trial of the same place was best
SHRINK = 0.22  # when none was better
LEAST_RADIUS = 2e-4
CLIFF = 3.0  # a difference larger than this fell off the edge of stability
STEEPEST = 60.0


@dataclass(frozen=True, slots=True)
class Polished:
    """rows where they ended; merit (S,); exact worst slack (S,) on the cases judged; stable (S,);
    finished (S,) False for those dropped from the field half way."""

    rows: Rows
    merit: FloatArray
    worst: FloatArray
    stable: BoolArray
    finished: BoolArray


@dataclass(frozen=True, slots=True)
class Pace:
    """How long a polish goes on.

    radius, least   of the trust region at the start and at the end
    iterations      at most
    halve           after these iterations the worse half of each structure's rows is dropped, down to `field`
    curvature       second differences as well: for optima that lie in no corner of the constraints
    """

    radius: float = 0.25
    least: float = LEAST_RADIUS
    iterations: int = 14
    halve: tuple[int, ...] = (3, 6)
    field: int = 3
    curvature: bool = False


def polish(
    objective: Objective,
    rows: Rows,
    goals: Goals | None = None,
    *,
    pace: Pace | None = None,
    stop: Callable[[], bool] | None = None,
) -> Polished:
    """Improve every row until its trust region has shrunk, or the pace says so."""
    pace = pace or Pace()
    goals = goals or Goals.same(len(rows))
    scores = objective.score(rows)
    state = terms(objective, goals, scores)
    x, merit, worst, stable = rows.x.copy(), state.merit(), scores.worst(), scores.stable.copy()
    radius = np.full(len(rows), pace.radius)
    running = np.ones(len(rows), dtype=bool)
    dropped = np.zeros(len(rows), dtype=bool)
    constraint, cap, gain = state.constraint, state.cap, state.gain
    low, high = _boxes(objective, rows)
    free = _free(objective, rows)
    for iteration in range(pace.iterations):
        index = np.flatnonzero(running)
        if index.size == 0 or (stop is not None and stop()):
            break
        here = rows.take(index).at(x[index])
        now = Terms(constraint[index], cap[index], None if gain is None else gain[index])
        aims = goals.take(index)
        room = np.where(free[index], radius[index, None], 0.0)
        least = -np.minimum(room, np.maximum(x[index] - low[index], 0.0))
        most = np.minimum(room, np.maximum(high[index] - x[index], 0.0))
        slope, gain_slope = _slopes(objective, here, aims, now, radius[index], high[index], free[index])

        def step_with(
            curvature: FloatArray | None,
            now: Terms = now,
            slope: FloatArray = slope,
            gain_slope: FloatArray | None = gain_slope,
            least: FloatArray = least,
            most: FloatArray = most,
        ) -> Step:
            return maximin_step(
                now.constraint,
                slope,
                least,
                most,
                gain=now.gain,
                gain_slope=gain_slope,
                weight=1.0 if now.gain is None else PENALTY,
                cap=now.cap,
                curvature=curvature,
            )

        step = step_with(None)
        if pace.curvature:
            step = step_with(_curvature(objective, here, aims, now, step, radius[index], free[index]))
        points = [here.at(np.clip(here.x + t * step.d, low[index], high[index])) for t in TRIALS]
        tried = objective.score(joined(points))
        ahead = terms(objective, _repeated(aims, len(TRIALS)), tried)
        merits = ahead.merit().reshape(len(TRIALS), -1)
        choice = merits.argmax(axis=0)
        better = merits[choice, np.arange(index.size)] > merit[index] + 1e-12
        taken = choice * index.size + np.arange(index.size)
        factor = np.where(better, np.array(GROWTH)[choice], SHRINK)
        moved, source = index[better], taken[better]
        x[moved] = joined(points).x[source]
        merit[moved] = ahead.merit()[source]
        constraint[moved] = ahead.constraint[source]
        if gain is not None and ahead.gain is not None:
            gain[moved] = ahead.gain[source]
        worst[moved], stable[moved] = tried.worst()[source], tried.stable[source]
        radius[index] = np.minimum(radius[index] * factor, 1.5)
        running[index] = radius[index] >= pace.least
        if iteration + 1 in pace.halve:
            losers = _losers(rows.structure, goals, merit, running | ~dropped, pace.field)
            dropped |= losers
            running &= ~losers
    return Polished(rows.at(x), merit, worst, stable, ~dropped)


def _slopes(
    objective: Objective,
    rows: Rows,
    goals: Goals,
    now: Terms,
    radius: FloatArray,
    high: FloatArray,
    free: BoolArray,
) -> tuple[FloatArray, FloatArray | None]:
    """Forward differences of every constraint (S, C, V) and of the gain (S, A, V); backward at an upper bound."""
    row, variable = np.nonzero(free)
    length = np.maximum(0.02 * radius, 2e-5)[row]
    length = np.where(rows.x[row, variable] + length > high[row, variable], -length, length)
    moved = rows.x[row]
    moved[np.arange(len(row)), variable] += length
    scores = objective.score(rows.take(row).at(moved), remember=False)
    there = terms(objective, goals.take(row), scores)

    def spread(ahead: FloatArray, base: FloatArray) -> FloatArray:
        with np.errstate(invalid="ignore"):
            change = ahead - base[row]
        change = np.where(np.isfinite(change) & (np.abs(change) <= CLIFF), change, 0.0)
        out = np.zeros((*base.shape, rows.x.shape[1]))
        out[row, :, variable] = np.clip(change / length[:, None], -STEEPEST, STEEPEST)
        return out

    gain_slope = None
    if now.gain is not None and there.gain is not None:
        gain_slope = spread(there.gain, now.gain)
    return spread(there.constraint, now.constraint), gain_slope


def _curvature(
    objective: Objective,
    rows: Rows,
    goals: Goals,
    now: Terms,
    step: Step,
    radius: FloatArray,
    free: BoolArray,
) -> FloatArray:
    """Second differences of -(multipliers · levels), its negative eigenvalues cut off. (S, V, V)

    They know nothing of the box: a point beyond it is only looked at, never kept.
    """
    count, variables = rows.x.shape
    length = np.clip(0.3 * radius, 2e-3, 5e-2)
    one, other = np.triu_indices(variables)
    moves = np.zeros((2 * variables + one.size, variables))
    moves[np.arange(variables), np.arange(variables)] = 1.0
    moves[np.arange(variables, 2 * variables), np.arange(variables)] = -1.0
    moves[2 * variables + np.arange(one.size), one] += 1.0
    moves[2 * variables + np.arange(one.size), other] += 1.0
    wanted = (free[:, None, :] | (moves == 0.0)[None, :, :]).all(axis=2)
    wanted[:, 2 * variables :] &= one != other
    row, move = np.nonzero(wanted)
    scores = objective.score(rows.take(row).at(rows.x[row] + length[row, None] * moves[move]), remember=False)
    there = terms(objective, goals.take(row), scores)

    def weighed(ahead: FloatArray, base: FloatArray, multipliers: FloatArray) -> FloatArray:
        with np.errstate(invalid="ignore"):
            change = ahead - base[row]
        change = np.where(np.isfinite(change) & (np.abs(change) <= CLIFF), change, 0.0)
        out: FloatArray = -(multipliers[row] * change).sum(axis=1)
        return out

    flat = weighed(there.constraint, now.constraint, step.multipliers)
    if now.gain is not None and there.gain is not None:
        flat = flat + weighed(there.gain, now.gain, step.gain_multipliers)
    change = np.zeros((count, len(moves)))
    change[row, move] = flat
    ahead, behind = change[:, :variables], change[:, variables : 2 * variables]
    hessian = np.zeros((count, variables, variables))
    mixed = change[:, 2 * variables :] - ahead[:, one] - ahead[:, other]
    mixed = np.where(wanted[:, 2 * variables :], mixed, 0.0)
    hessian[:, one, other] = mixed
    hessian[:, other, one] = mixed
    hessian[:, np.arange(variables), np.arange(variables)] = ahead + behind
    hessian /= length[:, None, None] ** 2
    value, vector = np.linalg.eigh(hessian)
    out: FloatArray = (vector * np.maximum(value, 0.0)[:, None, :]) @ vector.transpose(0, 2, 1)
    return out


def _boxes(objective: Objective, rows: Rows) -> tuple[FloatArray, FloatArray]:
    low = np.full(rows.x.shape, -np.inf)
    high = np.full(rows.x.shape, np.inf)
    for s in np.unique(rows.structure):
        index = rows.structure == s
        box = objective.boxes[int(s)]
        low[index, : len(box[0])], high[index, : len(box[1])] = box
    return low, high


def _free(objective: Objective, rows: Rows) -> BoolArray:
    count = np.array([len(s.parameters) for s in objective.structures])[rows.structure]
    out: BoolArray = np.arange(rows.x.shape[1])[None, :] < count[:, None]
    return out


def _repeated(goals: Goals, times: int) -> Goals:
    return Goals(goals.aims, np.tile(goals.aim, times), np.tile(goals.level, times))


def _losers(structure: IntArray, goals: Goals, merit: FloatArray, alive: BoolArray, field: int) -> BoolArray:
    """The worse half of the rows that share structure and goal, as long as more than `field` are left."""
    out = np.zeros(len(structure), dtype=bool)
    level = np.nan_to_num(goals.level, nan=-1.0)
    groups = np.unique(np.column_stack([structure, goals.aim, level]), axis=0)
    for s, aim, at in groups:
        index = np.flatnonzero((structure == s) & (goals.aim == aim) & (level == at) & alive)
        keep = max(field, (index.size + 1) // 2)
        out[index[np.argsort(-merit[index], kind="stable")[keep:]]] = True
    return out
