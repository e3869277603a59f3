"""First arrivals and last exits, proven: no cell before (after) the one found can hold another.

A question asks for the first or the last time at which a signal passes between inside, low <= x <= high, and
outside.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost, joined

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
    dropped: BoolArray = field(init=False)
    _rank: FloatArray = field(init=False)
    _sure: list[Cells] = field(init=False, default_factory=list)

    def __post_init__(self) -> None:
        self.dropped = np.zeros(len(self.low), dtype=bool)
        self._rank = np.full(len(self.low), np.inf)  # of the best passage found: the least counts

    def sort(self, cells: Cells, round_: int) -> IntArray:
        """Take the passages that are sure; returns the cells that must be cut.

        The cells of a question need not join, but whatever lies between them must be known to hold no passage
        that matters.
        """
        low, high, last = self.low[cells.key], self.high[cells.key], self.last[cells.key]
        a, b = cells.a, cells.b
        out_a = (a > high) | (a < low)
        monotone = cells.monotone()
        # a last exit leads from outside in, a first arrival from inside out
        right_way = (out_a != ((b > high) | (b < low))) & (out_a == last)
        least, most = cells.range()
        above = np.where(out_a, a, b) > high
        clean = right_way
        if round_ < ROUNDS:  # then the width is 1e-8 of a cell
            clean = right_way & (monotone | (cells.bent() & np.where(above, least >= low, most <= high)))
        rank = np.where(last, -cells.t, cells.t)
        sure = clean.nonzero()[0]
        if sure.size:
            np.minimum.at(self._rank, cells.key[sure], rank[sure])
            self._sure.append(cells.rows(sure))
        if round_ == ROUNDS:
            return np.zeros(0, dtype=np.intp)
        touches = (most > high + ROUNDING) | (least < low - ROUNDING)
        rest: IntArray = (touches & ~clean & ~monotone & ~(rank > self._rank[cells.key])).nonzero()[0]
        if rest.size > MANY:
            key = cells.key[rest]
            self.dropped[np.bincount(key, minlength=len(self.low)) > FEW] = True
            rest = rest[foremost(key, rank[rest], FEW)]
        return rest

    def passages(self) -> tuple[Cells, FloatArray, FloatArray]:
        """The cell that holds the passage of each question that has one, the time to look for it from, and
        the level that is passed.
        """
        if not self._sure:
            return Cells.none(), np.zeros(0), np.zeros(0)
        cells = joined(self._sure)
        rank = np.where(self.last[cells.key], -cells.t, cells.t)
        cells = cells.rows(rank == self._rank[cells.key])
        high = self.high[cells.key]
        level = np.where((cells.a > high) | (cells.b > high), high, self.low[cells.key])
        return cells, cells.t + cells.crossing(level, 2) * cells.h, level
