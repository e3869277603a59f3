"""What Newton's method needs of loops with dead time: crossings, turning points and the slopes of the curves.

Values are those of the polynomials themselves, turned by e^(-jωθ); nothing is squared, so light damping costs
no digits. Letters: F points, each with its own loop; u = ln ω.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.crossings import FALL, PHASE, newton
from synth.loop.frequency.isolation import Brackets
from synth.loop.frequency.response import D, N, Response, evaluate, log_rates, tamed

_DEPTH = 50.0  # in u, of a bracket that begins at 0
_STEPS = 12
_STRIDE = 0.3  # longest step in u
_FAR = 0.6  # from the start: what lies there is another's to find
_SETTLED = 1e-12  # relative gain of a peak that is left for the next step


class DelayedCrossing:
    """The angle of ±L nearest to zero, or ln|T|² less its level."""

    def __init__(self, response: Response, kind: int, row: IntArray, level: FloatArray) -> None:
        self.columns = np.stack((response.columns(N, row, 1), response.columns(D, row, 1)), axis=3)
        self.delay = response.dead_time[row]
        self.phase = kind == PHASE
        self.offset = np.log(level[row]) if kind == FALL else np.zeros(len(row))

    def keep(self, index: IntArray) -> None:
        """Go on with these points alone."""
        self.columns, self.delay, self.offset = (
            self.columns[..., index],
            self.delay[index],
            self.offset[index],
        )

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """What must vanish, its slope, and a number positive on the side `negative` of the brackets."""
        w = np.exp(u)
        re, im = tamed(*evaluate(self.columns, w))
        angle = w * self.delay
        if self.phase:
            _, _, turn = log_rates(re, im)
            cosine = re[0, 0] * re[0, 1] + im[0, 0] * im[0, 1]
            sine = im[0, 0] * re[0, 1] - re[0, 0] * im[0, 1]
            c, s = np.cos(angle), np.sin(angle)
            x, y = cosine * c + sine * s, sine * c - cosine * s
            with np.errstate(divide="ignore", invalid="ignore"):
                return np.arctan(y / x), turn[0] - turn[1] - angle, -y
        rotated = (re[:, 0] + 1j * im[:, 0]) * np.exp(-1j * angle)
        rotated[1] -= 1j * angle * rotated[0]
        value = np.stack((rotated, rotated + re[:, 1] + 1j * im[:, 1]), axis=1)
        size, rate, _ = log_rates(value.real, value.imag)
        with np.errstate(divide="ignore", invalid="ignore"):
            excess = np.log(size[0] / size[1]) - self.offset
        return excess, 2.0 * (rate[0] - rate[1]), excess


def refined(
    response: Response, kind: int, brackets: Brackets, level: FloatArray
) -> tuple[IntArray, FloatArray, BoolArray]:
    """(row, ω, negative) of the crossings of one kind in brackets of y = (ωθ)², whose `row` is the loop.

    level : (M,) of |T|² for FALL. What the brackets do not hold, by rounding or as a jump, is left out.
    """
    row, delay = brackets.row, response.dead_time[brackets.row]
    with np.errstate(divide="ignore"):
        top = np.log(np.sqrt(brackets.high) / delay)
        bottom = np.maximum(np.log(np.sqrt(brackets.low) / delay), top - _DEPTH)
    u, holds = newton(DelayedCrossing(response, kind, row, level), bottom, top, brackets.negative)
    return row[holds], np.exp(u[holds]), brackets.negative[holds]


class DelayedCurve:
    """P and Δ = D + N e^(-jωθ) with two derivatives in ln ω."""

    def __init__(self, response: Response, curve: IntArray, row: IntArray) -> None:
        self.columns = np.stack([response.columns(p, row, 2) for p in (curve, N, D)], axis=3)
        self.delay = response.dead_time[row]

    def keep(self, index: IntArray) -> None:
        """Go on with these points alone."""
        self.columns, self.delay = self.columns[..., index], self.delay[index]

    def at(self, w: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Real and imaginary parts, (3, 2, F), of P and Δ and their two derivatives in ln ω."""
        re, im = evaluate(self.columns, w)
        angle = 1j * w * self.delay
        n = (re[:, 1] + 1j * im[:, 1]) * np.exp(-angle)
        n[2] += angle * (angle * n[0] - 2.0 * n[1] - n[0])
        n[1] -= angle * n[0]
        closed = n + re[:, 2] + 1j * im[:, 2]
        return np.stack((re[:, 0], closed.real), axis=1), np.stack((im[:, 0], closed.imag), axis=1)


def climb_freely(
    curve: DelayedCurve, target: IntArray, w: FloatArray, best: FloatArray, at: FloatArray
) -> None:
    """Newton's method on the slope of |Δ/P|² in ln ω from one start for each target; keeps the best value.

    target : (F,) places in `best` and `at` (ω of the peak it lies on), each once. A climb ends where it
    leaves the neighbourhood of its start.
    """
    u = np.log(w)
    start, moving = u, np.ones(len(u), dtype=bool)
    for _ in range(_STEPS):
        w = np.exp(u)
        re, im = tamed(*curve.at(w))
        size, rate, turn = log_rates(re, im)
        with np.errstate(divide="ignore", invalid="ignore"):  # NaN where both are nothing, and no peak there
            value = np.sqrt(size[0] / size[1])
            bend = (re[2] * re[0] + im[2] * im[0]) / size - rate * rate + turn * turn
            slope, curvature = rate[0] - rate[1], bend[0] - bend[1]
            hollow = 2.0 * slope * slope - curvature  # |Δ/P|² is smooth where the peak is sharp
            step = np.where(hollow > 0.0, slope / hollow, np.copysign(_STRIDE, slope))
        u = u + np.clip(step, -_STRIDE, _STRIDE)
        higher = np.flatnonzero(moving & (value > best[target]))
        best[target[higher]] = value[higher]
        at[target[higher]] = np.exp(u[higher])  # nearer to the peak than where the value was taken
        moving &= (np.abs(slope * step) > _SETTLED) & (np.abs(u - start) < _FAR)
        count = np.count_nonzero(moving)
        if count == 0:
            break
        if count < 0.7 * len(u):
            keep = np.flatnonzero(moving)
            u, start, target, moving = u[keep], start[keep], target[keep], moving[keep]
            curve.keep(keep)
