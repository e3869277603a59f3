"""A scan of everything that a structure of two or three parameters can be, for sheets that nothing meets.

It has no starts and no luck in it. The box of the corners and ratios is covered with cells, and the gain line
of each with the gains that are stable in its centre or in a neighbour's, known exactly from the root locus;
with dead time, where that is dear, with all gains that give a crossover in the band. Cells that may hold more
than the best found are divided (synth.search.cells), and the best centres are polished like any start.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import stacks
from synth.loop.poles.gain_line import stable_gain_intervals
from synth.search.archive import Rows, distinct
from synth.search.campaign import Campaign
from synth.search.cells import Cells, Look, beside, joined, on_a_grid, refined
from synth.search.gain_line import FURTHEST
from synth.search.objective import ABSENT, Objective, uncompressed
from synth.search.polish import Pace
from synth.search.scales import response
from synth.search.starts import DECADE, Band, plant_band

MOST_PARAMETERS = 3
WIDTH = 1.0  # ln, widest cell of the first grid
CENTRES = 8_000  # loops scored at most beyond the first grid
DEEP = -0.5  # a cell bounded to lie below this is of no interest, whatever the best
PICKS = 4


@dataclass(frozen=True, slots=True)
class Cover:
    """rows: centres of cells, guide (S,) their worst slack; the largest ratio between neighbouring values of
    a parameter in the first grid; ceiling: what the slack may reach anywhere, None where nothing is
    stable."""

    rows: Rows
    guide: FloatArray
    resolution: float
    ceiling: float | None


def dense_scans(campaign: Campaign) -> bool:
    """Scan every structure of two or three parameters that does not meet the sheet; True when one came
    nearer.

    The resolution and the ceiling of each scan are left in its standing. Where there is dead time both, like
    the search, rest on the rational stand-in.
    """
    better = False
    for standing in campaign.standings:
        if not 1 < standing.parameters <= MOST_PARAMETERS or standing.best >= 0.0 or campaign.halted():
            continue
        before = standing.best
        with campaign.objective.approximating():
            found = cover(campaign.objective, standing.number, before)
        standing.resolution, standing.ceiling = found.resolution, found.ceiling
        if not len(found.rows):
            continue
        chosen = found.rows.take(distinct(found.rows, found.guide, PICKS))
        origin = np.full(len(chosen), campaign.origin("a dense scan"))
        campaign.polish_in(Rows(chosen.structure, chosen.x, chosen.sign, origin), Pace(radius=0.3, halve=()))
        standing.judge()
        if standing.ceiling is not None:
            standing.ceiling = max(standing.ceiling, standing.best)
        better |= standing.best > before + 1e-3
    return better


def cover(objective: Objective, n: int, known: float = -np.inf) -> Cover:
    """Cells over the whole box of structure n and both signs, divided where more than `known` may be."""

    def look(x: FloatArray, sign: FloatArray) -> FloatArray:
        scores = objective.score(objective.rows_at(n, x, sign), hasty=True, remember=False)
        return _plain(scores.search.min(axis=1), scores.stable)

    low, high = objective.boxes[n]
    counts = np.ceil((high[1:] - low[1:]) / WIDTH).astype(int)
    half = 0.5 * (high[1:] - low[1:]) / counts
    axes = [a + h * (2 * np.arange(c) + 1) for a, h, c in zip(low[1:], half, counts, strict=True)]
    shapes = np.array(list(itertools.product(*axes)))
    parts = [
        _grid(shapes, counts, half, ends, sign, look)
        for sign, ends in zip((1.0, -1.0), _gain_ends(objective, n, shapes), strict=True)
        if bool((ends[0] < ends[1]).any())
    ]
    if not parts:
        none = objective.rows_at(n, np.zeros((0, len(low))), np.zeros(0))
        return Cover(none, np.zeros(0), float(np.exp(2.0 * half.max())), None)
    cells = joined(parts)
    resolution = float(np.exp(2.0 * cells.half.max()))
    cells = refined(cells, look, CENTRES // len(objective.active[n]), known, DEEP)
    return Cover(
        objective.rows_at(n, cells.centre, cells.sign),
        cells.guide(),
        resolution,
        max(float(cells.bound().max()), cells.best()),
    )


def _grid(
    shapes: FloatArray,
    counts: IntArray,
    half: FloatArray,
    ends: tuple[FloatArray, FloatArray],
    sign: float,
    look: Look,
) -> Cells:
    """Cells of one sign. shapes (n, P - 1) on a grid of `counts`, cells there `half` wide each way; ends
    (n,) twice."""
    least, most = ends
    bottom, top = float(least[least < most].min()), float(most[least < most].max())
    steps = max(int(np.ceil((top - bottom) / WIDTH)), 1)
    tall = 0.5 * (top - bottom) / steps
    gains = bottom + tall * (2 * np.arange(steps) + 1)
    wide = (
        _widened(e.reshape(counts), take).reshape(-1, 1)
        for e, take in zip(ends, (np.fmin, np.fmax), strict=True)
    )
    shape, gain = np.nonzero((gains + tall > next(wide)) & (gains - tall < next(wide)))
    centre = np.column_stack([gains[gain], shapes[shape]])
    found = look(centre, np.full(len(centre), sign))
    full = np.full((steps, len(shapes), found.shape[1]), np.nan)
    full[gain, shape] = found
    halves = np.array([tall, *half])
    slack, slope = on_a_grid(full.reshape(steps, *counts, -1), 2.0 * halves)
    return Cells(
        centre,
        np.tile(halves, (len(centre), 1)),
        np.full(len(centre), sign),
        slack.reshape(full.shape)[gain, shape],
        ~np.isnan(found),
        slope.reshape(steps, len(shapes), len(halves), -1)[gain, shape],
    )


def _plain(search: FloatArray, stable: BoolArray) -> FloatArray:
    """Search slacks (n, R) without their compression, which hides how steep they are; NaN where absent."""
    plain = np.minimum(uncompressed(search), 1.0)
    out: FloatArray = np.where(stable[:, None] & (search > ABSENT), plain, np.nan)
    return out


def _gain_ends(
    objective: Objective, n: int, shapes: FloatArray
) -> tuple[tuple[FloatArray, FloatArray], tuple[FloatArray, FloatArray]]:
    """For gains above and below 0: least and greatest gain coordinate worth a look, (shapes,) each; the least
    is above the greatest where there is none."""
    structure, plants = objective.structures[n], objective.task.plants
    x = np.column_stack([np.zeros(len(shapes)), shapes])
    unit = structure.realise(
        structure.from_search(x, np.ones(len(x)), objective.scales.time, objective.scales.gain)
    )
    wide = plant_band(objective)
    w = Band(wide.low - 0.5 * DECADE, wide.high + 0.5 * DECADE).at(np.linspace(0.0, 1.0, 200))
    size = np.abs(response(unit, w)) * np.abs(response(plants, w)[0])
    with np.errstate(divide="ignore"):
        least = np.maximum(-np.log(size.max(axis=1)) - DECADE, -2.0 * FURTHEST)
        most = np.minimum(-np.log(size.min(axis=1)), 2.0 * FURTHEST)
    if objective.delayed:
        return (least, most), (least, most)
    ends = _stable_ends(plants, unit)
    return (
        (np.maximum(least, ends[0]), np.minimum(most, ends[1])),
        (np.maximum(least, ends[2]), np.minimum(most, ends[3])),
    )


def _stable_ends(plants: Rational, unit: Rational) -> FloatArray:
    """(4, B): logarithms of the least and the greatest gain that stabilise the first plant, above and below
    0, as factors on each of the B compensators."""
    count = len(unit)
    out = np.repeat(np.array([np.inf, -np.inf, np.inf, -np.inf])[:, None], count, axis=1)
    nominal, every = np.zeros(count, dtype=np.intp), np.arange(count)
    for rows in stacks(plants, unit, nominal, every):
        loops = close(plants, unit, nominal[rows], every[rows])
        for i, intervals in zip(rows, stable_gain_intervals(loops), strict=True):
            for one in intervals:
                for k, (low, high) in ((0, (one.low, one.high)), (2, (-one.high, -one.low))):
                    if high > 0.0:
                        with np.errstate(divide="ignore"):
                            out[k, i] = min(out[k, i], np.log(max(low, 0.0)))
                        out[k + 1, i] = max(out[k + 1, i], np.log(high))
    return out


def _widened(ends: FloatArray, take: np.ufunc) -> FloatArray:
    """The ends with those of all neighbours on the grid taken in; `take` passes over NaN."""
    for axis in range(ends.ndim):
        ends = take(take(*beside(ends, axis)), ends)
    return ends
