"""A small transfer function in factors, what cancels in it struck, so that equal functions look equal."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray

# A zero and a pole whose logarithms differ by less cancel: no one could set a dial so finely.
TOLERANCE = 1e-3

# Imaginary part, relative to the magnitude, that a double root of rounded coefficients may show.
REAL = 1e-4


@dataclass(frozen=True, slots=True)
class Factors:
    """gain · Π(1 - s/zeros) / (s^integrators · Π(1 - s/poles)), without common factors.

    zeros, poles : (n,) none of them 0 [rad/s]
    """

    gain: float
    integrators: int
    zeros: ComplexArray
    poles: ComplexArray

    def real_corners(self) -> tuple[FloatArray, FloatArray] | None:
        """Corners -z and -p, ascending, where all zeros and poles are real and negative; else None."""
        both = np.concatenate([self.zeros, self.poles])
        if np.any(np.abs(both.imag) > REAL * np.abs(both)) or np.any(both.real >= 0.0):
            return None
        return np.sort(-self.zeros.real), np.sort(-self.poles.real)


def factors_of(numerator: FloatArray, denominator: FloatArray, tolerance: float = TOLERANCE) -> Factors:
    """Factors of one rational function, descending coefficients; zeros and poles that coincide are struck.

    Raises ValueError for a numerator or denominator of zeros.
    """
    top, up = _without_zero_roots(numerator)
    bottom, down = _without_zero_roots(denominator)
    zeros, poles = list(_roots(top)), list(_roots(bottom))
    for z in list(zeros):
        if poles:
            gap = [abs(np.log(p / z)) for p in poles]
            nearest = int(np.argmin(gap))
            if gap[nearest] < tolerance:
                zeros.remove(z)
                del poles[nearest]
    return Factors(
        float(top[-1] / bottom[-1]),
        down - up,
        np.array(zeros, dtype=complex),
        np.array(poles, dtype=complex),
    )


def _without_zero_roots(coefficients: FloatArray) -> tuple[FloatArray, int]:
    """Coefficients without roots at s = 0 and without leading zeros, and how many roots at 0 there were."""
    nonzero = np.flatnonzero(coefficients)
    if nonzero.size == 0:
        raise ValueError("a polynomial of zeros has no factors")
    return coefficients[nonzero[0] : nonzero[-1] + 1], len(coefficients) - 1 - int(nonzero[-1])


def _roots(coefficients: FloatArray) -> ComplexArray:
    """Roots in units that keep coefficients of extreme times apart from the round-off."""
    degree = len(coefficients) - 1
    if degree == 0:
        return np.zeros(0, dtype=complex)
    scale = abs(coefficients[-1] / coefficients[0]) ** (1.0 / degree)
    scaled = coefficients * scale ** np.arange(degree, -1.0, -1.0)
    roots: ComplexArray = scale * np.roots(scaled).astype(complex)
    return roots
