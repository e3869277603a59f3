"""First and second order models with dead time, which most published rules are written for."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from synth.model import Plant

# A lead this near to a smaller lag cancels with it, not with a larger one: 1.6, less the blur of roots.
CLOSE = 1.59

REAL = 3e-3  # imaginary part, relative, that a triple real root may show in double precision


@dataclass(frozen=True, slots=True)
class ProcessModel:
    """slope · e^(-dead_time s) / ((s + 1/lag)(second_lag s + 1)).

    slope       gain/lag, the initial slope of the step response; the gain of an integrator
    lag         the dominant time constant [s]; inf for an integrator
    second_lag  0 in a first-order model [s]
    dead_time   with everything that was neglected [s]
    """

    slope: float
    lag: float
    second_lag: float
    dead_time: float

    @property
    def gain(self) -> float:
        """Static gain; ±inf for an integrator."""
        return self.slope * self.lag

    @property
    def integrating(self) -> bool:
        """Whether the dominant lag is an integrator."""
        return math.isinf(self.lag)


def half_rule(plant: Plant, order: int = 1) -> ProcessModel | None:
    """The model of first or second order that the half rule leaves; None where it does not apply.

    The largest neglected time constant is shared in halves between the smallest kept one and the dead time;
    the rest, and inverse-response time constants, go into the dead time. Positive numerator time
    constants cancel against a neighbour in the denominator (rules T1 to T3, the tuning constant equal to the
    dead time). It takes real stable poles, at most one integrator and a gain that is not 0.
    Source: S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning", J. Process
    Control 13 (2003) 291-309, sections 2 and 3.
    """
    poles, zeros = plant.poles(), plant.zeros()
    integrators = int((poles == 0.0).sum())
    if integrators > 1 or not len(poles) or np.any(zeros == 0.0):
        return None
    moving = poles[poles != 0.0]
    if np.any(np.abs(moving.imag) > REAL * np.abs(moving)) or np.any(moving.real >= 0.0):
        return None
    lags = sorted((-1.0 / moving.real).tolist(), reverse=True)
    num, den = np.trim_zeros(np.array(plant.numerator), "b"), np.trim_zeros(np.array(plant.denominator), "b")
    gain = float(num[-1] / den[-1])
    inverse = -(1.0 / zeros[zeros.real > 0.0]).sum().real  # complex ones by their sum, which is real
    delay = plant.dead_time - float(inverse)
    leads = sorted((-1.0 / zeros[zeros.real <= 0.0]).real.tolist(), reverse=True)
    if np.any(np.abs(zeros[zeros.real <= 0.0].imag) > REAL * np.abs(zeros[zeros.real <= 0.0])):
        return None  # a notch is no lead
    model = _shared(list(lags), gain, delay, order, integrators == 1)
    tuning = delay if delay > 0.0 else (model.dead_time if model is not None else 0.0)
    for _ in range(8):  # the cancelling rules ask for the dead time that they lead to
        rest, factor = _without_leads(list(lags), leads, max(tuning, 1e-9 * sum(lags)))
        model = _shared(rest, gain * factor, delay, order, integrators == 1)
        if model is None:
            return None
        tuning = model.dead_time
    return model


def _shared(
    lags: list[float], gain: float, delay: float, order: int, integrating: bool
) -> ProcessModel | None:
    """The half rule on real lags."""
    kept = ([math.inf] if integrating else []) + lags
    if len(kept) < 1:
        return None
    keep, neglected = kept[:order], kept[order:]
    if neglected:
        keep[-1] += 0.5 * neglected[0]
        delay += 0.5 * neglected[0] + sum(neglected[1:])
    lag = keep[0]
    second = keep[1] if len(keep) > 1 else 0.0
    if delay < 0.0:
        delay = 0.0
    return ProcessModel(gain if math.isinf(lag) else gain / lag, lag, second, delay)


def _without_leads(lags: list[float], leads: list[float], tuning: float) -> tuple[list[float], float]:
    """Rules T1 to T3 for each (T s + 1): what is left of the lags, and a factor on the gain."""
    factor = 1.0
    for lead in leads:
        larger = [t for t in lags if t >= lead]
        smaller = [t for t in lags if t < lead]
        if not larger and not smaller:
            break
        near = min(larger) if larger else max(smaller)
        if larger and smaller and lead / max(smaller) < min(larger) / lead and lead / max(smaller) < CLOSE:
            near = max(smaller)
        lags.remove(near)
        if lead >= near:
            factor *= lead / near if near >= tuning else max(lead / tuning, 1.0)
        elif lead >= 5.0 * tuning:
            factor *= lead / near
        else:
            held = min(near, 5.0 * tuning)
            if held <= lead:
                factor *= lead / near
            else:
                factor *= held / near
                lags.append(held - lead)
                lags.sort(reverse=True)
    return lags, factor
