"""Quantities of one loop without dead time in 50-digit arithmetic, for the accuracy tables.

Poles, residues and polynomials with mpmath from the very coefficients the core is given; extrema and
crossings are found on a dense scan in doubles and then refined in 50 digits.
"""

from __future__ import annotations

from collections.abc import Callable

import mpmath
import numpy as np
from mpmath import mpf
from populations import Population

NAMES = (
    "damping_ratio",
    "decay_rate",
    "overshoot",
    "rise_time",
    "settling_time",
    "control_peak",
    "disturbance_peak",
    "bandwidth",
    "phase_margin",
    "sensitivity_peak",
    "complementary_peak",
)
Poly = list[mpf]
Function = Callable[[mpf], mpf]


def quantities(population: Population, row: int) -> dict[str, float]:
    with mpmath.workdps(50):
        plant_num, plant_den, comp_num, comp_den = (
            [mpf(float(c)) for c in np.trim_zeros(part[row], "f")]
            for part in (
                population.plants.numerator,
                population.plants.denominator,
                population.compensators.numerator,
                population.compensators.denominator,
            )
        )
        num, den = _times(plant_num, comp_num), _times(plant_den, comp_den)
        closed = _plus(num, den)
        poles = _roots(closed)
        out = {"decay_rate": min(-p.real for p in poles)}
        y = _Step(num, closed, poles)
        u = _Step(_times(comp_num, plant_den), closed, poles)
        d = _Step(_times(plant_num, comp_den), closed, poles)
        horizon = 30.0 / float(out["decay_rate"])
        t = np.concatenate([[0.0], np.geomspace(1e-5, 1.0, 6000) * horizon, np.linspace(0, horizon, 6000)])
        t = np.unique(t)
        shape = y.scan(t) / float(y.final)
        peak = y.extremum(t, shape.argmax())
        out["overshoot"] = 100 * max(mpf(0), peak / y.final - 1)
        times = [y.crossing(t, shape, level, last=False) for level in (0.1, 0.9)]
        out["rise_time"] = times[1] - times[0]
        out["settling_time"] = y.leaving(t, shape, 0.02)
        for name, signal in (("control_peak", u), ("disturbance_peak", d)):
            values = np.abs(signal.scan(t))
            out[name] = (
                abs(signal.extremum(t, values.argmax())) if values.argmax() else abs(signal.at(mpf(0)))
            )
        out |= _frequency(num, den, closed)
        fall = out.pop("fall")
        shares = [(2 if p.imag else 1) * abs(r / y.final) for p, r in zip(poles, y.residues, strict=True)]
        counted = [p for p, s in zip(poles, shares, strict=True) if abs(p) <= 5 * fall or s >= mpf("0.02")]
        out["damping_ratio"] = min(-p.real / abs(p) for p in counted)
        return {name: float(value) for name, value in out.items()}


class _Step:
    """Step response of num/closed as a sum of exponentials."""

    def __init__(self, num: Poly, closed: Poly, poles: Poly) -> None:
        slope = _slope(closed)
        self.poles, self.final = poles, num[-1] / closed[-1]
        self.residues = [_at(num, p) / (p * _at(slope, p)) for p in poles]

    def at(self, t: mpf, derivative: int = 0) -> mpf:
        total = sum(
            (r * p**derivative * mpmath.exp(p * t) for r, p in zip(self.residues, self.poles, strict=True)),
            mpf(0),
        )
        return (self.final if derivative == 0 else 0) + total.real

    def scan(self, t: np.ndarray) -> np.ndarray:
        p, r = np.array(self.poles, dtype=complex), np.array(self.residues, dtype=complex)
        return float(self.final) + (r[:, None] * np.exp(p[:, None] * t)).sum(axis=0).real

    def extremum(self, t: np.ndarray, k: int) -> mpf:
        if k in (0, len(t) - 1):
            return self.at(mpf(float(t[k])))
        where = _bisected(lambda x: self.at(x, 1), t[k - 1], t[k + 1])
        return self.at(where)

    def crossing(self, t: np.ndarray, shape: np.ndarray, level: float, last: bool) -> mpf:
        k = int(np.flatnonzero(shape >= level)[0])
        return (
            mpf(0)
            if k == 0
            else _bisected(lambda x: self.at(x) / self.final - mpf(str(level)), t[k - 1], t[k])
        )

    def leaving(self, t: np.ndarray, shape: np.ndarray, band: float) -> mpf:
        k = int(np.flatnonzero(np.abs(shape - 1.0) > band)[-1])
        side = 1 if shape[k] > 1.0 else -1
        return _bisected(lambda x: self.at(x) / self.final - 1 - side * mpf(str(band)), t[k], t[k + 1])


def _frequency(num: Poly, den: Poly, closed: Poly) -> dict[str, mpf]:
    size = float(abs(closed[-1] / closed[0])) ** (1.0 / (len(closed) - 1))
    w = np.geomspace(1e-4, 1e4, 20001) * size
    n, d, c = (np.polyval([float(v) for v in p], 1j * w) for p in (num, den, closed))
    level = float(num[-1] / closed[-1]) ** 2 / 2.0

    def squared(p: Poly, q: Poly) -> Function:
        return lambda x: abs(_at(p, mpmath.mpc(0, x))) ** 2 / abs(_at(q, mpmath.mpc(0, x))) ** 2

    def peak(values: np.ndarray, f: Function) -> mpf:
        k = int(values.argmax())
        if k in (0, len(w) - 1):
            return mpmath.sqrt(max(f(mpf(float(w[k]))), mpf(1)))
        where = _bisected(lambda x: mpmath.diff(f, x), w[k - 1], w[k + 1])
        return mpmath.sqrt(f(where))

    follow = np.abs(n / c) ** 2
    falls = np.flatnonzero((follow[:-1] >= level) & (follow[1:] < level))
    half = (num[-1] / closed[-1]) ** 2 / 2
    fall = [_bisected(lambda x: squared(num, closed)(x) - half, w[k], w[k + 1]) for k in falls]
    margins = []
    for k in np.flatnonzero(np.diff(np.abs(n) > np.abs(d))):
        where = _bisected(lambda x: squared(num, den)(x) - 1, w[k], w[k + 1])
        s = mpmath.mpc(0, where)
        margins.append(abs(mpmath.degrees(mpmath.arg(-_at(num, s) / _at(den, s)))))
    return {
        "bandwidth": fall[0] if fall else mpf("inf"),
        "fall": fall[-1] if fall else mpf("inf"),
        "phase_margin": min(margins) if margins else mpf("nan"),
        "sensitivity_peak": max(
            mpf(1) if len(num) < len(den) else mpf(0), peak(np.abs(d / c), squared(den, closed))
        ),
        "complementary_peak": max(abs(num[-1] / closed[-1]), peak(np.abs(n / c), squared(num, closed))),
    }


def _bisected(f: Function, low: float, high: float) -> mpf:
    """Root between two points of opposite sign, to about 40 digits: bisection, then the secant rule."""
    a, b = mpf(float(low)), mpf(float(high))
    fa = f(a)
    for _ in range(12):
        m = (a + b) / 2
        fm = f(m)
        if (fm > 0) == (fa > 0):
            a, fa = m, fm
        else:
            b = m
    return mpmath.findroot(f, (a, b), solver="anderson", tol=mpf(10) ** -60, verify=False)


def _at(p: Poly, x: mpf) -> mpf:
    value = mpf(0)
    for c in p:
        value = value * x + c
    return value


def _slope(p: Poly) -> Poly:
    return [c * (len(p) - 1 - k) for k, c in enumerate(p[:-1])]


def _times(a: Poly, b: Poly) -> Poly:
    out = [mpf(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            out[i + j] += x * y
    return out


def _plus(a: Poly, b: Poly) -> Poly:
    width = max(len(a), len(b))
    a, b = [mpf(0)] * (width - len(a)) + a, [mpf(0)] * (width - len(b)) + b
    return [x + y for x, y in zip(a, b, strict=True)]


def _roots(p: Poly) -> list[mpmath.mpc]:
    slope, out = _slope(p), []
    for start in np.roots([float(c) for c in p]):
        root = mpmath.mpc(start)
        for _ in range(9):
            root -= _at(p, root) / _at(slope, root)
        out.append(root)
    return out
