"""What is verified: one compensator on one plant case, the plant as the sheet states it.

The frequency side evaluates the plant as written (`PlantForm.at`), nothing multiplied out; poles and time
need the coefficients, which are taken from the plant case and multiplied exactly, as fractions.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.model.forms import PlantForm
from synth.model.plant import Plant

Exact = tuple[Fraction, ...]


@dataclass(frozen=True)
class Subject:
    """One closed loop, SI units.

    form, parameters  the plant as stated and the values of its parameters
    plant             the same plant as coefficients
    numerator, denominator  of the compensator, descending powers of s, no leading zero in the denominator
    reference_step    size of the reference step that control_peak is judged for
    """

    form: PlantForm
    parameters: Mapping[str, float]
    plant: Plant
    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    reference_step: float = 1.0

    @property
    def dead_time(self) -> float:
        """θ [s]."""
        return self.plant.dead_time

    def compensator(self, w: FloatArray) -> ComplexArray:
        """C(jω)."""
        s = 1j * w
        out: ComplexArray = np.polyval(self.numerator, s) / np.polyval(self.denominator, s)
        return out

    def stated(self, w: FloatArray) -> ComplexArray:
        """P(jω), from the sheet's own words."""
        return self.form.at((1j * w).astype(complex), self.parameters)

    @cached_property
    def exact(self) -> tuple[Exact, Exact]:
        """N_P N_C and D_P D_C without rounding, both as long as D.

        All products are divided by one power of two, so that those of D are near 1 and fit a double.
        """
        below = self._product(self.plant.denominator, self.denominator)
        above = self._product(self.plant.numerator, self.numerator)
        return _padded(above, len(below)), below

    @cached_property
    def closed(self) -> Exact:
        """D_P D_C + N_P N_C without rounding and without leading zeros: the characteristic polynomial where
        there is no dead time."""
        total = [a + b for a, b in zip(*self.exact, strict=True)]
        return tuple(total[next((i for i, c in enumerate(total) if c), len(total)) :])

    @cached_property
    def load(self) -> Exact:
        """N_P D_C without rounding, as long as D."""
        return _padded(self._product(self.plant.numerator, self.denominator), len(self.exact[1]))

    @cached_property
    def control(self) -> Exact:
        """D_P N_C without rounding, as long as D."""
        return _padded(self._product(self.plant.denominator, self.numerator), len(self.exact[1]))

    def _product(self, a: tuple[float, ...], b: tuple[float, ...]) -> Exact:
        plant, own = (np.frexp(np.abs(p).max())[1] for p in (self.plant.denominator, self.denominator))
        return _product(a, b, Fraction(2) ** -(int(plant) + int(own)))


def scaled(polynomial: Sequence[Fraction], power: int) -> FloatArray:
    """Descending coefficients for time counted in units of 2^-power seconds."""
    degrees = np.arange(len(polynomial) - 1, -1, -1)
    out: FloatArray = np.ldexp(np.array([float(c) for c in polynomial]), power * degrees)
    return out


def _padded(polynomial: Exact, length: int) -> Exact:
    return (Fraction(0),) * (length - len(polynomial)) + polynomial


def _product(a: tuple[float, ...], b: tuple[float, ...], scale: Fraction) -> Exact:
    out = [Fraction(0)] * (len(a) + len(b) - 1)
    first, second = [Fraction(x) * scale for x in a], [Fraction(y) for y in b]
    for i, x in enumerate(first):
        for j, y in enumerate(second):
            out[i + j] += x * y
    return tuple(out)
