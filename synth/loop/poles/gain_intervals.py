"""Intervals of loop gains, and the polynomial hygiene that their edges need."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray


@dataclass(frozen=True, slots=True)
class Interval:
    """Open interval of loop gains; ends may be infinite."""

    low: float
    high: float

    def __contains__(self, gain: float) -> bool:
        return self.low < gain < self.high


def intervals_between(
    gains: FloatArray, stable_at: Callable[[FloatArray], BoolArray]
) -> tuple[Interval, ...]:
    """Stable intervals of the gain line, given all gains at which stability can change.

    stable_at : function of an array of gains (G,) -> (G,) bool.
    """
    edges = np.unique(gains)
    if edges.size == 0:
        return (Interval(-np.inf, np.inf),) if stable_at(np.zeros(1))[0] else ()
    ends = np.concatenate([[-np.inf], edges, [np.inf]])
    inner = 0.5 * (edges[1:] + edges[:-1])
    beyond = 1.0 + np.abs(edges[[0, -1]])
    probes = np.concatenate([[edges[0] - beyond[0]], inner, [edges[-1] + beyond[1]]])
    verdict = stable_at(probes)
    joined = stable_at(edges)  # a gain listed for a touch that rounding made up does not part two intervals
    out: list[Interval] = []
    for k in np.flatnonzero(verdict):
        low, high = float(ends[k]), float(ends[k + 1])
        if out and out[-1].high == low and joined[k - 1]:
            out[-1] = Interval(out[-1].low, high)
        else:
            out.append(Interval(low, high))
    return tuple(out)


def without_rounding(polynomials: FloatArray, size: FloatArray) -> FloatArray:
    """Coefficients that are no more than rounding of what cancelled in them, `size`, are 0."""
    out: FloatArray = np.where(np.abs(polynomials) <= 1e-15 * size, 0.0, polynomials)
    return out
