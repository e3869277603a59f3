"""Closed-loop poles of every candidate on every case, all in one go: calls of a few loops are dear.

B compensators, K plant cases.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray
from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import stacks
from synth.loop.frequency.stage import frequency_stage
from synth.loop.poles.stage import counted_poles, pole_stage
from synth.record.format import Mode, Pole
from synth.record.numbers import plain


@dataclass(frozen=True, slots=True)
class LoopPoles:
    """Of one loop: every pole listed [rad/s], and its modes (a pair once, upper half), largest share first.

    An unstable loop has no modes: nothing of it settles, so no pole has a share.
    """

    poles: list[Pole]
    modes: list[Mode]


def rows_of(compensators: Sequence[tuple[Sequence[float], Sequence[float]]]) -> Rational:
    """Numerators and denominators of any degree as B rows, padded in front."""
    width = max(max(len(n), len(d)) for n, d in compensators)

    def padded(values: Sequence[float]) -> list[float]:
        return [0.0] * (width - len(values)) + [float(v) for v in values]

    return Rational.of([padded(n) for n, _ in compensators], [padded(d) for _, d in compensators])


def every_pole(plants: Rational, compensators: Rational, below: float | None = None) -> list[list[LoopPoles]]:
    """Poles and modes of B compensators on K plants: out[b][k].

    below : [rad/s] where the sheet says up to which size poles count; None is the usual rule.
    """
    cases = len(plants)
    pair = np.arange(len(compensators) * cases)
    out = [LoopPoles([], []) for _ in pair]
    for rows in stacks(plants, compensators, pair % cases, pair // cases):
        loops = close(plants, compensators, (pair % cases)[rows], (pair // cases)[rows])
        stage = pole_stage(loops, ())
        for i, row in enumerate(rows):
            out[row] = LoopPoles(_listed(stage.poles[i], float(loops.time_scale[i])), [])
        good = np.flatnonzero(stage.stable)
        if good.size == 0:
            continue
        loops, poles = loops.rows(good), stage.poles[good]
        fall = frequency_stage(loops, poles, frozenset({"highest_fall"}))["highest_fall"]
        found, share, counted = counted_poles(loops, poles, fall)
        for i, row in enumerate(rows[good]):
            scale = float(loops.time_scale[i])
            modes = [
                _mode(complex(p) / scale, float(s), bool(c) if below is None else abs(p) <= below * scale)
                for p, s, c in zip(found[i], share[i], counted[i], strict=True)
                if not math.isnan(p.real) and p.imag >= 0.0
            ]
            modes.sort(key=lambda m: (-float(m["share"] or 0.0), math.hypot(*m["pole"])))
            out[row] = LoopPoles(out[row].poles, modes)
    return [out[b * cases : (b + 1) * cases] for b in range(len(compensators))]


def _listed(poles: ComplexArray, scale: float) -> list[Pole]:
    return [[float(p.real) / scale, float(p.imag) / scale] for p in poles if not math.isnan(p.real)]


def _mode(pole: complex, share: float, counted: bool) -> Mode:
    return {"pole": [pole.real, pole.imag], "share": plain(share), "counted": counted}
