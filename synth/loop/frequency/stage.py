"""The frequency stage: what is wanted of a stack of stable loops, and no more than that. M loops."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.frequency.crossings import FALL, GAIN, PHASE, Crossings, crossings, fall_level, of_kind
from synth.loop.frequency.delayed import delayed_quantities
from synth.loop.frequency.margins import fall_quantities, gain_margins, gain_quantities
from synth.loop.frequency.peaks import CURVES, suprema
from synth.loop.frequency.response import response_of

FALLS = frozenset({"bandwidth", "highest_fall"})
GAINS = frozenset({"crossover", "phase_margin", "delay_margin"})
PHASES = frozenset({"gain_margin", "gain_margin_up", "gain_margin_down"})
KEYS = FALLS | GAINS | PHASES | frozenset(CURVES)


@np.errstate(over="ignore")
def frequency_stage(loops: Loops, poles: ComplexArray, wanted: frozenset[str]) -> dict[str, FloatArray]:
    """Frequency quantities of stable loops.

    Parameters
    ----------
    loops : M stable loops; dead time in all or in none.
    poles : (M, n) scaled closed-loop poles, used as a hint where to look first (NaN is passed over).
    wanted : names of quantities; those of other stages are passed over. "highest_fall" is the HIGHEST ω at
        which |T| falls through |T(0)|/√2: NaN where it never does or T(0) = 0, inf where falls recur for ever
        (dead time with L(∞) ≠ 0).

    Returns
    -------
    (M,) scaled values by name: frequencies in 1/time_scale, margins in deg and dB, delay_margin in
    time_scale, noise_gain in 1/plant_gain. NaN is absent, inf is meant. Loops whose |N|², |D|² or θ^-n leaves
    the number range have NaN throughout.
    """
    wanted = wanted & KEYS
    if not wanted:
        return {}
    response = response_of(loops)
    readable = np.isfinite(response.squares).all(axis=(0, 1))
    delayed = bool((loops.dead_time > 0.0).any())
    if delayed:  # coefficients are also read in powers of the angle ωθ
        readable &= np.isfinite(loops.dead_time ** -(loops.order + 2.0))
    if not readable.all():
        some = np.flatnonzero(readable)
        found_there = frequency_stage(loops.rows(some), poles[some], wanted) if some.size else {}
        return {key: _spread(len(loops), some, found_there.get(key)) for key in wanted}
    kinds = tuple(k for k, keys in ((GAIN, GAINS), (FALL, FALLS), (PHASE, PHASES)) if wanted & keys)
    curves = tuple(k for k in CURVES if k in wanted)
    out: dict[str, FloatArray] = {}
    found: list[Crossings] = []
    if delayed:
        others = tuple(k for k in kinds if k != GAIN)
        recurring = np.zeros(len(loops), dtype=bool)
        if others or curves:
            found, out, recurring = delayed_quantities(response, poles, others, curves)
        if GAIN in kinds:
            found.append(crossings(response, (GAIN,)))
    else:
        if kinds:
            found.append(crossings(response, kinds))
        if curves:
            out = suprema(response, poles, curves)
    if GAIN in kinds:
        out |= gain_quantities(response, of_kind(found, GAIN))
    if FALL in kinds:
        out |= fall_quantities(len(loops), of_kind(found, FALL), fall_level(response) == 0.0)
        if delayed:
            out["highest_fall"] = np.where(recurring, np.inf, out["highest_fall"])
    if PHASE in kinds:
        out |= gain_margins(response, of_kind(found, PHASE))
    return {k: v for k, v in out.items() if k in wanted}


def _spread(m: int, index: IntArray, values: FloatArray | None) -> FloatArray:
    """(M,) with `values` at `index`, NaN elsewhere."""
    out = np.full(m, np.nan)
    if values is not None:
        out[index] = values
    return out
