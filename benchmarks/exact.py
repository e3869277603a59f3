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
    """Those of NAMES; of an unstable loop the decay rate alone."""
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
        if out["decay_rate"] <= 0:
            return {"decay_rate": float(out["decay_rate"])}
        y = _Step(num, closed, poles)
        u = _Step(_times(comp_num, plant_den), closed, poles)
        d = _Step(_times(plant_num, comp_den), closed, poles)
        t = _times_to_look(poles)
        shape = y.scan(t) / float(y.final)
        sign = 1 if y.final > 0 else -1
        peak = y.largest(t, lambda x: sign * x)
        out["overshoot"] = 100 * max(mpf(0), peak / y.final - 1)
        times = [y.crossing(t, shape, level, last=False) for level in (0.1, 0.9)]
        out["rise_time"] = times[1] - times[0]
        out["settling_time"] = y.leaving(t, 0.02)
        for name, signal in (("control_peak", u), ("disturbance_peak", d)):
            out[name] = abs(signal.largest(t, np.abs))
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

    def scan(self, t: np.ndarray, derivative: int = 0) -> np.ndarray:
        p = np.array(self.poles, dtype=complex)
        weighted = [r * p**derivative for r, p in zip(self.residues, self.poles, strict=True)]
        r = np.array(weighted, dtype=complex)
        total = np.full(t.shape, 0.0 if derivative else float(self.final))
        for pole, residue in zip(p, r, strict=True):
            total += (residue * np.exp(pole * t)).real
        return total

    def tops(
        self, t: np.ndarray, size: Callable[[np.ndarray], np.ndarray], low: float, high: float = np.inf
    ) -> np.ndarray:
        """Times of local maxima of size(y), in doubles, refined from a scan; the end points among them.

        low, high : only those that the scan puts between these values.
        """
        v = size(self.scan(t))
        k = np.flatnonzero((v[1:-1] >= v[:-2]) & (v[1:-1] >= v[2:])) + 1
        k = k[(v[k] >= low) & (v[k] <= high)]
        left, right = t[k - 1], t[k + 1]
        rising = np.sign(self.scan(left, 1))
        for _ in range(45):
            middle = 0.5 * (left + right)
            before = np.sign(self.scan(middle, 1)) == rising
            left, right = np.where(before, middle, left), np.where(before, right, middle)
        return np.unique(np.concatenate([t[:1], 0.5 * (left + right), t[-1:]]))

    def largest(self, t: np.ndarray, size: Callable[[np.ndarray], np.ndarray]) -> mpf:
        """Value of y where size(y) is largest: the error of the place, in doubles, enters squared.

        The ends are compared in 50 digits: large residues leave the doubles few.
        """
        tops = self.tops(t, size, 0.8 * float(size(self.scan(t)).max()))
        places = [tops[size(self.scan(tops)).argmax()], t[0], t[-1]]
        return max((self.at(mpf(float(place))) for place in places), key=lambda y: float(size(np.float64(y))))

    def crossing(self, t: np.ndarray, shape: np.ndarray, level: float, last: bool) -> mpf:
        k = int(np.flatnonzero(shape >= level)[0])
        return (
            mpf(0)
            if k == 0
            else _bisected(lambda x: self.at(x) / self.final - mpf(str(level)), t[k - 1], t[k])
        )

    def leaving(self, t: np.ndarray, band: float) -> mpf:
        def off(y: np.ndarray) -> np.ndarray:
            return np.abs(y / float(self.final) - 1.0)

        t = np.union1d(t, self.tops(t, off, 0.7 * band, 1.5 * band))
        shape = self.scan(t) / float(self.final)
        k = int(np.flatnonzero(np.abs(shape - 1.0) > band)[-1])
        side = 1 if shape[k] > 1.0 else -1
        return _bisected(lambda x: self.at(x) / self.final - 1 - side * mpf(str(band)), t[k], t[k + 1])


def _frequency(num: Poly, den: Poly, closed: Poly) -> dict[str, mpf]:
    w = _frequencies_to_look(
        np.concatenate([np.roots([float(c) for c in part]) for part in (num, den, closed)])
    )
    n, d, c = (np.polyval([float(v) for v in p], 1j * w) for p in (num, den, closed))
    level = float(num[-1] / closed[-1]) ** 2 / 2.0

    def squared(p: Poly, q: Poly) -> Function:
        return lambda x: abs(_at(p, mpmath.mpc(0, x))) ** 2 / abs(_at(q, mpmath.mpc(0, x))) ** 2

    def peak(values: np.ndarray, f: Function) -> mpf:
        k = int(values.argmax())
        if k in (0, len(w) - 1):
            return mpmath.sqrt(f(mpf(float(w[k]))))
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
        "phase_margin": min(margins) if margins else mpf("inf"),
        "sensitivity_peak": max(
            mpf(1) if len(num) < len(den) else mpf(0), peak(np.abs(d / c), squared(den, closed))
        ),
        "complementary_peak": max(abs(num[-1] / closed[-1]), peak(np.abs(n / c), squared(num, closed))),
    }


def _times_to_look(poles: list[mpmath.mpc]) -> np.ndarray:
    """Times dense enough for the scan: 400 a decade, 12 a turn of every pair while it lasts."""
    p = np.array(poles, dtype=complex)
    horizon = 30.0 / (-p.real).min()
    start = 1e-4 / np.abs(p).max()
    parts = [[0.0], np.geomspace(start, horizon, 400 * max(15, int(np.log10(horizon / start)) + 1))]
    for pair in p[p.imag > 0.0]:
        last = 9.0 / -pair.real
        parts.append(np.linspace(0.0, last, min(int(12 * last * pair.imag / (2 * np.pi)) + 2, 6_000_000)))
    return np.unique(np.concatenate(parts))


def _frequencies_to_look(roots: np.ndarray) -> np.ndarray:
    """Frequencies dense enough for the scan: 2500 a decade, and finer near every lightly damped root."""
    r = roots[roots != 0.0]
    low, high = 1e-4 * np.abs(r).min(), 1e4 * np.abs(r).max()
    parts = [np.geomspace(low, high, int(2500 * np.log10(high / low)))]
    for root in r[(r.imag > 0.0) & (np.abs(r.real) < 0.05 * np.abs(r))]:
        near = np.sinh(np.linspace(-8.0, 8.0, 801)) * abs(root.real)
        parts.append(root.imag + near[near > -0.9 * root.imag])
    return np.unique(np.concatenate(parts))


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
    p = [c for k, c in enumerate(p) if any(p[: k + 1])]  # leading zeros
    zeros = 0
    while len(p) > 1 and p[-1] == 0:
        p, zeros = p[:-1], zeros + 1
    if len(p) < 2:
        return [mpmath.mpc(0)] * zeros
    with mpmath.workdps(120):  # twenty nearly equal roots take seventy digits away
        return [+z for z in _all_roots(p)] + [mpmath.mpc(0)] * zeros


def _all_roots(p: Poly) -> list[mpmath.mpc]:
    """Roots of a polynomial with p[0] and p[-1] not 0."""
    found = [mpmath.mpc(start) for start in np.roots([float(c) for c in p])]
    found = [z * (1 + mpf("1e-9") * (k + 1) * mpmath.mpc(1, 1)) for k, z in enumerate(found)]
    slope = _slope(p)
    for _ in range(200):  # Aberth's iteration: no two starts end in one root
        moved = mpf(0)
        for i, z in enumerate(found):
            newton = _at(p, z) / _at(slope, z)
            step = newton / (1 - newton * sum(1 / (z - other) for j, other in enumerate(found) if j != i))
            found[i] = z - step
            moved = max(moved, abs(step / z))
        if moved < mpf(10) ** -50:
            break
    else:
        raise ArithmeticError("roots not found")
    # a real polynomial: what is real but for rounding is real
    return [mpmath.mpc(z.real) if abs(z.imag) < abs(z) * mpf(10) ** -45 else z for z in found]
