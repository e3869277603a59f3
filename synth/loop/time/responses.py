"""Step responses of loops with dead time to the end: marched, then carried on by the true modes.

M loops, S signals. Own time τ: u at τ, y and d one delay later.
"""

from __future__ import annotations

from collections.abc import Iterator
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
    """panels of the signals as S M loops, up to own time end (M,) or to where nothing of a signal is asked
    any more, and the single mode that is left at the end.

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


@dataclass(frozen=True, slots=True)
class _Late:
    """Late panels of some signals of some loops, and the modes that fill them."""

    loops: IntArray
    signals: IntArray
    modes: TrueModes
    panels: LatePanels


def responses(loops: Loops, poles: ComplexArray, numerators: FloatArray, throughout: BoolArray) -> Responses:
    """Responses of M stable loops. numerators (S, M, n + 1), N first; poles (M, q) true roots, NaN padded.

    throughout (S,) : of a signal that is not asked for to its end only the sup matters.
    """
    delay = loops.dead_time
    modes = true_modes(loops, numerators, poles)
    early_size = _early_size(loops, numerators)
    unit = np.maximum(units(modes, delay), early_size)
    # close poles may leave the sum of their modes worthless: y at least is judged by what it comes to
    final = np.abs(modes.final[:, 0])
    unit[:, 0] = np.where(final > 0.0, np.maximum(final, early_size[:, 0]), unit[:, 0])
    early = early_response(loops, numerators, modes, unit)
    doubtful = ~(early.meets | early.quiet)
    start = early.delays * delay
    end = start.copy()
    parts = []
    for signals, at in _going_on(early, modes, start, throughout):
        some = modes.rows(at).signals(signals)
        size = unit[np.ix_(at, signals)]
        alone = alone_from(some, size, DEAD)
        later = np.flatnonzero(alone > start[at])
        at, alone = at[later], alone[later]
        some = some.rows(later)
        later_panels = late_panels(some, size[later], start[at], alone, MOST_LATE)
        np.maximum.at(end, at[later_panels.owner], later_panels.start + later_panels.length)
        doubtful[at] |= end[at] < alone
        parts.append(_Late(at, signals, some, later_panels))
    pole = modes.pole[:, 0]
    amplitude = np.where(early.meets, modes.residue[:, :, 0].T, 0.0) * np.exp(pole * end)
    panels = _assembled(early, delay, parts)
    return Responses(panels, end, amplitude, pole, modes.final.T.copy(), unit.T.copy(), doubtful)


def _going_on(
    early: Early, modes: TrueModes, start: FloatArray, throughout: BoolArray
) -> Iterator[tuple[IntArray, IntArray]]:
    """Sets of signals that are still asked for after `start` (M,), and the loops of each set.

    A sup has been passed where the modes that are left, all added up, stay below the size that was seen.
    """
    left = np.abs(modes.residue) * np.exp(modes.pole.real * start[:, None])[:, None]
    asked = throughout[:, None] | ~(np.abs(modes.final).T + left.sum(axis=2).T <= early.size)
    which = (asked & early.meets).T @ (1 << np.arange(len(throughout)))
    for one in np.unique(which[which > 0]):
        yield np.flatnonzero((one >> np.arange(len(throughout))) & 1), np.flatnonzero(which == one)


def _early_size(loops: Loops, numerators: FloatArray) -> FloatArray:
    """A size of each signal in its first delay: a mean of the open loop's step response, weight s e^(-st).
    (M, S).

    Where the loop has come to rest long before a delay is over, the modes see nothing of what there was.
    """
    s = (6.0 / loops.dead_time)[:, None] * 16.0 ** np.arange(8) + 0.0j
    with np.errstate(all="ignore"):
        below = horner(loops.denominator, s)
        sizes = [np.abs(horner(one, s) / below).max(axis=1) for one in numerators]
    out: FloatArray = np.nan_to_num(np.stack(sizes, axis=1))
    return out


def _assembled(early: Early, delay: FloatArray, late: list[_Late]) -> Panels:
    """All panels in order of signal, loop and time."""
    signals, rows = early.size.shape
    marched = np.zeros(rows, dtype=np.intp)
    for piece in early.pieces:
        marched[piece.rows] += len(piece.sizes)
    count = np.tile(marched, (signals, 1))
    for part in late:
        count[np.ix_(part.signals, part.loops)] += np.bincount(part.panels.owner, minlength=len(part.loops))
    first = (np.cumsum(count) - count.ravel()).reshape(count.shape)
    total = int(count.sum())
    start, length, values = np.empty(total), np.empty(total), np.empty((total, NODES))
    following = first.copy()
    for piece in early.pieces:
        panels = len(piece.sizes)
        place = following[:, piece.rows, None] + np.arange(panels)
        begin = piece.delay + np.cumsum(piece.sizes) - piece.sizes
        start[place] = begin * delay[piece.rows, None]
        length[place] = piece.sizes * delay[piece.rows, None]
        values[place] = piece.values
        following[:, piece.rows] += panels
    for part in late:
        p, mine = part.panels, part.loops[part.panels.owner]
        within = np.arange(len(mine)) - np.searchsorted(p.owner, p.owner)
        place = (first + marched)[part.signals[:, None], mine] + within
        start[place], length[place] = p.start, p.length
        fill(part.modes, p, values, place)
    owner = np.repeat(np.arange(signals * rows), count.ravel())
    return Panels(owner, start, length, values, first.ravel())
