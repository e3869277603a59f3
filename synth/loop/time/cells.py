"""What the ends of a cell prove about its inside.

Q cells. With a, b the end values and c, d the end slopes times the width, the cubic through them has the
control points a, a + c/3, b - d/3, b and its slope c, turn, d; a curve stays within the hull of its control
points. The signal differs from the cubic by at most `miss`, its slope from the cubic's by 3.08 miss and its
second derivative by 32 miss (times width, width squared).
Source: G. Birkhoff, A. Priver, Hermite interpolation errors for derivatives, J. Math. Phys. 46 (1967).
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.signals import CELLS, Signals

MANY = 50_000
"""Cells in doubt at one time beyond which only the FEW most promising of each question are followed."""

FEW = 32

SLOPE_MISS = np.sqrt(3.0) / 216.0 * 384.0
BEND_MISS = 16.0


class Cells:
    """A list of cells, each with what it is looked at for.

    place  (3, Q) number of the question it belongs to, loop, signal
    data   (7, Q) t, h: start and width; a, b, c, d: end values, end slopes times h; miss: cubic error
    """

    __slots__ = ("a", "b", "c", "d", "data", "h", "key", "loop", "miss", "place", "signal", "t")

    def __init__(self, place: IntArray, data: FloatArray) -> None:
        self.place, self.data = place, data
        self.key, self.loop, self.signal = place
        self.t, self.h, self.a, self.b, self.c, self.d, self.miss = data

    def __len__(self) -> int:
        return int(self.place.shape[1])

    def rows(self, index: IntArray | BoolArray) -> Cells:
        """The cells named by `index`."""
        if index.dtype == bool:
            index = np.flatnonzero(index)
        return Cells(self.place.take(index, axis=1), self.data.take(index, axis=1))

    def keyed(self, key: IntArray) -> Cells:
        """The same cells for other questions."""
        return Cells(np.stack([key, self.loop, self.signal]), self.data)

    @property
    def turn(self) -> FloatArray:
        """Middle control point of the slope."""
        out: FloatArray = 3.0 * (self.b - self.a) - self.c - self.d
        return out

    def monotone(self) -> BoolArray:
        """Whether the slope provably keeps its sign."""
        turn, least = self.turn, SLOPE_MISS * self.miss
        low = np.minimum(np.minimum(self.c, self.d), turn)
        high = np.maximum(np.maximum(self.c, self.d), turn)
        out: BoolArray = (low > least) | (high < -least)
        return out

    def bent(self) -> BoolArray:
        """Whether the second derivative provably keeps its sign: at most one extremum, at most two
        crossings.
        """
        turn, least = self.turn, BEND_MISS * self.miss
        one, two = turn - self.c, self.d - turn
        out: BoolArray = (np.minimum(one, two) > least) | (np.maximum(one, two) < -least)
        return out

    def range(self) -> tuple[FloatArray, FloatArray]:
        """Lower and upper bound of the signal in the cell."""
        left, right = self.a + self.c / 3.0, self.b - self.d / 3.0
        low = np.minimum(np.minimum(self.a, self.b), np.minimum(left, right)) - self.miss
        high = np.maximum(np.maximum(self.a, self.b), np.maximum(left, right)) + self.miss
        return low, high

    def summit(self) -> tuple[FloatArray, FloatArray]:
        """Place (0 to 1) and value of the cubic's one extremum; for cells whose end slopes differ in sign."""
        turn = self.turn
        sign = np.sign(self.c)
        root = np.sqrt(np.maximum(turn * turn - self.c * self.d, 0.0))
        x = np.clip(np.abs(self.c) / np.maximum(np.abs(self.c) - sign * turn + root, 1e-300), 0.0, 1.0)
        return x, self.cubic(x)

    def cubic(self, x: FloatArray) -> FloatArray:
        """Value of the cubic at x (0 to 1)."""
        third = self.c + self.d - 2.0 * (self.b - self.a)
        out: FloatArray = self.a + x * (self.c + x * (self.turn - self.c + x * third))
        return out

    def crossing(self, level: FloatArray) -> FloatArray:
        """Place (0 to 1) where the cubic meets the level; for cells whose ends lie on either side of it."""
        x: FloatArray
        with np.errstate(all="ignore"):
            x = (level - self.a) / (self.b - self.a)
        low, high = np.zeros(len(self)), np.ones(len(self))
        turn, third = self.turn, self.c + self.d - 2.0 * (self.b - self.a)
        rising = self.b > self.a
        for _ in range(5):
            value = self.a + x * (self.c + x * (turn - self.c + x * third)) - level
            below = (value < 0.0) == rising
            low, high = np.where(below, x, low), np.where(below, high, x)
            slope = self.c + x * (2.0 * (turn - self.c) + x * (3.0 * third))
            with np.errstate(all="ignore"):
                x = x - value / slope
            x = np.where((x >= low) & (x <= high), x, 0.5 * (low + high))
        return x

    def since(self, time: FloatArray, value: FloatArray, slope: FloatArray) -> Cells:
        """The cells without what lies before `time` (Q,), where the signal has that value and slope."""
        cut = time > self.t
        part = np.where(cut, (self.t + self.h - time) / self.h, 1.0)
        data = self.data.copy()
        data[[1, 4, 5]] *= part
        data[6] *= part**4
        data[0, cut], data[2, cut] = time[cut], value[cut]
        data[4, cut] = slope[cut] * data[1, cut]
        return Cells(self.place, data)

    def split(self, modes: Signals) -> Cells:
        """Each cell in eight."""
        q, h = len(self), self.h / CELLS
        value, slope = modes.nodes(self.loop, self.t, h, self.signal)
        data = np.empty((7, CELLS, q))
        data[0] = self.t + h * np.arange(CELLS)[:, None]
        data[1] = h
        data[2], data[3] = value[0, :-1], value[0, 1:]
        data[4], data[5] = slope[0, :-1], slope[0, 1:]
        data[6] = modes.cell_misses(self.loop, self.signal, self.t, h)
        return Cells(np.tile(self.place, CELLS), data.reshape(7, CELLS * q))


def foremost(cells: Cells, rank: FloatArray, most: int) -> Cells:
    """Of the cells of each question the `most` of least rank."""
    order = np.lexsort((rank, cells.key))
    key = cells.key[order]
    number = np.arange(len(key))
    begin = np.ones(len(key), dtype=bool)
    begin[1:] = key[1:] != key[:-1]
    start = np.maximum.accumulate(np.where(begin, number, 0))
    return cells.rows(order[number - start < most])


def joined(parts: list[Cells]) -> Cells:
    """One list from several."""
    if len(parts) == 1:
        return parts[0]
    return Cells(
        np.concatenate([p.place for p in parts], axis=1), np.concatenate([p.data for p in parts], axis=1)
    )


def no_cells() -> Cells:
    """An empty list."""
    return Cells(np.zeros((3, 0), dtype=np.intp), np.zeros((7, 0)))
