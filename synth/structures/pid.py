"""PID: proportional, integral and filtered derivative; its two zeros may be complex."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.corners import between
from synth.structures.factors import Factors
from synth.structures.family import Parameter, Ratio, Settings, Structure

LEAST, MOST = 1.0, 100.0  # Td/Tf, as for PD


def _realise(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    gain, integral, derivative, lag = theta.T
    top = np.column_stack([gain * integral * (derivative + lag), gain * (integral + lag), gain])
    return top, np.column_stack([integral * lag, integral, np.zeros_like(gain)])


def _place(crossover: FloatArray, phase: FloatArray, shares: FloatArray) -> FloatArray:
    """Shares: integral corner 1/Ti over crossover (0.01 to 4), and Td/Tf; what is left is one quadratic.

    With a = 1/(w Ti), N = Td/Tf, x = w Tf:  C/K = 1 + N x²/(1 + x²) + j (N x/(1 + x²) - a).
    The phase asks  x² (a + t (1 + N)) - N x + a + t = 0  with t = tan(phase); the smaller positive root is
    the faster filter. A lagging phase needs a >= -t, where the derivative adds nothing.
    """
    t = np.where(np.abs(phase) < 0.5 * np.pi, np.tan(phase), np.nan)
    least = np.maximum(0.01, -t * 1.001)
    a = between(least, np.maximum(4.0, 3.0 * least), shares[:, 0])
    n = between(LEAST, MOST, shares[:, 1])
    square, constant = a + t * (1.0 + n), a + t
    root = np.sqrt(n**2 - 4.0 * square * constant)
    # citardauq form: exact also where the square's coefficient goes through 0
    first, second = 2.0 * constant / (n + root), 2.0 * constant / (n - root)
    x = np.where(first > 0.0, first, np.where(second > 0.0, second, np.nan))
    lag = x / crossover
    return np.column_stack([1.0 / (a * crossover), n * lag, lag])


def _settings(theta: FloatArray) -> Settings:
    gain, integral, derivative, lag = (float(v) for v in theta)
    forms: Settings = {
        "standard": {
            "gain": gain,
            "integral time": integral,
            "derivative time": derivative,
            "filter time": lag,
            "filter ratio": derivative / lag,
        },
        "parallel": {
            "proportional gain": gain,
            "integral gain": gain / integral,
            "derivative gain": gain * derivative,
            "filter time": lag,
        },
    }
    total, product = integral + lag, integral * (derivative + lag)
    square = total**2 - 4.0 * product
    if square >= 0.0:
        slow = 0.5 * (total + np.sqrt(square))
        fast = product / slow
        series = gain * slow / integral
        forms["series"] = {
            "gain": series,
            "integral time": slow,
            "derivative time": fast,
            "filter time": lag,
            "filter ratio": fast / lag,
        }
        if fast > lag:
            forms["series, filtered derivative"] = {
                "gain": series,
                "integral time": slow,
                "derivative time": fast - lag,
                "filter time": lag,
                "filter ratio": (fast - lag) / lag,
            }
    else:
        forms["notch of zeros"] = {
            "integral gain": gain / integral,
            "zero frequency": 1.0 / np.sqrt(product),
            "zero damping": 0.5 * total / np.sqrt(product),
            "filter time": lag,
        }
    return {form: {name: float(value) for name, value in values.items()} for form, values in forms.items()}


def _recognise(factors: Factors) -> FloatArray | None:
    if factors.integrators != 1 or factors.zeros.size != 2 or factors.poles.size != 1:
        return None
    if factors.poles[0].real >= 0.0:
        return None
    lag = -1.0 / factors.poles[0].real
    integral = float(-(1.0 / factors.zeros).sum().real) - lag
    if integral <= 0.0:
        return None
    derivative = float((1.0 / factors.zeros).prod().real) / integral - lag
    return np.array([factors.gain * integral, integral, derivative, lag])


PID = Structure(
    name="PID",
    formula="K (1 + 1/(Ti s) + Td s/(Tf s + 1))",
    words="Proportional, integral and filtered derivative. No static error, phase around the crossover, "
    "and zeros that may be complex; Td/Tf from 1 to 100.",
    parameters=(
        Parameter("gain", "gain", "", "gain"),
        Parameter("integral_time", "integral time", "s", "time"),
        Parameter("derivative_time", "derivative time", "s", "time"),
        Parameter("filter_time", "filter time", "s", "time"),
    ),
    ratios=(Ratio(over=2, under=3, at=3, low=LEAST, high=MOST),),
    order=2,
    integral=True,
    simpler=("P", "PI", "PD"),
    freedoms=2,
    forms={
        "standard": "gain (1 + 1/(integral time s) + derivative time s / (filter time s + 1))",
        "parallel": "proportional gain + integral gain / s + derivative gain s / (filter time s + 1)",
        "series": "gain (1 + 1/(integral time s)) (derivative time s + 1) / (filter time s + 1)",
        "series, filtered derivative": "gain (1 + 1/(integral time s)) "
        "(1 + derivative time s / (filter time s + 1))",
        "notch of zeros": "integral gain (s²/zero frequency² + 2 zero damping s/zero frequency + 1) "
        "/ (s (filter time s + 1))",
    },
    _realise=_realise,
    _place=_place,
    _settings=_settings,
    _recognise=_recognise,
)
