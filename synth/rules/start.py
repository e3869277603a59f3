"""A published setting as a starting point, and series forms turned into the forms of the structures."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray

FILTER_RATIO = 10.0  # derivative filter where the rule names none: a tenth of the derivative time


@dataclass(frozen=True, slots=True)
class Start:
    """Where a search may set out from.

    rule    name of the rule with its choice ("SIMC, closed-loop time 0.2 s")
    source  who published it
    theta   (P,) parameters of the structure, SI
    """

    rule: str
    source: str
    theta: FloatArray


def unfiltered(values: tuple[float, ...]) -> FloatArray:
    """P, PI or PID by the number of its values (gain, Ti, Td) of a rule that names no derivative filter."""
    return np.array([*values, values[2] / FILTER_RATIO] if len(values) == 3 else values)


def pd(gain: float, derivative: float) -> FloatArray:
    """PD of a rule that names no filter."""
    return np.array([gain, derivative, derivative / FILTER_RATIO])


def series_pid(gain: float, integral: float, lead: float) -> FloatArray:
    """gain (1 + 1/(integral s)) (lead s + 1)/(lead s/10 + 1) as parameters of PID: the same function."""
    lag = lead / FILTER_RATIO
    ti = integral + lead - lag
    return np.array([gain * ti / integral, ti, integral * lead / ti - lag, lag])


def pi_lead(gain: float, integral: float, lead: float) -> FloatArray:
    """The same as parameters of PI-lead."""
    return np.array([gain, integral, 1.0 / lead, FILTER_RATIO / lead])


def lead(gain: float, time: float) -> FloatArray:
    """gain (time s + 1)/(time s/10 + 1) as parameters of lead."""
    return np.array([gain, 1.0 / time, FILTER_RATIO / time])
