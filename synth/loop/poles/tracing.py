"""Roots at a run of parameter values, joined to continuous branches.

Neighbouring sets of roots are matched by nearness; where that is not clear, or the picture would show a
corner, a value is put in between. At a repeated root either continuation is right: branches meet there and
part.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray

# A step may be this part of the picture's size, and this part of the distance to the next branch, at most.
PICTURE_STEP = 0.03
CLEAR_STEP = 0.35
# No further halving below this part of the parameter's value.
FINEST = 1e-7


def traced(
    roots_at: Callable[[FloatArray], ComplexArray], values: FloatArray, most: int
) -> tuple[FloatArray, ComplexArray]:
    """Values with those put in between, (G,), and branches, (n, G)."""
    values = np.asarray(values, dtype=float)
    roots = roots_at(values)
    if roots.shape[1] == 0:
        return values, roots.T
    size = _picture_size(roots)
    while len(values) < most:
        joined = _joined(roots)
        room = np.diff(values) > FINEST * np.maximum(np.abs(values[1:]), np.abs(values[:-1]))
        split = np.flatnonzero(_coarse(joined, size) & room)
        if split.size == 0:
            break
        split = split[: most - len(values)]
        fresh = 0.5 * (values[split] + values[split + 1])
        order = np.argsort(np.concatenate([values, fresh]), kind="stable")
        roots = np.concatenate([roots, roots_at(fresh)])[order]
        values = np.concatenate([values, fresh])[order]
    return values, _joined(roots).T


def _picture_size(roots: ComplexArray) -> float:
    """A length to measure steps with: the roots' typical distance from the origin, far branches apart."""
    size = np.abs(roots[np.isfinite(roots)])
    return float(np.quantile(size, 0.75)) if size.size and size.max() > 0.0 else 1.0


def _coarse(joined: ComplexArray, size: float) -> BoolArray:
    """Steps that are too long to draw or to be sure of, (G - 1,)."""
    step = np.abs(np.diff(joined, axis=0))
    apart = np.abs(joined[:, :, None] - joined[:, None, :])
    diagonal = np.arange(joined.shape[1])
    apart[:, diagonal, diagonal] = np.inf
    nearest = np.fmin.reduce(apart, axis=2, initial=np.inf)
    gap = np.fmin(nearest[1:], nearest[:-1])
    scale = np.fmin(np.fmax(size, np.abs(joined[1:])), 1e300)
    # near a repeated root no step is short against the gap: there the picture's size alone decides
    unclear = (step > CLEAR_STEP * gap) & (step > 0.2 * PICTURE_STEP * scale)
    out: BoolArray = (unclear | (step > PICTURE_STEP * scale)).any(axis=1)
    return out


def _joined(roots: ComplexArray) -> ComplexArray:
    """Columns put in order so that each follows one branch. (G, n) -> (G, n)."""
    out = roots.copy()
    for g in range(1, len(out)):
        out[g] = out[g][_nearest_assignment(out[g - 1], out[g])]
    return out


def _nearest_assignment(before: ComplexArray, after: ComplexArray) -> IntArray:
    """A permutation of `after` that keeps the sum of squared steps small: greedy, then exchanges of two."""
    count = len(before)
    cost = np.abs(before[:, None] - after[None, :]) ** 2
    cost = np.where(np.isnan(cost), 1e300, cost)  # a root at infinity goes to what is left
    pick: IntArray = cost.argmin(axis=1)
    if len(set(pick.tolist())) == count:
        return pick
    pick = np.full(count, -1)
    free = cost.copy()
    for _ in range(count):
        i, j = divmod(int(np.argmin(free)), count)
        pick[i] = j
        free[i, :] = free[:, j] = np.inf
    better = True
    while better:
        better = False
        for i in range(count):
            for k in range(i + 1, count):
                now, then = cost[i, pick[i]] + cost[k, pick[k]], cost[i, pick[k]] + cost[k, pick[i]]
                if then < now * (1.0 - 1e-12):
                    pick[i], pick[k] = pick[k], pick[i]
                    better = True
    return pick
