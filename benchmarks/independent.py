"""A long global search that shares nothing with ours but the evaluator: scipy's differential evolution.

The worst slack of one structure over its whole box, both signs of gain. Runs from fresh populations
follow each other until the evaluations are used up, in turns over the search coordinates themselves and over
the crossover with corners relative to it: what is a narrow valley in one of them need not be in the other.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import differential_evolution

from synth.search.archive import Rows
from synth.search.objective import Objective, uncompressed
from synth.search.polish import EXACT_PACE, polish
from synth.search.scales import response

MEMBERS = 30  # a coordinate
WIDE = 3.0 * float(np.log(10.0))
Array = np.ndarray


@dataclass(frozen=True)
class Best:
    """Where the best of all runs stands: x (P,), sign, worst slack, and what it took."""

    x: Array
    sign: float
    slack: float
    evaluations: int
    runs: int


@dataclass(frozen=True)
class Space:
    """A box (P + 1,) that scipy searches, and its points (N, P + 1) as rows; the last decides the sign."""

    low: Array
    high: Array
    rows: Callable[[Array], Rows]


def search(objective: Objective, n: int, evaluations: int, seed: int = 0, *, steering: bool = False) -> Best:
    """The best of structure n that `evaluations` of them find, on the cases that are active: by the exact
    worst slack, or by the one that our search steers by."""
    if not steering:
        with objective.literally():
            return search(objective, n, evaluations, seed, steering=True)
    spaces = [_own(objective, n), _by_crossover(objective, n)]
    used, runs, best = 0, 0, None

    with objective.approximating():
        while used < evaluations:
            space = spaces[runs % 2]

            def cost(u: Array, space: Space = space) -> Array:
                return -objective.score(space.rows(u.T), remember=False, hasty=True).guide()

            members = MEMBERS * len(space.low)
            before = objective.evaluations
            result = differential_evolution(
                cost,
                list(zip(space.low, space.high, strict=True)),
                popsize=MEMBERS,
                maxiter=max((evaluations - used) // members - 1, 1),
                tol=0.0,
                atol=1e-5,
                rng=[seed, runs],
                polish=False,
                vectorized=True,
                updating="deferred",
                mutation=(0.4, 1.0),
                recombination=0.8,
            )
            used, runs = used + objective.evaluations - before, runs + 1
            if best is None or -float(result.fun) > best[1]:
                best = space.rows(result.x[None, :]), -float(result.fun)
    if best is None:
        raise ValueError("there are no evaluations to search with")
    rows, slack = best
    if objective.delayed:  # the stand-in led the way
        done = polish(objective, rows, pace=EXACT_PACE)
        rows, slack = done.rows, float(done.merit[0])
    slack = float(uncompressed(np.array([slack]))[0])
    return Best(rows.x[0, : len(objective.boxes[n][0])], float(rows.sign[0]), slack, used, runs)


def _own(objective: Objective, n: int) -> Space:
    """The search coordinates, the gain within three decades beyond what any crossover of the plant asks
    for."""
    low, high = (end.copy() for end in objective.boxes[n])
    marks = np.log(objective.scales.marks)
    w = np.exp(np.linspace(marks[0] - WIDE, marks[-1] + WIDE, 200))
    size = np.abs(response(objective.task.plants, w)[0]) / objective.scales.gain
    size = np.log(size[np.isfinite(size) & (size > 0.0)])
    low[0], high[0] = max(-size.max() - WIDE, -25.0), min(-size.min() + WIDE, 25.0)

    def rows(u: Array) -> Rows:
        return objective.rows_at(n, u[:, :-1], _sign(u))

    return Space(np.append(low, -1.0), np.append(high, 1.0), rows)


def _by_crossover(objective: Objective, n: int) -> Space:
    """ln of the crossover, free corners relative to it, ratios as they are; abs(L) = 1 gives the gain."""
    structure, (low, high) = objective.structures[n], objective.boxes[n]
    own = structure.box()
    free = ~(np.isfinite(own[0]) & np.isfinite(own[1]))
    free[0] = False
    turn = np.array([1.0 if p.role == "frequency" else -1.0 for p in structure.parameters])
    marks = np.log(objective.scales.marks * objective.scales.time)
    bottom, top = np.where(free, -WIDE, low), np.where(free, WIDE, high)
    bottom[0], top[0] = marks[0] - WIDE, marks[-1] + WIDE

    def rows(u: Array) -> Rows:
        x = u[:, :-1].copy()
        x[:, free] = turn[free] * (x[:, free] + u[:, :1])
        x = np.clip(x, np.where(np.isfinite(low), low, x), np.where(np.isfinite(high), high, x))
        x[:, 0] = 0.0
        w = np.exp(u[:, 0]) / objective.scales.time
        theta = structure.from_search(x, np.ones(len(x)), objective.scales.time, objective.scales.gain)
        size = np.abs(structure.response(theta, w) * response(objective.task.plants, w)[0])
        with np.errstate(divide="ignore"):
            gain = -np.log(size)
        x[:, 0] = np.clip(np.nan_to_num(gain), -30.0, 30.0)
        return objective.rows_at(n, x, _sign(u))

    return Space(np.append(bottom, -1.0), np.append(top, 1.0), rows)


def _sign(u: Array) -> Array:
    return np.where(u[:, -1] < 0.0, -1.0, 1.0)
