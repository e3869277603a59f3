"""PI-lead: integral action below the crossover, a lead around it; a PID in series form."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import product
from synth.structures import lead
from synth.structures.corners import between, bump, corner_angles, corners_to_polynomials
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Ratio, Settings, Structure


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, time, zero, pole = theta.T
    one = np.ones_like(gain)
    top, bottom = corners_to_polynomials(gain, zero, pole)
    return product(top, np.column_stack([time, one])), product(bottom, np.column_stack([time, 0.0 * one]))


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """Shares: integral corner over crossover (0.01 to 4), where the lead's corners lie."""
    a = between(0.01, 4.0, shares[:, 0])
    larger, smaller = corner_angles(phase + np.arctan(a), shares[:, 1], 1.0, lead.MOST)
    return np.column_stack([1.0 / (a * crossover), crossover / np.tan(larger), crossover / np.tan(smaller)])


def _settings(theta: FloatArray) -> Settings:
    gain, time, zero, pole = (float(v) for v in theta)
    series = {
        "gain": gain,
        "integral time": time,
        "derivative time": 1.0 / zero,
        "filter time": 1.0 / pole,
        "filter ratio": pole / zero,
    }
    forms: Settings = {
        "one line": {"gain": gain, "integral time": time, **bump(zero, pole)},
        "series": series,
    }
    lag = 1.0 / pole
    integral = time + 1.0 / zero - lag  # what the sum form calls Ti; positive since z < p
    derivative = time / (zero * integral) - lag
    proportional = gain * integral / time
    if derivative > 0.0:
        forms["standard"] = {
            "gain": proportional,
            "integral time": integral,
            "derivative time": derivative,
            "filter time": lag,
            "filter ratio": derivative / lag,
        }
        forms["parallel"] = {
            "proportional gain": proportional,
            "integral gain": gain / time,
            "derivative gain": proportional * derivative,
            "filter time": lag,
        }
    return forms


def _recognise(factors: Factors) -> FloatArray | None:
    corners = factors.real_corners()
    if factors.integrators != 1 or corners is None or (len(corners[0]), len(corners[1])) != (2, 1):
        return None
    zeros, pole = corners[0], corners[1][0]
    pairings = np.array([[factors.gain / zeros[i], 1.0 / zeros[i], zeros[1 - i], pole] for i in (0, 1)])
    fits = np.flatnonzero(PI_LEAD.legal(pairings))
    return pairings[fits[0]] if fits.size else None


PI_LEAD = Structure(
    name="PI-lead",
    formula="K (1 + 1/(Ti s)) (s/z + 1)/(s/p + 1), z < p",
    words="A PI with a lead (a series PID, real zeros): no static error, up to 69° around the crossover.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("integral_time", "integral time", "s", "time"),
        Parameter("zero", "zero corner", "rad/s", "frequency"),
        Parameter("pole", "pole corner", "rad/s", "frequency"),
    ),
    ratios=(Ratio(over=3, under=2, at=3, low=1.0, high=lead.MOST, open_low=True),),
    order=2,
    integral=True,
    simpler=("P", "PI", "lead"),
    freedoms=2,
    forms={
        "one line": "gain (1 + 1/(integral time s)) (s/zero corner + 1) / (s/pole corner + 1)",
        "series": "gain (1 + 1/(integral time s)) (derivative time s + 1) / (filter time s + 1)",
        "standard": "gain (1 + 1/(integral time s) + derivative time s / (filter time s + 1))",
        "parallel": "proportional gain + integral gain / s + derivative gain s / (filter time s + 1)",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
