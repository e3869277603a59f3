"""A rational stand-in for loops with dead time: for a search that scores thousands, not for printed figures.

Stability and the frequency side stay exact; only the time responses and the damping of far poles come from
the stand-in. The dead time ahead of y is taken out exactly (y(t) = w(t - θ)), so only the feedback path
carries the approximation e^(-sθ) ≈ Q(sθ)/R(sθ) and the kinks at θ stay where they are:

    w:  N R / (D R + N Q)      u:  N_C D_P R / (D R + N Q)      y of d, from θ on:  N_P D_C R / (D R + N Q)

Source: the subdiagonal Padé approximant of the exponential, numerator of degree m - 1, denominator of degree
m (G. A. Baker and P. Graves-Morris, Padé Approximants, 2nd ed., 1996, sec. 1.2, the exponential function).
"""

from __future__ import annotations

from dataclasses import replace
from math import factorial

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops, product
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.share import spaced
from synth.loop.poles.stage import REACH, least_damping, needs_counting, with_far_poles
from synth.loop.quantities import Measure
from synth.loop.time.result import TimeStage
from synth.loop.time.stage import time_stage

ORDER = 4
"""Degree of R. On random loops (tests/loop/test_stand_in.py) the median error of every quantity is below 1e-4
and the 95th percentile below 1 %; what is decided early is the worst: rise time, overshoot, load peak."""

TRUSTED = 3.0
"""abs(s) θ up to which a pole of the stand-in is as good as a true one."""

LATER = ("settling_time", "peak_time", "tracking_area")
"""Time quantities of y that the dead time itself is added to."""


def worthwhile(loops: Loops) -> BoolArray:
    """(M,) where the stand-in serves: L(∞) = 0. Else y jumps anew after every θ."""
    out: BoolArray = loops.numerator[:, 0] == 0.0
    return out


def without_dead_time(loops: Loops) -> Loops:
    """The stand-ins of M loops, order n + ORDER, dead time 0. y and the response to d are early by θ."""
    over, under = _approximant(loops.dead_time)
    numerator, denominator = product(loops.numerator, under), product(loops.denominator, under)
    closed = denominator + product(loops.numerator, over)
    return replace(
        loops,
        numerator=numerator,
        denominator=denominator,
        control=product(loops.control, under),
        load=product(loops.load, under),
        closed=closed,
        dead_time=np.zeros(len(loops)),
    )


def responses(
    loops: Loops, rational: Loops, poles: ComplexArray, measures: tuple[Measure, ...]
) -> dict[Measure, FloatArray]:
    """Time-stage measures of M loops by their stand-ins `rational`, with `poles` (M, n + ORDER)."""
    asked = [m for m in measures if m.row.stage == "time"]
    out: dict[Measure, FloatArray] = {}
    for after in sorted({m.after for m in asked}, reverse=True):
        # 0 rides along with the latest: it is 0 in any unit of time
        some = tuple(m for m in asked if m.after == after or (m.after == 0.0 and m not in out))
        if all(m in out for m in some):
            continue
        stage: TimeStage = time_stage(_counting_from(loops, rational, after), poles, some)
        for measure in some:
            value = stage.values[measure]
            out[measure] = value + loops.dead_time if measure.quantity in LATER else value
    return out


def _counting_from(loops: Loops, rational: Loops, after: float) -> Loops:
    """The stand-ins with their unit of time stretched so that `after` [s], in it, is later by θ in each loop.

    The responses are early by θ, and the time stage turns seconds into scaled time by this unit alone.
    """
    if after == 0.0:
        return rational
    with np.errstate(divide="ignore"):
        stretch = after / np.maximum(after - loops.dead_time * loops.time_scale, 0.0)
    return replace(rational, time_scale=rational.time_scale * stretch)


def damping(
    loops: Loops,
    rational: Loops,
    poles: ComplexArray,
    measures: tuple[Measure, ...],
    highest_fall: FloatArray | None,
) -> dict[Measure, FloatArray]:
    """Damping ratios by the rule for loops with dead time: the reach alone counts a pole, its share does not.

    Poles of the stand-in where they are close to the true ones, true ones where the rule reaches further out.
    """
    out: dict[Measure, FloatArray] = {}
    spacing = spaced(rational, poles)
    size = np.abs(poles)
    for measure in measures:
        if measure.quantity != "damping_ratio":
            continue
        if not needs_counting(measure):
            assert measure.below is not None
            reach = measure.below * rational.time_scale
        else:
            assert highest_fall is not None
            reach = np.where(np.isfinite(highest_fall), REACH * highest_fall, np.inf)
        out[measure] = least_damping(rational, poles, size <= reach[:, None], spacing)
        far = np.flatnonzero(reach * loops.dead_time > TRUSTED)
        if far.size:
            true = delayed_poles(loops.rows(far), reach[far])
            with np.errstate(invalid="ignore"):
                near = np.abs(true) <= reach[far, None]
            least = least_damping(loops.rows(far), true, near)
            out[measure][far] = with_far_poles(loops.rows(far), least, reach[far])
    return out


def _approximant(dead_time: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Q and R, both (M, ORDER + 1), in descending powers of s, both 1 at s = 0."""
    m = ORDER
    whole = factorial(2 * m - 1)

    def weight(k: int, degree: int) -> float:
        return factorial(2 * m - 1 - k) * factorial(degree) / (whole * factorial(k) * factorial(degree - k))

    over = [0.0] + [(-1.0) ** k * weight(k, m - 1) for k in range(m - 1, -1, -1)]
    under = [weight(k, m) for k in range(m, -1, -1)]
    powers = dead_time[:, None] ** np.arange(m, -1, -1)
    return np.array(over) * powers, np.array(under) * powers
