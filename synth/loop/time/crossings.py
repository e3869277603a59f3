"""First arrivals and last exits, proven: no cell before (after) the one found can hold another.

A question asks for the first or the last time at which a signal passes between inside, low <= x <= high, and
outside.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost, joined, no_cells
from synth.loop.time.events import crossing
from synth.loop.time.signals import Signals

ROUNDS = 9
ROUNDING = 1e-15


@dataclass(slots=True)
class Edges:
    """V questions.

    low, high  (V,) the edges; last (V,) whether the last exit is asked for, not the first one
    dropped    (V,) set where cells in doubt had to be given up
    """

    low: FloatArray
    high: FloatArray
    last: BoolArray
    dropped: BoolArray


def resolve(modes: Signals, edges: Edges, cells: Cells) -> FloatArray:
    """(V,) time of the first or last passage within the cells given; NaN where there is none.

    The cells of a question need not join, but whatever lies between them must be known to hold no passage
    that matters.
    """
    answers = len(edges.low)
    found = np.full(answers, np.nan)
    sure = no_cells()
    for k in range(ROUNDS + 1):
        if len(cells) == 0:
            break
        low, high, last = edges.low[cells.key], edges.high[cells.key], edges.last[cells.key]
        out_a = (cells.a > high) | (cells.a < low)
        out_b = (cells.b > high) | (cells.b < low)
        least, most = cells.range()
        touches = (most > high + ROUNDING) | (least < low - ROUNDING)
        monotone = cells.monotone()
        passes = out_a != out_b
        # a last exit leads from outside in, a first arrival from inside out
        right_way = passes & (out_a == last)
        outside = np.where(out_a, cells.a, cells.b)
        above = outside > high
        one_edge = np.where(above, least >= low, most <= high)
        clean = right_way & (monotone | (cells.bent() & one_edge))
        if k == ROUNDS:
            clean = right_way  # the width is 1e-8 of a cell
        if clean.any():
            sure = joined([sure, cells.rows(clean)])
            sure = foremost(sure, np.where(edges.last[sure.key], -sure.t, sure.t), 1)
        pending = ~clean & ~monotone & touches
        when = np.full(answers, np.nan)
        when[sure.key] = sure.t
        limit = when[cells.key]
        with np.errstate(invalid="ignore"):
            beaten = np.where(last, cells.t < limit, cells.t > limit)
        cells = cells.rows(pending & ~beaten)
        if len(cells) > MANY:
            kept = foremost(cells, np.where(edges.last[cells.key], -cells.t, cells.t), FEW)
            edges.dropped[
                np.bincount(cells.key, minlength=answers) > np.bincount(kept.key, minlength=answers)
            ] = True
            cells = kept
        if k < ROUNDS and len(cells):
            cells = cells.split(modes)
    if len(sure):
        high = edges.high[sure.key]
        above = (sure.a > high) | (sure.b > high)
        level = np.where(above, high, edges.low[sure.key])
        guess = sure.t + sure.crossing(level) * sure.h
        found[sure.key] = crossing(
            modes, sure.loop, sure.signal, sure.t, sure.h, guess, level, sure.b > sure.a
        )
    return found
