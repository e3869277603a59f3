"""Rules of electric drives, modulus and symmetrical optimum: one large lag and the sum of small ones."""

from __future__ import annotations

from synth.loop.arrays import FloatArray
from synth.model import Plant
from synth.rules import start
from synth.rules.process_model import ProcessModel, half_rule
from synth.rules.start import Start

SYMMETRICAL = "C. Kessler, Das symmetrische Optimum, Regelungstechnik 6 (1958) 395-400 and 432-436"
MODULUS = (
    "C. Kessler, Über die Vorausberechnung optimal abgestimmter Regelkreise, Regelungstechnik 3 (1955) 40-49"
)


def symmetrical_optimum(slope: float, small: float, a: float = 2.0) -> tuple[float, float]:
    """Gain and integral time on slope/(s (T s + 1)): 1/(a slope T), a² T; phase margin atan((a² - 1)/2a)."""
    return 1.0 / (a * slope * small), a**2 * small


def modulus_optimum(model: ProcessModel, small: float) -> tuple[float, float]:
    """Gain and integral time: the large lag cancelled, 1/(2 T s (T s + 1)) left. Needs a finite lag."""
    return model.lag / (2.0 * model.gain * small), model.lag


def starts(plant: Plant, structure: str) -> list[Start]:
    """Starting settings of these rules; dead time counts among the small lags."""
    order = 1 if structure == "PI" else 2
    model = half_rule(plant, order)
    if structure not in ("PI", "PID", "PI-lead") or model is None or model.dead_time <= 0.0:
        return []
    small, lead = model.dead_time, model.second_lag
    if order == 2 and lead <= 0.0:
        return []

    def made(gain: float, integral: float) -> FloatArray:
        if structure == "PI":
            return start.unfiltered((gain, integral))
        return (start.series_pid if structure == "PID" else start.pi_lead)(gain, integral, lead)

    out = []
    if model.lag >= 4.0 * small:
        for a in (2.0, 3.0, 4.0):
            theta = made(*symmetrical_optimum(model.slope, small, a))
            out.append(Start(f"symmetrical optimum, a = {a:g}", SYMMETRICAL, theta))
    if not model.integrating:
        out.append(Start("modulus optimum", MODULUS, made(*modulus_optimum(model, small))))
    return out
