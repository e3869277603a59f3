"""The root locus of 1 + k L(s) = 0: branches as the gain k moves, and the classical facts about them.

N, D : numerator and denominator of L, one row each, descending powers, any unit of time. The facts are exact
(roots of polynomials); the branches are sampled where they bend. Rules: W. R. Evans, Graphical analysis of
control systems, Trans. AIEE 67 (1948), for k > 0; the complementary locus, k < 0, by the same rules turned by
180°.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import product
from synth.loop.poles.gain_intervals import without_rounding
from synth.loop.poles.gain_line import NEARLY_REAL, Crossing, axis_crossings
from synth.loop.poles.roots import closed_roots
from synth.loop.poles.tracing import traced


@dataclass(frozen=True, slots=True)
class Break:
    """Where branches meet and part: a repeated root of D + k N."""

    point: complex
    gain: float


@dataclass(frozen=True, slots=True)
class Asymptotes:
    """Straight lines that the branches to infinity approach; no angles when there is no such branch."""

    centroid: float
    angles: tuple[float, ...]  # [deg] in (-180, 180]


@dataclass(frozen=True, slots=True)
class Locus:
    """Branches and facts of the locus for gains of one sign.

    gains     (G,) increasing in magnitude, from 0
    branches  (n, G) each continuous; NaN where a root is at infinity
    """

    gains: FloatArray
    branches: ComplexArray
    poles: ComplexArray
    zeros: ComplexArray
    segments: tuple[tuple[float, float], ...]
    asymptotes: Asymptotes
    breaks: tuple[Break, ...]
    crossings: tuple[Crossing, ...]


def root_locus(
    numerator: FloatArray, denominator: FloatArray, *, furthest: float | None = None, sign: int = 1
) -> Locus:
    """Branches of the locus and its facts.

    furthest : largest abs(k) drawn; None goes well beyond the last break and crossing, to where the branches
    have nearly reached their zeros or asymptotes. sign : +1 for k >= 0, -1 for the complementary locus.
    """
    num, den = _proper(numerator, denominator)
    breaks = tuple(b for b in break_points(num, den) if b.gain * sign > 0.0)
    crossings = tuple(c for c in axis_crossings(num, den) if c.gain * sign > 0.0)
    marks = np.array(sorted({abs(b.gain) for b in breaks} | {abs(c.gain) for c in crossings}))
    low, high = _span(num, den, marks)
    if furthest is not None:
        high = furthest
        low = min(low, 1e-3 * furthest)
        marks = np.append(marks[marks < furthest], furthest)
    start = np.concatenate([[0.0], np.geomspace(low, high, 48)])
    gains, branches = branches_of(lambda k: den + sign * k[:, None] * num, np.union1d(start, marks))
    return Locus(
        gains=sign * gains,
        branches=branches,
        poles=_roots(den),
        zeros=_roots(num),
        segments=real_segments(num, den, sign=sign),
        asymptotes=asymptotes(num, den, sign=sign),
        breaks=breaks,
        crossings=crossings,
    )


def branches_of(
    characteristic: Callable[[FloatArray], FloatArray], values: FloatArray, *, most: int = 1200
) -> tuple[FloatArray, ComplexArray]:
    """Poles as continuous branches while any one parameter moves.

    characteristic : function of parameter values (G,) -> polynomials (G, n + 1)
    values : (G,) increasing; points are added between them until branches can be told apart and look smooth,
    `most` in all. Returns the values and the branches (n, G).
    """
    return traced(lambda v: closed_roots(characteristic(v)), values, most)


def real_segments(
    numerator: FloatArray, denominator: FloatArray, *, sign: int = 1
) -> tuple[tuple[float, float], ...]:
    """Parts of the real axis on the locus, from left to right: where L is real and of sign -sign."""
    num, den = _proper(numerator, denominator)
    ends = np.unique([r.real for r in np.concatenate([_roots(num), _roots(den)]) if _is_real(r)])
    if ends.size == 0:
        bounds = [(-np.inf, np.inf)]
    else:
        bounds = list(zip([-np.inf, *ends], [*ends, np.inf], strict=True))
    out: list[tuple[float, float]] = []
    for low, high in bounds:
        middle = _between(float(low), float(high))
        if np.polyval(num, middle) * np.polyval(den, middle) * sign < 0.0:
            if out and out[-1][1] == low:
                out[-1] = (out[-1][0], float(high))
            else:
                out.append((float(low), float(high)))
    return tuple(out)


def asymptotes(numerator: FloatArray, denominator: FloatArray, *, sign: int = 1) -> Asymptotes:
    """Centroid (Σ poles - Σ zeros) / (n - m), angles (180° + 360° i) / (n - m) for k N/D > 0 far out."""
    num, den = np.trim_zeros(numerator, "f"), np.trim_zeros(denominator, "f")
    excess = len(den) - len(num)
    if excess <= 0 or len(num) == 0:
        return Asymptotes(float("nan"), ())
    poles_sum = -den[1] / den[0] if len(den) > 1 else 0.0
    zeros_sum = -num[1] / num[0] if len(num) > 1 else 0.0
    first = 180.0 if sign * num[0] / den[0] > 0.0 else 0.0
    angles = sorted(_wrapped((first + 360.0 * i) / excess) for i in range(excess))
    return Asymptotes(float((poles_sum - zeros_sum) / excess), tuple(angles))


def break_points(numerator: FloatArray, denominator: FloatArray) -> tuple[Break, ...]:
    """All repeated roots that D + k N has for a real k ≠ 0, of either sign; by decreasing real part.

    They satisfy N' D - N D' = 0 with k = -D/N real. One entry a point (the upper of a complex pair).
    """
    num, den = _proper(numerator, denominator)
    if len(den) < 2:
        return ()
    rise, fall = (product(_slope(a)[None, :], b[None, :]) for a, b in ((num, den), (den, num)))
    slope = without_rounding(rise - fall, np.abs(rise) + np.abs(fall))[0]  # biproper L: leading terms cancel
    found: list[Break] = []
    for root in _roots(slope):
        point = complex(root.real, 0.0) if _is_real(root) else complex(root)
        bottom = complex(np.polyval(num, point))
        top = complex(np.polyval(den, point))
        if point.imag < 0.0 or abs(bottom) <= 1e-10 * np.polyval(np.abs(num), abs(point)):
            continue
        gain = -top / bottom
        if abs(gain.imag) > NEARLY_REAL * abs(gain):
            continue
        if abs(top) <= 1e-10 * np.polyval(np.abs(den), abs(point)):  # a repeated open-loop pole: gain 0
            continue
        if not any(abs(point - b.point) <= 10 * NEARLY_REAL * abs(point) for b in found):
            found.append(Break(point, gain.real))
    return tuple(sorted(found, key=lambda b: (-b.point.real, b.point.imag)))


def departure_angles(
    numerator: FloatArray, denominator: FloatArray, pole: complex, *, sign: int = 1
) -> tuple[float, ...]:
    """Directions [deg] in which branches leave the open-loop pole nearest to `pole`, one for each of them.

    From k N + Dq (s - p)^q = 0 near p. Arrival at a zero z: the same with numerator and denominator
    exchanged.
    """
    num, den = _proper(numerator, denominator)
    poles = _roots(den)
    at = complex(poles[np.argmin(np.abs(poles - pole))])
    count = int((np.abs(poles - at) <= 1e-4 * abs(at)).sum())  # at 0 exactly equal: such poles come out exact
    slope = den
    for k in range(count):
        slope = _slope(slope) / (k + 1)
    turn = float(np.angle(-sign * np.polyval(num, at) / np.polyval(slope, at), deg=True))
    return tuple(sorted(_wrapped((turn + 360.0 * i) / count) for i in range(count)))


def gains_at_damping(
    numerator: FloatArray, denominator: FloatArray, ratio: float
) -> tuple[tuple[complex, float], ...]:
    """Where branches cross the ray of one damping ratio, 0 <= ratio < 1: (pole, gain), the nearest first.

    On s = r e^(jφ), cos φ = -ratio, Im(D conj N) is a real polynomial in r.
    """
    num, den = _proper(numerator, denominator)
    ray = complex(-ratio, np.sqrt(1.0 - ratio * ratio))
    powers = ray ** np.arange(len(num) - 1, -1, -1)
    size = product(np.abs(den)[None, :], np.abs(num)[None, :])
    both: FloatArray = np.convolve(den * powers, np.conj(num * powers)).imag
    turned = without_rounding(both[None, :], size)[0]
    found = []
    for root in _roots(turned):
        if root.real > 0.0 and _is_real(root):
            point = root.real * ray
            gain = -np.polyval(den, point) / np.polyval(num, point)
            found.append((complex(point), float(gain.real)))
    return tuple(sorted(found, key=lambda pair: abs(pair[0])))


def _proper(numerator: FloatArray, denominator: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Both of the denominator's width, without leading zeros there."""
    den = np.trim_zeros(np.atleast_1d(np.asarray(denominator, dtype=float)), "f")
    num = np.trim_zeros(np.atleast_1d(np.asarray(numerator, dtype=float)), "f")
    if len(den) == 0 or len(num) == 0 or len(num) > len(den):
        raise ValueError("the locus needs a proper L with N and D not zero")
    return np.pad(num, (len(den) - len(num), 0)), den


def _slope(polynomial: FloatArray) -> FloatArray:
    """Coefficients of the derivative, one fewer."""
    out: FloatArray = polynomial[:-1] * np.arange(len(polynomial) - 1, 0, -1)
    return out


def _roots(polynomial: FloatArray) -> ComplexArray:
    trimmed = np.trim_zeros(polynomial, "f")
    if len(trimmed) < 2:
        return np.zeros(0, dtype=complex)
    found: ComplexArray = closed_roots(trimmed[None, :])[0]
    return found


def _is_real(root: complex) -> bool:
    return abs(root.imag) <= NEARLY_REAL * abs(root)


def _between(low: float, high: float) -> float:
    if np.isinf(low) and np.isinf(high):
        return 0.0
    if np.isinf(low):
        return high - 1.0 - abs(high)
    if np.isinf(high):
        return low + 1.0 + abs(low)
    return 0.5 * (low + high)


def _wrapped(angle: float) -> float:
    """[deg] into (-180, 180]."""
    return 180.0 - (180.0 - angle) % 360.0


def _span(num: FloatArray, den: FloatArray, marks: FloatArray) -> tuple[float, float]:
    """Smallest and largest gain worth drawing: where D + k N has hardly left D, and where k N rules it."""
    finite = marks[np.isfinite(marks)]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = np.abs(den[:, None]) / np.abs(num[None, num != 0.0])
    ratios = ratios[np.isfinite(ratios) & (ratios > 0.0)]
    middle = float(np.exp(np.log(ratios).mean())) if ratios.size else 1.0
    known = np.append(finite[finite > 0.0], middle)
    return 1e-3 * float(known.min()), 30.0 * float(known.max())
