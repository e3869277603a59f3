"""Early responses of loops with dead time: marched delay by delay until the true modes meet them, or rest.

M loops, S signals. Own time τ: u at τ, y and d one delay later.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.roots import closed_roots
from synth.loop.time.collocation import NODES, TO_CHEBYSHEV
from synth.loop.time.steps import Walk, ladder, lasting_kinks, resampling, resolution
from synth.loop.time.true_modes import TrueModes, geometric

# The most delays that are ever marched, and the most panels of one loop; what is not decided by then is
# flagged.
MOST_DELAYS, MOST_PANELS = 1536, 6144
# Delays marched before the modes are tried: sooner they hardly ever meet.
SOONEST = 3
# Places of a delay at which the modes are compared with what was marched: enough to see modes that turn up
# to eight times a delay, and those that turn faster die long before the first that are left out.
PLACES = 16
# The modes are trusted where they meet the marched response over a whole delay to this part of its unit.
AGREES = 3e-9
# A response has come to rest, and modes have died, at this part of the unit.
DEAD = 3e-10
# Last Chebyshev coefficients above this part of the largest value: the panels are cut finer.
RESOLVED = 3e-9
# Delays that most loops are done with: before it new panels are not worth their making.
WORTH = 8
# The most panels of a delay, of all loops together, that are carried at once: 25 MB of matrices.
ROOM = 8192

_PLACES = tuple((np.arange(PLACES) + 0.5) / PLACES)
# Values of a panel to its last two Chebyshev coefficients and its values at both ends.
_ENDS = np.concatenate([TO_CHEBYSHEV[:, -2:], np.eye(NODES)[:, [0, -1]]], axis=1)


@dataclass(frozen=True, slots=True)
class Piece:
    """One delay of some loops: the numbers of the loops (m,), of the delay, the panels' lengths (P,) as parts
    of the delay, and values (S, m, P, 13)."""

    rows: IntArray
    delay: int
    sizes: FloatArray
    values: FloatArray


@dataclass(slots=True)
class Early:
    """Pieces in order of time, how many delays each loop was followed for (M,), whether the modes met it in
    the last one, or it had come to rest, and the largest size seen of each signal (S, M)."""

    delays: IntArray
    meets: BoolArray
    quiet: BoolArray
    size: FloatArray
    pieces: list[Piece] = field(default_factory=list)


def early_response(loops: Loops, numerators: FloatArray, modes: TrueModes, unit: FloatArray) -> Early:
    """The response of each loop until its modes can take over.

    numerators (S, M, n + 1), N first; unit (M, S) is what errors are relative to.
    """
    rows, no = len(loops), np.zeros(len(loops), dtype=bool)
    out = Early(np.zeros(rows, dtype=np.intp), no, no.copy(), np.zeros((len(numerators), rows)))
    open_poles = closed_roots(_without_integrators(loops.denominator))
    fine, coarse, hold = resolution(loops, open_poles, modes.pole)
    kinks = lasting_kinks(loops, open_poles, coarse)
    least = _jumping_delays(loops)
    todo, finer = np.arange(rows), 0
    while todo.size:
        again = []
        for at in _classes(todo, fine, coarse, hold):
            even = int(coarse[at].max())
            cut, smooth = ladder(int(fine[at].max()), even, int(hold[at].max())), ladder(even, even)
            walk = Walk.start(loops, numerators, at, cut)
            meeting = _Meeting(modes.rows(at), unit[at], loops.dead_time[at])
            refine = finer < 3 and len(cut) < MOST_PANELS // 16
            again.append(_walk(out, at, walk, meeting, smooth, int(kinks[at].max()), least[at], refine))
        todo, finer = np.concatenate(again), finer + 1
        fine[todo] += 1
        coarse[todo] += 1
        kinks[todo] *= 2.0
    return out


def _walk(
    out: Early,
    at: IntArray,
    walk: Walk,
    meeting: _Meeting,
    smooth: FloatArray,
    kinks: int,
    least: FloatArray,
    refine: bool,
) -> IntArray:
    """March the loops `at` and write them to `out`; returns those that need finer panels instead."""
    left, k, due = np.arange(len(at)), 0, SOONEST
    longest = min(MOST_DELAYS, max(MOST_PANELS // len(walk.sizes), 2))
    ends = np.zeros((len(walk.numerators), len(at), 4))
    rough, pieces = np.zeros(len(at), dtype=bool), []
    while left.size:
        values = walk.over()
        pieces.append(Piece(left, k, walk.sizes, values))
        ends[:, left] = np.fmax(ends[:, left], _ends(values))
        sizes = walk.sizes
        k += 1
        if k == max(kinks, WORTH):
            walk = walk.cut(smooth)
        if k < min(due, longest):
            continue
        due = k + 1 + k // 8
        if refine:
            last, size = ends[:, left, :2].max(axis=2), ends[:, left, 2:].max(axis=2)
            rough[left] = (last > RESOLVED * size).any(axis=0)
        meets = meeting.met(left, k, sizes, values) & (k >= least[left])
        quiet = np.zeros_like(meets)
        quiet[~meets] = meeting.at_rest(left[~meets], values[:, ~meets])
        done = meets | quiet | rough[left] | (k >= longest)
        ready = left[done]
        out.delays[at[ready]], out.meets[at[ready]], out.quiet[at[ready]] = k, meets[done], quiet[done]
        if done.any():
            left = left[~done]
            walk = walk.rows(np.flatnonzero(~done))
    out.size[:, at] = ends[:, :, 2:].max(axis=2)
    for piece in pieces:
        good = ~rough[piece.rows]
        values = piece.values if good.all() else piece.values[:, good]
        out.pieces.append(Piece(at[piece.rows[good]], piece.delay, piece.sizes, values))
    return at[rough]


def _ends(values: FloatArray) -> FloatArray:
    """The largest over all panels of the last two Chebyshev coefficients and the values at both ends.
    (S, m, P, 13) -> (S, m, 4)."""
    # one product for all panels: numpy would make a call for each of many small ones
    found = np.abs(values.reshape(-1, NODES) @ _ENDS).reshape(*values.shape[:-1], 4)
    out: FloatArray = np.fmax.reduce(found, axis=2)
    return out


class _Meeting:
    """Where the modes (M) meet what was marched."""

    def __init__(self, modes: TrueModes, unit: FloatArray, delay: FloatArray) -> None:
        self.modes, self.unit = modes, np.maximum(unit, 1e-300)
        self.turn = modes.pole * delay[:, None]
        step = np.conj(self.turn) / PLACES  # conjugate as in true_modes.fill
        self.table = geometric(np.exp(0.5 * step), np.exp(step), PLACES).view(float)

    def met(self, rows: IntArray, delays: int, sizes: FloatArray, values: FloatArray) -> BoolArray:
        """Whether the modes agree with values (S, m, P, 13), the last of so many delays. (m,).

        What the modes leave out is itself a response of the loop, as small later as it is over one whole
        delay.
        """
        signals, m, panels, _ = values.shape
        marched = values.reshape(signals * m, panels * NODES) @ resampling(tuple(sizes), _PLACES)
        growth = np.exp(self.turn[rows] * (delays - 1.0))
        weight = (self.modes.residue[rows] * growth[:, None]).view(float)
        found = weight @ self.table[rows].swapaxes(1, 2) + self.modes.final[rows, :, None]
        apart = np.abs(marched.reshape(signals, m, PLACES).swapaxes(0, 1) - found).max(axis=2)
        out: BoolArray = (apart <= AGREES * self.unit[rows]).all(axis=1)  # not where it is no number
        return out

    def at_rest(self, rows: IntArray, values: FloatArray) -> BoolArray:
        """Whether values (S, m, P, 13) have come to rest: a stable loop at rest over one whole delay stays
        so."""
        final, limit = self.modes.final[rows].T, DEAD * self.unit[rows].T
        out: BoolArray = np.all(np.abs(values[:, :, -1, -1] - final) <= limit, axis=0)
        if out.any():
            off = np.abs(values[:, out] - final[:, out, None, None]).max(axis=(2, 3))
            out[out] = np.all(off <= limit[:, out], axis=0)
        return out


def _jumping_delays(loops: Loops) -> FloatArray:
    """Delays after which jumps, each abs(N/D) at infinity times the last, have died. (M,)."""
    with np.errstate(all="ignore"):
        ratio = np.abs(loops.numerator[:, 0] / loops.denominator[:, 0])
        out: FloatArray = np.ceil(23.0 / -np.log(np.clip(ratio, 1e-6, 0.985)))
    return out


def _without_integrators(denominator: FloatArray) -> FloatArray:
    """Without the roots at 0 that all rows have, at least: they ask for no panels."""
    used = np.flatnonzero(denominator.any(axis=0))
    return denominator[:, : used[-1] + 1]


def _classes(todo: IntArray, fine: IntArray, coarse: IntArray, hold: IntArray) -> list[IntArray]:
    """Rows that are marched together: the same panels, and no more at once than there is room for."""
    out = []
    if len(todo) <= 300:  # one fine cut for all costs less than many calls
        step = 4 if len(todo) > 100 else 8
        key = np.where(coarse[todo] > 1, coarse[todo], 0) * 100 + np.minimum(fine[todo] // step, 3)
        key += 10 * hold[todo]
    else:
        key = (hold[todo] * 100 + coarse[todo]) * 100 + fine[todo]
    for one in np.unique(key):
        at = todo[key == one]
        panels = len(ladder(int(fine[at].max()), int(coarse[at].max()), int(hold[at].max())))
        out += np.array_split(at, min(-(-len(at) * panels // ROOM), len(at)))
    return out
