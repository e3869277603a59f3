"""Sequential programming on the maximin slack, all starts of all structures in lockstep.

S rows, V search coordinates (padded), C constraint values a row, G cases of the quantity to improve.

One iteration: forward differences of every slack, the step of a small programme inside a trust region, three
trial points along it, and the radius follows what was gained. The programme is linear in the slacks and
carries the curvature of their weighted sum, gathered from the differences of successive iterations, so that
an optimum that lies in no corner of the constraints is found as fast as one that does. A call of the core
costs much the same for one row as for a hundred, so the rows move together and each iteration is two calls.

Sources: R. Fletcher and E. Sainz de la Maza, "Nonlinear programming and nonsmooth optimization by successive
linear programming", Mathematical Programming 43 (1989) 235-256; the update of the curvature is the symmetric
rank-one one of A. R. Conn, N. I. M. Gould and Ph. L. Toint, Mathematical Programming 50 (1991) 177-195.
Figures (steps, factors, limits) were measured on the families of benchmarks/problems.py.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.search.archive import Rows, joined
from synth.search.goals import Goals, Terms, terms
from synth.search.linear_step import Step, maximin_step
from synth.search.objective import Objective
from synth.search.planes import Planes

TRIALS = (1.0, 0.5, 0.2)
GROWTH = (1.8, 0.9, 0.45)  # of the radius when the trial of the same place was best
SHRINK = 0.22  # when none was better
LARGEST_RADIUS = 1.5
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
    second          second differences in place of gathered curvature: dearer, for the last digits of an
                    optimum
    planes          how many slopes of other points are minded besides a row's own, see `planes`
    """

    radius: float = 0.4
    least: float = 2e-4
    iterations: int = 14
    halve: tuple[int, ...] = (3, 6)
    field: int = 5
    second: bool = False
    planes: int = 0


def polish(
    objective: Objective,
    rows: Rows,
    goals: Goals | None = None,
    *,
    pace: Pace | None = None,
    stop: Callable[[], bool] | None = None,
) -> Polished:
    """Improve every row until its trust region has shrunk, or the pace says so. `stop` is asked once an
    iteration."""
    pace = pace or Pace()
    goals = goals or Goals.same(len(rows))
    field = _Field(objective, rows, goals, pace)
    for iteration in range(pace.iterations):
        index = np.flatnonzero(field.running)
        if index.size == 0 or (stop is not None and stop()):
            break
        field.advance(index, pace)
        if iteration + 1 in pace.halve:
            losers = _losers(rows.structure, goals, field.merit, ~field.dropped, pace.field)
            field.dropped |= losers
            field.running &= ~losers
    return Polished(rows.at(field.x), field.merit, field.worst, field.stable, ~field.dropped)


EXACT_PACE = Pace(radius=0.02, iterations=4, least=2e-3, halve=())


@dataclass(slots=True)
class _Known:
    """What a row remembers of its last iteration: coordinates (S, V), slopes (S, C, V) and (S, G, V),
    multipliers (S, C) and (S, G), the curvature gathered so far (S, V, V), and whether there was an
    iteration (S,)."""

    x: FloatArray
    slope: FloatArray
    gain_slope: FloatArray
    multipliers: FloatArray
    gain_multipliers: FloatArray
    curvature: FloatArray
    usable: BoolArray


class _Field:
    """The rows of one polish and where they stand."""

    def __init__(self, objective: Objective, rows: Rows, goals: Goals, pace: Pace) -> None:
        self.objective, self.rows, self.goals = objective, rows, goals
        scores = objective.score(rows)
        state = terms(objective, goals, scores)
        self.x = rows.x.copy()
        self.constraint, self.cap, self.gain = state.constraint, state.cap, state.gain
        self.merit, self.worst, self.stable = state.merit(), scores.worst(), scores.stable.copy()
        self.radius = np.full(len(rows), pace.radius)
        self.running = np.ones(len(rows), dtype=bool)
        self.dropped = np.zeros(len(rows), dtype=bool)
        self.low, self.high, self.free = objective.limits(rows)
        count, variables = rows.x.shape
        cases = 0 if self.gain is None else self.gain.shape[1]
        self.known = _Known(
            self.x.copy(),
            np.zeros((*self.constraint.shape, variables)),
            np.zeros((count, cases, variables)),
            np.zeros(self.constraint.shape),
            np.zeros((count, cases)),
            np.zeros((count, variables, variables)),
            np.zeros(count, dtype=bool),
        )
        self.planes = Planes.of(pace.planes, self.x, self.constraint)

    def advance(self, index: IntArray, pace: Pace) -> None:
        """One iteration of the rows named by `index`."""
        here = self.rows.take(index).at(self.x[index])
        goals = self.goals.take(index)
        now = Terms(
            self.constraint[index],
            self.cap[index],
            None if self.gain is None else self.gain[index],
            goals.penalty,
        )
        if pace.planes:
            slope, gain_slope = self._slopes_of_several(index, here, goals, now)
        else:
            slope, gain_slope = self._slopes(index, here, goals, now)
        if pace.second:
            first = self._step(index, now, slope, gain_slope, None)
            curvature = self._second_differences(index, here, goals, now, first)
        else:
            curvature = self._gathered(index, slope, gain_slope)
        step = self._step(index, now, slope, gain_slope, curvature)
        self._remember(index, slope, gain_slope, step)
        self._try(index, here, goals, step, pace)

    def _step(
        self,
        index: IntArray,
        now: Terms,
        slope: FloatArray,
        gain_slope: FloatArray | None,
        curvature: FloatArray | None,
    ) -> Step:
        room = np.where(self.free[index], self.radius[index, None], 0.0)
        level, level_slope = self.planes.beside(
            index, self.x[index], now.constraint, slope, self.radius[index]
        )
        step = maximin_step(
            level,
            level_slope,
            -np.minimum(room, np.maximum(self.x[index] - self.low[index], 0.0)),
            np.minimum(room, np.maximum(self.high[index] - self.x[index], 0.0)),
            gain=now.gain,
            gain_slope=gain_slope,
            weight=1.0 if now.gain is None else now.penalty,
            cap=now.cap,
            curvature=curvature,
        )
        return replace(step, multipliers=step.multipliers[:, : now.constraint.shape[1]])

    def _try(self, index: IntArray, here: Rows, goals: Goals, step: Step, pace: Pace) -> None:
        """Score the trial points, move to the best where it is better, and let the radius follow."""
        low, high = self.low[index], self.high[index]
        points = joined([here.at(np.clip(here.x + t * step.d, low, high)) for t in TRIALS])
        tried = self.objective.score(points)
        ahead = terms(self.objective, _repeated(goals, len(TRIALS)), tried)
        merits = ahead.merit()
        choice = merits.reshape(len(TRIALS), -1).argmax(axis=0)
        source = choice * index.size + np.arange(index.size)
        better = merits[source] > self.merit[index] + 1e-12
        moved, source = index[better], source[better]
        self.x[moved], self.merit[moved] = points.x[source], merits[source]
        self.constraint[moved] = ahead.constraint[source]
        if self.gain is not None and ahead.gain is not None:
            self.gain[moved] = ahead.gain[source]
        self.worst[moved], self.stable[moved] = tried.worst()[source], tried.stable[source]
        if pace.planes:
            self.planes.look(index, self.x[index], self.constraint[index])
            nearest = np.arange((len(TRIALS) - 1) * index.size, len(TRIALS) * index.size)
            drop = np.abs(_difference(ahead.constraint[nearest], self.constraint[index])).max(axis=1)
            failed = ~better & (drop <= CLIFF)
            self.planes.look(index[failed], points.x[nearest[failed]], ahead.constraint[nearest[failed]])
        factor = np.where(better, np.array(GROWTH)[choice], SHRINK)
        self.radius[index] = np.minimum(self.radius[index] * factor, LARGEST_RADIUS)
        self.running[index] = self.radius[index] >= pace.least

    def _slopes_of_several(
        self, index: IntArray, here: Rows, goals: Goals, now: Terms
    ) -> tuple[FloatArray, FloatArray | None]:
        """Slopes as of `_slopes`; a row that did not move has its own already, and takes those of the nearest
        point that it failed to move to."""
        planes, known = self.planes, self.known
        there = here.at(planes.there[index])
        slope, gain_slope = self._slopes(
            index, there, goals, replace(now, constraint=planes.value_there[index])
        )
        planes.add(index, slope)
        elsewhere = (there.x != here.x).any(axis=1)[:, None, None]
        slope = np.where(elsewhere, known.slope[index], slope)
        if gain_slope is not None:
            gain_slope = np.where(elsewhere, known.gain_slope[index], gain_slope)
        return slope, gain_slope

    def _slopes(
        self, index: IntArray, here: Rows, goals: Goals, now: Terms
    ) -> tuple[FloatArray, FloatArray | None]:
        """Forward differences of every constraint (S, C, V) and of the gain (S, G, V); backward at an upper
        end."""
        row, variable = np.nonzero(self.free[index])
        length = np.maximum(0.02 * self.radius[index], 2e-5)[row]
        beyond = here.x[row, variable] + length > self.high[index][row, variable]
        length = np.where(beyond, -length, length)
        moved = here.x[row]
        moved[np.arange(len(row)), variable] += length
        there = self._terms_at(here.take(row).at(moved), goals.take(row))

        def spread(ahead: FloatArray, base: FloatArray) -> FloatArray:
            out = np.zeros((*base.shape, here.x.shape[1]))
            slope = _change(ahead, base[row]) / length[:, None]
            out[row, :, variable] = np.clip(slope, -STEEPEST, STEEPEST)
            return out

        gain_slope = None
        if now.gain is not None and there.gain is not None:
            gain_slope = spread(there.gain, now.gain)
        return spread(there.constraint, now.constraint), gain_slope

    def _terms_at(self, rows: Rows, goals: Goals) -> Terms:
        return terms(self.objective, goals, self.objective.score(rows, remember=False))

    def _gathered(self, index: IntArray, slope: FloatArray, gain_slope: FloatArray | None) -> FloatArray:
        """Curvature of the levels as the last multipliers weigh them, updated by what the slopes did
        since."""
        known = self.known
        moved = self.x[index] - known.x[index]
        turned = -np.einsum("sc,scv->sv", known.multipliers[index], slope - known.slope[index])
        if gain_slope is not None:
            turned -= np.einsum(
                "sc,scv->sv", known.gain_multipliers[index], gain_slope - known.gain_slope[index]
            )
        known.curvature[index] = updated(known.curvature[index], moved, turned, known.usable[index])
        return positive(known.curvature[index])

    def _remember(
        self, index: IntArray, slope: FloatArray, gain_slope: FloatArray | None, step: Step
    ) -> None:
        known = self.known
        known.x[index], known.slope[index], known.multipliers[index] = self.x[index], slope, step.multipliers
        if gain_slope is not None:
            known.gain_slope[index], known.gain_multipliers[index] = gain_slope, step.gain_multipliers
        known.usable[index] = True

    def _second_differences(
        self, index: IntArray, here: Rows, goals: Goals, now: Terms, step: Step
    ) -> FloatArray:
        """The same curvature from second differences, its negative eigenvalues cut off. (S, V, V)

        They know nothing of the box: a point beyond it is only looked at, never kept.
        """
        count, variables = here.x.shape
        free = self.free[index]
        length = np.clip(0.3 * self.radius[index], 2e-3, 5e-2)
        one, other = np.triu_indices(variables, 1)
        unit = np.eye(variables)
        moves = np.concatenate([unit, -unit, unit[one] + unit[other]])
        row, move = np.nonzero((free[:, None, :] | (moves == 0.0)[None, :, :]).all(axis=2))
        points = here.take(row).at(here.x[row] + length[row, None] * moves[move])
        there = self._terms_at(points, goals.take(row))
        flat = -(step.multipliers[row] * _change(there.constraint, now.constraint[row])).sum(axis=1)
        if now.gain is not None and there.gain is not None:
            flat -= (step.gain_multipliers[row] * _change(there.gain, now.gain[row])).sum(axis=1)
        change = np.zeros((count, len(moves)))
        change[row, move] = flat
        ahead, behind = change[:, :variables], change[:, variables : 2 * variables]
        mixed = np.where(
            free[:, one] & free[:, other], change[:, 2 * variables :] - ahead[:, one] - ahead[:, other], 0.0
        )
        hessian = np.zeros((count, variables, variables))
        hessian[:, one, other] = hessian[:, other, one] = mixed
        hessian[:, np.arange(variables), np.arange(variables)] = ahead + behind
        return positive(hessian / length[:, None, None] ** 2)


def _difference(ahead: FloatArray, base: FloatArray) -> FloatArray:
    """Differences, 0 where both are absent."""
    with np.errstate(invalid="ignore"):
        out: FloatArray = np.where(ahead == base, 0.0, ahead - base)
    return out


def _change(ahead: FloatArray, base: FloatArray) -> FloatArray:
    """Differences, 0 where one of them is absent or fell off a cliff."""
    change = _difference(ahead, base)
    out: FloatArray = np.where(np.isfinite(change) & (np.abs(change) <= CLIFF), change, 0.0)
    return out


def updated(curvature: FloatArray, moved: FloatArray, turned: FloatArray, usable: BoolArray) -> FloatArray:
    """H (S, V, V) after a move s (S, V) over which the gradient turned by y (S, V): the symmetric rank-one
    update, which starts from nothing and is exact for a quadratic after V moves. Skipped where it is ill
    determined."""
    missing = turned - np.einsum("svw,sw->sv", curvature, moved)
    weight = (missing * moved).sum(axis=1)
    size = np.sqrt((missing**2).sum(axis=1) * (moved**2).sum(axis=1))
    use = usable & (np.abs(weight) > 1e-3 * size) & (size > 0.0)
    change = missing[:, :, None] * missing[:, None, :] / np.where(use, weight, 1.0)[:, None, None]
    out: FloatArray = np.where(use[:, None, None], curvature + change, curvature)
    return out


def positive(curvature: FloatArray) -> FloatArray:
    """The part of H (S, V, V) with positive eigenvalues."""
    value, vector = np.linalg.eigh(curvature)
    out: FloatArray = (vector * np.maximum(value, 0.0)[:, None, :]) @ vector.transpose(0, 2, 1)
    return out


def _repeated(goals: Goals, times: int) -> Goals:
    return Goals(goals.aims, np.tile(goals.aim, times), np.tile(goals.level, times), goals.penalty)


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
