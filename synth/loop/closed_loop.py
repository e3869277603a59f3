"""C and P to one nondimensional closed loop.

Time is counted in units of a power of two of a second near the geometric mean of the closed-loop poles, and
the plant's gain is divided out, so every grid and tolerance further up is relative. Scaling by powers of two
is exact.
The characteristic polynomial is formed from the uncancelled numerators and denominators, D_P D_C + N_P N_C.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Rational:
    """A stack of transfer functions in SI units: plants (K rows) or compensators (B rows).

    numerator, denominator : (R, width), descending powers of s, leading zeros as padding
    dead_time : (R,) [s]
    """

    numerator: FloatArray
    denominator: FloatArray
    dead_time: FloatArray

    def __len__(self) -> int:
        return int(self.numerator.shape[0])

    @classmethod
    def of(cls, numerator: object, denominator: object, dead_time: object = 0.0) -> Rational:
        """Rows from nested lists or arrays; one polynomial alone is one row."""
        num = np.atleast_2d(np.asarray(numerator, dtype=float))
        den = np.atleast_2d(np.asarray(denominator, dtype=float))
        rows = max(num.shape[0], den.shape[0])
        num = np.broadcast_to(num, (rows, num.shape[1]))
        den = np.broadcast_to(den, (rows, den.shape[1]))
        delay = np.broadcast_to(np.asarray(dead_time, dtype=float), (rows,))
        return cls(num, den, delay)

    def rows(self, index: IntArray) -> Rational:
        """The rows named by `index`."""
        return Rational(self.numerator[index], self.denominator[index], self.dead_time[index])


@dataclass(frozen=True, slots=True)
class Loops:
    """M closed loops of order n, nondimensional.

    All polynomials (M, n + 1), descending powers of s·time_scale:
    numerator    N = N_P N_C            denominator  D = D_P D_C, leading coefficient never 0
    control      N_C D_P                load         N_P D_C
    closed       N + D  (the characteristic polynomial where dead_time is 0)
    Of loops of several orders put `together`, n is the highest and zeros lead in the rows of the others.
    so that L = N/D e^(-s θ), T = N e^(-s θ)/Δ, C S = control/Δ, P S = load e^(-s θ)/Δ, Δ = D + N e^(-s θ).

    dead_time    (M,) θ in units of time_scale; all zero or all positive within one Loops
    time_scale   (M,) [s]
    plant_gain   (M,) what P was divided by and C multiplied by

    value in SI = value · time_scale^time_power · plant_gain^gain_power (see the table of quantities).
    """

    numerator: FloatArray
    denominator: FloatArray
    control: FloatArray
    load: FloatArray
    closed: FloatArray
    dead_time: FloatArray
    time_scale: FloatArray
    plant_gain: FloatArray

    def __len__(self) -> int:
        return int(self.numerator.shape[0])

    @property
    def order(self) -> int:
        """n, the order of D."""
        return int(self.denominator.shape[1]) - 1

    @property
    def delayed(self) -> bool:
        """Whether there is dead time: in all of them or in none."""
        return len(self) > 0 and bool(self.dead_time[0] > 0.0)

    def leading(self, polynomials: FloatArray) -> FloatArray:
        """(M,) coefficient of s^n in each row, n the order of that row's loop."""
        if self.denominator[:, 0].all():
            return polynomials[:, 0]
        out: FloatArray = polynomials[np.arange(len(self)), (self.denominator != 0.0).argmax(axis=1)]
        return out

    def cut(self) -> Loops:
        """The same loops without the zeros that lead in all of them."""
        spare = self.order - int(exact_degree(self.denominator).max(initial=0))
        parts = {f: getattr(self, f)[:, spare:] for f in POLYNOMIALS}
        return replace(self, **parts) if spare else self

    def by_order(self) -> list[tuple[IntArray, Loops]]:
        """The loops of each order as a stack of their own, and their rows in this one."""
        order = exact_degree(self.denominator)
        kinds = np.unique(order)
        if kinds.size == 1:
            return [(np.arange(len(self)), self)]
        return [(at, self.rows(at).cut()) for at in (np.flatnonzero(order == n) for n in kinds)]

    def rows(self, index: IntArray | BoolArray) -> Loops:
        """The loops named by `index` (integers or a mask)."""
        return replace(self, **{f: getattr(self, f)[index] for f in self.__slots__})


POLYNOMIALS = ("numerator", "denominator", "control", "load", "closed")


def together(parts: list[Loops]) -> Loops:
    """Stacks of several orders as one of the highest; zeros lead in the shorter rows."""
    order = max(part.order for part in parts)
    rows = {f: [trimmed(getattr(part, f), order) for part in parts] for f in POLYNOMIALS}
    rest = {f: [getattr(part, f) for part in parts] for f in ("dead_time", "time_scale", "plant_gain")}
    return Loops(**{f: np.concatenate(pieces) for f, pieces in (rows | rest).items()})


def exact_degree(polynomials: FloatArray) -> IntArray:
    """Degree of each row, counting no leading zeros; -1 for a row of zeros. (R, w) -> (R,)."""
    nonzero = polynomials != 0.0
    degree: IntArray = np.where(nonzero.any(axis=1), polynomials.shape[1] - 1 - nonzero.argmax(axis=1), -1)
    return degree


def trimmed(polynomials: FloatArray, degree: int) -> FloatArray:
    """Rows of exactly degree + 1 columns: leading zeros dropped or added."""
    width = polynomials.shape[1]
    if width >= degree + 1:
        return polynomials[:, width - degree - 1 :]
    out = np.zeros((polynomials.shape[0], degree + 1))
    out[:, degree + 1 - width :] = polynomials
    return out


def product(a: FloatArray, b: FloatArray) -> FloatArray:
    """Row by row polynomial product, (M, p + 1) and (M, q + 1) -> (M, p + q + 1)."""
    out = np.zeros((a.shape[0], a.shape[1] + b.shape[1] - 1))
    for j in range(b.shape[1]):
        out[:, j : j + a.shape[1]] += a * b[:, j, None]
    return out


def _stretched(polynomials: FloatArray, power: IntArray) -> tuple[FloatArray, IntArray]:
    """p(s) in the variable s·2^power, divided by a power of two: the largest coefficient is in [0.5, 1).

    Returns the rows and the exponents taken out. Exact: exponents alone are touched.
    """
    width = polynomials.shape[1]
    mantissa, exponent = np.frexp(polynomials)
    shift = exponent - power[:, None] * np.arange(width - 1, -1, -1)[None, :]
    largest = np.where(mantissa != 0.0, shift, np.iinfo(shift.dtype).min).max(axis=1)
    largest[(mantissa == 0.0).all(axis=1)] = 0  # a row of zeros has no size to take out
    return np.ldexp(mantissa, np.maximum(shift - largest[:, None], -2000).astype(np.int32)), largest


def close(plants: Rational, compensators: Rational, plant_of: IntArray, compensator_of: IntArray) -> Loops:
    """Close the loops of the named pairs.

    plant_of, compensator_of : (M,) row numbers, at least one. Within one call every dead time must be zero or
    every one positive (`evaluate` sorts them so). Where D_P D_C are of several degrees, the loops stand
    together as those of the highest.
    """
    dp = int(exact_degree(plants.denominator)[plant_of].max())
    dc = int(exact_degree(compensators.denominator)[compensator_of].max())
    plant_num, plant_den = trimmed(plants.numerator, dp)[plant_of], trimmed(plants.denominator, dp)[plant_of]
    comp_num = trimmed(compensators.numerator, dc)[compensator_of]
    comp_den = trimmed(compensators.denominator, dc)[compensator_of]
    delay = plants.dead_time[plant_of] + compensators.dead_time[compensator_of]

    power = _time_power(plant_num, plant_den, comp_num, comp_den)
    plant_num, a = _stretched(plant_num, power)
    plant_den, b = _stretched(plant_den, power)
    comp_num, c = _stretched(comp_num, power)
    comp_den, d = _stretched(comp_den, power)
    # a gain beyond the number range is inf or NaN here and an unstable loop above
    with np.errstate(over="ignore", invalid="ignore"):
        comp_num = np.ldexp(comp_num, np.clip(a - b + c - d, -4000, 4000).astype(np.int32)[:, None])
        gain = np.ldexp(1.0, np.clip(a - b, -4000, 4000).astype(np.int32))
        numerator, denominator = product(plant_num, comp_num), product(plant_den, comp_den)
        control, load = product(comp_num, plant_den), product(plant_num, comp_den)
        closed = numerator + denominator
    scale = np.ldexp(1.0, power.astype(np.int32))
    loops = Loops(
        numerator=numerator,
        denominator=denominator,
        control=control,
        load=load,
        closed=closed,
        dead_time=delay / scale,
        time_scale=scale,
        plant_gain=gain,
    )
    return loops.cut()  # the plant of the highest degree may have met none of the highest compensators


def _time_power(
    plant_num: FloatArray, plant_den: FloatArray, comp_num: FloatArray, comp_den: FloatArray
) -> IntArray:
    """log2 of the time scale: minus the mean log2 magnitude of the nonzero roots of D + N."""

    def log2(values: FloatArray) -> FloatArray:
        mantissa, exponent = np.frexp(values)
        with np.errstate(divide="ignore"):
            out: FloatArray = np.log2(np.abs(mantissa)) + exponent
        return out

    # D + N is formed from logarithms of its end coefficients alone, so that no product can overflow
    d = _largest_products(log2(plant_den), log2(comp_den))
    tails = np.maximum(d, _largest_products(log2(plant_num), log2(comp_num)))
    row, n = np.arange(len(tails)), tails.shape[1] - 1
    first = np.argmax(np.isfinite(d), axis=1)
    last = n - np.argmax(np.isfinite(tails)[:, ::-1], axis=1)
    roots = last - first
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.where(roots > 0, (tails[row, last] - d[row, first]) / np.maximum(roots, 1), 0.0)
    power: IntArray = -np.round(np.clip(np.nan_to_num(mean), -900, 900)).astype(np.intp)
    return power


def _largest_products(a: FloatArray, b: FloatArray) -> FloatArray:
    """Logarithm of the largest term in each coefficient of a product, from those of the factors."""
    out = np.full((a.shape[0], a.shape[1] + b.shape[1] - 1), -np.inf)
    for i in range(a.shape[1]):
        here = out[:, i : i + b.shape[1]]
        np.maximum(here, a[:, i, None] + b, out=here)
    return out
