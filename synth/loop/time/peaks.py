"""Suprema: the largest value a signal takes, proven over every cell.

A question asks for the supremum of sign * (x + offset) over t >= 0. Its answer starts from what is known
(nodes, limits) and is raised until no cell can hold more.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost
from synth.loop.time.events import extremum
from synth.loop.time.signals import Signals

ROUNDS = 8

LEVEL = 1e-14
"""Cells in which the signal moves by less, relative to itself, are constant: what is left is rounding."""


@dataclass(slots=True)
class Peaks:
    """W answers, each raised by the questions that name it; V questions.

    best, place   (W,) largest value known and where it was found (NaN: at no time, a limit or a floor)
    tolerance     (W,) a gain below this does not count
    answer, sign, offset   (V,) of each question
    dropped       (W,) set where cells in doubt had to be given up
    """

    best: FloatArray
    place: FloatArray
    tolerance: FloatArray
    answer: IntArray
    sign: FloatArray
    offset: FloatArray
    dropped: BoolArray

    def seen(self, cells: Cells) -> Cells:
        """The cells in terms of their question, sign * (x + offset)."""
        sign = self.sign[cells.key]
        data = cells.data.copy()
        data[2:4] += self.offset[cells.key]
        data[2:6] *= sign
        return Cells(cells.place, data)

    def least(self, key: IntArray) -> FloatArray:
        """(Q,) what a cell must be able to reach to matter."""
        answer = self.answer[key]
        out: FloatArray = self.best[answer] + self.tolerance[answer]
        return out

    def raise_to(self, key: IntArray, value: FloatArray, place: FloatArray) -> None:
        """Take note of values found."""
        order = np.argsort(value, kind="stable")
        answer, value, place = self.answer[key][order], value[order], place[order]
        higher = value > self.best[answer]
        self.best[answer[higher]] = value[higher]  # the last of equal answers, the largest, stays
        self.place[answer[higher]] = place[higher]


def resolve(modes: Signals, peaks: Peaks, cells: Cells) -> None:
    """Raise every answer to its supremum over the cells (already in the terms of their question)."""
    for _ in range(ROUNDS):
        if len(cells) == 0:
            return
        single = cells.bent() & (cells.c > 0.0) & (cells.d < 0.0)
        upper = cells.range()[1]
        place, summit = cells.summit()
        upper = np.where(single, summit + cells.miss, upper)
        known = np.maximum(cells.a, cells.b) - 2.0 * peaks.tolerance[peaks.answer[cells.key]]
        lower = np.where(single, np.maximum(summit - cells.miss, known), known)
        floor = peaks.best.copy()
        np.maximum.at(floor, peaks.answer[cells.key], lower)
        useful = (upper > peaks.least(cells.key)) & (upper >= floor[peaks.answer[cells.key]])
        found = useful & single
        if found.any():
            few, x = cells.rows(found), place[found]
            guess = few.t + x * few.h
            up = peaks.sign[few.key] > 0.0
            time, value = extremum(modes, few.loop, few.signal, few.t, few.h, guess, up)
            peaks.raise_to(few.key, peaks.sign[few.key] * (value + peaks.offset[few.key]), time)
        level = useful & ~single & _level(cells)
        if level.any():
            few = cells.rows(level)
            at_end = few.b > few.a
            peaks.raise_to(few.key, np.where(at_end, few.b, few.a), np.where(at_end, few.t + few.h, few.t))
        np.maximum.at(peaks.best, peaks.answer[cells.key], known)
        rest = useful & ~single & ~level & (upper > peaks.least(cells.key))
        if np.count_nonzero(rest) > MANY:
            kept = foremost(cells.rows(rest), -upper[rest], FEW)
            lost = np.bincount(cells.key[rest], minlength=len(peaks.sign)) > np.bincount(
                kept.key, minlength=len(peaks.sign)
            )
            peaks.dropped[peaks.answer[lost]] = True
            cells, rest = kept, np.ones(len(kept), dtype=bool)
        if not rest.any():
            return
        cells = peaks.seen(cells.rows(rest).split(modes))
        cells = cells.rows((cells.range()[1] > peaks.least(cells.key)) & ~cells.monotone())
    peaks.raise_to(cells.key, np.maximum(cells.a, cells.b), cells.t)


def _level(cells: Cells) -> BoolArray:
    """Whether the signal stands still in a cell, as far as doubles can tell: a plateau has no one summit."""
    moves = np.maximum(np.maximum(np.abs(cells.c), np.abs(cells.d)), np.abs(cells.b - cells.a))
    out: BoolArray = np.maximum(moves, cells.miss) <= LEVEL * np.maximum(np.abs(cells.a), np.abs(cells.b))
    return out
