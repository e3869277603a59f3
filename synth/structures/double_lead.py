"""Double lead: two equal leads, for plants that lack more phase than one lead can add."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import product
from synth.structures import lead
from synth.structures.corners import bump, corner_angles, corners_to_polynomials
from synth.structures.factors import REAL, Factors
from synth.structures.family import Parameter, Ratio, Settings, Structure


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, zero, pole = theta.T
    top, bottom = corners_to_polynomials(np.ones_like(gain), zero, pole)
    return gain[:, None] * product(top, top), product(bottom, bottom)


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """Half of the phase from each of the two; the share says where the corners lie."""
    zero, pole = corner_angles(0.5 * phase, shares[:, 0], 1.0, lead.MOST)
    return np.column_stack([crossover / np.tan(zero), crossover / np.tan(pole)])


def _settings(theta: FloatArray) -> Settings:
    gain, zero, pole = (float(v) for v in theta)
    line = bump(zero, pole)
    return {
        "one line": {"gain": gain, **line, "max phase": 2.0 * line["max phase"]},
        "standard": {"gain": gain, "zero corner": zero, "pole corner": pole},
        "ends": {"gain at zero frequency": gain, "gain at high frequency": gain * (pole / zero) ** 2},
    }


def _recognise(factors: Factors) -> FloatArray | None:
    if factors.integrators or (factors.zeros.size, factors.poles.size) != (2, 2):
        return None
    corners: list[float] = []
    for pair in (factors.zeros, factors.poles):
        middle = float(pair.real.mean())
        if middle >= 0.0 or np.any(np.abs(pair - middle) > REAL * abs(middle)):
            return None
        corners.append(-middle)
    return np.array([factors.gain, *corners])


DOUBLE_LEAD = Structure(
    name="double-lead",
    formula="K ((s/z + 1)/(s/p + 1))², z < p",
    words="Two equal leads: up to 139° around the crossover at p/z to 30, for (p/z)² more gain above it.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("zero", "zero corner", "rad/s", "frequency"),
        Parameter("pole", "pole corner", "rad/s", "frequency"),
    ),
    ratios=(Ratio(over=2, under=1, at=2, low=1.0, high=lead.MOST, open_low=True),),
    order=2,
    integral=False,
    simpler=("P",),
    freedoms=1,
    forms={
        "one line": "gain ((s/zero corner + 1) / (s/pole corner + 1))²",
        "standard": "gain ((s/zero corner + 1) / (s/pole corner + 1))²",
        "ends": "from gain at zero frequency to gain at high frequency",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
