"""Rules on the step response of the process: Ziegler-Nichols, Cohen-Coon, Chien-Hrones-Reswick."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from synth.model import Plant
from synth.rules import start
from synth.rules.process_model import ProcessModel, half_rule
from synth.rules.start import Start

ZIEGLER_NICHOLS = (
    "J. G. Ziegler and N. B. Nichols, Optimum settings for automatic controllers, "
    "Trans. ASME 64 (1942) 759-768"
)
COHEN_COON = (
    "G. H. Cohen and G. A. Coon, Theoretical consideration of retarded control, Trans. ASME 75 (1953) 827-834"
)
CHIEN_HRONES_RESWICK = (
    "K. L. Chien, J. A. Hrones and J. B. Reswick, On the automatic control of generalized passive systems, "
    "Trans. ASME 74 (1952) 175-185"
)

# aim: factor of 1/a, Ti and Td in dead times (in lags for the set point), for P, PI and PID
CHR: Mapping[str, tuple[float, tuple[float, float], tuple[float, float, float]]] = MappingProxyType(
    {
        "set point, no overshoot": (0.3, (0.35, 1.2), (0.6, 1.0, 0.5)),
        "set point, 20 % overshoot": (0.7, (0.6, 1.0), (0.95, 1.4, 0.47)),
        "load, no overshoot": (0.3, (0.6, 4.0), (0.95, 2.4, 0.42)),
        "load, 20 % overshoot": (0.7, (0.7, 2.3), (1.2, 2.0, 0.42)),
    }
)


def ziegler_nichols(slope: float, dead_time: float, structure: str) -> tuple[float, ...]:
    """Settings from a = slope · dead time, the intercept of the steepest tangent."""
    a = slope * dead_time
    table: dict[str, tuple[float, ...]] = {
        "P": (1.0 / a,),
        "PI": (0.9 / a, 3.0 * dead_time),
        "PID": (1.2 / a, 2.0 * dead_time, 0.5 * dead_time),
    }
    return table[structure]


def cohen_coon(model: ProcessModel, structure: str) -> tuple[float, ...]:
    """Settings for quarter decay; needs a finite lag and a dead time."""
    r = model.dead_time / model.lag
    scale = 1.0 / (model.gain * r)
    table: dict[str, tuple[float, ...]] = {
        "P": (scale * (1.0 + r / 3.0),),
        "PI": (scale * (0.9 + r / 12.0), model.dead_time * (30.0 + 3.0 * r) / (9.0 + 20.0 * r)),
        "PID": (
            scale * (4.0 / 3.0 + r / 4.0),
            model.dead_time * (32.0 + 6.0 * r) / (13.0 + 8.0 * r),
            4.0 * model.dead_time / (11.0 + 2.0 * r),
        ),
    }
    return table[structure]


def chien_hrones_reswick(model: ProcessModel, aim: str, structure: str) -> tuple[float, ...]:
    """Settings for an aim of CHR; for the set point Ti counts in lags, for the load in dead times."""
    a = model.slope * model.dead_time
    gain, (pi_gain, pi_time), (pid_gain, pid_time, pid_lead) = CHR[aim]
    unit = model.lag if aim.startswith("set point") else model.dead_time
    table: dict[str, tuple[float, ...]] = {
        "P": (gain / a,),
        "PI": (pi_gain / a, pi_time * unit),
        "PID": (pid_gain / a, pid_time * unit, pid_lead * model.dead_time),
    }
    return table[structure]


def starts(plant: Plant, structure: str) -> list[Start]:
    """Starting settings of these rules; the model comes from the half rule."""
    model = half_rule(plant, 1)
    if model is None or model.dead_time <= 0.0 or structure not in ("P", "PI", "PID"):
        return []
    out = [
        Start(
            "Ziegler-Nichols, step response",
            ZIEGLER_NICHOLS,
            start.unfiltered(ziegler_nichols(model.slope, model.dead_time, structure)),
        )
    ]
    if not model.integrating:
        out.append(Start("Cohen-Coon", COHEN_COON, start.unfiltered(cohen_coon(model, structure))))
        for aim in CHR:
            theta = start.unfiltered(chien_hrones_reswick(model, aim, structure))
            out.append(Start(f"Chien-Hrones-Reswick, {aim}", CHIEN_HRONES_RESWICK, theta))
    return out
