"""PD: a gain and a filtered derivative; a lead whose corners are 1/(Td + Tf) and 1/Tf."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.corners import bump, corner_angles
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Ratio, Settings, Structure

# Td/Tf: below 1 the derivative is all filter, above 100 it is all noise.
LEAST, MOST = 1.0, 100.0


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, derivative, lag = theta.T
    one = np.ones_like(gain)
    return np.column_stack([gain * (derivative + lag), gain]), np.column_stack([lag, one])


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """atan(w (Td + Tf)) - atan(w Tf) is the phase; the share says where the two corners lie."""
    zero, pole = corner_angles(phase, shares[:, 0], 1.0 + LEAST, 1.0 + MOST)
    lag = np.tan(pole) / crossover
    return np.column_stack([np.tan(zero) / crossover - lag, lag])


def _settings(theta: FloatArray) -> Settings:
    gain, derivative, lag = (float(v) for v in theta)
    return {
        "standard": {
            "gain": gain,
            "derivative time": derivative,
            "filter time": lag,
            "filter ratio": derivative / lag,
        },
        "parallel": {"proportional gain": gain, "derivative gain": gain * derivative, "filter time": lag},
        "lead": {"gain": gain, **bump(1.0 / (derivative + lag), 1.0 / lag)},
    }


def _recognise(factors: Factors) -> FloatArray | None:
    corners = factors.real_corners()
    if factors.integrators or corners is None or (len(corners[0]), len(corners[1])) != (1, 1):
        return None
    lag = 1.0 / corners[1][0]
    return np.array([factors.gain, 1.0 / corners[0][0] - lag, lag])


PD = Structure(
    name="PD",
    formula="K (1 + Td s/(Tf s + 1))",
    words="Proportional and filtered derivative. Adds phase around the crossover; Td/Tf from 1 to 100.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("derivative_time", "derivative time", "s", "time"),
        Parameter("filter_time", "filter time", "s", "time"),
    ),
    ratios=(Ratio(over=1, under=2, at=2, low=LEAST, high=MOST),),
    order=1,
    integral=False,
    simpler=("P",),
    freedoms=1,
    forms={
        "standard": "gain (1 + derivative time s / (filter time s + 1))",
        "parallel": "proportional gain + derivative gain s / (filter time s + 1)",
        "lead": "gain (s/zero corner + 1) / (s/pole corner + 1)",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
