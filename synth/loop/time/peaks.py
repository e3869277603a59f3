"""Suprema: the largest value a signal takes, proven over every cell.

A question asks for the supremum of sign * (x + offset) over t >= 0. Its answer starts from what is known
(nodes, limits); cells that can hold more are halved until each holds one summit or nothing that matters.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost, joined

ROUNDS = 8

LEVEL = 1e-14
"""Cells in which the signal moves by less, relative to itself, are constant: what is left is rounding."""


@dataclass(slots=True)
class Peaks:
    """W answers, each raised by the questions that name it; V questions.

    best, place   (W,) largest value known and where it was found (NaN: at no time, a limit or a floor)
    tolerance     (W,) a gain below this does not count
    answer        (V,) of each question
    dropped       (W,) set where cells in doubt had to be given up
    floor         (W,) what the supremum is sure to reach
    """

    best: FloatArray
    place: FloatArray
    tolerance: FloatArray
    answer: IntArray
    dropped: BoolArray = field(init=False)
    floor: FloatArray = field(init=False)
    _summits: list[tuple[Cells, FloatArray, FloatArray]] = field(init=False, default_factory=list)

    def __post_init__(self) -> None:
        self.dropped, self.floor = np.zeros(len(self.best), dtype=bool), self.best + self.tolerance

    def sort(self, cells: Cells, round_: int) -> IntArray:
        """Take what the cells tell; returns those that must be cut. Cells are in the terms of their question.

        A cell that is bent and rises at its start and falls at its end holds one summit.
        """
        answer = self.answer[cells.key]
        top = np.maximum(cells.a, cells.b)
        if round_ == ROUNDS:
            self._raise_to(answer, top, cells.t)
            return np.zeros(0, dtype=np.intp)
        single = cells.bent() & (cells.c > 0.0) & (cells.d < 0.0)
        place, summit = cells.summit()
        upper = np.where(single, summit + cells.miss, cells.range()[1])
        known = top - 2.0 * self.tolerance[answer]
        np.maximum.at(self.floor, answer, np.where(single, np.maximum(summit - cells.miss, known), known))
        useful = (upper >= self.floor[answer]) & ~cells.monotone()
        found = (useful & single).nonzero()[0]
        if found.size:
            self._summits.append((cells.rows(found), place[found], upper[found]))
        rest: IntArray = (useful & ~single).nonzero()[0]
        if rest.size == 0:
            return rest
        if round_:
            level = _level(cells.rows(rest))
            at, rest = rest[level], rest[~level]
            later = np.where(cells.b[at] > cells.a[at], cells.h[at], 0.0)
            self._raise_to(answer[at], top[at], cells.t[at] + later)
        if rest.size > MANY:
            kept = foremost(cells.key[rest], -upper[rest], FEW)
            lost = np.bincount(cells.key[rest], minlength=len(self.answer)) > FEW
            self.dropped[self.answer[lost]] = True
            rest = rest[kept]
        return rest

    def summits(self) -> tuple[Cells, FloatArray]:
        """Cells that hold a summit which may be the highest, and the times to look for it from."""
        if not self._summits:
            return Cells.none(), np.zeros(0)
        parts, places, uppers = zip(*self._summits, strict=True)
        cells, place = joined(list(parts)), np.concatenate(places)
        high = (np.concatenate(uppers) >= self.floor[self.answer[cells.key]]).nonzero()[0]
        cells = cells.rows(high)
        return cells, cells.t + place[high] * cells.h

    def close(self, key: IntArray, value: FloatArray, time: FloatArray) -> None:
        """Take the summits found, in the terms of their questions."""
        np.maximum(self.best, self.floor - self.tolerance, out=self.best)
        self._raise_to(self.answer[key], value, time)

    def _raise_to(self, answer: IntArray, value: FloatArray, place: FloatArray) -> None:
        order = np.argsort(value, kind="stable")
        answer, value, place = answer[order], value[order], place[order]
        higher = value > self.best[answer]
        self.best[answer[higher]] = value[higher]  # the last of equal answers, the largest, stays
        self.place[answer[higher]] = place[higher]


def _level(cells: Cells) -> BoolArray:
    """Whether the signal stands still in a cell, as far as doubles can tell: a plateau has no one summit."""
    moves = np.maximum(np.maximum(np.abs(cells.c), np.abs(cells.d)), np.abs(cells.b - cells.a))
    out: BoolArray = np.maximum(moves, cells.miss) <= LEVEL * np.maximum(np.abs(cells.a), np.abs(cells.b))
    return out
