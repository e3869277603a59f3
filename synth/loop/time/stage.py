"""Every quantity of the step responses that was asked for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.quantities import Measure
from synth.loop.time.modes import SIGNALS, step_modes
from synth.loop.time.plain import Response, plain_quantity


@dataclass
class TimeStage:
    """values: scaled, (M,) a measure; approximate: (M,) True where the error bound was not reached."""

    values: dict[Measure, FloatArray]
    approximate: dict[Measure, BoolArray]


def time_stage(loops: Loops, poles: ComplexArray, measures: tuple[Measure, ...]) -> TimeStage:
    """The time-stage measures among `measures`, for M stable loops.

    poles : (M, n) scaled closed-loop poles, pairs adjacent, upper first (with dead time: the true roots found).
    """
    asked = tuple(m for m in measures if m.row.stage == "time")
    if (loops.dead_time > 0.0).any():
        from synth.loop.time.delayed import delayed_time_stage

        return delayed_time_stage(loops, poles, asked)
    modes = step_modes(loops, poles, SIGNALS)
    out = {m: np.full(len(loops), np.nan) for m in asked}
    for i in range(len(loops)):
        response = Response(modes, i, float(loops.denominator[i, -1]) == 0.0)
        for m in asked:
            out[m][i] = plain_quantity(response, m, float(loops.time_scale[i]))
    return TimeStage(out, {})
