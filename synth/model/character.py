"""What kind of plant it is: type, right-half-plane roots, hidden modes, scales. One plant at a time."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.model.plant import Plant

# A root whose real part is this small against its magnitude is taken to lie on the axis.
AXIS = 1e-10

# A common root of N and D is believed where both are 0 within so many roundings of their coefficients.
COMMON = 1e-13

LIGHT = 0.2  # damping ratio below which a mode is called lightly damped


@dataclass(frozen=True, slots=True)
class Character:
    """The facts of one plant. Roots in rad/s, multiple ones repeated.

    integrators        poles at s = 0 of the plant's function: those of D less the zeros at 0
    differentiators    zeros at s = 0 of the plant's function: those of N less the poles at 0
    right_zeros        zeros with Re > 0 that are not hidden
    right_poles        poles with Re > 0 that are not hidden
    axis_poles         poles on the imaginary axis other than 0, not hidden
    hidden_unstable    roots that N and D share with Re >= 0: no compensator moves them, nothing stabilises
    light_modes        (frequency [rad/s], damping ratio) of lightly damped or undamped complex pole pairs
    light_zeros        the same for zeros, which fix where a high gain lets poles go
    excess             poles less zeros
    dc_gain            P(0); ±inf with integrators, 0 with differentiators
    dead_time          [s]
    time_scale         1 / geometric mean of nonzero pole, zero and 1/θ magnitudes [s]; 1 where there are none
    gain_scale         abs(P) at 1/time_scale
    sign               sign of the leading behaviour at s -> 0: of lim s^type P(s)
    """

    integrators: int
    differentiators: int
    right_zeros: tuple[complex, ...]
    right_poles: tuple[complex, ...]
    axis_poles: tuple[complex, ...]
    hidden_unstable: tuple[complex, ...]
    light_modes: tuple[tuple[float, float], ...]
    light_zeros: tuple[tuple[float, float], ...]
    excess: int
    dc_gain: float
    dead_time: float
    time_scale: float
    gain_scale: float
    sign: float

    @property
    def stable(self) -> bool:
        """No pole with Re >= 0, hidden ones included."""
        return not (self.right_poles or self.axis_poles or self.hidden_unstable or self.integrators)


def characters(plants: Rational) -> tuple[Character, ...]:
    """The character of each row."""
    return tuple(character_of(Plant.from_row(plants, k)) for k in range(len(plants)))


def character_of(plant: Plant) -> Character:
    """The character of one plant."""
    num, den = np.array(plant.numerator), np.array(plant.denominator)
    zeros, poles = plant.zeros(), plant.poles()
    hidden, zeros, poles = _split_hidden(num, den, zeros, poles)
    poles_at_0, zeros_at_0 = int((poles == 0.0).sum()), int((zeros == 0.0).sum())
    low = float(num[np.flatnonzero(num)[-1]] / den[np.flatnonzero(den)[-1]])
    kind = poles_at_0 - zeros_at_0
    with np.errstate(divide="ignore"):
        dc = low if kind == 0 else (0.0 if kind < 0 else np.copysign(np.inf, low))
    time_scale, gain_scale = scales_of(plant)
    moving_zeros, moving_poles = zeros[zeros != 0.0], poles[poles != 0.0]
    return Character(
        integrators=poles_at_0,
        differentiators=zeros_at_0,
        right_zeros=_sorted(moving_zeros[moving_zeros.real > AXIS * np.abs(moving_zeros)]),
        right_poles=_sorted(moving_poles[moving_poles.real > AXIS * np.abs(moving_poles)]),
        axis_poles=_sorted(moving_poles[np.abs(moving_poles.real) <= AXIS * np.abs(moving_poles)]),
        hidden_unstable=_sorted(hidden[hidden.real >= -AXIS * np.abs(hidden)]),
        light_modes=_light(moving_poles),
        light_zeros=_light(moving_zeros),
        excess=len(den) - len(num),
        dc_gain=float(dc),
        dead_time=plant.dead_time,
        time_scale=time_scale,
        gain_scale=gain_scale,
        sign=float(np.sign(low)),
    )


def scales_of(plant: Plant) -> tuple[float, float]:
    """(time scale [s], abs(P) there): the units in which this plant's numbers are near 1."""
    marks = np.abs(np.concatenate([plant.zeros(), plant.poles()]))
    marks = marks[marks > 0.0]
    if plant.dead_time > 0.0:
        marks = np.append(marks, 1.0 / plant.dead_time)
    if marks.size:
        time_scale = float(np.exp(-np.log(marks).mean()))
    else:  # integrators alone: the frequency at which the gain is 1
        excess = len(plant.denominator) - len(plant.numerator)
        ratio = abs(plant.denominator[0] / plant.numerator[0])
        time_scale = float(ratio ** (1.0 / excess)) if excess else 1.0
    for shift in (1.0, 1.1, 0.9):  # a zero or pole on the axis may sit exactly there
        gain = float(np.abs(plant.response(np.array([1j * shift / time_scale])))[0])
        if np.isfinite(gain) and gain > 0.0:
            return time_scale, gain
    return time_scale, 1.0


def _split_hidden(
    num: FloatArray, den: FloatArray, zeros: ComplexArray, poles: ComplexArray
) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Common roots of N and D (both 0 there within rounding), and what is left of zeros and poles."""
    zeros_left, poles_left, hidden = list(zeros), list(poles), []
    for zero in zeros:
        if not poles_left:
            break
        pole = poles_left[int(np.argmin(np.abs(np.array(poles_left) - zero)))]
        if abs(pole - zero) > 1e-4 * abs(zero):
            continue
        tries = (zero, pole, 0.5 * (zero + pole))
        if min(max(_residue(num, m), _residue(den, m)) for m in tries) <= COMMON:
            hidden.append(0.5 * (zero + pole))
            zeros_left.remove(zero)
            poles_left.remove(pole)
    return np.array(hidden, complex), np.array(zeros_left, complex), np.array(poles_left, complex)


def _residue(coefficients: FloatArray, s: complex) -> float:
    """abs(p(s)) against the sum of the magnitudes of its terms: a few eps at a root."""
    powers = np.abs(s) ** np.arange(len(coefficients) - 1, -1, -1)
    total = float(np.abs(coefficients) @ powers)
    return float(abs(np.polyval(coefficients, s)) / total) if total > 0.0 else 0.0


def _light(roots: ComplexArray) -> tuple[tuple[float, float], ...]:
    upper = roots[(roots.imag > 0.0)]
    found = sorted((float(abs(r)), float(-r.real / abs(r))) for r in upper)
    return tuple((w, z) for w, z in found if abs(z) < LIGHT)


def _sorted(roots: ComplexArray) -> tuple[complex, ...]:
    return tuple(complex(r) for r in sorted(roots, key=lambda r: (abs(r), r.imag)))
