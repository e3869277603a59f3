"""Cells of a box that know how high the worst slack in them may lie, and are divided where that matters.

N cells, P coordinates, R requirements. A cell is looked at in its centre. How each slack changes along each
coordinate is measured between neighbouring centres; nothing in the cell is taken to rise above its centre by
more than MARGIN times what these slopes make over the half widths. That is an estimate and no proof: what
changes within a cell and not between its neighbours escapes it.

A slack that is absent (NaN: no stable loop, or nothing to measure) is taken from a neighbour that has it, so
that the edge of stability is no cliff to be followed for ever; where no neighbour has it, it is LOST.

The division in three that keeps the centre is that of D. R. Jones, C. D. Perttunen and B. E. Stuckman,
J. Optimization Theory and Applications 79 (1993) 157-181.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray

MARGIN = 2.0  # measured by `ceilings` of benchmarks/bench_global.py
LOST = -1e3
ENOUGH = 2e-3  # a cell that may lie above the best by no more than this is left whole
AT_ONCE = 256  # cells divided together: what a call costs is shared

Look = Callable[[FloatArray, FloatArray], FloatArray]  # x (n, P), sign (n,) -> slack (n, R)


@dataclass(frozen=True, slots=True)
class Cells:
    """centre, half (N, P); sign (N,) of the gain; slack (N, R) in the centre, never NaN, and whether it was
    seen there, not borrowed; slope (N, P, R) without their signs."""

    centre: FloatArray
    half: FloatArray
    sign: FloatArray
    slack: FloatArray
    seen: BoolArray
    slope: FloatArray

    def __len__(self) -> int:
        return int(self.sign.shape[0])

    def best(self) -> float:
        """The highest worst slack of a centre, -inf where none has all."""
        return float(self.guide().max())

    def guide(self) -> FloatArray:
        """(N,) worst slack of each centre, -inf where some slack is absent."""
        out: FloatArray = np.where(self.seen, self.slack, -np.inf).min(axis=1)
        return out

    def bound(self) -> FloatArray:
        """(N,) what the worst slack may reach in each: in every cell one requirement is the least hopeful."""
        rise = np.einsum("npr,np->nr", self.slope, self.half)
        out: FloatArray = (self.slack + MARGIN * rise).min(axis=1)
        return out

    def take(self, index: IntArray) -> Cells:
        """The cells named by `index` (integers or a mask)."""
        return Cells(
            self.centre[index],
            self.half[index],
            self.sign[index],
            self.slack[index],
            self.seen[index],
            self.slope[index],
        )

    def divided(self, look: Look) -> Cells:
        """Each in three along the coordinate that its least slack changes most in. Two new centres a cell."""
        row = np.arange(len(self))
        rise = self.slope * self.half[:, :, None]
        # a slack that does not change at all says nothing about where to cut
        least = np.where(rise.sum(axis=1) > 0.0, self.slack, np.inf).argmin(axis=1)
        along = rise[row, :, least].argmax(axis=1)
        width = 2.0 / 3.0 * self.half[row, along]
        step = np.zeros_like(self.centre)
        step[row, along] = width
        sides = self.centre - step, self.centre + step
        found = np.split(look(np.concatenate(sides), np.tile(self.sign, 2)), 2)
        own = np.where(self.seen, self.slack, np.nan)
        change = np.fmax(np.abs(found[0] - own), np.abs(found[1] - own))
        half, slope = self.half.copy(), self.slope.copy()
        half[row, along] /= 3.0
        slope[row, along] = np.where(np.isnan(change), slope[row, along], change / width[:, None])
        near = np.fmax(np.fmax(*found), own)
        lost = np.isnan(near)
        near[lost] = LOST
        slope = np.where(lost[:, None, :], 0.0, slope)
        return joined(
            [
                Cells(x, half, self.sign, np.where(np.isnan(s), near, s), ~np.isnan(s), slope)
                for x, s in zip((self.centre, *sides), (own, *found), strict=True)
            ]
        )


def joined(parts: list[Cells]) -> Cells:
    """Cells one after the other."""
    return Cells(
        np.concatenate([p.centre for p in parts]),
        np.concatenate([p.half for p in parts]),
        np.concatenate([p.sign for p in parts]),
        np.concatenate([p.slack for p in parts]),
        np.concatenate([p.seen for p in parts]),
        np.concatenate([p.slope for p in parts]),
    )


def refined(cells: Cells, look: Look, budget: int, known: float, enough: float) -> Cells:
    """Divide the most hopeful cells until none can lie above what is known or found by more than ENOUGH, nor
    above `enough`, or `budget` further centres were looked at."""
    while budget >= 2:
        bound = cells.bound()
        order = np.argsort(-bound, kind="stable")[: min(AT_ONCE, budget // 2)]
        chosen = order[bound[order] > max(known + ENOUGH, cells.best() + ENOUGH, enough)]
        if not chosen.size:
            break
        rest = np.ones(len(cells), dtype=bool)
        rest[chosen] = False
        cells = joined([cells.take(rest), cells.take(chosen).divided(look)])
        budget -= 2 * chosen.size
    return cells


def on_a_grid(slack: FloatArray, width: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Slacks and slopes of the cells of a full grid; what is absent has both from its neighbours.

    slack (n_1, ..., n_P, R) with NaN, width (P,) between neighbours -> the same shape, and
    (n_1, ..., n_P, P, R): the largest change to a neighbour for one unit of the coordinate.
    """
    axes = range(len(width))
    slope = np.stack(
        [_largest([np.abs(side - slack) for side in beside(slack, k)]) / width[k] for k in axes], axis=-2
    )
    near = _largest([side for k in axes for side in beside(slack, k)])
    steep = _largest([side for k in axes for side in beside(slope, k)])
    absent = np.isnan(slack)
    return (
        np.nan_to_num(np.where(absent, near, slack), nan=LOST),
        np.nan_to_num(np.where(absent[..., None, :], steep, slope)),
    )


def beside(values: FloatArray, axis: int) -> tuple[FloatArray, FloatArray]:
    """The values one place before and one place after along an axis, NaN beyond the ends."""
    end = np.full_like(np.take(values, [0], axis), np.nan)
    before = np.concatenate([end, np.delete(values, -1, axis)], axis)
    after = np.concatenate([np.delete(values, 0, axis), end], axis)
    return before, after


def _largest(parts: list[FloatArray]) -> FloatArray:
    """Elementwise, NaN only where all are."""
    out: FloatArray = np.fmax.reduce(np.array(parts))
    return out
