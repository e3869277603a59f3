"""The least damping ratio of the far poles of loops with dead time: those a list of all poles cannot hold.

Far out every pole lies on the chain s θ = ln(-N/D)(s) + 2πjk, one to a turn, and its ratio moves slowly from
one to the next. So poles are solved for at a ladder of frequencies, crowded round lightly damped roots of N
and D, then ever closer together round the least ratio, in the end every one beside it. Each ratio is that of
a true pole.

M loops, G seeds. Scaled time.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.roots import closed_roots
from synth.loop.polynomials import horner, horner_slope

_LADDER = 160  # frequencies between the ends of the range
_CROWD = np.sinh(np.linspace(-7.0, 7.0, 41))  # in units of the root's distance to the axis
_EDGE = np.arange(-24.0, 9.0) * (np.pi / 2.0)  # rad: round the end, where the last pole that counts lies
_ROUNDS = 4
_FINER = np.linspace(0.0, 1.0, 33)
_LEAST = 3  # ratios round which a closer look is taken
_LAST = np.arange(-16.0, 17.0) * (np.pi / 2.0)  # rad
_STEPS = 8


def far_damping(loops: Loops, first: FloatArray, reach: FloatArray) -> FloatArray:
    """Least -Re p / abs(p) of the poles with `first` < abs(p) <= `reach`, (M,); inf where there is none.

    Where `reach` is inf the ratios tend to 0 from above, and 0 is their infimum.

    loops : dead_time (M,) > 0; first, reach : (M,) scaled 1/time, `first` many turns from the origin.
    A pole nearer than `first` may be among them.
    """
    out = np.full(len(loops), np.inf)
    endless = loops.numerator.any(axis=1) & np.isfinite(loops.closed).all(axis=1)
    out[endless & (reach == np.inf)] = 0.0
    rows = np.flatnonzero(endless & (reach > first) & np.isfinite(reach))
    for start in range(0, len(rows), 256):
        at = rows[start : start + 256]
        out[at] = _least(loops.rows(at), first[at], reach[at])
    return out


def _least(loops: Loops, first: FloatArray, reach: FloatArray) -> FloatArray:
    low, high = first[:, None], reach[:, None]
    delay = loops.dead_time[:, None]
    ladder = low * (high / low) ** np.linspace(0.0, 1.0, _LADDER)
    roots = np.concatenate([closed_roots(loops.denominator), closed_roots(loops.numerator)], axis=1)
    crowd = (np.abs(roots.imag)[:, :, None] + np.abs(roots.real)[:, :, None] * _CROWD).reshape(len(loops), -1)
    seeds = np.concatenate([ladder, np.nan_to_num(crowd), high + _EDGE / delay], axis=1)
    seeds = np.sort(np.clip(seeds, low, high), axis=1)
    ratio = _ratios(loops, seeds, reach)
    best = ratio.min(axis=1)
    for _ in range(_ROUNDS):
        # from the neighbour before to the neighbour after each of the least
        width = seeds.shape[1]
        local = _local_least(ratio)
        before = np.take_along_axis(seeds, np.maximum(local - 1, 0), axis=1)[:, :, None]
        after = np.take_along_axis(seeds, np.minimum(local + 1, width - 1), axis=1)[:, :, None]
        seeds = np.sort((before + (after - before) * _FINER).reshape(len(loops), -1), axis=1)
        ratio = _ratios(loops, seeds, reach)
        best = np.minimum(best, ratio.min(axis=1))
    centre = np.take_along_axis(seeds, ratio.argmin(axis=1)[:, None], axis=1)
    last = _ratios(loops, np.maximum(centre + _LAST / delay, low), reach)
    return np.asarray(np.minimum(best, last.min(axis=1)))


def _local_least(ratio: FloatArray) -> IntArray:
    """Places of the least local minima of each row, (M, G) -> (M, few)."""
    wide = np.pad(ratio, ((0, 0), (1, 1)), constant_values=np.inf)
    local = (wide[:, 1:-1] <= wide[:, :-2]) & (wide[:, 1:-1] <= wide[:, 2:])
    order = np.argsort(np.where(local, ratio, np.inf), axis=1)
    return order[:, :_LEAST]


def _ratios(loops: Loops, frequency: FloatArray, reach: FloatArray) -> FloatArray:
    """Damping ratio of the pole nearest to each frequency, (M, G); inf where none counts or is found.

    Newton's method on s θ - ln(-N/D), its imaginary part taken modulo a turn: whichever turn is nearest.
    """
    delay = loops.dead_time[:, None]
    with np.errstate(all="ignore"):  # seeds that do not settle are dropped
        s: ComplexArray = frequency.astype(complex) * 1j
        level = np.log(np.abs(horner(loops.numerator, s) / horner(loops.denominator, s)))
        s = s + np.clip(np.nan_to_num(level), -700.0, 700.0) / delay
        rest = np.full(s.shape, np.inf, dtype=complex)
        for _ in range(_STEPS):
            n, slope_n = horner_slope(loops.numerator, s)
            d, slope_d = horner_slope(loops.denominator, s)
            rest = s * delay - np.log(-n / d)
            rest = rest - 2j * np.pi * np.round(rest.imag / (2.0 * np.pi))
            s = s - rest / (delay - (slope_n / n - slope_d / d))
        size = np.abs(s)
        fine = np.abs(rest) <= 1e-9 * (1.0 + 1e-5 * size * delay)
        ratio: FloatArray = np.where(fine & (size <= reach[:, None]), -s.real / size, np.inf)
    return ratio
