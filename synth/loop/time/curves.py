"""Step responses as curves, at times the caller chooses: what is drawn and recorded."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.roots import closed_roots
from synth.loop.time.clusters import cluster_modes
from synth.loop.time.residues import CROWDED, crowding, limits, step_modes


def step_curves(loops: Loops, t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """y and u of a unit reference step, and y of a unit step at the plant's input.

    Parameters
    ----------
    loops : M loops, stable or not (NaN where a pole lies at 0, whose response has no modal limit).
    t : (T,) or (M, T) times >= 0 in units of each loop's time_scale; at 0 the value after the jump is given.

    Returns
    -------
    y, u, d : (M, T) each, scaled by the loop's plant gain like every value of the core.
    """
    times = np.broadcast_to(t, (len(loops), np.asarray(t).shape[-1]))
    if loops.delayed:
        from synth.loop.time.delayed_curves import delayed_step_curves

        return delayed_step_curves(loops, times)
    signals = ("y", "u", "d")
    poles = closed_roots(loops.closed)
    close = crowding(poles) > CROWDED
    out = np.empty((len(loops), len(signals), times.shape[1]))
    with np.errstate(all="ignore"):  # an unstable loop may leave the number range
        for rows, make in ((np.flatnonzero(~close), step_modes), (np.flatnonzero(close), cluster_modes)):
            if rows.size:
                out[rows] = make(loops.rows(rows), poles[rows], signals).curves(times[rows])
        out += limits(loops, signals)[1][:, :, None]
    return out[:, 0], out[:, 1], out[:, 2]
