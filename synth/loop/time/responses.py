"""Step responses of loops with dead time to the end: marched, then carried on by the true modes.

M loops, S signals. Own time τ: u at τ, y and d one delay later.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.roots import closed_roots
from synth.loop.polynomials import horner
from synth.loop.time.collocation import GRID, NODES, TO_CHEBYSHEV
from synth.loop.time.panels import Panels
from synth.loop.time.steps import March, ladder, lasting_kinks, march, resolution
from synth.loop.time.true_modes import TrueModes, alone_from, late_panels, true_modes, units

# Delays after which a response that still goes on is handed to the modes, and the most that are ever marched.
LONG, HANDOVER, MOST_DELAYS = 48, 14, 1536
# The most panels marched for one loop; what is not decided by then is flagged.
MOST_PANELS = 6144
MOST_LATE = 4096
# The modes are trusted where they meet the marched response over a whole delay to this part of its unit.
AGREES = 3e-9
# Other modes have died, or all have, at this part of the unit.
DEAD = 3e-10
# Last Chebyshev coefficients above this part of the largest value: the panels are cut finer.
RESOLVED = 3e-9


# Values of a panel to its last two Chebyshev coefficients and its values at both ends.
_ENDS = np.concatenate([TO_CHEBYSHEV[:, -2:], np.eye(NODES)[:, [0, -1]]], axis=1)


@dataclass(frozen=True, slots=True)
class Responses:
    """panels up to own time end (M,), and the single mode that is left then.

    amplitude (M, S) complex and pole (M,): signal = final + Re(amplitude e^(pole (τ - end))) for τ > end.
    unit, final (M, S); doubtful (M,) where neither could be had within the most delays or panels.
    """

    panels: Panels
    end: FloatArray
    amplitude: ComplexArray
    pole: ComplexArray
    final: FloatArray
    unit: FloatArray
    doubtful: BoolArray


def responses(loops: Loops, poles: ComplexArray, numerators: FloatArray) -> Responses:
    """Responses of M stable loops. numerators (M, S, n + 1), N first; poles (M, q) true roots, NaN padded."""
    delay = loops.dead_time
    modes = true_modes(loops, numerators, poles)
    early = _early_size(loops, numerators)
    unit = np.maximum(units(modes, delay), early)
    # close poles may leave the sum of their modes worthless: y at least is judged by what it comes to
    final = np.abs(modes.final[:, 0])
    unit[:, 0] = np.where(final > 0.0, np.maximum(final, early[:, 0]), unit[:, 0])
    alone = alone_from(modes, unit, DEAD)
    with np.errstate(invalid="ignore", over="ignore"):
        needed = np.ceil(np.nan_to_num(alone / delay, nan=np.inf, posinf=1e300)) + 1.0
    least = _chain_delays(loops)
    delays = np.where(needed > LONG, HANDOVER, np.maximum(needed, 2.0))
    delays = np.minimum(np.maximum(delays, least), MOST_DELAYS).astype(np.intp)
    open_poles = closed_roots(loops.denominator)
    fine, coarse, hold = resolution(loops, open_poles, modes.pole)
    kinks = lasting_kinks(loops, open_poles, coarse)

    rows = len(loops)
    pieces: list[Panels] = []
    amplitude = np.zeros((rows, numerators.shape[1]), dtype=complex)
    end, doubtful = np.zeros(rows), np.zeros(rows, dtype=bool)
    todo, coarser = np.arange(rows), np.zeros(rows, dtype=np.intp)
    while todo.size:
        again = []
        for at in _classes(todo, fine, coarse, hold, delays):
            even = int(coarse[at].max())
            cut, smooth = ladder(int(fine[at].max()), even, int(hold[at].max())), ladder(even, even)
            longest = max(MOST_PANELS // len(cut), 2)
            delays[at] = np.minimum(delays[at], longest)
            part = march(loops.rows(at), numerators[at], delays[at], cut, smooth, int(kinks[at].max()))
            rough = _unresolved(part) & (coarser[at] < 3) & (len(cut) < MOST_PANELS // 16)
            meets, quiet = _checked(part, delays[at], delay[at], modes.rows(at), unit[at])
            longer = ~rough & ~(meets | quiet) & (delays[at] < min(MOST_DELAYS, longest))
            done = ~rough & ~longer
            fine[at[rough]] += 1
            coarse[at[rough]] += 1
            coarser[at[rough]] += 1
            kinks[at[rough]] *= 2.0
            delays[at[longer]] = np.minimum(2 * delays[at[longer]], MOST_DELAYS)
            again.append(at[~done])
            kept = at[done]
            pieces.extend(_flat(leg, at, done, delays, delay) for leg in part)
            end[kept] = delays[kept] * delay[kept]
            amplitude[kept] = np.where(meets[done, None], modes.residue[kept, :, 0], 0.0)
            doubtful[kept] = ~(meets | quiet)[done]
        todo = np.concatenate(again)

    going_on = amplitude.any(axis=1) & (alone > end)
    if going_on.any():
        at = np.flatnonzero(going_on)
        owner, start, length, values = late_panels(modes.rows(at), unit[at], end[at], alone[at], MOST_LATE)
        pieces.append(Panels(at[owner], start, length, values, np.zeros(0, dtype=np.intp)))
        np.maximum.at(end, at[owner], start + length)
        doubtful[at] |= end[at] < alone[at]
    pole = modes.pole[:, 0]
    amplitude = amplitude * np.exp(pole * end)[:, None]
    return Responses(_assembled(pieces, rows), end, amplitude, pole, modes.final, unit, doubtful)


def _chain_delays(loops: Loops) -> FloatArray:
    """Delays after which the far roots, those that are not among the poles, have died: each shrinks by
    abs(N/D)."""
    far = (9.0j / loops.dead_time[:, None]).astype(complex)
    with np.errstate(all="ignore"):
        ratio = np.abs(horner(loops.numerator, far) / horner(loops.denominator, far))[:, 0]
        ratio = np.fmax(ratio, np.abs(loops.numerator[:, 0] / loops.denominator[:, 0]))
        out: FloatArray = np.ceil(23.0 / -np.log(np.clip(ratio, 1e-6, 0.985)))
    return out


def _early_size(loops: Loops, numerators: FloatArray) -> FloatArray:
    """A size of each signal in its first delay: a mean of the open loop's step response, weight s e^(-st).
    (M, S).

    Where the loop has come to rest long before a delay is over, the modes see nothing of what there was.
    """
    s = (6.0 / loops.dead_time)[:, None] * 4.0 ** np.arange(16) + 0.0j
    with np.errstate(all="ignore"):
        below = horner(loops.denominator, s)
        sizes = [np.abs(horner(numerators[:, i], s) / below).max(axis=1) for i in range(numerators.shape[1])]
    out: FloatArray = np.nan_to_num(np.stack(sizes, axis=1))
    return out


def _classes(
    todo: IntArray, fine: IntArray, coarse: IntArray, hold: IntArray, delays: IntArray
) -> list[IntArray]:
    """Rows that are marched together: the same panels, and no more numbers at once than fit in 60 MB."""
    out = []
    if len(todo) <= 300:  # one fine cut for all costs less than many calls
        key = np.where(coarse[todo] > 1, coarse[todo], 0) * 100 + np.minimum((fine[todo] + 2) // 3, 3)
        key += 10 * hold[todo]
    else:
        key = (hold[todo] * 100 + coarse[todo]) * 100 + fine[todo]
    for one in np.unique(key):
        at = todo[key == one]
        at = at[np.argsort(-delays[at], kind="stable")]
        panels = len(ladder(int(fine[at].max()), int(coarse[at].max()), int(hold[at].max())))
        while at.size:
            room = max(1, int(2.5e6 // (int(delays[at[0]]) * panels * NODES)))
            out.append(at[:room])
            at = at[room:]
    return out


def _unresolved(part: list[March]) -> BoolArray:
    """Whether any panel's polynomial has not settled in its last coefficients. (m,)."""
    sizes, lasts = [], []
    for leg in part:
        shape = leg.values.shape
        # one product for all panels: numpy would make a call for each of many small ones
        ends = np.abs(leg.values.reshape(-1, NODES) @ _ENDS).reshape(*shape[:-1], 4)
        most = np.fmax.reduce(np.fmax.reduce(ends, axis=1), axis=1)
        lasts.append(most[:, :, :2].max(axis=2))
        sizes.append(most[:, :, 2:].max(axis=2))
    size, last = np.fmax.reduce(sizes), np.fmax.reduce(lasts)
    out: BoolArray = (last > RESOLVED * size).any(axis=1)
    return out


def _checked(
    part: list[March], delays: IntArray, delay: FloatArray, modes: TrueModes, unit: FloatArray
) -> tuple[BoolArray, BoolArray]:
    """Whether the modes meet the last delay marched, and whether the response has come to rest on it. (m,)
    each.

    A stable loop that is at rest over one whole delay stays so; and what the modes leave out is itself a
    response of the loop, as small later as it is over that delay.
    """
    meets, quiet = np.zeros(len(delays), dtype=bool), np.zeros(len(delays), dtype=bool)
    for leg in part:
        here = np.flatnonzero((delays > leg.begin) & (delays <= leg.begin + leg.values.shape[1]))
        last = leg.values[here, delays[here] - 1 - leg.begin]
        m, panels, signals, _ = last.shape
        begin = np.cumsum(leg.sizes) - leg.sizes
        place = (begin[:, None] + leg.sizes[:, None] * GRID).ravel()
        time = (delays[here, None] - 1.0 + place) * delay[here, None]
        some = modes.rows(here)
        sum_of_modes = some.at(time).reshape(m, signals, panels, NODES).swapaxes(1, 2)
        scale = np.maximum(unit[here], 1e-300)[:, None, :, None]
        apart = np.nan_to_num(np.abs(last - sum_of_modes) / scale, nan=np.inf)
        rest = np.nan_to_num(np.abs(last - some.final[:, None, :, None]) / scale, nan=np.inf)
        meets[here] = apart.max(axis=(1, 2, 3)) <= AGREES
        quiet[here] = rest.max(axis=(1, 2, 3)) <= DEAD
    return meets, quiet


def _flat(leg: March, at: IntArray, done: BoolArray, delays: IntArray, delay: FloatArray) -> Panels:
    """The panels of the rows that are done; `first` is left to the assembly."""
    _, held, panels, signals, _ = leg.values.shape
    mask = done[:, None] & (leg.begin + np.arange(held) < delays[at, None])
    row, k = np.nonzero(mask)
    begin = np.cumsum(leg.sizes) - leg.sizes
    owner = np.repeat(at[row], panels)
    step = delay[owner]
    start = (np.repeat(leg.begin + k, panels) + np.tile(begin, len(row))) * step
    length = np.tile(leg.sizes, len(row)) * step
    values = leg.values[row, k].reshape(-1, signals, NODES)
    return Panels(owner, start, length, values, np.zeros(0, dtype=np.intp))


def _assembled(pieces: list[Panels], rows: int) -> Panels:
    """All panels in order of loop and time."""
    owner = np.concatenate([p.owner for p in pieces])
    start = np.concatenate([p.start for p in pieces])
    order = np.lexsort((start, owner))
    place = np.empty_like(order)
    place[order] = np.arange(len(order))
    # each piece goes to its place at once: gathered first, all values would be copied twice
    values = np.empty((len(owner), *pieces[0].values.shape[1:]))
    begin = 0
    for p in pieces:
        values[place[begin : begin + len(p.owner)]] = p.values
        begin += len(p.owner)
    length = np.concatenate([p.length for p in pieces])[order]
    owner = owner[order]
    return Panels(owner, start[order], length, values, np.searchsorted(owner, np.arange(rows)))
