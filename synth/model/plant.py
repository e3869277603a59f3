"""One plant: N(s)/D(s) e^(-s θ), nothing cancelled."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.model import forms


@dataclass(frozen=True, slots=True)
class Plant:
    """N(s)/D(s) e^(-s θ) in SI units.

    numerator, denominator  descending powers of s, no leading zeros; not normalised
    dead_time               θ [s]
    """

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time: float = 0.0

    @classmethod
    def from_formula(cls, text: str, **parameters: float) -> Plant:
        """A formula in s with values for its names: Plant.from_formula("K/(T*s + 1)", K=2, T=0.1)."""
        return cls._from(forms.from_formula(text), parameters)

    @classmethod
    def from_coefficients(
        cls, numerator: Sequence[float], denominator: Sequence[float], dead_time: float = 0.0
    ) -> Plant:
        """Descending coefficients; dead time in seconds."""
        return cls._from(forms.from_coefficients(numerator, denominator, dead_time), {})

    @classmethod
    def from_roots(
        cls, gain: float, zeros: Sequence[complex], poles: Sequence[complex], dead_time: float = 0.0
    ) -> Plant:
        """gain · Π(s - zero)/Π(s - pole) [rad/s]; complex roots with their conjugates."""
        return cls._from(forms.from_roots(gain, zeros, poles, dead_time), {})

    @classmethod
    def from_matrices(
        cls,
        a: Sequence[Sequence[float]],
        b: Sequence[Sequence[float] | float],
        c: Sequence[Sequence[float] | float],
        d: object = 0.0,
        dead_time: float = 0.0,
    ) -> Plant:
        """State space; hidden modes stay."""
        return cls._from(forms.from_matrices(a, b, c, d, dead_time), {})

    @classmethod
    def from_row(cls, rational: Rational, row: int = 0) -> Plant:
        """One row of a stack of transfer functions."""
        return cls(
            _without_leading_zeros(rational.numerator[row]),
            _without_leading_zeros(rational.denominator[row]),
            float(rational.dead_time[row]),
        )

    @classmethod
    def _from(cls, form: forms.PlantForm, parameters: dict[str, float]) -> Plant:
        return cls.from_row(form.plants({n: np.array([float(v)]) for n, v in parameters.items()}))

    @property
    def order(self) -> int:
        """Degree of D."""
        return len(self.denominator) - 1

    def rational(self) -> Rational:
        """The plant as a stack of one."""
        return Rational.of(self.numerator, self.denominator, self.dead_time)

    def response(self, s: ComplexArray) -> ComplexArray:
        """P(s) at complex s of any shape; inf or NaN at a pole."""
        points = np.asarray(s, dtype=complex)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            out: ComplexArray = np.exp(-points * self.dead_time) * np.polyval(self.numerator, points)
            out = out / np.polyval(self.denominator, points)
        return out

    def zeros(self) -> ComplexArray:
        """Roots of N [rad/s], those at 0 exactly 0."""
        return roots_of(np.array(self.numerator))

    def poles(self) -> ComplexArray:
        """Roots of D [rad/s], those at 0 exactly 0."""
        return roots_of(np.array(self.denominator))


def roots_of(coefficients: FloatArray) -> ComplexArray:
    """Roots of one polynomial (descending, no leading zeros), found in units that keep them near 1."""
    nonzero = np.flatnonzero(coefficients)
    at_origin = len(coefficients) - 1 - int(nonzero[-1])
    rest = coefficients[: int(nonzero[-1]) + 1]
    degree = len(rest) - 1
    if degree == 0:
        return np.zeros(at_origin, dtype=complex)
    mantissa, exponent = np.frexp(rest)
    # log2 of the geometric mean of the roots; a power of two scales exactly
    slope = (exponent[-1] - exponent[0]) / degree
    unit = int(np.round(slope))
    shifted = exponent + unit * np.arange(degree, -1, -1)
    scaled = np.ldexp(mantissa, np.clip(shifted - shifted.max(), -1100, 0))
    roots = np.roots(scaled) * 2.0**unit
    out: ComplexArray = np.concatenate([roots, np.zeros(at_origin)]).astype(complex)
    return out


def _without_leading_zeros(row: FloatArray) -> tuple[float, ...]:
    first = int(np.flatnonzero(row)[0])
    return tuple(float(v) for v in row[first:])
