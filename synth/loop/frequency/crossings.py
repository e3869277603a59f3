"""Where |L| = 1, where |T| passes |T(0)|/√2 and where L is real: all such frequencies of every loop.

Each is a positive root of a polynomial in x = ω², bracketed by `isolation` and refined by Newton's method in
ln ω on logarithms of the unsquared polynomials, which keeps the digits that squaring loses near light
damping. With dead time the first kind alone is a polynomial's.

Letters: M loops, F crossings.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.frequency.isolation import Brackets
from synth.loop.frequency.response import CLOSED, D, N, Response, complex_values, cross, evaluate

GAIN, FALL, PHASE = 0, 1, 2
_ITERATIONS = 70  # bisection alone closes any bracket in fewer
_SETTLED = 3e-14  # Newton step in ln ω
_NEAR = 1e-4  # step from which on the convergence is quadratic
_HOLDS = 1e-4  # what may be left of a logarithm or an angle at a root


@dataclass(frozen=True, slots=True)
class Crossings:
    """F crossings.

    kind   GAIN (|L| = 1), FALL (|T| passes the level, in either direction) or PHASE (L is real)
    row    the loop
    w      frequency [1/time_scale]
    down   FALL and GAIN: the magnitude falls through
    loop   L(jω) there, complex
    """

    kind: IntArray
    row: IntArray
    w: FloatArray
    down: BoolArray
    loop: ComplexArray


def of_kind(found: Sequence[Crossings], kind: int) -> Crossings:
    """All crossings of one kind."""
    rows = [(c.kind == kind).nonzero()[0] for c in found]
    parts = [(c.kind[k], c.row[k], c.w[k], c.down[k], c.loop[k]) for c, k in zip(found, rows, strict=True)]
    return Crossings(*(np.concatenate(part) for part in zip(*parts, strict=True)))


def fall_level(response: Response) -> FloatArray:
    """|T(0)|²/2 of each loop; 0 where T(0) = 0."""
    ratio = response.ends[0, N] / (response.ends[0, N] + response.ends[0, D])
    level: FloatArray = 0.5 * ratio * ratio
    return level


def polynomials(response: Response, kinds: tuple[int, ...]) -> FloatArray:
    """What vanishes at the crossings of each kind, (n + 1, kinds · M) in ascending powers of x; of loops
    without dead time, or GAIN alone.
    """
    squares = response.squares
    stack = [squares[:, :0, 0]]
    for kind in kinds:
        if kind == GAIN:
            stack.append(squares[:, D] - squares[:, N])
        elif kind == FALL:
            level = fall_level(response)
            # a loop with T(0) = 0 has no level: the zero polynomial has no roots
            stack.append((level * squares[:, CLOSED] - squares[:, N]) * (level > 0.0))
        else:
            stack.append(_quadrature(response))
    return np.concatenate(stack, axis=1)


def crossings(response: Response, kinds: tuple[int, ...], brackets: Brackets) -> Crossings:
    """The crossings at the bracketed roots of `polynomials`."""
    m = response.loops
    kind, row = np.array(kinds, dtype=np.intp)[brackets.row // m], brackets.row % m
    equation = _Rational(response, kind, row, np.where(kind == FALL, fall_level(response)[row], 1.0))
    u, holds = newton(equation, 0.5 * np.log(brackets.low), 0.5 * np.log(brackets.high), brackets.negative)
    kind, row, w, down = kind[holds], row[holds], np.exp(u[holds]), brackets.negative[holds]
    return Crossings(kind, row, w, down, loop_at(response, row, w))


def _quadrature(response: Response) -> FloatArray:
    """Im(N conj D)/ω, ascending powers of x; coefficients that are rounding alone are set to zero."""
    m = response.loops
    even, odd = response.halves[:, 0, 0], response.halves[:, 0, 1]
    en, on, ed, od = even[:, :m], odd[:, :m], even[:, m : 2 * m], odd[:, m : 2 * m]
    n = len(response.squares) - 1
    p = cross(on, ed, en, od, -1.0, 0, n)
    size = cross(np.abs(on), np.abs(ed), np.abs(en), np.abs(od), 1.0, 0, n)
    return np.where(np.abs(p) <= 4e-16 * size, 0.0, p)


class Equation(Protocol):
    """F equations in u = ln ω."""

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """What must vanish, its slope, and a number positive on the side `negative` of the brackets."""

    def keep(self, index: IntArray) -> None:
        """Go on with these equations alone."""


def newton(
    equation: Equation, bottom: FloatArray, top: FloatArray, negative: BoolArray
) -> tuple[FloatArray, BoolArray]:
    """Roots u of F equations by Newton's method, kept inside the brackets; a step that leaves them is a
    bisection.

    Returns u (F,) and whether the equation holds there: it does not in a bracket that rounding of the squared
    polynomials made up (degrees above 40), or where the angle jumps.
    """
    sign = np.where(negative, 1.0, -1.0)
    u = 0.5 * (bottom + top)
    result, holds = np.empty(len(u)), np.empty(len(u), dtype=bool)
    active, done = np.arange(len(u)), np.zeros(len(u), dtype=bool)
    excess, last = result, np.full(len(u), np.nan)  # last: the step before, where it was Newton's
    for iteration in range(_ITERATIONS):
        excess, slope, side = equation.at(u)
        new = u - excess / slope
        before = side * sign > 0.0
        bottom = np.where(before, u, bottom)
        top = np.where(before, top, u)
        tolerance = (_SETTLED if iteration < 10 else 30.0 * _SETTLED) * np.maximum(1.0, np.abs(u))
        # a converged step may end beside a bracket whose end is the root itself: that is no reason to bisect
        step = np.abs(new - u)
        good = ((new >= bottom) & (new <= top)) | (step < tolerance)
        new = np.where(good, new, 0.5 * (bottom + top))
        u = np.where(done, u, new)  # what is done stays, whatever the others still need
        # steps shrink as their squares: the next one is known before it is made
        known = (step < _NEAR) & (step * step * step < 0.1 * tolerance * last * last)
        done |= (good & ((step < tolerance) | known)) | (top - bottom < 1e-15)
        last = np.where(good, step, np.nan)
        finished = np.count_nonzero(done)
        if finished == len(u):
            break
        if 4 * finished > len(u):
            result[active[done]], holds[active[done]] = u[done], np.abs(excess[done]) < _HOLDS
            keep = np.flatnonzero(~done)
            active, u, bottom, top, sign = active[keep], u[keep], bottom[keep], top[keep], sign[keep]
            excess, last, done = excess[keep], last[keep], done[keep]
            equation.keep(keep)
    result[active], holds[active] = u, np.abs(excess) < _HOLDS
    return result, holds


class _Rational:
    """ln|ratio|² less its level, or the angle of ±N/D nearest to zero, for loops without dead time.

    With the slope corrected by the bend Newton's steps are Halley's (E. Halley, 1694), of third order.
    """

    def __init__(self, response: Response, kind: IntArray, row: IntArray, squared: FloatArray) -> None:
        first = response.columns(N, row, 2)
        second = response.columns(np.where(kind == FALL, CLOSED, D), row, 2)
        self.columns = np.stack((first, second), axis=3)  # (h + 1, 3, 2, 2, F)
        self.offset = np.log(squared)
        self.phase = kind == PHASE

    def keep(self, index: IntArray) -> None:
        self.columns, self.offset, self.phase = (
            self.columns[..., index],
            self.offset[index],
            self.phase[index],
        )

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        value = complex_values(*evaluate(self.columns, np.exp(u)))  # (3 derivatives, 2 polynomials, F)
        rates, bends = value[1:] / value[0]
        bends -= rates * rates
        rate, bend, ratio = rates[0] - rates[1], bends[0] - bends[1], value[0, 0] / value[0, 1]
        gain = np.log(np.abs(ratio)) - 0.5 * self.offset
        excess, slope, bent, side = gain, rate.real, bend.real, gain
        if self.phase.any():
            excess = np.where(self.phase, np.arctan(ratio.imag / ratio.real), gain)
            slope = np.where(self.phase, rate.imag, slope)
            bent = np.where(self.phase, bend.imag, bent)
            side = np.where(self.phase, -ratio.imag, gain)
        return excess, slope - 0.5 * excess * bent / slope, side


def loop_at(response: Response, row: IntArray, w: FloatArray) -> ComplexArray:
    """L(jω) of F points, dead time included."""
    both = np.stack((response.columns(N, row, 0), response.columns(D, row, 0)), axis=3)
    numerator, denominator = complex_values(*evaluate(both, w))[0]
    value: ComplexArray = numerator / denominator
    if response.dead_time.any():
        value = value * np.exp(-1j * w * response.dead_time[row])
    return value
