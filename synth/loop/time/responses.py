"""Step responses of loops with dead time to the end: marched, then carried on by the true modes.

M loops, S signals. Own time τ: u at τ, y and d one delay later.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.polynomials import horner
from synth.loop.time.collocation import NODES
from synth.loop.time.early import DEAD, Early, early_response
from synth.loop.time.panels import Panels
from synth.loop.time.true_modes import LatePanels, TrueModes, alone_from, fill, late_panels, true_modes, units

# The most late panels of one loop; what is not decided by then is flagged.
MOST_LATE = 4096


@dataclass(frozen=True, slots=True)
class Responses:
    """panels up to own time end (M,), and the single mode that is left then.

    amplitude (S, M) complex and pole (M,): signal = final + Re(amplitude e^(pole (τ - end))) for τ > end.
    unit, final (S, M); doubtful (M,) where neither could be had within the most delays or panels.
    """

    panels: Panels
    end: FloatArray
    amplitude: ComplexArray
    pole: ComplexArray
    final: FloatArray
    unit: FloatArray
    doubtful: BoolArray


def responses(loops: Loops, poles: ComplexArray, numerators: FloatArray) -> Responses:
    """Responses of M stable loops. numerators (S, M, n + 1), N first; poles (M, q) true roots, NaN padded."""
    delay = loops.dead_time
    modes = true_modes(loops, numerators, poles)
    early_size = _early_size(loops, numerators)
    unit = np.maximum(units(modes, delay), early_size)
    # close poles may leave the sum of their modes worthless: y at least is judged by what it comes to
    final = np.abs(modes.final[:, 0])
    unit[:, 0] = np.where(final > 0.0, np.maximum(final, early_size[:, 0]), unit[:, 0])
    early = early_response(loops, numerators, modes, unit)
    doubtful = ~(early.meets | early.quiet)
    end = early.delays * delay
    alone = alone_from(modes, unit, DEAD)
    late = np.flatnonzero(early.meets & (alone > end))
    later = late_panels(modes.rows(late), unit[late], end[late], alone[late], MOST_LATE)
    panels = _assembled(early, loops, modes, late, later)
    np.maximum.at(end, late[later.owner], later.start + later.length)
    doubtful[late] |= end[late] < alone[late]
    pole = modes.pole[:, 0]
    amplitude = np.where(early.meets, modes.residue[:, :, 0].T, 0.0) * np.exp(pole * end)
    return Responses(panels, end, amplitude, pole, modes.final.T.copy(), unit.T.copy(), doubtful)


def _early_size(loops: Loops, numerators: FloatArray) -> FloatArray:
    """A size of each signal in its first delay: a mean of the open loop's step response, weight s e^(-st).
    (M, S).

    Where the loop has come to rest long before a delay is over, the modes see nothing of what there was.
    """
    s = (6.0 / loops.dead_time)[:, None] * 4.0 ** np.arange(16) + 0.0j
    with np.errstate(all="ignore"):
        below = horner(loops.denominator, s)
        sizes = [np.abs(horner(one, s) / below).max(axis=1) for one in numerators]
    out: FloatArray = np.nan_to_num(np.stack(sizes, axis=1))
    return out


def _assembled(early: Early, loops: Loops, modes: TrueModes, late: IntArray, later: LatePanels) -> Panels:
    """All panels in order of loop and time; `later` belongs to the loops `late`."""
    rows, delay = len(loops), loops.dead_time
    count = np.zeros(rows, dtype=np.intp)
    for piece in early.pieces:
        count[piece.rows] += len(piece.sizes)
    marched = count.copy()
    count[late] += np.bincount(later.owner, minlength=len(late))
    first = np.cumsum(count) - count
    total = int(count.sum())
    owner = np.repeat(np.arange(rows), count)
    start, length = np.empty(total), np.empty(total)
    values = np.empty((modes.final.shape[1], total, NODES))
    following = first.copy()
    for piece in early.pieces:
        panels = len(piece.sizes)
        place = following[piece.rows, None] + np.arange(panels)
        begin = piece.delay + np.cumsum(piece.sizes) - piece.sizes
        start[place] = begin * delay[piece.rows, None]
        length[place] = piece.sizes * delay[piece.rows, None]
        values[:, place] = piece.values
        following[piece.rows] += panels
    mine = late[later.owner]
    place = np.arange(len(mine)) + (first + marched)[mine] - np.searchsorted(later.owner, later.owner)
    start[place], length[place] = later.start, later.length
    fill(modes.rows(late), later, values, place)
    return Panels(owner, start, length, values, first)
