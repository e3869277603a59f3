"""The nominal plant's own scales: where in frequency and gain a search begins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.model.character import scales_of as plant_scales
from synth.model.plant import Plant


@dataclass(frozen=True, slots=True)
class Scales:
    """time [s] and gain (abs(P) at 1/time) that make the plant's numbers near 1;
    marks (n,): magnitudes of its zeros, poles and 1/θ [rad/s], ascending, never empty."""

    time: float
    gain: float
    marks: FloatArray


def scales_of(plants: Rational) -> Scales:
    """Scales of the first row (the nominal plant)."""
    plant = Plant.from_row(plants, 0)
    time, gain = plant_scales(plant)
    marks = np.abs(np.concatenate([plant.zeros(), plant.poles()]))
    marks = marks[marks > 0.0]
    if plant.dead_time > 0.0:
        marks = np.append(marks, 1.0 / plant.dead_time)
    return Scales(time, gain, np.sort(marks) if marks.size else np.array([1.0 / time]))


def response(plants: Rational, w: FloatArray) -> ComplexArray:
    """P(jw) with its dead time: K plants at F frequencies, (K, F)."""
    s = 1j * w[None, :]
    top, bottom = np.zeros((len(plants), len(w)), complex), np.zeros((len(plants), len(w)), complex)
    for column in plants.numerator.T:
        top = top * s + column[:, None]
    for column in plants.denominator.T:
        bottom = bottom * s + column[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        out: ComplexArray = top / bottom * np.exp(-s * plants.dead_time[:, None])
    return out
