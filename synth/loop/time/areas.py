"""Areas: the integral of the absolute value, as differences of the primitive from zero to zero."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost, joined
from synth.loop.time.signals import Signals

ROUNDS = 5


@dataclass(slots=True)
class Zeros:
    """V questions.

    negligible  (V,) an area below this between two zeros need not be found
    """

    negligible: FloatArray
    _held: list[Cells] = field(init=False, default_factory=list)

    def sort(self, cells: Cells, round_: int) -> IntArray:
        """Take the cells that hold one zero each; returns those that must be cut."""
        changes = (cells.a > 0.0) != (cells.b > 0.0)
        monotone = cells.monotone()
        proven = monotone | (changes & cells.bent())
        clean = changes & (proven | (round_ == ROUNDS))
        self._held.append(cells.rows(clean))
        if round_ == ROUNDS:
            return np.zeros(0, dtype=np.intp)
        low, high = cells.range()
        sliver = np.minimum(-low, high) * cells.h
        rest: IntArray = (~proven & ((sliver > self.negligible[cells.key]) | changes)).nonzero()[0]
        if rest.size > MANY:
            rest = rest[foremost(cells.key[rest], -cells.h[rest], FEW)]
        return rest

    def cells(self) -> Cells:
        """The cells found."""
        return joined(self._held) if self._held else Cells.none()


def areas(
    modes: Signals, signals: list[int], end: FloatArray, crossings: Cells
) -> tuple[FloatArray, FloatArray]:
    """Integral of abs(x) from 0 to infinity of the named signals, (A, M), and a bound of its relative error.

    crossings : one zero a cell; its key is signal number · M + loop. end (A, M) a time after the last zero
    that counts; from there on the slowest mode stands for all.

    The primitive is flat at a zero, so one evaluation at the cubic's zero, moved by a Newton step, has an
    error of third order in that step.
    """
    shape, m, end = end.shape, end.shape[1], end.ravel()
    count = len(end)
    number = np.arange(count)
    loops, many = number % m, np.repeat(signals, m)
    guess = crossings.t + crossings.crossing(np.zeros(len(crossings)), 5) * crossings.h
    before = (guess < end[crossings.key]).nonzero()[0]
    crossings, guess = crossings.rows(before), guess[before]
    where = np.concatenate([loops, crossings.loop, loops])
    which = np.concatenate([many, crossings.signal, many])
    primitive, value, slope = modes.jet(where, which, np.concatenate([np.zeros(count), guess, end]), -1, 3)
    inner = slice(count, count + len(guess))
    step = -value[inner] / slope[inner]
    step = np.where(np.abs(step) <= crossings.h, step, 0.0)
    primitive[inner] += step * (value[inner] + 0.5 * step * slope[inner])
    row = np.concatenate([number, crossings.key, number])
    time = np.concatenate([np.full(count, -1.0), guess, np.maximum(end, 0.0)])
    order = np.lexsort((time, row))
    row = row[order]
    primitive = primitive[order]
    change = np.abs(primitive[1:] - primitive[:-1]) * (row[1:] == row[:-1])
    total: FloatArray = np.bincount(row[1:], weights=change, minlength=count).astype(float)
    rest, error = modes.tail(loops, many, end)
    total += rest
    return total.reshape(shape), (error / np.maximum(total, 1e-300)).reshape(shape)
