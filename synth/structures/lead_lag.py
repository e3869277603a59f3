"""Lead-lag: a lead for the phase at the crossover, a lag for the gain below it."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import product
from synth.structures import lag, lead
from synth.structures.corners import between, bump, corner_angles, corners_to_polynomials
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Ratio, Settings, Structure


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, lead_zero, lead_pole, lag_zero, lag_pole = theta.T
    top, bottom = corners_to_polynomials(gain, lead_zero, lead_pole)
    more, under = corners_to_polynomials(np.ones_like(gain), lag_zero, lag_pole)
    return product(top, more), product(bottom, under)


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """Shares: where the lead's corners lie, lag ratio (1.2 to 60), lag zero over crossover (0.01 to 4)."""
    ratio = between(1.2, 60.0, shares[:, 1])
    zero = crossover * between(0.01, 4.0, shares[:, 2])
    pole = zero / ratio
    lost = np.arctan(crossover / pole) - np.arctan(crossover / zero)
    larger, smaller = corner_angles(phase + lost, shares[:, 0], 1.0, lead.MOST)
    return np.column_stack([crossover / np.tan(larger), crossover / np.tan(smaller), zero, pole])


def _settings(theta: FloatArray) -> Settings:
    gain, lead_zero, lead_pole, lag_zero, lag_pole = (float(v) for v in theta)
    lines = {f"lead {name}": value for name, value in bump(lead_zero, lead_pole).items()}
    lines |= {f"lag {name}": value for name, value in bump(lag_zero, lag_pole).items()}
    return {
        "one line": {"gain": gain, **lines},
        "standard": {
            "gain": gain,
            "lead zero corner": lead_zero,
            "lead pole corner": lead_pole,
            "lag zero corner": lag_zero,
            "lag pole corner": lag_pole,
        },
        "ends": {
            "gain at zero frequency": gain,
            "gain at high frequency": gain * (lead_pole / lead_zero) * (lag_pole / lag_zero),
        },
    }


def _recognise(factors: Factors) -> FloatArray | None:
    corners = factors.real_corners()
    if factors.integrators or corners is None or (len(corners[0]), len(corners[1])) != (2, 2):
        return None
    zeros, poles = corners
    pairings = np.array(
        [[factors.gain, zeros[i], poles[j], zeros[1 - i], poles[1 - j]] for i in (0, 1) for j in (0, 1)]
    )
    fits = np.flatnonzero(LEAD_LAG.legal(pairings))
    return pairings[fits[0]] if fits.size else None


LEAD_LAG = Structure(
    name="lead-lag",
    formula="K (s/z1 + 1)/(s/p1 + 1) · (s/z2 + 1)/(s/p2 + 1), z1 < p1, p2 < z2",
    words="A lead for phase around the crossover and a lag for gain below it; p1/z1 to 30, z2/p2 to 100.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("lead_zero", "lead zero corner", "rad/s", "frequency"),
        Parameter("lead_pole", "lead pole corner", "rad/s", "frequency"),
        Parameter("lag_zero", "lag zero corner", "rad/s", "frequency"),
        Parameter("lag_pole", "lag pole corner", "rad/s", "frequency"),
    ),
    ratios=(
        Ratio(over=2, under=1, at=2, low=1.0, high=lead.MOST, open_low=True),
        Ratio(over=3, under=4, at=4, low=1.0, high=lag.MOST, open_low=True),
    ),
    order=2,
    integral=False,
    simpler=("P", "lag", "lead"),
    freedoms=3,
    forms={
        "one line": "gain (s/lead zero corner + 1) / (s/lead pole corner + 1) "
        "(s/lag zero corner + 1) / (s/lag pole corner + 1)",
        "standard": "gain (s/lead zero corner + 1) / (s/lead pole corner + 1) "
        "(s/lag zero corner + 1) / (s/lag pole corner + 1)",
        "ends": "from gain at zero frequency to gain at high frequency",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
