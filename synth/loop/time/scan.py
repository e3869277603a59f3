"""One pass over the planned blocks: node values, and the cells whose slope does not provably keep its
sign."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.cells import SLOPE_MISS, Cells
from synth.loop.time.signals import CELLS, Signals


@dataclass(slots=True)
class Scan:
    """P consecutive blocks of A whole loops, S signals (counted from their values at infinity).

    owner, first   (A,) loop numbers, and their first block
    loop, t, h     (P,)
    value, slope   (S, 9, P) slope times h; a block ends with the value that the next one begins with
    miss           (S, P) cubic error

    A cell has the flat number (signal * 8 + cell) * P + block.
    """

    owner: IntArray
    first: IntArray
    loop: IntArray
    t: FloatArray
    h: FloatArray
    value: FloatArray
    slope: FloatArray
    miss: FloatArray

    def doubtful(self) -> IntArray:
        """Flat numbers of the cells not proven monotone."""
        v, c, d = self.value, self.slope[:, :-1], self.slope[:, 1:]
        turn = np.subtract(v[:, 1:], v[:, :-1])
        turn *= 3.0
        turn -= c
        turn -= d
        least = SLOPE_MISS * self.miss[:, None]
        low = np.minimum(c, d)
        np.minimum(low, turn, out=low)
        np.maximum(turn, c, out=turn)
        np.maximum(turn, d, out=turn)
        doubt: BoolArray = low <= least
        doubt &= turn >= -least
        return doubt.ravel().nonzero()[0]

    def passing(self, signal: int, low: float, high: float, last: bool) -> IntArray:
        """Flat numbers of the cells at whose ends the signal leaves low..high for the first time, or (last)
        comes back for the last; one a loop at most, in order of the loops.
        """
        x, blocks = self.value[signal], len(self.loop)
        out = (x > high) | (x < low)
        number = (out[:-1] > out[1:] if last else out[:-1] < out[1:]).ravel().nonzero()[0]
        cell, block = np.divmod(number, blocks)
        order = np.argsort(block * CELLS + cell)  # in time, loop after loop
        number, loop = number[order], self.loop[block[order]]
        chosen = np.ones(len(number), dtype=bool)
        np.not_equal(loop[1:], loop[:-1], out=chosen[:-1] if last else chosen[1:])
        out_of: IntArray = number[chosen] + signal * CELLS * blocks
        return out_of

    def changing(self, signal: int) -> IntArray:
        """Flat numbers of the cells whose ends differ in sign."""
        positive = self.value[signal] > 0.0
        number: IntArray = (positive[1:] != positive[:-1]).ravel().nonzero()[0]
        return number + signal * CELLS * len(self.loop)

    def cells(self, flat: IntArray) -> Cells:
        """The named cells as a list; the key is the loop's number."""
        blocks = len(self.loop)
        row, block = np.divmod(flat, blocks)
        signal, cell = np.divmod(row, CELLS)
        place, data = np.empty((3, len(flat)), dtype=np.intp), np.empty((7, len(flat)))
        self.loop.take(block, out=place[0])
        place[1], place[2] = place[0], signal
        self.h.take(block, out=data[1])
        np.add(self.t.take(block), cell * data[1], out=data[0])
        left = flat + signal * blocks  # of the nodes there are nine
        right = left + blocks
        self.value.take(left, out=data[2])
        self.value.take(right, out=data[3])
        self.slope.take(left, out=data[4])
        self.slope.take(right, out=data[5])
        self.miss.take(signal * blocks + block, out=data[6])
        return Cells(place, data)


def scan(
    modes: Signals,
    owner: IntArray,
    first: IntArray,
    loop: IntArray,
    t: FloatArray,
    h: FloatArray,
    miss: FloatArray,
) -> Scan:
    """Evaluate the blocks (loop, t, h); `first` counts from 0 in this pass."""
    value, slope = modes.nodes(loop, t, h)
    within = (loop[1:] == loop[:-1]).nonzero()[0]
    value[:, -1, within] = value[:, 0, within + 1]  # so that no passage is lost to rounding in between
    return Scan(owner, first, loop, t, h, value, slope, np.ascontiguousarray(miss))
