"""AMIGO: settings that keep the sensitivity peak near 1.4, from a first-order model with dead time."""

from __future__ import annotations

from synth.model import Plant
from synth.rules import start
from synth.rules.process_model import ProcessModel, half_rule
from synth.rules.start import Start

AMIGO = (
    "K. J. Åström and T. Hägglund, Revisiting the Ziegler-Nichols step response method for PID control, "
    "J. Process Control 14 (2004) 635-650"
)


def amigo_pi(model: ProcessModel) -> tuple[float, float]:
    """Gain and integral time; needs a dead time."""
    delay, lag = model.dead_time, model.lag
    if model.integrating:
        return 0.35 / (model.slope * delay), 13.4 * delay
    gain = 0.15 / model.gain + (0.35 - delay * lag / (delay + lag) ** 2) * lag / (model.gain * delay)
    integral = 0.35 * delay + 13.0 * delay * lag**2 / (lag**2 + 12.0 * delay * lag + 7.0 * delay**2)
    return gain, integral


def amigo_pid(model: ProcessModel) -> tuple[float, float, float]:
    """Gain, integral and derivative time of the sum form; needs a dead time."""
    delay, lag = model.dead_time, model.lag
    if model.integrating:
        return 0.45 / (model.slope * delay), 8.0 * delay, 0.5 * delay
    gain = (0.2 + 0.45 * lag / delay) / model.gain
    integral = delay * (0.4 * delay + 0.8 * lag) / (delay + 0.1 * lag)
    return gain, integral, 0.5 * delay * lag / (0.3 * delay + lag)


def starts(plant: Plant, structure: str) -> list[Start]:
    """Starting settings for one structure; empty where the rule does not apply.

    The model comes from the half rule, not from a step response as in the source.
    """
    model = half_rule(plant, 1)
    if model is None or model.dead_time <= 0.0:
        return []
    if structure == "PI":
        return [Start("AMIGO", AMIGO, start.unfiltered(amigo_pi(model)))]
    if structure == "PID":
        return [Start("AMIGO", AMIGO, start.unfiltered(amigo_pid(model)))]
    return []
