"""Stable intervals of the whole gain line with dead time.

On the axis L(jω) must be real. Far out abs(L) is monotone: where it falls, the first crossing of either
sign beyond its last extremum bounds the line (each further one lies at a larger gain and only adds unstable
poles); where it rises to abs(L(∞)), the limit 1 / abs(L(∞)) does. So finitely many crossings decide.
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.closed_loop import Loops, product
from synth.loop.frequency.crossings import loop_at
from synth.loop.frequency.real_axis import real_axis_crossings
from synth.loop.frequency.response import response_of
from synth.loop.poles.crossing_count import squared_on_axis
from synth.loop.poles.encirclement import delayed_stable
from synth.loop.poles.gain_intervals import Interval, intervals_between, without_rounding
from synth.loop.poles.roots import closed_roots

# Phase of the dead time [rad] beyond which crossings are not looked for.
FURTHEST = 2e4


def delayed_intervals(loops: Loops) -> list[tuple[Interval, ...]]:
    """All factors on the gain of each loop that keep it stable; disjoint intervals in order.

    Ends are exact up to rounding, and none is missed (real_axis.py).
    """
    out = []
    for row, gains in enumerate(_edges(loops)):
        one = loops.rows(np.array([row]))
        out.append(intervals_between(gains, partial(_stable_at, one)))
    return out


def _stable_at(one: Loops, gains: FloatArray) -> BoolArray:
    rows = one.rows(np.zeros(len(gains), dtype=np.intp))
    numerator = gains[:, None] * rows.numerator
    return delayed_stable(replace(rows, numerator=numerator, closed=rows.denominator + numerator))


@np.errstate(divide="ignore", invalid="ignore", over="ignore")
def _edges(loops: Loops) -> list[FloatArray]:
    """Gains at which the number of unstable poles of each loop can change."""
    response = response_of(loops)
    last = _last_extremum(loops) * loops.dead_time
    row, w = real_axis_crossings(response, np.minimum(1.001 * last + 3.0 * np.pi, FURTHEST))
    numerator, denominator = loops.numerator, loops.denominator
    limit = np.abs(denominator[:, 0] / numerator[:, 0])  # inf where L(∞) = 0
    rows = np.arange(len(loops))
    row = np.concatenate([row, rows])
    gains = np.concatenate(
        [(-1.0 / loop_at(response, row[: len(w)], w)).real, -denominator[:, -1] / numerator[:, -1]]
    )
    use = np.isfinite(gains) & (np.abs(gains) < limit[row])
    ends = np.isfinite(limit)
    row = np.concatenate([row[use], rows[ends], rows[ends]])
    gains = np.concatenate([gains[use], -limit[ends], limit[ends]])
    return [0.0 + gains[row == one] for one in rows]


def _last_extremum(loops: Loops) -> FloatArray:
    """(M,) the largest ω at which abs(L) can have an extremum, with room; 0 where there is none."""
    top, bottom = squared_on_axis(loops.numerator), squared_on_axis(loops.denominator)
    powers = np.arange(top.shape[1] - 1, 0, -1)
    if len(powers) == 0:
        return np.zeros(len(loops))
    rise, fall = product(top[:, :-1] * powers, bottom), product(top, bottom[:, :-1] * powers)
    roots = closed_roots(without_rounding(rise - fall, np.abs(rise) + np.abs(fall)))
    out: FloatArray = np.sqrt(np.nan_to_num(np.abs(roots)).max(axis=1, initial=0.0))
    return out
