"""Suprema of |S|, |T| and |C S| over all frequencies, with the proof that none higher was missed.

A first peak comes from a coarse look (octaves of ω², the most lightly damped pole, both ends) and Newton's
method. Then the level test: γ is an upper bound if and only if γ² |Δ|² - |P|² has no positive root in x = ω².
Where it has, the curve is above γ between two roots, Newton starts there, and the test is repeated.

Source of the level test: N. A. Bruinsma and M. Steinbuch, A fast algorithm to compute the H∞-norm of a
transfer function matrix, Systems & Control Letters 14 (1990) 287-293; the roots are counted by `isolation`.

Letters: M loops, R = kinds · M curves.
"""

from __future__ import annotations

from functools import cache
from typing import Protocol

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.frequency.isolation import Brackets, isolate
from synth.loop.frequency.response import (
    CLOSED,
    CONTROL,
    D,
    N,
    Response,
    complex_values,
    evaluate,
    polynomial,
)
from synth.loop.polynomials import in_strips

CURVES = {"sensitivity_peak": D, "complementary_peak": N, "noise_gain": CONTROL}

_SPAN = 20  # the coarse look: x from 2^-20 to 2^20 ...
_RANGE = 480  # ... but x^n no further than 2^480
_NEIGHBOUR = 2.0**0.5  # ratio of neighbouring ω of that look
_LIGHT = 0.05  # damping below which every pole of a loop is climbed at
_STEPS = 60  # bisection alone needs half of them
_ROUNDS = 12
_LEAST_MARGIN = 2e-9  # relative, of the level above the peak in the test
_MOST_MARGIN = 2e-7
_EPS = float(np.finfo(float).eps)


class Suprema:
    """Suprema of the curves in `keys`, of stable loops without dead time, each with a level to be tested.

    Error: the value is that of a frequency found by Newton's method; the test excludes a higher peak by more
    than 2e-9 relative (2e-7 where damping of 1e-4 leaves no more digits in |Δ|²).
    """

    def __init__(self, response: Response, poles: ComplexArray, keys: tuple[str, ...]) -> None:
        self.response, self.keys = response, keys
        m = response.loops
        numerators = np.array([CURVES[k] for k in keys], dtype=np.intp)
        self.curve, self.row = np.repeat(numerators, m), np.tile(np.arange(m), len(keys))
        self.best, self.at = _coarse(response, poles, numerators)
        inside = (self.at > 0.0).nonzero()[0]
        start = self.at[inside]
        self._climb(inside, (start / _NEIGHBOUR, start, start * _NEIGHBOUR))
        _climb_light_poles(response, poles, numerators, self.best, self.at)
        self.todo = np.arange(len(self.row))  # curves whose level is not tested yet

    def _climb(self, curves: IntArray, around: tuple[FloatArray, FloatArray, FloatArray]) -> None:
        points = _Rational(self.response, self.curve[curves], self.row[curves])
        climb(points, curves, around, self.best, self.at)

    def levels(self) -> tuple[FloatArray, FloatArray]:
        """γ² |Δ|² - |P|² of the curves to test, (n + 1, F), and where each should come close to 0, (F,)."""
        curve, row = self.curve[self.todo], self.row[self.todo]
        best, at = self.best[self.todo], self.at[self.todo]
        top, bottom = self.response.squares[:, curve, row], self.response.squares[:, CLOSED, row]
        level: FloatArray = (best * (1.0 + _margin(top, bottom, best, at))) ** 2 * bottom - top
        return level, at**2

    def raise_to(self, brackets: Brackets) -> None:
        """Climb between the roots of the levels; what rose is to be tested again."""
        which, x = _between(brackets.row, brackets.low, brackets.high)
        before = self.best.copy()
        self._climb(self.todo[which], (np.sqrt(x[0]), (x[1] * x[2]) ** 0.25, np.sqrt(x[3])))
        self.todo = (self.best > before * (1.0 + 1e-12)).nonzero()[0]

    def settled(self) -> dict[str, FloatArray]:
        """(M,) each, by key; the levels are tested until nothing rises."""
        for _ in range(_ROUNDS):
            if not self.todo.size:
                break
            level, hint = self.levels()
            self.raise_to(isolate(level, hint))
        m = self.response.loops
        return {key: self.best[i * m : (i + 1) * m] for i, key in enumerate(self.keys)}


def _coarse(response: Response, poles: ComplexArray, numerators: IntArray) -> tuple[FloatArray, FloatArray]:
    """Largest value seen of each curve and its frequency; 0 stands for an end, or the border of the look."""
    m = response.loops
    powers, w = _octaves(len(response.squares))
    bottom = in_strips(powers, response.squares[:, CLOSED])
    best, at = [], []
    lightest = _lightest(poles)
    light = np.flatnonzero(lightest > 0.0)
    below = _size(response, np.full(len(light), CLOSED), light, lightest[light])
    columns = np.arange(m)
    for p in numerators:
        ends = np.abs(response.ends[:, p] / response.ends[:, CLOSED]).max(axis=0)
        # |Δ|² that cancels to nothing at a node stands beside a pole all but on the axis: looked at below
        above, size = in_strips(powers, response.squares[:, p]), np.zeros_like(bottom)
        ratio = np.divide(above, bottom, out=size, where=bottom > 0.0)
        top = ratio.argmax(axis=0)
        value = np.sqrt(np.maximum(ratio[top, columns], 0.0))
        place = np.where((top > 0) & (top < len(w) - 1), w[top], 0.0)
        if light.size:
            seen = _size(response, np.full(len(light), p), light, lightest[light]) / below
            higher = seen > value[light]
            value[light] = np.where(higher, seen, value[light])
            place[light] = np.where(higher, lightest[light], place[light])
        at_end = ends >= value
        best.append(np.where(at_end, ends, value))
        at.append(np.where(at_end, 0.0, place))
    return np.concatenate(best), np.concatenate(at)


@cache
def _octaves(count: int) -> tuple[FloatArray, FloatArray]:
    """x^0, x^1, ... (F, count) at octaves of x, and ω there."""
    span = min(_SPAN, _RANGE // max(count - 1, 1))
    x: FloatArray = np.exp2(np.arange(-span, span + 1.0))
    return np.vander(x, count, increasing=True), np.sqrt(x)


def _climb_light_poles(
    response: Response, poles: ComplexArray, numerators: IntArray, best: FloatArray, at: FloatArray
) -> None:
    """Climb at every pole of loops that have several lightly damped ones; raises `best` and `at`.

    So near the axis |Δ|² keeps few digits, and in a loop of high order with many modes the level test may see
    nothing of a second needle: one of 1.0083 beside 1.004 was missed at order 21 (see test_ill_conditioned).
    """
    light = (poles.imag > 0.0) & (-poles.real < _LIGHT * np.abs(poles))
    loop, place = np.nonzero(light & (light.sum(axis=1) > 1)[:, None])
    if not loop.size:
        return
    pole = poles[loop, place]
    w = np.sqrt(pole.imag**2 - pole.real**2)
    for k, p in enumerate(numerators):
        curve = _Rational(response, np.full(len(loop), p), loop)
        around = (w / _NEIGHBOUR, w, w * _NEIGHBOUR)
        climb(curve, k * response.loops + loop, around, best, at)


def _lightest(poles: ComplexArray) -> FloatArray:
    """(M,) resonance frequency of the pole with the least damping, 0 where none is below 0.3."""
    if poles.shape[1] == 0:
        return np.zeros(len(poles))
    damping = np.where(poles.imag > 0.0, -poles.real / np.abs(poles), 1.0)
    row, pick = np.arange(len(poles)), damping.argmin(axis=1)
    chosen = poles[row, pick]
    resonance = np.sqrt(np.maximum(chosen.imag**2 - chosen.real**2, 0.0))
    return np.where(damping[row, pick] < 0.3, resonance, 0.0)


def _size(response: Response, polynomial: IntArray, row: IntArray, w: FloatArray) -> FloatArray:
    re, im = evaluate(response.columns(polynomial, row, 0), w)
    out: FloatArray = np.hypot(re[0], im[0])
    return out


class Curve(Protocol):
    """F points on curves |P/Δ|, each with its own loop."""

    def at(self, w: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Real and imaginary parts, (3, 2, F), of P and Δ and their two derivatives in ln ω."""

    def keep(self, index: IntArray) -> None:
        """Go on with these points alone."""


def climb(
    curve: Curve,
    target: IntArray,
    between: tuple[FloatArray, FloatArray, FloatArray],
    best: FloatArray,
    at: FloatArray,
) -> None:
    """Newton's method on the slope of |Δ/P|² in ln ω, F starts at once; keeps the best value met.

    target : (F,) place in `best` and `at` (ω of the best) that each start may raise.
    between : ω low, start, high: the slope's sign moves the ends in, and a step that leaves them is a
        bisection.
    """
    if not target.size:
        return
    low, u, high = (np.log(x) for x in between)
    for _ in range(_STEPS):
        w = np.exp(u)
        values = complex_values(*curve.at(w))
        value = np.abs(values[0, 0] / values[0, 1])
        rate, bend = values[1:] / values[0]  # NaN where a curve is nothing: no peak there
        bend -= rate * rate
        np.fmax.at(best, target, value)
        met = best[target] == value
        at[target[met]] = w[met]
        slope, curvature = rate[0].real - rate[1].real, bend[0].real - bend[1].real
        rises = slope > 0.0
        low, high = np.where(rises, u, low), np.where(rises, high, u)
        new = u + slope / (2.0 * slope * slope - curvature)  # |Δ/P|² is smooth where the peak is sharp
        new = np.where((new >= low) & (new <= high), new, 0.5 * (low + high))
        step = np.abs(new - u)
        moving = (step > 1e-9) & (step * np.abs(slope) > 1e-16)  # what the value gains is half of the product
        count = np.count_nonzero(moving)
        if count == 0:
            break
        u = new
        if 2 * count < len(u):
            keep = moving.nonzero()[0]
            u, low, high, target = u[keep], low[keep], high[keep], target[keep]
            curve.keep(keep)


class _Rational:
    """Curves of loops without dead time."""

    def __init__(self, response: Response, curve: IntArray, row: IntArray) -> None:
        closed = response.columns(CLOSED, row, 2)
        self.columns = np.stack((response.columns(curve, row, 2), closed), axis=3)

    def keep(self, index: IntArray) -> None:
        self.columns = self.columns[..., index]

    def at(self, w: FloatArray) -> tuple[FloatArray, FloatArray]:
        return evaluate(self.columns, w)


def _margin(top: FloatArray, bottom: FloatArray, best: FloatArray, at: FloatArray) -> FloatArray:
    """How far above the peak to put the level: as near as the digits left in the squares allow."""
    x = at * at
    terms, above = polynomial(np.abs(bottom), x), polynomial(np.abs(top), x)
    noise = 8.0 * _EPS * (terms + above / (best * best)) / np.abs(polynomial(bottom, x))
    out: FloatArray = np.fmin(np.fmax(noise, _LEAST_MARGIN), _MOST_MARGIN)
    return out


def _between(
    row: IntArray, low: FloatArray, high: FloatArray
) -> tuple[IntArray, tuple[FloatArray, FloatArray, FloatArray, FloatArray]]:
    """Where a curve is above the level: between a row's first and second root, its third and fourth, and so
    on.

    Returns the rows and the brackets of both roots, four x in ascending order.
    """
    order = np.lexsort((low, row))
    row, low, high = row[order], low[order], high[order]
    first = np.searchsorted(row, row)  # where this row's roots begin
    opening = np.flatnonzero(((np.arange(len(row)) - first) % 2 == 0) & (np.append(row[1:], -1) == row))
    return row[opening], (low[opening], high[opening], low[opening + 1], high[opening + 1])
