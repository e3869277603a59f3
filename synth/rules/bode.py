"""Leads and lags the textbook way: phase at the crossover from the Bode plot, the lag a decade below it."""

from __future__ import annotations

import numpy as np

from synth.model import Plant, character_of
from synth.rules.start import Start
from synth.structures import by_name

BODE = (
    "H. W. Bode, Network Analysis and Feedback Amplifier Design, 1945; the steps as in K. Ogata, "
    "Modern Control Engineering, 5th ed. (2010), chapter 7"
)

CROSSOVERS = (0.1, 0.3, 1.0, 3.0, 10.0)  # times the plant's own frequency scale
MARGINS = (45.0, 60.0)  # deg

# Shares of the structures' `place`: the lead centred on the crossover, other corners a decade below it.
_DECADE_BELOW = float(np.log(10.0) / np.log(400.0))  # 0.1 on the way from 0.01 to 4
_RATIO_TEN = float(np.log(10.0 / 1.2) / np.log(50.0))  # 10 on the way from 1.2 to 60
SHARES = {
    "P": (),
    "PI": (),
    "PD": (0.4,),
    "lead": (0.5,),
    "double-lead": (0.5,),
    "PI-lead": (_DECADE_BELOW, 0.5),
    "PID": (_DECADE_BELOW, 0.5),
    "lead-lag": (0.5, _RATIO_TEN, _DECADE_BELOW),
}


def starts(plant: Plant, structure: str) -> list[Start]:
    """Settings with 45° and 60° of phase margin at several crossovers, where the structure has them."""
    facts = character_of(plant)
    out = []
    for factor in CROSSOVERS:
        w = factor / facts.time_scale
        value = complex(plant.response(np.array([1j * w]))[0])
        if not np.isfinite(value) or value == 0.0:
            continue
        if structure == "lag":
            out += _lag(value, w)
            continue
        for margin in MARGINS:
            for sign in (1.0, -1.0):
                lead = np.radians(margin) - np.pi - np.angle(sign * value)
                theta = by_name(structure).place(
                    np.array([w]), np.array([lead]), np.array([SHARES[structure]])
                )[0]
                if structure == "P" and margin != MARGINS[0]:
                    continue  # a gain has no phase to give
                if np.isfinite(theta).all():
                    theta[0] *= sign / abs(value)
                    out.append(Start(f"crossover {w:.3g} rad/s, margin {margin:g}°", BODE, theta))
    return out


def _lag(value: complex, w: float) -> list[Start]:
    """Gain for the crossover as if alone, then a lag of ratio 3 or 10 with its zero a decade below."""
    out = []
    for ratio in (3.0, 10.0):
        for sign in (1.0, -1.0):
            zero = 0.1 * w
            theta = np.array([sign * ratio / abs(value), zero, zero / ratio])
            out.append(Start(f"lag of ratio {ratio:g} below a crossover of {w:.3g} rad/s", BODE, theta))
    return out
