"""Rules that ask for a closed-loop time constant: SIMC, lambda tuning, Haalman.

Each takes a first or second order model with dead time and gives series settings.
"""

from __future__ import annotations

from synth.loop.arrays import FloatArray
from synth.model import Plant
from synth.rules import start
from synth.rules.process_model import ProcessModel, half_rule
from synth.rules.start import Start

SIMC = (
    "S. Skogestad, Simple analytic rules for model reduction and PID controller tuning, "
    "J. Process Control 13 (2003) 291-309"
)
LAMBDA = (
    "E. B. Dahlin, Designing and tuning digital controllers, Instrum. Control Syst. 41 (1968); D. E. Rivera, "
    "M. Morari and S. Skogestad, Internal model control: PID controller design, Ind. Eng. Chem. Process Des. "
    "Dev. 25 (1986) 252-265"
)
HAALMAN = "A. Haalman, Adjusting controllers for a deadtime process, Control Eng. 12 (1965) 71-73"

FACTORS = (0.5, 1.0, 2.0, 4.0)  # closed-loop time constants tried, in units of the dead time


def simc(model: ProcessModel, closed_loop: float) -> tuple[float, float]:
    """Gain and integral time: 1/(slope (τc + θ)), min(lag, 4 (τc + θ))."""
    pace = closed_loop + model.dead_time
    return 1.0 / (model.slope * pace), min(model.lag, 4.0 * pace)


def simc_double_integrator(slope: float, dead_time: float, closed_loop: float) -> tuple[float, float]:
    """On slope/s²: series gain 1/(4 slope (τc + θ)²), and one time for Ti and Td, 4 (τc + θ)."""
    pace = closed_loop + dead_time
    return 1.0 / (4.0 * slope * pace**2), 4.0 * pace


def lambda_tuning(model: ProcessModel, closed_loop: float) -> tuple[float, float]:
    """Gain and integral time: the lag cancelled; for an integrator a closed loop of two equal lags."""
    if model.integrating:
        integral = 2.0 * closed_loop + model.dead_time
        return integral / (model.slope * (closed_loop + model.dead_time) ** 2), integral
    return model.lag / (model.gain * (closed_loop + model.dead_time)), model.lag


def haalman(model: ProcessModel) -> tuple[float, float]:
    """Loop transfer function 2 e^(-θs)/(3 θ s): the lag cancelled. Needs a dead time and a finite lag."""
    return 2.0 * model.lag / (3.0 * model.gain * model.dead_time), model.lag


def starts(plant: Plant, structure: str) -> list[Start]:
    """Starting settings of these rules for one structure; empty where none applies."""
    out: list[Start] = []
    first, second = half_rule(plant, 1), half_rule(plant, 2)
    if structure in ("P", "PI") and first is not None:
        for pace in _paces(first):
            gain, integral = simc(first, pace)
            theta = start.unfiltered((gain,) if structure == "P" else (gain, integral))
            out.append(Start(f"SIMC, closed-loop time {pace:.3g} s", SIMC, theta))
            if structure == "PI":
                theta = start.unfiltered(lambda_tuning(first, pace))
                out.append(Start(f"lambda tuning, closed-loop time {pace:.3g} s", LAMBDA, theta))
        if structure == "PI" and first.dead_time > 0.0 and not first.integrating:
            out.append(Start("Haalman", HAALMAN, start.unfiltered(haalman(first))))
    if structure in ("PD", "lead", "PID", "PI-lead") and second is not None and second.second_lag > 0.0:
        for pace in _paces(second):
            out.append(
                Start(
                    f"SIMC with derivative, closed-loop time {pace:.3g} s",
                    SIMC,
                    _with_lead(structure, *simc(second, pace), second.second_lag),
                )
            )
    slope = _double_integrator(plant)
    if structure in ("PD", "lead", "PID", "PI-lead") and slope is not None:
        for pace in _paces(ProcessModel(slope, plant.dead_time, 0.0, plant.dead_time)):
            gain, time = simc_double_integrator(slope, plant.dead_time, pace)
            out.append(
                Start(
                    f"SIMC for a double integrator, closed-loop time {pace:.3g} s",
                    SIMC,
                    _with_lead(structure, gain, time, time),
                )
            )
    return out


def _with_lead(structure: str, gain: float, integral: float, lead: float) -> FloatArray:
    if structure == "PID":
        return start.series_pid(gain, integral, lead)
    if structure == "PI-lead":
        return start.pi_lead(gain, integral, lead)
    return start.pd(gain, lead) if structure == "PD" else start.lead(gain, lead)


def _paces(model: ProcessModel) -> list[float]:
    """Closed-loop time constants to try: round the dead time, or round a tenth of the lag without one."""
    if model.dead_time > 0.0:
        return [f * model.dead_time for f in FACTORS]
    scale = model.second_lag if model.second_lag > 0.0 else model.lag
    return [f * scale for f in (0.05, 0.2, 0.5, 1.0)] if 0.0 < scale < float("inf") else [0.1, 1.0, 10.0]


def _double_integrator(plant: Plant) -> float | None:
    """Gain of slope/s² where the plant is that, with nothing but dead time beside."""
    if len(plant.numerator) != 1 or len(plant.denominator) != 3 or any(plant.denominator[1:]):
        return None
    return plant.numerator[0] / plant.denominator[0]
