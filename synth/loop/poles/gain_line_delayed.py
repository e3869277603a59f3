"""Stable intervals of the whole gain line with dead time.

On the axis L(jω) must be real. Far out abs(L) is monotone: where it falls, the first crossing of either
sign beyond its last extremum bounds the line (each further one lies at a larger gain and only adds unstable
poles); where it rises to abs(L(∞)), the limit 1 / abs(L(∞)) does. So finitely many crossings decide.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops, product
from synth.loop.poles.crossing_count import squared_on_axis
from synth.loop.poles.encirclement import delayed_stable
from synth.loop.poles.gain_intervals import Interval, intervals_between, without_rounding
from synth.loop.poles.roots import closed_roots

# Steps of the search along the axis: no root turns by more than this many degrees, the dead time by this
# many rad.
TURN = 4.0
DELAY_STEP = 0.1
# Phase of the dead time [rad] beyond which crossings are not looked for.
FURTHEST = 2e4


def delayed_intervals(loops: Loops) -> list[tuple[Interval, ...]]:
    """All factors on the gain of each loop that keep it stable; disjoint intervals in order.

    Ends are exact up to rounding. Two crossings within one step of the search that enclose a narrow
    interval can go unseen (the phase has then an extremum within 1e-3 rad of a multiple of π).
    """
    out = []
    for row in range(len(loops)):
        one = loops.rows(np.array([row]))
        out.append(intervals_between(_edges(one), partial(_stable_at, one)))
    return out


def _stable_at(one: Loops, gains: FloatArray) -> BoolArray:
    rows = one.rows(np.zeros(len(gains), dtype=np.intp))
    numerator = gains[:, None] * rows.numerator
    return delayed_stable(replace(rows, numerator=numerator, closed=rows.denominator + numerator))


def _edges(one: Loops) -> FloatArray:
    """Gains at which the number of unstable poles can change."""
    theta = float(one.dead_time[0])
    last = _last_extremum(one)
    w = _axis_points(one, min(last + 3.0 * np.pi / theta + last * 1e-3, FURTHEST / theta))
    _, imaginary = _on_axis(one, w)
    change = np.flatnonzero(np.sign(imaginary[:-1]) * np.sign(imaginary[1:]) < 0.0)
    low, high = w[change], w[change + 1]
    at_low = np.sign(imaginary[change])
    for _ in range(60):
        middle = 0.5 * (low + high)
        left = np.sign(_on_axis(one, middle)[1]) == at_low
        low, high = np.where(left, middle, low), np.where(left, high, middle)
    crossings = np.concatenate([w[imaginary == 0.0], 0.5 * (low + high)])
    n = np.polyval(one.numerator[0], 1j * crossings) * np.exp(-1j * crossings * theta)
    d = np.polyval(one.denominator[0], 1j * crossings)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        gains = -(d / n).real
    gains = gains[np.isfinite(gains)]
    if one.numerator[0, 0] != 0.0:
        limit = abs(float(one.denominator[0, 0] / one.numerator[0, 0]))
        gains = np.append(gains[np.abs(gains) < limit], [-limit, limit])
    return 0.0 + gains


def _on_axis(one: Loops, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Real and imaginary part of N conj(D) e^(-jωθ)."""
    s = 1j * w
    value: ComplexArray = np.polyval(one.numerator[0], s) * np.conj(np.polyval(one.denominator[0], s))
    value = value * np.exp(-s * one.dead_time[0])
    return value.real, value.imag


def _last_extremum(one: Loops) -> float:
    """The largest ω at which abs(L) can have an extremum, with room."""
    top, bottom = squared_on_axis(one.numerator), squared_on_axis(one.denominator)
    powers = np.arange(top.shape[1] - 1, 0, -1)
    if len(powers) == 0:
        return 0.0
    rise, fall = product(top[:, :-1] * powers, bottom), product(top, bottom[:, :-1] * powers)
    (roots,) = closed_roots(without_rounding(rise - fall, np.abs(rise) + np.abs(fall)))
    roots = roots[~np.isnan(roots)]
    return float(np.sqrt(np.abs(roots).max())) if roots.size else 0.0


def _axis_points(one: Loops, furthest: float) -> FloatArray:
    """Frequencies in [0, furthest] between which no root of N or D and no dead time turns the phase by
    much."""
    theta = float(one.dead_time[0])
    points = [np.arange(0.0, furthest, DELAY_STEP / theta), np.array([furthest])]
    tangent = np.tan(np.deg2rad(np.arange(-90.0 + TURN / 2, 90.0, TURN)))
    for rows in (one.numerator, one.denominator):
        for root in _roots_of(rows[0]):
            points.append(np.abs(root.imag) + np.abs(root.real) * tangent)
            points.append(np.abs(root.imag) * (1.0 + np.array([-1e-9, 1e-9])))
    every = np.unique(np.concatenate(points))
    out: FloatArray = every[(every >= 0.0) & (every <= furthest)]
    return out


def _roots_of(row: FloatArray) -> ComplexArray:
    kept = np.trim_zeros(row, "f")
    if len(kept) < 2:
        return np.zeros(0, dtype=complex)
    found: ComplexArray = closed_roots(kept[None, :])[0]
    return found
