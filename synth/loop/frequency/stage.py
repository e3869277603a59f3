"""The frequency stage: what is wanted of a stack of stable loops, and no more than that. M loops."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.frequency.crossings import (
    FALL,
    GAIN,
    PHASE,
    Crossings,
    crossings,
    fall_level,
    of_kind,
    polynomials,
)
from synth.loop.frequency.delayed import delayed_quantities
from synth.loop.frequency.isolation import isolate
from synth.loop.frequency.margins import fall_quantities, gain_margins, gain_quantities
from synth.loop.frequency.peaks import CURVES, Suprema
from synth.loop.frequency.response import Response, response_of

FALLS = frozenset({"bandwidth", "highest_fall"})
GAINS = frozenset({"crossover", "phase_margin", "delay_margin"})
PHASES = frozenset({"gain_margin", "gain_margin_up", "gain_margin_down"})
KEYS = FALLS | GAINS | PHASES | frozenset(CURVES)


@np.errstate(all="ignore")  # what leaves the number range is NaN, and what rests on it is absent
def frequency_stage(loops: Loops, poles: ComplexArray, wanted: frozenset[str]) -> dict[str, FloatArray]:
    """Frequency quantities of stable loops.

    Parameters
    ----------
    loops : M stable loops; dead time in all or in none.
    poles : (M, n) scaled closed-loop poles, used as a hint where to look first without dead time (NaN is
        passed over).
    wanted : names of quantities; those of other stages are passed over. "highest_fall" is the HIGHEST ω at
        which |T| falls through |T(0)|/√2: NaN where it never does or T(0) = 0, inf where falls recur for ever
        (dead time with L(∞) ≠ 0).

    Returns
    -------
    (M,) scaled values by name: frequencies in 1/time_scale, margins in deg and dB, delay_margin in
    time_scale, noise_gain in 1/plant_gain. NaN is absent, inf is meant. Loops whose |N|² or |D|² leaves the
    number range have NaN throughout.
    """
    wanted = wanted & KEYS
    if not wanted:
        return {}
    response = response_of(loops)
    readable = np.isfinite(response.squares).all(axis=(0, 1))
    if loops.delayed:  # a coefficient whose square vanishes would be taken for none
        readable &= ~((response.ends != 0.0) & (np.abs(response.ends) < 1e-150)).any(axis=(0, 1))
    if not readable.all():
        some = np.flatnonzero(readable)
        found_there = frequency_stage(loops.rows(some), poles[some], wanted) if some.size else {}
        return {key: _spread(len(loops), some, found_there.get(key)) for key in wanted}
    kinds = tuple(k for k, keys in ((GAIN, GAINS), (FALL, FALLS), (PHASE, PHASES)) if wanted & keys)
    curves = tuple(k for k in CURVES if k in wanted)
    out: dict[str, FloatArray] = {}
    found: list[Crossings] = []
    if loops.delayed:
        others = tuple(k for k in kinds if k != GAIN)
        recurring = np.zeros(len(loops), dtype=bool)
        if others or curves:
            found, out, recurring = delayed_quantities(response, others, curves)
        if GAIN in kinds:
            found.append(crossings(response, (GAIN,), isolate(polynomials(response, (GAIN,)))))
    else:
        found, out = _rational_quantities(response, poles, kinds, curves)
    if GAIN in kinds:
        out |= gain_quantities(response, of_kind(found, GAIN))
    if FALL in kinds:
        out |= fall_quantities(len(loops), of_kind(found, FALL), fall_level(response) == 0.0)
        if loops.delayed:
            out["highest_fall"] = np.where(recurring, np.inf, out["highest_fall"])
    if PHASE in kinds:
        out |= gain_margins(response, of_kind(found, PHASE))
    return {k: v for k, v in out.items() if k in wanted}


def _rational_quantities(
    response: Response, poles: ComplexArray, kinds: tuple[int, ...], curves: tuple[str, ...]
) -> tuple[list[Crossings], dict[str, FloatArray]]:
    """Crossings and suprema of loops without dead time: all polynomials are searched for roots at once."""
    sought = polynomials(response, kinds)
    if not curves:
        return [crossings(response, kinds, isolate(sought))], {}
    count = sought.shape[1]
    suprema = Suprema(response, poles, curves)
    levels, hint = suprema.levels()
    brackets = isolate(np.concatenate([sought, levels], axis=1), np.concatenate([np.zeros(count), hint]))
    first = brackets.row < count
    suprema.raise_to(brackets.rows(~first, count))
    return [crossings(response, kinds, brackets.rows(first, 0))], suprema.settled()


def _spread(m: int, index: IntArray, values: FloatArray | None) -> FloatArray:
    """(M,) with `values` at `index`, NaN elsewhere."""
    out = np.full(m, np.nan)
    if values is not None:
        out[index] = values
    return out
