"""Areas: the integral of the absolute value, as differences of the primitive from zero to zero."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.time.cells import FEW, MANY, Cells, foremost, joined
from synth.loop.time.signals import Signals

ROUNDS = 5


def zeros(modes: Signals, cells: Cells, negligible: FloatArray) -> Cells:
    """Cells that hold one zero each, from cells that may hold none, one or more.

    negligible (V,) of each question: an area below this between two zeros need not be found.
    """
    out = []
    for k in range(ROUNDS + 1):
        if len(cells) == 0:
            break
        changes = (cells.a > 0.0) != (cells.b > 0.0)
        proven = cells.monotone() | (changes & cells.bent())
        clean = changes & (proven | (k == ROUNDS))
        out.append(cells.rows(clean))
        low, high = cells.range()
        sliver = np.minimum(-low, high) * cells.h
        pending = ~clean & ~proven & ((sliver > negligible[cells.key]) | changes)
        cells = cells.rows(pending)
        if len(cells) > MANY:
            cells = foremost(cells, -cells.h, FEW)
        if k < ROUNDS and len(cells):
            cells = cells.split(modes)
    return joined(out) if out else cells


def area(
    modes: Signals, signal: int, loops: IntArray, end: FloatArray, crossings: Cells
) -> tuple[FloatArray, FloatArray]:
    """Integral of abs(x) from 0 to infinity for the named loops, (A,), and a bound of its relative error.

    crossings : one zero a cell; its key is the number of the loop within `loops`. end (A,) a time after the
    last zero that counts; from there on the slowest mode stands for all.

    The primitive is flat at a zero, so one evaluation at the cubic's zero, moved by a Newton step, has an
    error of third order in that step.
    """
    count = len(loops)
    guess = crossings.t + crossings.crossing(np.zeros(len(crossings))) * crossings.h
    before = guess < end[crossings.key]
    crossings, guess = crossings.rows(before), guess[before]
    many = np.full(count, signal)
    where = np.concatenate([loops, crossings.loop, loops])
    which = np.concatenate([many, crossings.signal, many])
    primitive, value, slope = modes.jet(where, which, np.concatenate([np.zeros(count), guess, end]), -1, 3)
    inner = slice(count, count + len(guess))
    with np.errstate(all="ignore"):
        step = -value[inner] / slope[inner]
    step = np.where(np.abs(step) <= crossings.h, step, 0.0)
    primitive[inner] += step * (value[inner] + 0.5 * step * slope[inner])
    row = np.concatenate([np.arange(count), crossings.key, np.arange(count)])
    time = np.concatenate([np.full(count, -1.0), guess, np.maximum(end, 0.0)])
    order = np.lexsort((time, row))
    row = row[order]
    primitive = primitive[order]
    change = np.abs(np.diff(primitive)) * (row[1:] == row[:-1])
    total: FloatArray = np.bincount(row[1:], weights=change, minlength=count)[:count].astype(float)
    rest, error = modes.tail(loops, many, end)
    total += rest
    return total, error / np.maximum(total, 1e-300)
