"""What the time stage hands back."""

from __future__ import annotations

from dataclasses import dataclass

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.quantities import Measure


@dataclass
class TimeStage:
    """values: scaled, (M,) a measure; approximate: (M,) True where the error bound was not reached."""

    values: dict[Measure, FloatArray]
    approximate: dict[Measure, BoolArray]
