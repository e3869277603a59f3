"""PI: a gain and an integral; its phase is negative, its static error none."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Settings, Structure


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, time = theta[:, 0], theta[:, 1]
    return np.column_stack([gain * time, gain]), np.column_stack([time, np.zeros_like(time)])


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """The phase of 1 + 1/(jw Ti) is -atan(1/(w Ti)): it fixes Ti."""
    time = -1.0 / (crossover * np.tan(phase))
    return np.where((phase > -0.5 * np.pi) & (phase < 0.0), time, np.nan)[:, None]


def _settings(theta: FloatArray) -> Settings:
    gain, time = (float(v) for v in theta)
    return {
        "standard": {"gain": gain, "integral time": time},
        "parallel": {"proportional gain": gain, "integral gain": gain / time},
        "corner": {"integral gain": gain / time, "zero corner": 1.0 / time},
    }


def _recognise(factors: Factors) -> FloatArray | None:
    corners = factors.real_corners()
    if factors.integrators != 1 or corners is None or (len(corners[0]), len(corners[1])) != (1, 0):
        return None
    time = 1.0 / corners[0][0]
    return np.array([factors.gain * time, time])


PI = Structure(
    name="PI",
    formula="K (1 + 1/(Ti s))",
    words="Proportional and integral. No static error; costs phase below and around its corner 1/Ti.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("integral_time", "integral time", "s", "time"),
    ),
    ratios=(),
    order=1,
    integral=True,
    simpler=("P",),
    freedoms=0,
    forms={
        "standard": "gain (1 + 1/(integral time s))",
        "parallel": "proportional gain + integral gain / s",
        "corner": "integral gain (1 + s/zero corner) / s",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
