"""One pass over the planned blocks: node values, and the cells whose slope does not provably keep its
sign."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.cells import SLOPE_MISS, Cells
from synth.loop.time.signals import Signals


@dataclass(slots=True)
class Scan:
    """P consecutive blocks of A whole loops, S signals (counted from their values at infinity).

    owner, first   (A,) loop numbers, and their first block; `last` the last
    loop, t, h     (P,)
    local          (P,) number of the block's loop within `owner`
    value, slope   (S, 9, P) slope times h
    miss           (S, P) cubic error
    """

    owner: IntArray
    first: IntArray
    last: IntArray
    local: IntArray
    loop: IntArray
    t: FloatArray
    h: FloatArray
    value: FloatArray
    slope: FloatArray
    miss: FloatArray

    def top(self, signal: int) -> FloatArray:
        """(P,) largest node of each block."""
        out: FloatArray = self.value[signal].max(axis=0)
        return out

    def bottom(self, signal: int) -> FloatArray:
        """(P,) smallest node of each block."""
        out: FloatArray = self.value[signal].min(axis=0)
        return out

    def doubtful(self, signal: int) -> IntArray:
        """Flat numbers (cell * P + block) of the cells not proven monotone."""
        v, s = self.value[signal], self.slope[signal]
        c, d = s[:-1], s[1:]
        turn = np.subtract(v[1:], v[:-1])
        turn *= 3.0
        turn -= c
        turn -= d
        least = SLOPE_MISS * self.miss[signal]
        low = np.minimum(c, d)
        np.minimum(low, turn, out=low)
        high = np.maximum(c, d, out=None)
        np.maximum(high, turn, out=high)
        doubt: BoolArray = (low <= least) & (high >= -least)
        return np.flatnonzero(doubt)

    def cells(self, signal: int, flat: IntArray, key: IntArray) -> Cells:
        """The named cells as a list; key (Q,) goes with them."""
        blocks = len(self.loop)
        cell, block = np.divmod(flat, blocks)
        data = np.empty((7, len(flat)))
        self.h.take(block, out=data[1])
        np.add(self.t.take(block), cell * data[1], out=data[0])
        v, s = self.value[signal].reshape(-1), self.slope[signal].reshape(-1)
        after = flat + blocks
        v.take(flat, out=data[2])
        v.take(after, out=data[3])
        s.take(flat, out=data[4])
        s.take(after, out=data[5])
        self.miss[signal].take(block, out=data[6])
        place = np.empty((3, len(flat)), dtype=np.intp)
        place[0], place[2] = key, signal
        self.loop.take(block, out=place[1])
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
    last = np.append(first[1:], len(loop)) - 1
    local = np.repeat(np.arange(len(owner)), last - first + 1)
    return Scan(owner, first, last, local, loop, t, h, value, slope, miss)
