"""Lag: more gain at low frequencies than at high ones, without an integrator."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.corners import bump, corner_angles, realise_pair, recognise_pair
from synth.structures.family import Parameter, Ratio, Settings, Structure

MOST = 100.0  # z/p


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """atan(w/z) - atan(w/p) is the phase, negative; the share says where the two corners lie."""
    pole, zero = corner_angles(-phase, shares[:, 0], 1.0, MOST)
    return np.column_stack([crossover / np.tan(zero), crossover / np.tan(pole)])


def _settings(theta: FloatArray) -> Settings:
    gain, zero, pole = (float(v) for v in theta)
    return {
        "one line": {"gain": gain, **bump(zero, pole)},
        "standard": {"gain": gain, "zero corner": zero, "pole corner": pole},
        "ends": {"gain at zero frequency": gain, "gain at high frequency": gain * pole / zero},
    }


LAG = Structure(
    name="lag",
    formula="K (s/z + 1)/(s/p + 1), p < z",
    words="Raises the gain below its corners by z/p (to 100): smaller static errors for some phase.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("zero", "zero corner", "rad/s", "frequency"),
        Parameter("pole", "pole corner", "rad/s", "frequency"),
    ),
    ratios=(Ratio(over=1, under=2, at=2, low=1.0, high=MOST, open_low=True),),
    order=1,
    integral=False,
    simpler=("P",),
    freedoms=1,
    forms={
        "one line": "gain (s/zero corner + 1) / (s/pole corner + 1)",
        "standard": "gain (s/zero corner + 1) / (s/pole corner + 1)",
        "ends": "from gain at zero frequency to gain at high frequency",
    },
    _realise=realise_pair,
    _place=_place,
    _settings=_settings,
    _recognise=recognise_pair,
)
