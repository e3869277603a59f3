"""A rational stand-in for loops with dead time: for a search that scores thousands, not for printed figures.

Stability and the frequency side stay exact; only the time responses and the damping of far poles come from
the stand-in. The dead time ahead of y is taken out exactly (y(t) = w(t - θ)), so only the feedback path
carries the approximation e^(-sθ) ≈ Q(sθ)/R(sθ) and the kinks at θ stay where they are:

    w:  N R / (D R + N Q)      u:  N_C D_P R / (D R + N Q)      y of d, from θ on:  N_P D_C R / (D R + N Q)

Source: the subdiagonal Padé approximant of the exponential, numerator of degree m - 1, denominator of degree
m (G. A. Baker and P. Graves-Morris, Padé Approximants, 2nd ed., 1996, sec. 1.2, the exponential function).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import factorial

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops, exact_degree, product
from synth.loop.poles.encirclement import delayed_stable
from synth.loop.poles.newton import by_newton, characteristic, upper_half
from synth.loop.poles.roots import closed_roots, rightmost
from synth.loop.poles.share import spaced
from synth.loop.poles.stage import REACH, least_damping, needs_counting
from synth.loop.polynomials import horner
from synth.loop.quantities import Measure
from synth.loop.time.result import TimeStage
from synth.loop.time.stage import time_stage

ORDER = 4
"""Degree of R. On random loops (tests/loop/test_stand_in.py) the median error of every quantity is below 1e-4
and the 95th percentile below 1 %; what is decided early is the worst: rise time, overshoot, load peak."""

TRUSTED = 3.0
"""abs(s) θ up to which a pole of the stand-in is as good as a true one."""

CROWDED = 1e9
"""Crowding of the poles from which on close ones are taken together: seven digits are more than the stand-in
has."""

LADDER: FloatArray = np.pi * np.concatenate([np.arange(1.0, 9.0), 8.0 * 1.25 ** np.arange(1.0, 40.0)])
LAST: FloatArray = np.pi * np.arange(0.0, 4.0)
"""Angles ωθ from which poles of the chain are sought, and how far below the end of the reach."""

SETTLED = 1e-10
"""Relative distance to a true pole from which a seed has arrived."""

LATER = ("settling_time", "peak_time", "tracking_area")
"""Time quantities of y that the dead time itself is added to."""


@dataclass(frozen=True, slots=True)
class StandIns:
    """M loops with dead time and their stand-ins.

    loops, rational : the true ones and theirs; poles : (M, n + ORDER) of the stand-ins, NaN at the end of
    rows of lower order than n.
    """

    loops: Loops
    rational: Loops
    poles: ComplexArray

    @classmethod
    def of(cls, loops: Loops) -> StandIns:
        """Those of `loops`."""
        with np.errstate(all="ignore"):  # a dead time out of all proportion: no poles, and not served
            rational = without_dead_time(loops)
        return cls(loops, rational, closed_roots(rational.closed))

    def rows(self, index: IntArray) -> StandIns:
        """The loops named by `index`."""
        return StandIns(self.loops.rows(index), self.rational.rows(index), self.poles[index])

    def abscissa(self) -> FloatArray:
        """(M,) largest real part of a pole."""
        return rightmost(self.poles)


def worthwhile(loops: Loops) -> BoolArray:
    """(M,) where the stand-in serves: L(∞) = 0, else y jumps anew after every θ, but L not 0 throughout."""
    out: BoolArray = (loops.numerator[:, 0] == 0.0) & loops.numerator.any(axis=1)
    return out


def truly_stable(loops: Loops) -> BoolArray:
    """(M,) whether every pole of the true loops is stable: the exact count, of all orders at once.

    D and N of a lower order are given a root at -1 for each degree they lack, which adds that pole alone.
    """
    lacking = loops.order - exact_degree(loops.denominator)
    numerator, denominator = loops.numerator.copy(), loops.denominator.copy()
    for degree in range(int(lacking.max(initial=0))):
        short = np.flatnonzero(lacking > degree)
        for polynomials in (numerator, denominator):
            some = polynomials[short]
            some[:, :-1] += some[:, 1:]  # p(s) (s + 1)
            polynomials[short] = some
    return delayed_stable(replace(loops, numerator=numerator, denominator=denominator))


def without_dead_time(loops: Loops) -> Loops:
    """The stand-ins of M loops, order n + ORDER, dead time 0. y and the response to d are early by θ."""
    over, under = _approximant(loops.dead_time)
    parts = np.concatenate([loops.numerator, loops.denominator, loops.control, loops.load])
    numerator, denominator, control, load = np.split(product(parts, np.tile(under, (4, 1))), 4)
    return Loops(
        numerator=numerator,
        denominator=denominator,
        control=control,
        load=load,
        closed=denominator + product(loops.numerator, over),
        dead_time=np.zeros(len(loops)),
        time_scale=loops.time_scale,
        plant_gain=loops.plant_gain,
    )


def responses(near: StandIns, measures: tuple[Measure, ...]) -> dict[Measure, FloatArray]:
    """Time-stage measures of M loops by their stand-ins."""
    asked = [m for m in measures if m.row.stage == "time"]
    out: dict[Measure, FloatArray] = {}
    for after in sorted({m.after for m in asked}, reverse=True):
        # 0 rides along with the latest: it is 0 in any unit of time
        some = tuple(m for m in asked if m.after == after or (m.after == 0.0 and m not in out))
        if all(m in out for m in some):
            continue
        stage: TimeStage = time_stage(_counting_from(near, after), near.poles, some, crowded=CROWDED)
        for measure in some:
            value = stage.values[measure]
            out[measure] = value + near.loops.dead_time if measure.quantity in LATER else value
    return out


def _counting_from(near: StandIns, after: float) -> Loops:
    """The stand-ins with their unit of time stretched so that `after` [s], in it, is later by θ in each loop.

    The responses are early by θ, and the time stage turns seconds into scaled time by this unit alone.
    """
    if after == 0.0:
        return near.rational
    unit = near.rational.time_scale
    with np.errstate(divide="ignore"):
        stretch = after / np.maximum(after - near.loops.dead_time * unit, 0.0)
    return replace(near.rational, time_scale=unit * stretch)


def damping(
    near: StandIns, measures: tuple[Measure, ...], highest_fall: FloatArray | None
) -> dict[Measure, FloatArray]:
    """Damping ratios by the rule for loops with dead time: the reach alone counts a pole, its share does not.

    Poles of the stand-in where they are close to the true ones, true ones where the rule reaches further out.
    """
    asked = [m for m in measures if m.quantity == "damping_ratio"]
    out: dict[Measure, FloatArray] = {}
    if not asked:
        return out
    spacing = spaced(near.rational, near.poles)
    size = np.abs(near.poles)
    for measure in asked:
        if not needs_counting(measure):
            assert measure.below is not None
            reach = measure.below * near.loops.time_scale
        else:
            assert highest_fall is not None
            reach = np.where(np.isfinite(highest_fall), REACH * highest_fall, np.inf)
        out[measure] = least_damping(near.rational, near.poles, size <= reach[:, None], spacing)
        far = np.flatnonzero(reach * near.loops.dead_time > TRUSTED)
        if far.size:
            out[measure][far] = _true_damping(near.rows(far), reach[far])
    return out


def _true_damping(near: StandIns, reach: FloatArray) -> FloatArray:
    """Least damping ratio of the true poles found with abs(p) <= reach, (M,); 0, their limit, for an infinite
    reach.

    Newton's method from the poles of the stand-in and from a ladder up the chain, where
    s θ = ln(-N/D)(s) + 2πjk: every half turn to begin with, then ever fewer, and the last that count. Nothing
    proves that none is missing between.
    """
    loops = near.loops
    top = np.where(np.isfinite(reach), reach * loops.dead_time, 0.0)
    rungs = np.minimum(LADDER[LADDER < 2.0 * top.max()], top[:, None])
    angle = np.concatenate([rungs, np.maximum(top[:, None] - LAST, np.pi)], axis=1)
    with np.errstate(all="ignore"):  # seeds that run away end as NaN
        delay = loops.dead_time[:, None]
        chain = 1j * angle / delay
        for _ in range(3):
            size = np.abs(horner(loops.numerator, chain) / horner(loops.denominator, chain))
            chain.real = np.log(size) / delay
        found = by_newton(loops, np.concatenate([upper_half(near.poles), chain], axis=1), reach)
        value, slope = characteristic(loops, found)
        size = np.abs(found)
        counted = (np.abs(value) <= SETTLED * np.abs(slope) * size) & (size <= reach[:, None])
        ratio = np.where(counted, -found.real / size, 1.0).min(axis=1, initial=1.0)
    return np.where(np.isfinite(reach), ratio, 0.0)


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
