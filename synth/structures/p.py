"""P: a gain alone."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Settings, Structure


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    return theta[:, :1], np.ones((len(theta), 1))


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    return np.empty((len(crossover), 0))


def _settings(theta: FloatArray) -> Settings:
    return {"standard": {"gain": float(theta[0])}}


def _recognise(factors: Factors) -> FloatArray | None:
    if factors.integrators or factors.zeros.size or factors.poles.size:
        return None
    return np.array([factors.gain])


P = Structure(
    name="P",
    formula="K",
    words="A gain. Adds no phase and no integral action: the loop keeps the plant's own shape.",
    parameters=(Parameter("gain", "gain", "", "gain"),),
    ratios=(),
    order=0,
    integral=False,
    simpler=(),
    freedoms=0,
    forms={"standard": "K"},
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
