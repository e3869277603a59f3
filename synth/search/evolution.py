"""A short differential evolution of several structures in lockstep: finds other basins where the polish
stood still.

S members in all, V coordinates. One generation is one call of the core.

Source: R. Storn and K. Price, "Differential evolution", J. Global Optimization 11 (1997) 341-359; here the
variant that starts from the best member (best/1/bin) for half of the trials and from a random one for the
rest, with the difference weight drawn anew for every trial.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from synth.loop.arrays import FloatArray
from synth.search.archive import Rows
from synth.search.objective import Objective

CROSSING = 0.8  # share of coordinates taken from the mutant


def evolve(
    objective: Objective,
    members: Rows,
    *,
    generations: int,
    rng: np.random.Generator,
    stop: Callable[[], bool] | None = None,
) -> tuple[Rows, FloatArray]:
    """Evolve the members of each structure among themselves. Returns them and their search slacks (S,).

    A structure needs at least four members. The sign of a trial is that of the member it starts from.
    """
    score = objective.score(members).guide()
    x, sign = members.x.copy(), members.sign.copy()
    blocks = [np.flatnonzero(members.structure == s) for s in np.unique(members.structure)]
    for _ in range(generations):
        if stop is not None and stop():
            break
        trial, trial_sign = np.empty_like(x), np.empty_like(sign)
        for block in blocks:
            s = int(members.structure[block[0]])
            low, high = objective.boxes[s]
            p = len(low)
            count = block.size
            a, b, c = (block[rng.integers(count, size=count)] for _ in range(3))
            best = block[int(np.argmax(score[block]))]
            base = np.where(rng.random(count) < 0.5, best, a)
            weight = rng.uniform(0.4, 0.9, size=(count, 1))
            mutant = x[base, :p] + weight * (x[b, :p] - x[c, :p])
            keep = rng.random((count, p)) > CROSSING
            keep[np.arange(count), rng.integers(p, size=count)] = False
            trial[block] = x[block]
            trial[block, :p] = np.clip(np.where(keep, x[block, :p], mutant), low, high)
            trial_sign[block] = sign[base]
        rows = Rows(members.structure, trial, trial_sign, members.origin)
        reached = objective.score(rows).guide()
        better = reached >= score
        x[better], sign[better], score[better] = trial[better], trial_sign[better], reached[better]
    return Rows(members.structure, x, sign, members.origin), score
