"""Step responses with dead time as curves, at times the caller chooses.

M loops, T times.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.roots import closed_roots
from synth.loop.time.collocation import polynomial, powers, total
from synth.loop.time.steps import Walk, ladder, resolution
from synth.loop.time.true_modes import true_modes

# The most delays marched before the modes take over, and how many are where there are more.
MOST_DRAWN, LONG = 200, 48


def delayed_step_curves(loops: Loops, t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """y and u of a unit reference step and y of a unit step at the plant's input, stable or not.

    t : (M, T) or (T,) scaled times. At a jump the value after it is given. Returns (y, u, d), (M, T) each.
    """
    t = np.broadcast_to(np.asarray(t, dtype=float), (len(loops), np.shape(t)[-1]))
    delay = loops.dead_time[:, None]
    numerators = np.stack([loops.numerator, loops.control, loops.load])
    horizon = np.maximum(t.max(axis=1, initial=0.0) / loops.dead_time, 0.0)
    poles = delayed_poles(loops, np.zeros(len(loops)))
    modes = true_modes(loops, numerators, poles)
    out = np.zeros((3, len(loops), t.shape[1]))
    fine, coarse, hold = resolution(loops, closed_roots(loops.denominator), modes.pole)
    own = np.stack([t - delay, t, t - delay])
    for row in range(len(loops)):
        one = np.array([row])
        count = int(np.floor(horizon[row])) + 1
        marched = min(count, MOST_DRAWN if count <= MOST_DRAWN else LONG)
        sizes = ladder(int(fine[row]) + 1, int(coarse[row]) + 1, int(hold[row]))
        walk = Walk.start(loops, numerators, one, sizes)
        values = np.stack([walk.over()[:, 0] for _ in range(marched)])
        edges = np.concatenate([[0.0], np.cumsum(sizes)])
        for s in range(3):
            time = own[s, row]
            place = time / loops.dead_time[row]
            early = np.flatnonzero((time >= 0.0) & (place < marched))
            k = np.floor(place[early]).astype(np.intp)
            part = place[early] - k
            i = np.clip(np.searchsorted(edges, part, side="right") - 1, 0, len(sizes) - 1)
            x = (part - edges[i]) / sizes[i]
            out[s, row, early] = total(polynomial(values[k, s, i]), powers(x))
            late = np.flatnonzero(place >= marched)
            if late.size:
                out[s, row, late] = modes.rows(one).at(time[None, late])[0, s]
    return out[0], out[1], out[2]
