"""How far rounding can have moved each pole, and which quantities of the poles are therefore not sure.

Many nearly equal poles under hardly any feedback (twenty lags and a gain of 1e-6) are where this matters: the
coefficients themselves, rounded, do not tell the poles better than eps^(1/20). M loops, q poles.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.polynomials import horner_slope, magnitude_sum
from synth.loop.quantities import Measure

OF_POLES = ("damping_ratio", "decay_rate", "natural_frequency")

SURE = 1e-6
"""What a quantity promises, relative to max(value, own scale)."""

SUSPECT = 1e-7
"""Poles that a first look puts further off than this, relative to their size, are looked at properly."""


def uncertainty(loops: Loops, poles: ComplexArray) -> FloatArray:
    """(M, q) how far from the true root each computed root may lie, of loops without dead time.

    The smallest d for which a (d Π max(d, gap_j)) over the other roots, gap_j away, exceeds what rounding can
    do to the value there, 2 n eps Σ (abs(N_k) + abs(D_k)) abs(p)^k: noise / abs(Δ') for a root alone, the
    m-th root of it for m equal ones. An estimate from above; measured errors are a tenth of it.
    """
    size = np.abs(poles)
    with np.errstate(all="ignore"):
        whole = np.abs(loops.numerator) + np.abs(loops.denominator)
        noise = 2.0 * loops.order * np.finfo(float).eps * magnitude_sum(whole, size)
        _, slope = horner_slope(loops.closed, poles)
        off: FloatArray = noise / np.abs(slope)
        rows = np.flatnonzero((~(off <= SUSPECT * size) & ~np.isnan(poles)).any(axis=1))
        if rows.size:
            gap = np.abs(poles[rows][:, :, None] - poles[rows][:, None, :])
            gap[np.isnan(gap)] = 1.0  # of padding
            own = np.arange(gap.shape[1])
            gap[:, own, own] = 0.0
            lead = np.abs(loops.leading(loops.closed)[rows, None])
            low, high = np.zeros((len(rows), len(own))), 2.0 * size[rows]
            for _ in range(40):
                middle = 0.5 * (low + high)
                value = lead * np.maximum(middle[:, :, None], gap).prod(axis=2)
                above = value > noise[rows]
                low, high = np.where(above, low, middle), np.where(above, middle, high)
            off[rows] = high
    return off


def doubts(loops: Loops, poles: ComplexArray, values: dict[Measure, FloatArray]) -> dict[Measure, BoolArray]:
    """Where damping ratio, decay rate and natural frequency may be off by more than they promise.

    values : (M,) of those measures, in scaled time; others are passed over. Loops without dead time.
    """
    asked = {m: v for m, v in values.items() if m.quantity in OF_POLES and np.isfinite(v).any()}
    if not asked or poles.shape[1] == 0:
        return {}
    off, size = uncertainty(loops, poles), np.abs(poles)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = off / size
        ratio = -poles.real / size
        turned = share * np.abs(poles.imag) / size + 0.5 * share * share  # the cosine of an angle moves by
    out: dict[Measure, BoolArray] = {}
    for measure, value in asked.items():
        scale = (measure.row.scale or 0.0) * loops.time_scale**-measure.row.time_power
        least = SURE * np.fmax(np.abs(value), scale)
        if measure.quantity == "natural_frequency":
            mine = size == value[:, None]
            wrong = mine & (off > least[:, None])
        else:
            where, moved = (ratio, turned) if measure.quantity == "damping_ratio" else (-poles.real, off)
            # poles surely below the value are not counted; the others may truly lie below
            low = (value - least)[:, None]
            wrong = (where + moved >= low) & (where - moved < low)
        out[measure] = wrong.any(axis=1) & np.isfinite(value)
    return out
