"""Lead: phase round the crossover from a zero below and a pole above it."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.corners import bump, corner_angles, realise_pair, recognise_pair
from synth.structures.family import Parameter, Ratio, Settings, Structure

MOST = 30.0  # p/z


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """atan(w/z) - atan(w/p) is the phase; the share says where the two corners lie."""
    zero, pole = corner_angles(phase, shares[:, 0], 1.0, MOST)
    return np.column_stack([crossover / np.tan(zero), crossover / np.tan(pole)])


def _settings(theta: FloatArray) -> Settings:
    gain, zero, pole = (float(v) for v in theta)
    forms: Settings = {
        "one line": {"gain": gain, **bump(zero, pole)},
        "standard": {"gain": gain, "zero corner": zero, "pole corner": pole},
        "derivative": {
            "gain": gain,
            "derivative time": 1.0 / zero - 1.0 / pole,
            "filter time": 1.0 / pole,
            "filter ratio": pole / zero - 1.0,
        },
    }
    return forms


LEAD = Structure(
    name="lead",
    formula="K (s/z + 1)/(s/p + 1), z < p",
    words="Adds up to 69° around the crossover at p/z to 30, for p/z more gain at high frequency.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("zero", "zero corner", "rad/s", "frequency"),
        Parameter("pole", "pole corner", "rad/s", "frequency"),
    ),
    ratios=(Ratio(over=2, under=1, at=2, low=1.0, high=MOST, open_low=True),),
    order=1,
    integral=False,
    simpler=("P",),
    freedoms=1,
    forms={
        "one line": "gain (s/zero corner + 1) / (s/pole corner + 1)",
        "standard": "gain (s/zero corner + 1) / (s/pole corner + 1)",
        "derivative": "gain (1 + derivative time s / (filter time s + 1))",
    },
    _realise=realise_pair,
    _place=_place,
    _settings=_settings,
    _recognise=recognise_pair,
)
