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

STRIP = 1000
"""Cells cut at once, so that what it takes stays in cache."""

SLOPE_MISS = np.sqrt(3.0) / 216.0 * 384.0
BEND_MISS = 16.0


class Cells:
    """A list of cells, each with what it is looked at for.

    place  (3, Q) number of the question it belongs to, loop, signal
    data   (7, Q) t, h: start and width; a, b, c, d: end values, end slopes times h; miss: cubic error
    turn   (Q,) middle control point of the slope
    """

    __slots__ = ("a", "b", "c", "d", "data", "h", "key", "loop", "miss", "place", "signal", "t", "turn")

    def __init__(self, place: IntArray, data: FloatArray) -> None:
        self.place, self.data = place, data
        self.key, self.loop, self.signal = place
        self.t, self.h, self.a, self.b, self.c, self.d, self.miss = data
        self.turn: FloatArray = 3.0 * (self.b - self.a) - self.c - self.d

    def __len__(self) -> int:
        return int(self.place.shape[1])

    @classmethod
    def none(cls) -> Cells:
        """An empty list."""
        return cls(np.zeros((3, 0), dtype=np.intp), np.zeros((7, 0)))

    def rows(self, index: IntArray | BoolArray) -> Cells:
        """The cells named by `index`."""
        if index.dtype == bool:
            index = index.nonzero()[0]
        return Cells(self.place.take(index, axis=1), self.data.take(index, axis=1))

    def part(self, start: int, stop: int, key: int) -> Cells:
        """The cells from number `start` to `stop`, their questions counted from `key`."""
        place = self.place[:, start:stop]
        return Cells(place - np.array([[key], [0], [0]]) if key else place, self.data[:, start:stop])

    def monotone(self) -> BoolArray:
        """Whether the slope provably keeps its sign."""
        least = SLOPE_MISS * self.miss
        low = np.minimum(np.minimum(self.c, self.d), self.turn)
        high = np.maximum(np.maximum(self.c, self.d), self.turn)
        out: BoolArray = (low > least) | (high < -least)
        return out

    def bent(self) -> BoolArray:
        """Whether the second derivative provably keeps its sign: at most one extremum, at most two
        crossings.
        """
        least = BEND_MISS * self.miss
        one, two = self.turn - self.c, self.d - self.turn
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
        size = np.abs(self.c)
        x = np.minimum(size / np.maximum(size - sign * turn + root, 1e-300), 1.0)
        return x, self.cubic(x)

    def cubic(self, x: FloatArray) -> FloatArray:
        """Value of the cubic at x (0 to 1)."""
        third = self.c + self.d - 2.0 * (self.b - self.a)
        out: FloatArray = self.a + x * (self.c + x * (self.turn - self.c + x * third))
        return out

    def crossing(self, level: FloatArray, steps: int) -> FloatArray:
        """Place (0 to 1) where the cubic meets the level, by so many steps of Newton's from where the chord
        does; for cells whose ends lie on either side of it.
        """
        low, high = np.zeros(len(self)), np.ones(len(self))
        third = self.c + self.d - 2.0 * (self.b - self.a)
        second, rising, start = self.turn - self.c, self.b > self.a, self.a - level
        with np.errstate(all="ignore"):
            x: FloatArray = start / (self.a - self.b)
            for _ in range(steps):
                value = start + x * (self.c + x * (second + x * third))
                below = (value < 0.0) == rising
                low, high = np.where(below, x, low), np.where(below, high, x)
                x = x - value / (self.c + x * (2.0 * second + x * (3.0 * third)))
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
        """Each cell in eight, which stand side by side."""
        q, h = len(self), self.h / CELLS
        data = np.empty((7, q, CELLS))
        data[0] = self.t[:, None] + h[:, None] * _EIGHT
        data[1] = h[:, None]
        for start in range(0, q, STRIP):
            some = slice(start, start + STRIP)
            where = self.loop[some], self.t[some], h[some]
            value, slope = modes.nodes(*where, self.signal[some])
            data[2, some], data[3, some] = value[0, :-1].T, value[0, 1:].T
            data[4, some], data[5, some] = slope[0, :-1].T, slope[0, 1:].T
            data[6, some] = modes.cell_misses(*where, self.signal[some]).T
        place = np.empty((3, q, CELLS), dtype=np.intp)
        place[:] = self.place[:, :, None]
        return Cells(place.reshape(3, CELLS * q), data.reshape(7, CELLS * q))


_EIGHT = np.arange(CELLS)


def foremost(key: IntArray, rank: FloatArray, most: int) -> IntArray:
    """Numbers of the cells that are among the `most` of least rank of their question."""
    order = np.lexsort((rank, key))
    key = key[order]
    number = np.arange(len(key))
    begin = np.ones(len(key), dtype=bool)
    begin[1:] = key[1:] != key[:-1]
    start = np.maximum.accumulate(np.where(begin, number, 0))
    out: IntArray = order[number - start < most]
    return out


def joined(parts: list[Cells]) -> Cells:
    """One list from several."""
    if len(parts) == 1:
        return parts[0]
    return Cells(
        np.concatenate([p.place for p in parts], axis=1), np.concatenate([p.data for p in parts], axis=1)
    )
