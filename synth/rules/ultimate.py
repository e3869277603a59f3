"""Rules on the gain and period at which a P loop begins to oscillate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.model import Plant, character_of
from synth.rules import start
from synth.rules.start import Start

ZIEGLER_NICHOLS = (
    "J. G. Ziegler and N. B. Nichols, Optimum settings for automatic controllers, "
    "Trans. ASME 64 (1942) 759-768"
)
TYREUS_LUYBEN = (
    "B. D. Tyreus and W. L. Luyben, Tuning PI controllers for integrator/dead time processes, "
    "Ind. Eng. Chem. Res. 31 (1992) 2625-2628"
)


@dataclass(frozen=True, slots=True)
class Ultimate:
    """gain at which a P loop reaches the stability boundary, period of the oscillation there [s]."""

    gain: float
    period: float


def ultimate(plant: Plant) -> Ultimate | None:
    """The first phase crossover of a plant that a low gain leaves stable; None where there is none.

    Stable plants, and those with one integrator or less than a half turn of integrators; for reverse-acting
    plants the gain is negative.
    """
    facts = character_of(plant)
    if facts.right_poles or facts.axis_poles or facts.hidden_unstable or facts.integrators > 1:
        return None
    span = np.log10(1.0 / facts.time_scale)
    w = np.logspace(span - 4.0, span + 4.0, 4001)
    if plant.dead_time > 0.0:
        w = np.unique(np.concatenate([w, np.linspace(0.0, 4.0, 401)[1:] / plant.dead_time]))
    value = facts.sign * plant.response(1j * w)
    # crossings of the negative real axis from above: the phase falls through -180 degrees
    crosses = np.flatnonzero((value[:-1].imag > 0.0) != (value[1:].imag > 0.0))
    crosses = crosses[(value[crosses].real < 0.0) & (value[crosses + 1].real < 0.0)]
    if not crosses.size:
        return None
    sizes = np.abs(value[crosses])
    at = int(crosses[np.argmax(sizes)])  # the one that a rising gain meets first
    low, high = w[at], w[at + 1]
    below = value[at].imag
    for _ in range(80):
        middle = 0.5 * (low + high)
        inside = facts.sign * plant.response(np.array([1j * middle]))[0]
        if (inside.imag > 0.0) == (below > 0.0):
            low = middle
        else:
            high = middle
    size = float(np.abs(plant.response(np.array([1j * low])))[0])
    return Ultimate(facts.sign / size, 2.0 * np.pi / float(low))


def ziegler_nichols(point: Ultimate, structure: str) -> tuple[float, ...]:
    """Quarter-decay settings."""
    gain, period = point.gain, point.period
    table: dict[str, tuple[float, ...]] = {
        "P": (0.5 * gain,),
        "PI": (gain / 2.2, period / 1.2),
        "PID": (0.6 * gain, 0.5 * period, 0.125 * period),
    }
    return table[structure]


def tyreus_luyben(point: Ultimate, structure: str) -> tuple[float, ...]:
    """Calmer settings for PI and PID."""
    if structure == "PI":
        return point.gain / 3.2, 2.2 * point.period
    return point.gain / 2.2, 2.2 * point.period, point.period / 6.3


def starts(plant: Plant, structure: str) -> list[Start]:
    """Starting settings of these rules for one structure; empty where there is no ultimate gain."""
    if structure not in ("P", "PI", "PID"):
        return []
    point = ultimate(plant)
    if point is None:
        return []
    theta = start.unfiltered(ziegler_nichols(point, structure))
    out = [Start("Ziegler-Nichols, ultimate gain", ZIEGLER_NICHOLS, theta)]
    if structure != "P":
        out.append(Start("Tyreus-Luyben", TYREUS_LUYBEN, start.unfiltered(tyreus_luyben(point, structure))))
    return out
