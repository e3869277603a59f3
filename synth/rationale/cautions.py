"""Cautions for the plant and the compensator at hand: short, with the numbers, and always the last line."""

from __future__ import annotations

import math

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.rationale.practice import EFFORT, backwards, far_beyond, idle, poor_reach, reach_words
from synth.rationale.scene import Scene
from synth.wording.caveats import HARDWARE
from synth.wording.figures import count, figure, quantity

DELAY_PERIODS = 1.5  # sampling periods that hold and computation cost together
EASY_SHARE = 0.1  # of the longest period; costs some tenth of the delay margin
SLOW = 5.0  # times the settling time
NEAR_VALID = 0.5  # of the frequency up to which the model was identified


def cautions(scene: Scene) -> list[str]:
    """What to heed with this candidate on this plant; the line on hardware is always last."""
    found = [
        *_stability(scene),
        *_direction(scene),
        *_reach(scene),
        *_practice(scene),
        *_compensator(scene),
        *_slow(scene),
        *_effort(scene),
        *_sampling(scene),
        *_noise(scene),
        *_model(scene),
    ]
    return [*found, HARDWARE]


def _stability(scene: Scene) -> list[str]:
    unstable = [k for k, row in enumerate(scene.outcome.plants.denominator) if _right_half(row)]
    down, case = scene.worst("gain_margin_down")
    conditional = math.isfinite(down)
    margin = f"the downward gain margin is {figure(down, 3)} dB{_on(scene, case)}"
    rule = "a low gain does not make it safe, and the loop must never be broken while it runs"
    if unstable:
        where = (
            "" if len(unstable) == len(scene.outcome.case_names) else f" on {count(len(unstable), 'case')}"
        )
        tail = f": {margin}" if conditional else ""
        return [f"The plant is unstable without its loop{where}; {rule}{tail}."]
    if conditional:
        return [f"The loop is conditionally stable: {margin}; {rule}."]
    return []


def _right_half(polynomial: FloatArray) -> bool:
    return bool((_roots(polynomial).real > 0.0).any())


def _roots(polynomial: FloatArray) -> ComplexArray:
    """Roots, in a unit of s that keeps extreme coefficients in range."""
    nonzero = np.flatnonzero(polynomial)
    if nonzero.size < 2:
        return np.zeros(0, dtype=complex)
    p = np.asarray(polynomial[nonzero[0] :], dtype=float)
    last = nonzero[-1] - nonzero[0]
    unit = float(np.exp((np.log(abs(p[last])) - np.log(abs(p[0]))) / last))
    with np.errstate(over="ignore", under="ignore"):
        scaled = p * unit ** np.arange(len(p) - 1, -1, -1.0)
    found: ComplexArray = np.asarray(np.roots(scaled / np.abs(scaled).max()) * unit, dtype=np.complex128)
    return found


def _direction(scene: Scene) -> list[str]:
    if words := backwards(scene):
        return [f"The loop {words}."]
    gain = scene.candidate.parameters.get("gain")
    if gain is not None and gain < 0.0:
        return ["The gain of C is negative (reverse-acting): make sure of the sign at the terminals."]
    return []


def _reach(scene: Scene) -> list[str]:
    case = poor_reach(scene)
    if case is None:
        return []
    reached = reach_words(float(scene.column("final_value")[case]))
    return [f"The loop {reached}{_on(scene, case)}; the sheet bounds no static error."]


def _practice(scene: Scene) -> list[str]:
    return [f"{text[:1].upper()}{text[1:]}." for text in (*idle(scene), *far_beyond(scene))]


def _compensator(scene: Scene) -> list[str]:
    poles = _roots(np.asarray(scene.candidate.denominator))
    worst = poles[poles.real > 0.0]
    if worst.size == 0:
        return []
    return [f"The compensator is itself unstable (pole at {figure(float(worst.real.max()), 3)} rad/s)."]


def _slow(scene: Scene) -> list[str]:
    """A mode that the reference step hardly shows, and that every disturbance goes through."""
    decay, case = scene.worst("decay_rate")
    settling = float(scene.column("settling_time")[case])
    if not (decay > 0.0 and settling > 0.0 and 1.0 / decay > SLOW * settling):
        return []
    return [
        f"A slow mode, decaying to 1/e in {quantity(1.0 / decay, 's', 3)}{_on(scene, case)}, hardly shows in "
        "the reference step; a disturbance dies out with it. decay_rate or disturbance_area would bound it."
    ]


def _effort(scene: Scene) -> list[str]:
    peak, case = scene.worst("control_peak")
    if math.isnan(peak):
        return []
    step = f"{figure(scene.spec.reference_step)} {scene.spec.output.unit}".rstrip()
    text = (
        f"Effort: u peaks at {quantity(peak, scene.unit('control_peak'))}{_on(scene, case)} for a "
        f"reference step of {step}, and for that alone. No actuator limit, rate limit or anti-windup is "
        "in the model."
    )
    bounded = {b.measure.quantity for b in scene.spec.bounds}
    if "control_peak" not in bounded and any(_right_half(row) for row in scene.outcome.plants.denominator):
        text += " The sheet sets no control_peak, and an unstable plant is lost once the actuator saturates."
    elif not bounded & set(EFFORT):
        text += " The sheet bounds neither control_peak nor noise_gain."
    return [text]


def _sampling(scene: Scene) -> list[str]:
    delay, case = scene.worst("delay_margin")
    if not math.isfinite(delay):
        return []
    if delay <= 0.0:
        return ["Sampling: the loop stands no extra delay at all."]
    longest = quantity(delay / DELAY_PERIODS, "s", 2)
    easy = quantity(EASY_SHARE * delay / DELAY_PERIODS, "s", 2)
    return [
        f"Sampling: the loop stands {quantity(delay, 's', 3)} more delay{_on(scene, case)}. Hold and "
        f"computation cost about 1.5 periods, so it ends at a period of {longest}; "
        f"rule of thumb: {easy} or less."
    ]


def _noise(scene: Scene) -> list[str]:
    numerator = np.trim_zeros(np.asarray(scene.candidate.numerator, dtype=float), "f")
    denominator = np.trim_zeros(np.asarray(scene.candidate.denominator, dtype=float), "f")
    if len(numerator) < len(denominator) or len(numerator) == 0:
        return []
    high = float(numerator[0] / denominator[0])
    plants = scene.outcome.plants
    top, bottom = np.trim_zeros(plants.numerator[0], "f"), np.trim_zeros(plants.denominator[0], "f")
    direct = float(top[0] / bottom[0]) if len(top) == len(bottom) and plants.dead_time[0] == 0.0 else 0.0
    jump = high / (1.0 + high * direct) * scene.spec.reference_step
    gain = f"{figure(high, 3)} {scene.plant_unit('u per y')}"
    return [
        f"Noise: at high frequency the gain of C is {gain}; u jumps to "
        f"{quantity(jump, scene.unit('control_peak'), 3)} at the instant of the reference step."
    ]


def _model(scene: Scene) -> list[str]:
    names, inside = scene.outcome.case_names, scene.outcome.interior_examined
    if len(names) == 1:
        out = ["Model: the nominal plant alone was examined."]
    else:
        points = f" and {count(inside, 'point')} inside the tolerances" if inside else ""
        out = [f"Model: {count(len(names), 'case')}{points} were examined, not all that lies between them."]
    valid, crossover = scene.spec.valid_to, scene.column("crossover")
    if valid is not None and not np.isnan(crossover).all():
        w = float(np.nanmax(crossover))
        place = "beyond" if w > valid else "near" if w > NEAR_VALID * valid else ""
        if place:
            out.append(
                f"The crossover, {figure(w, 3)} rad/s, is {place} {figure(valid, 3)} rad/s, the model's end."
            )
    peak, case = scene.worst("sensitivity_peak")
    if peak > 2.0:
        where = _on(scene, case)
        out.append(f"Ms is {figure(peak, 3)}{where}, above 2: little room for what the model leaves out.")
    return out


def _on(scene: Scene, case: int) -> str:
    return scene.on(scene.case(case))


def uncounted(poles: list[complex], limit: float) -> list[str]:
    """A caution on poles that do not count in the damping ratio and are below what the sheet asks for."""
    short = [p for p in poles if p.imag > 0.0 and -p.real / abs(p) < limit]
    if not short:
        return []
    worst = min(short, key=lambda p: -p.real / abs(p))
    return [
        f"Not counted in the damping ratio: {count(len(short), 'pair')} below {figure(limit)}, the least "
        f"damped at {figure(abs(worst), 3)} rad/s with {figure(-worst.real / abs(worst), 3)}."
    ]
