"""THE table of quantities: every number the program knows, written down once.

The spec reader, the scoring core, the report and the record are all driven by it. To add a quantity, write
the function that computes it in the stage it belongs to, and add a row here.

Definitions: quantities.md of the project's design notes, restated in the docstring of each function.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

Dimension = Literal["ratio", "percent", "time", "rate", "frequency", "angle", "decibel", "plant"]
Side = Literal["min", "max"]
Stage = Literal["poles", "frequency", "time"]


@dataclass(frozen=True, slots=True)
class Quantity:
    """One row.

    key         name in spec files and records
    name        the words of the trade for it
    unit        unit it is computed, printed and recorded in; "" for a pure ratio
    dimension   what a spec file must write: "time" takes s, ms ...; "ratio" and "plant" take bare numbers
    better      "max" when larger is better, "min" when smaller is, None when it depends on the use
    scale       own scale: what a limit of 0 is measured against; None where a limit of 0 cannot be meant
    best        the value that cannot be beaten (slack 1 there); None where there is none
    stage       stage of the core that yields it
    time_power  t in value = value_scaled · time_scale^t, where time is counted in units of time_scale [s]
    gain_power  g in value = value_scaled · plant_gain^g, where the plant's gain was divided out
    options     keys that a requirement on it may carry beside min, max and cases
    listed      False for what only the search asks for: no sheet names it, no report prints it
    """

    key: str
    name: str
    unit: str
    dimension: Dimension
    better: Side | None
    stage: Stage
    scale: float | None = None
    best: float | None = None
    time_power: int = 0
    gain_power: int = 0
    options: tuple[str, ...] = ()
    listed: bool = True


_ROWS = (
    # poles
    Quantity("damping_ratio", "damping ratio", "", "ratio", "max", "poles", 0.01, 1.0, options=("below",)),
    Quantity("decay_rate", "decay rate", "1/s", "rate", "max", "poles", 0.01, time_power=-1),
    Quantity("natural_frequency", "natural frequency", "rad/s", "frequency", None, "poles", time_power=-1),
    # reference step
    Quantity("final_value", "final value", "", "ratio", None, "poles", 0.01),
    Quantity("static_error", "static error", "%", "percent", "min", "poles", 1.0, 0.0),
    Quantity("velocity_error", "velocity error", "s", "time", "min", "poles", 0.01, 0.0, time_power=1),
    Quantity("overshoot", "overshoot", "%", "percent", "min", "time", 1.0, 0.0),
    Quantity("undershoot", "undershoot", "%", "percent", "min", "time", 1.0, 0.0),
    Quantity("rise_time", "rise time", "s", "time", "min", "time", time_power=1, options=("span",)),
    Quantity("peak_time", "peak time", "s", "time", "min", "time", time_power=1),
    Quantity("settling_time", "settling time", "s", "time", "min", "time", time_power=1, options=("band",)),
    Quantity("tracking_area", "tracking area", "s", "time", "min", "time", time_power=1),
    Quantity("late_deviation", "late deviation", "%", "percent", "min", "time", 1.0, listed=False),
    # frequency
    Quantity("bandwidth", "bandwidth", "rad/s", "frequency", "max", "frequency", time_power=-1),
    Quantity("crossover", "crossover", "rad/s", "frequency", None, "frequency", time_power=-1),
    Quantity("phase_margin", "phase margin", "deg", "angle", "max", "frequency", 1.0),
    Quantity("gain_margin", "gain margin", "dB", "decibel", "max", "frequency", 1.0),
    Quantity("gain_margin_up", "gain margin upward", "dB", "decibel", "max", "frequency", 1.0),
    Quantity("gain_margin_down", "gain margin downward", "dB", "decibel", "max", "frequency", 1.0),
    Quantity("delay_margin", "delay margin", "s", "time", "max", "frequency", time_power=1),
    Quantity("sensitivity_peak", "sensitivity peak Ms", "", "ratio", "min", "frequency", 0.01),
    Quantity("complementary_peak", "complementary peak Mt", "", "ratio", "min", "frequency", 0.01),
    # effort and disturbance
    Quantity("control_peak", "control peak", "u", "plant", "min", "time", gain_power=-1),
    Quantity("noise_gain", "noise gain", "u per y", "plant", "min", "frequency", gain_power=-1),
    Quantity("disturbance_peak", "disturbance peak", "y per d", "plant", "min", "time", gain_power=1),
    Quantity(
        "disturbance_area",
        "disturbance area",
        "y s per d",
        "plant",
        "min",
        "time",
        time_power=1,
        gain_power=1,
    ),
    Quantity(
        "disturbance_integral",
        "disturbance integral",
        "y s per d",
        "plant",
        "min",
        "poles",
        time_power=1,
        gain_power=1,
    ),
    Quantity(
        "disturbance_residue",
        "disturbance residue",
        "y per d",
        "plant",
        "min",
        "poles",
        0.01,
        0.0,
        gain_power=1,
    ),
)

QUANTITIES: MappingProxyType[str, Quantity] = MappingProxyType({q.key: q for q in _ROWS})


@dataclass(frozen=True, slots=True)
class Measure:
    """A quantity with the options a requirement gave it; what the core is asked for.

    band   settling_time: half width of the band round y∞, relative (0.02 is 2 %)
    below  damping_ratio: count exactly the poles with abs(p) <= below [rad/s]; None is the usual rule
    span   rise_time: start and end level, relative to y∞
    after  late_deviation: 100 sup of abs(z - 1) from this time on [s], which stands in for a settling time
    """

    quantity: str
    band: float = 0.02
    below: float | None = None
    span: tuple[float, float] = (0.1, 0.9)
    after: float = 0.0

    def __post_init__(self) -> None:
        if self.quantity not in QUANTITIES:
            raise ValueError(f"unknown quantity {self.quantity!r}")

    @property
    def row(self) -> Quantity:
        """The table row of this quantity."""
        return QUANTITIES[self.quantity]


EVERY_QUANTITY: tuple[Measure, ...] = tuple(Measure(key) for key, row in QUANTITIES.items() if row.listed)
