"""What a compensator structure is: parameters, ranges, coordinates to search in.

B compensators, P parameters of the structure, D freedoms left once crossover and phase are given.

A structure is data and four functions of its own module (realise, place, settings, recognise). What follows
from the data alone, legality, search coordinates, rounding, is done here once.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.structures.factors import Factors

Role = Literal["gain", "time", "frequency"]
Settings = dict[str, dict[str, float]]


@dataclass(frozen=True, slots=True)
class Parameter:
    """One tuned value: key in records, name in reports, unit, and how it scales with time and plant gain."""

    key: str
    name: str
    unit: str
    role: Role


@dataclass(frozen=True, slots=True)
class Ratio:
    """A range rule: low <= theta[over] / theta[under] <= high (low itself excluded where `open_low`).

    `at` is the one of the two parameters whose search coordinate is the logarithm of the ratio.
    """

    over: int
    under: int
    at: int
    low: float
    high: float
    open_low: bool = False


# An open lower end is searched from here on: one part in a thousand is still told apart by four digits.
OPEN_MARGIN = 1e-3

# What the last digit of a double may do to a ratio that sits on its bound.
ROUND_OFF = 1e-9


@dataclass(frozen=True, slots=True, eq=False)
class Structure:
    """A compensator family.

    name, formula, words   as the trade writes and says it
    parameters             P of them; the first is always the gain, the only one that may be negative
    ratios                 range rules between pairs of parameters
    order                  poles of C
    integral               C has a pole at s = 0
    simpler                structures this one contains, or comes as near to as one likes, simplest first
    freedoms               D, what `place` still asks for
    forms                  formula of each practitioner form that `settings` may give
    """

    name: str
    formula: str
    words: str
    parameters: tuple[Parameter, ...]
    ratios: tuple[Ratio, ...]
    order: int
    integral: bool
    simpler: tuple[str, ...]
    freedoms: int
    forms: Mapping[str, str]
    _realise: Callable[[FloatArray], tuple[FloatArray, FloatArray]] = field(repr=False)
    _place: Callable[[FloatArray, FloatArray, FloatArray], FloatArray] = field(repr=False)
    _settings: Callable[[FloatArray], Settings] = field(repr=False)
    _recognise: Callable[[Factors], FloatArray | None] = field(repr=False)

    def realise(self, theta: FloatArray) -> Rational:
        """C(s) of each row. theta (B, P) in SI -> B rows of coefficients."""
        self._check(theta)
        numerator, denominator = self._realise(theta)
        return Rational.of(numerator, denominator)

    def legal(self, theta: FloatArray) -> BoolArray:
        """Which rows keep the range rules: finite, gain not 0, the rest positive, ratios in range. (B,)"""
        self._check(theta)
        ok: BoolArray = (
            np.isfinite(theta).all(axis=1) & (theta[:, 0] != 0.0) & (theta[:, 1:] > 0.0).all(axis=1)
        )
        for rule in self.ratios:
            with np.errstate(divide="ignore", invalid="ignore"):
                ratio = theta[:, rule.over] / theta[:, rule.under]
            least = ratio > rule.low if rule.open_low else ratio >= rule.low * (1.0 - ROUND_OFF)
            ok &= least & (ratio <= rule.high * (1.0 + ROUND_OFF))
        return ok

    def to_search(
        self, theta: FloatArray, time_scale: float, gain_scale: float
    ) -> tuple[FloatArray, FloatArray]:
        """Logarithms of nondimensional magnitudes, in which the legal set is a box.

        time_scale [s]; gain_scale: the plant's gain there, so that K · gain_scale is a loop gain.
        Returns x (B, P) and the sign of the gain (B,).
        """
        self._check(theta)
        unit = self._units(time_scale, gain_scale)
        with np.errstate(divide="ignore"):
            x: FloatArray = np.log(np.abs(theta) * unit)
            for rule in self.ratios:
                x[:, rule.at] = np.log(theta[:, rule.over]) - np.log(theta[:, rule.under])
        return x, np.where(theta[:, 0] < 0.0, -1.0, 1.0)

    def from_search(
        self, x: FloatArray, sign: FloatArray, time_scale: float, gain_scale: float
    ) -> FloatArray:
        """The inverse of `to_search`: x (B, P), sign (B,) -> theta (B, P)."""
        self._check(x)
        with np.errstate(over="ignore", under="ignore"):
            theta: FloatArray = np.exp(x) / self._units(time_scale, gain_scale)
            for rule in self.ratios:
                ratio = np.exp(x[:, rule.at])
                if rule.at == rule.under:
                    theta[:, rule.at] = theta[:, rule.over] / ratio
                else:
                    theta[:, rule.at] = theta[:, rule.under] * ratio
        theta[:, 0] *= sign
        return theta

    def box(self) -> tuple[FloatArray, FloatArray]:
        """Bounds on x: (low (P,), high (P,)); ±inf for what is free."""
        low, high = np.full(len(self.parameters), -np.inf), np.full(len(self.parameters), np.inf)
        for rule in self.ratios:
            low[rule.at] = np.log(rule.low) + (OPEN_MARGIN if rule.open_low else 0.0)
            high[rule.at] = np.log(rule.high)
        return low, high

    def place(self, crossover: FloatArray, phase_lead: FloatArray, shares: FloatArray) -> FloatArray:
        """Parameters from design coordinates.

        crossover (B,) [rad/s]; phase_lead (B,) [rad] what C must add there, wrapped to (-pi, pi];
        shares (B, D) in (0, 1) for what is still free. Returns theta (B, P) with positive gain and
        abs(C(j crossover)) = 1; a row of NaN where the structure cannot give that phase. P has no phase
        to give: its gain is 1 whatever is asked.
        """
        if shares.shape != (len(crossover), self.freedoms):
            raise ValueError(
                f"shares must have shape ({len(crossover)}, {self.freedoms}), got {shares.shape}"
            )
        phase = np.pi - (np.pi - phase_lead) % (2.0 * np.pi)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            theta = self._place(crossover, phase, shares)
            theta = np.column_stack([np.ones(len(theta)), theta])
            theta[:, 0] = 1.0 / np.abs(self.response(theta, crossover))
        theta[~self.legal(theta)] = np.nan
        return theta

    def response(self, theta: FloatArray, w: FloatArray) -> ComplexArray:
        """C(jw) of each row at one frequency of its own: theta (B, P), w (B,) [rad/s] -> (B,) complex."""
        numerator, denominator = self._realise(theta)
        powers = (1j * w[:, None]) ** np.arange(self.order, -1, -1)
        top = (numerator * powers[:, self.order + 1 - numerator.shape[1] :]).sum(axis=1)
        bottom = (denominator * powers).sum(axis=1)
        out: ComplexArray = top / bottom
        return out

    def settings(self, theta: FloatArray) -> Settings:
        """Every usual form of one compensator: theta (P,) -> {form: {name: value}}; units in SETTING_UNITS.

        A form that this setting does not have (series PID with complex zeros) is left out.
        """
        if theta.shape != (len(self.parameters),):
            raise ValueError(f"theta must have shape ({len(self.parameters)},), got {theta.shape}")
        return self._settings(theta)

    def recognise(self, factors: Factors) -> FloatArray | None:
        """theta (P,) with which this structure is the given function, None where it cannot be."""
        theta = self._recognise(factors)
        if theta is None or not bool(self.legal(theta[None, :])[0]):
            return None
        return theta

    def rounded(self, theta: FloatArray, digits: int = 4) -> FloatArray:
        """Rows rounded to so many significant digits, and still legal: a ratio that rounding pushed over its
        bound is brought back by a unit of the last digit. (B, P) -> (B, P)"""
        self._check(theta)
        with np.errstate(divide="ignore", invalid="ignore"):
            exponent = np.nan_to_num(np.floor(np.log10(np.abs(theta))), neginf=0.0) - digits + 1
        # decimal text gives the double nearest to the printed number; arithmetic with powers of ten does not
        out: FloatArray = np.array([[float(f"{v:.{digits - 1}e}") for v in row] for row in theta])
        out = out.reshape(theta.shape)
        for rule in self.ratios:
            ratio = out[:, rule.over] / out[:, rule.under]
            step = 10.0 ** exponent[:, rule.at] * (1.0 if rule.at == rule.over else -1.0)
            small = ratio <= rule.low if rule.open_low else ratio < rule.low
            move = np.where(small, step, np.where(ratio > rule.high, -step, 0.0))
            for b in np.flatnonzero(move):
                out[b, rule.at] = float(f"{out[b, rule.at] + move[b]:.{digits - 1}e}")
        return out

    def _units(self, time_scale: float, gain_scale: float) -> FloatArray:
        """What each parameter is multiplied by to lose its dimension. (P,)"""
        factor = {"gain": gain_scale, "time": 1.0 / time_scale, "frequency": time_scale}
        return np.array([factor[p.role] for p in self.parameters])

    def _check(self, rows: FloatArray) -> None:
        if rows.ndim != 2 or rows.shape[1] != len(self.parameters):
            raise ValueError(
                f"{self.name} takes rows of {len(self.parameters)} parameters, got shape {rows.shape}"
            )


SETTING_UNITS: Mapping[str, str] = MappingProxyType(
    {
        "gain": "",
        "integral time": "s",
        "derivative time": "s",
        "filter time": "s",
        "filter ratio": "",
        "proportional gain": "",
        "integral gain": "1/s",
        "derivative gain": "s",
        "max phase": "deg",
        "at": "rad/s",
        "corner ratio": "",
        "zero corner": "rad/s",
        "pole corner": "rad/s",
        "zero frequency": "rad/s",
        "zero damping": "",
        "lead max phase": "deg",
        "lead at": "rad/s",
        "lead corner ratio": "",
        "lead zero corner": "rad/s",
        "lead pole corner": "rad/s",
        "lag max phase": "deg",
        "lag at": "rad/s",
        "lag corner ratio": "",
        "lag zero corner": "rad/s",
        "lag pole corner": "rad/s",
        "gain at high frequency": "",
        "gain at zero frequency": "",
    }
)
"""Unit of every name that `settings` uses; a gain is in u per y, which the plant's own units fill in."""
