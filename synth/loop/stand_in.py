"""A rational stand-in for loops with dead time: for a search that scores thousands, never for a figure it prints.

Stability and the frequency side stay exact; only the time responses and the damping of far poles come from the
stand-in. The dead time ahead of y is taken out exactly (y(t) = w(t - θ)), so only the feedback path carries the
approximation e^(-sθ) ≈ Q(sθ)/R(sθ) and the kinks at θ stay where they are:

    w:  N R / (D R + N Q)      u:  N_C D_P R / (D R + N Q)      y of d, from θ on:  N_P D_C R / (D R + N Q)

Source: the subdiagonal Padé approximant of the exponential, numerator of degree m - 1, denominator of degree m
(G. A. Baker and P. Graves-Morris, Padé Approximants, 2nd ed., 1996, sec. 1.2, the exponential function).
"""

from __future__ import annotations

from dataclasses import replace
from math import factorial

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.loop.closed_loop import Loops, product
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.share import spaced
from synth.loop.poles.stage import REACH, least_damping, needs_counting
from synth.loop.quantities import Measure
from synth.loop.time.stage import TimeStage, time_stage

ORDER = 4
"""Degree of R. On random loops (tests/loop/test_stand_in.py) the worst slack moves by less than 1e-3 in the median."""

TRUSTED = 3.0
"""abs(s) θ up to which a pole of the stand-in is as good as a true one."""

LATER = ("settling_time", "peak_time", "tracking_area")
"""Time quantities of y that the dead time itself is added to."""


def worthwhile(loops: Loops) -> BoolArray:
    """(M,) where the stand-in serves: L(∞) = 0. Else y jumps anew after every θ, which no rational loop does."""
    out: BoolArray = loops.numerator[:, 0] == 0.0
    return out


def without_dead_time(loops: Loops) -> Loops:
    """The stand-ins of M loops, of order n + ORDER and dead time 0. y and the response to d are early by θ."""
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
    """Time-stage measures of M loops by their stand-ins `rational`, whose poles are `poles` (M, n + ORDER)."""
    ahead = float((loops.dead_time * loops.time_scale).min(initial=np.inf))
    early = {m: replace(m, after=max(m.after - ahead, 0.0)) if m.after else m for m in measures}
    stage: TimeStage = time_stage(rational, poles, tuple(dict.fromkeys(early.values())))
    out: dict[Measure, FloatArray] = {}
    for measure in measures:
        if measure.row.stage == "time":
            value = stage.values[early[measure]]
            out[measure] = value + loops.dead_time if measure.quantity in LATER else value
    return out


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
            out[measure][far] = least_damping(loops.rows(far), true, near)
    return out


def _approximant(dead_time: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Q and R, both (M, ORDER + 1), in descending powers of s, both 1 at s = 0."""
    m = ORDER
    total = factorial(2 * m - 1)
    over = [
        (-1.0) ** k * factorial(2 * m - 1 - k) * factorial(m - 1) / (total * factorial(k) * factorial(m - 1 - k))
        for k in range(m - 1, -1, -1)
    ]
    under = [
        factorial(2 * m - 1 - k) * factorial(m) / (total * factorial(k) * factorial(m - k)) for k in range(m, -1, -1)
    ]
    powers = dead_time[:, None] ** np.arange(m, -1, -1)
    return np.array([0.0, *over]) * powers, np.array(under) * powers
