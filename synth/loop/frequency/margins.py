"""From crossings to bandwidth, crossover and margins. M loops.

With Nyquist's count satisfied (the loop is stable) every margin is the nearest crossing; without one it is
infinite.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.crossings import Crossings
from synth.loop.frequency.response import D, N, Response


def lowest(m: int, row: IntArray, value: FloatArray, start: float = np.inf) -> FloatArray:
    """(M,) smallest value of each row; `start` where there is none."""
    out = np.full(m, start)
    np.minimum.at(out, row, value)
    return out


def highest(m: int, row: IntArray, value: FloatArray, start: float = -np.inf) -> FloatArray:
    """(M,) largest value of each row; `start` where there is none."""
    out = np.full(m, start)
    np.fmax.at(out, row, value)
    return out


def fall_quantities(m: int, falls: Crossings, no_level: BoolArray) -> dict[str, FloatArray]:
    """bandwidth: LOWEST ω where |T| falls through |T(0)|/√2, inf where it never does; highest_fall: the
    HIGHEST, NaN.

    falls : crossings of |T|, upward ones among them. no_level : (M,) T(0) = 0, both are absent.
    """
    row, w = falls.row[falls.down], falls.w[falls.down]
    return {
        "bandwidth": np.where(no_level, np.nan, lowest(m, row, w)),
        "highest_fall": np.where(no_level, np.nan, highest(m, row, w, np.nan)),
    }


def gain_quantities(response: Response, gains: Crossings) -> dict[str, FloatArray]:
    """crossover (highest ω with |L| = 1), phase_margin [deg] and delay_margin over ALL gain crossovers.

    ω = 0 is a crossover where |L(0)| is 1 exactly. delay_margin is 0 where |L(∞)| >= 1.
    """
    m = response.loops
    crossover = highest(m, gains.row, gains.w, np.nan)
    angle = np.angle(-gains.loop)  # 180° + arg L, wrapped
    margin = lowest(m, gains.row, np.degrees(np.abs(angle)))
    delay = lowest(m, gains.row, np.where(angle > 0.0, angle, angle + 2.0 * np.pi) / gains.w)

    at_zero = np.abs(response.ends[0, N]) == np.abs(response.ends[0, D])
    if at_zero.any():
        crossover = np.where(at_zero, np.fmax(crossover, 0.0), crossover)
        positive = response.ends[0, N] * response.ends[0, D] > 0.0  # L(0) = 1; -1 is not stable
        margin = np.where(at_zero & positive, np.minimum(margin, 180.0), margin)
    through = np.abs(response.ends[1, N]) >= np.abs(response.ends[1, D])
    return {
        "crossover": crossover,
        "phase_margin": margin,
        "delay_margin": np.where(through, 0.0, delay),
    }


def gain_margins(response: Response, phases: Crossings) -> dict[str, FloatArray]:
    """gain_margin_up, gain_margin_down and the smaller of them, gain_margin [dB]; inf where there is none.

    Every ω with L real and negative counts, ω -> 0 and ω -> ∞ as limits; with dead time and L(∞) ≠ 0 the
    circle |L(∞)|, which the curve follows for ever, is a limit too.
    """
    m = response.loops
    negative = np.flatnonzero(phases.loop.real < 0.0)
    row, size = phases.row[negative], np.abs(phases.loop[negative])
    with np.errstate(divide="ignore"):
        change = 20.0 * np.log10(size)
        up = lowest(m, row[change <= 0.0], -change[change <= 0.0])
        down = lowest(m, row[change >= 0.0], change[change >= 0.0])
        ratio = response.ends[:, N] / np.where(response.ends[:, D] == 0.0, np.nan, response.ends[:, D])
        circle = response.dead_time > 0.0
        ratio[1] = np.where(circle, -np.abs(ratio[1]), ratio[1])
        for limit in ratio:
            limit_change = np.where(limit < 0.0, 20.0 * np.log10(np.abs(limit)), np.nan)
            up = np.fmin(up, np.where(limit_change <= 0.0, -limit_change, np.inf))
            down = np.fmin(down, np.where(limit_change >= 0.0, limit_change, np.inf))
    return {"gain_margin_up": up, "gain_margin_down": down, "gain_margin": np.minimum(up, down)}
