"""A grid over everything that a structure of two or three parameters can be, for sheets that nothing meets.

It has no starts and no luck in it: corners and ratios over their whole range, the gain by the crossover it
gives. What it finds is polished like any start, so a basin wider than a cell of the grid cannot have been
missed.
"""

from __future__ import annotations

import itertools

import numpy as np

from synth.loop.arrays import FloatArray
from synth.search.archive import Rows, distinct
from synth.search.campaign import Campaign
from synth.search.objective import Objective
from synth.search.polish import Pace
from synth.search.scales import response
from synth.search.starts import DECADE, Band, plant_band

MOST_PARAMETERS = 3
CORNERS = {2: 48, 3: 28}  # points along a corner and along the crossover, by the number of parameters
RATIOS = 12  # points along a ratio
PICKS = 4


def dense_scans(campaign: Campaign) -> bool:
    """Scan every structure of two or three parameters that does not meet the sheet; True when one came
    nearer.

    The resolution of each scan is left in its standing.
    """
    better = False
    for standing in campaign.standings:
        if not 1 < standing.parameters <= MOST_PARAMETERS or standing.best >= 0.0 or campaign.halted():
            continue
        n, before = standing.number, standing.best
        rows, standing.resolution = grid(campaign.objective, n, standing.signs)
        guide = campaign.objective.score(rows, hasty=True).guide()
        chosen = rows.take(distinct(rows, guide, PICKS))
        origin = np.full(len(chosen), campaign.origin("a dense scan"))
        chosen = Rows(chosen.structure, chosen.x, chosen.sign, origin)
        campaign.polish_in(chosen, Pace(radius=0.3, halve=()))
        standing.judge()
        better |= standing.best > before + 1e-3
    return better


def grid(objective: Objective, n: int, signs: tuple[int, ...]) -> tuple[Rows, float]:
    """Rows of structure n over its whole box, and the largest ratio between neighbouring values of a
    parameter."""
    structure = objective.structures[n]
    own = structure.box()
    low, high = objective.boxes[n]
    count = CORNERS[len(structure.parameters)]
    axes: list[FloatArray] = []
    steps = []
    for j in range(1, len(structure.parameters)):
        points = RATIOS if np.isfinite(own[0][j]) and np.isfinite(own[1][j]) else count
        axes.append(np.linspace(low[j], high[j], points))
        steps.append((high[j] - low[j]) / (points - 1))
    wide = plant_band(objective)
    band = Band(wide.low - 0.5 * DECADE, wide.high + 0.5 * DECADE)
    crossover = band.at(np.linspace(0.0, 1.0, count))
    steps.append((band.high - band.low) / (count - 1))
    corners = np.array(list(itertools.product(*axes)))
    x = np.zeros((len(corners) * count, objective.width))
    x[:, 1 : len(axes) + 1] = np.repeat(corners, count, axis=0)
    at = np.tile(crossover, len(corners))
    theta = structure.from_search(
        x[:, : len(structure.parameters)], np.ones(len(x)), objective.scales.time, objective.scales.gain
    )
    size = np.abs(
        structure.response(theta, at) * np.tile(response(objective.task.plants, crossover)[0], len(corners))
    )
    with np.errstate(divide="ignore"):
        x[:, 0] = -np.log(size)
    x = x[np.isfinite(x[:, 0])]
    both = np.concatenate([x] * len(signs))
    sign = np.repeat(np.array(signs, dtype=float), len(x))
    rows = Rows(np.full(len(both), n), both, sign, np.full(len(both), -1))
    return rows, float(np.exp(max(steps)))
