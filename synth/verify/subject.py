"""What is verified: one compensator on one plant case, the plant as the sheet states it.

The frequency side evaluates the plant as written (`PlantForm.at`), nothing multiplied out; poles and time
need the coefficients, which are taken from the plant case and multiplied exactly, as fractions.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.model.forms import PlantForm
from synth.model.plant import Plant

Exact = tuple[Fraction, ...]


@dataclass(frozen=True, slots=True)
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

    def exact(self) -> tuple[Exact, Exact]:
        """N_P N_C and D_P D_C without rounding, both as long as D."""
        below = _product(self.plant.denominator, self.denominator)
        above = _product(self.plant.numerator, self.numerator)
        return (Fraction(0),) * (len(below) - len(above)) + above, below

    def load(self) -> Exact:
        """N_P D_C without rounding."""
        return _product(self.plant.numerator, self.denominator)

    def feedthrough(self) -> float:
        """L(∞) without the dead time."""
        above, below = self.exact()
        return float(above[0] / below[0])


def _product(a: tuple[float, ...], b: tuple[float, ...]) -> Exact:
    out = [Fraction(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            out[i + j] += Fraction(x) * Fraction(y)
    return tuple(out)
