"""What the time stage hands back, and where it reads it."""

from __future__ import annotations

from dataclasses import dataclass

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.quantities import Measure

READ_FROM = {
    "overshoot": "y",
    "undershoot": "y",
    "peak_time": "y",
    "rise_time": "y",
    "settling_time": "y",
    "late_deviation": "y",
    "tracking_area": "y",
    "control_peak": "u",
    "disturbance_peak": "d",
    "disturbance_area": "d",
}
"""Which signal each quantity is read from."""


@dataclass
class TimeStage:
    """values: scaled, (M,) a measure; approximate: (M,) True where the error bound was not reached."""

    values: dict[Measure, FloatArray]
    approximate: dict[Measure, BoolArray]
