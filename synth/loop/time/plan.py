"""Where to look: blocks of cells narrow enough to prove what a cubic says, and no further than needed.

On a cell of width h the cubic through its end values and slopes misses the signal by at most h^4/384 times
the largest fourth derivative (G. Birkhoff, A. Priver, Hermite interpolation errors for derivatives, J. Math.
Phys. 46 (1967)), which the sum of abs(r) abs(p)^4 e^(-sigma t) bounds from t on. The plan makes that error a
small part of the signal, or of its envelope where that is less.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.signals import CELLS, HERMITE, Profile, Signals

TAIL = 0.02
"""Cubic error allowed, relative to the envelope."""

GROWTH = 1.2
"""Growth of the block's length per length."""

SLACK, HOPELESS = 4.0, 1e8
"""Cubic error relative to what is allowed, above which a block is cut, and above which it stays as it is."""


@dataclass(frozen=True, slots=True)
class Plan:
    """P blocks, loop by loop, in order of time.

    loop, t, h  (P,) loop number, start and cell width
    miss        (S, P) cubic error
    first       (A,) number of the first block of each loop that has one
    owner       (A,) those loops
    """

    loop: IntArray
    t: FloatArray
    h: FloatArray
    miss: FloatArray
    first: IntArray
    owner: IntArray


@np.errstate(all="ignore")  # curves that have died away
def reach(profile: Profile, curve: FloatArray, level: FloatArray) -> FloatArray:
    """(M, R) earliest sure time at which decreasing curves (M, R, K) of the profile are <= level (M, R).

    Between two times a log-convex curve is read off the chord of its logarithm, which lies above it. The
    last time where the level is never reached.
    """
    time, below = profile.time, curve <= level[:, :, None]
    below[:, :, -1] = True
    k = below.argmax(axis=2)
    row = np.arange(len(time))[:, None]
    right: FloatArray = time[row, k]
    if not profile.log_convex:
        return right
    before = np.maximum(k - 1, 0)
    column = np.arange(curve.shape[1])
    high, low = curve[row, column, before], curve[row, column, k]
    part = np.log(high / level) / np.log(high / low)
    part = np.where((part >= 0.0) & (part <= 1.0), part, 1.0)
    left = time[row, before]
    out: FloatArray = left + part * (right - left)
    return out


def onset(time: FloatArray, holds: BoolArray) -> FloatArray:
    """(M,) first time from which `holds` (M, K) is true; inf where it is not."""
    return np.where(holds.any(axis=1), time[np.arange(len(time)), holds.argmax(axis=1)], np.inf)


def widths(profile: Profile, ends: FloatArray, allowed: FloatArray) -> FloatArray:
    """(M, K) cell width at each time that the most demanding signal allows; inf where none is looked at any
    more.

    ends (M, S) when each signal has been seen enough; allowed (M, S) cubic error allowed.
    """
    tolerance = np.minimum(allowed[:, :, None], TAIL * profile.envelope)
    width = np.sqrt(np.sqrt(tolerance / (HERMITE * profile.fourth)))
    width[~(profile.time[:, None] < ends[:, :, None])] = np.inf
    out: FloatArray = np.fmin.reduce(width, axis=1)
    return out


@np.errstate(all="ignore")  # signals that are nothing
def blocks(modes: Signals, profile: Profile, ends: FloatArray, allowed: FloatArray, most: int) -> Plan:
    """Blocks from 0 to the last of the ends of each loop, at most `most` a loop (then the plan stops early).

    Where the widths of the table are followed through, one block more is a block's length further. So that a
    steep rise of the width does not run ahead of the block that it happens in, a block may be longer than the
    one before by about GROWTH; what is still too wide is cut.
    """
    time, end = profile.time, ends.max(axis=1)
    m, k = time.shape
    width = widths(profile, ends, allowed)
    slope = GROWTH / CELLS
    width = np.minimum.accumulate(width - slope * time, axis=1) + slope * time
    reached = np.minimum(time, end[:, None])
    rate = (reached[:, 1:] - reached[:, :-1]) / (CELLS * np.sqrt(width[:, :-1] * width[:, 1:]))
    load = np.zeros((m, k))
    np.where(rate >= 0.0, np.minimum(rate, 1e300), 0.0).cumsum(axis=1, out=load[:, 1:])
    total = load[:, -1]
    count = np.where(end > 0.0, np.maximum(np.ceil(total), 1.0), 0.0)
    cut_short = count > most
    count = np.minimum(count, most).astype(np.intp)
    loop = np.arange(m).repeat(count)
    number = np.arange(len(loop)) - (count.cumsum() - count)[loop]
    share = np.where(cut_short, 1.0, total / count)
    # one interpolation for all loops, each loop's curve in a stretch of its own
    base = np.arange(m) * (2.0 * total.max(initial=0.0) + 4.0)
    stop = np.interp(share[loop] * (number + 1) + base[loop], (load + base[:, None]).ravel(), reached.ravel())
    final = ((number + 1 == count[loop]) & ~cut_short[loop]).nonzero()[0]
    stop[final] = end[loop[final]]
    start = np.zeros(len(stop))
    start[1:] = stop[:-1]
    start[number == 0] = 0.0
    return _cut(modes, loop, start, (stop - start) / CELLS, ends, allowed)


def _cut(
    modes: Signals, loop: IntArray, t: FloatArray, h: FloatArray, ends: FloatArray, allowed: FloatArray
) -> Plan:
    """The blocks with the cubic error of each, and those with too much of it cut."""
    fourth, envelope = modes.bounds(loop, t)
    quartic = HERMITE * h**4
    tolerance = np.minimum(allowed[loop].T, TAIL * envelope)
    live = t < ends[loop].T
    excess = np.where(live, fourth * quartic / tolerance, 0.0).max(axis=0)
    many = (excess > SLACK) & (excess < HOPELESS)
    if many.any():
        pieces = np.where(many, np.ceil(np.sqrt(np.sqrt(excess))), 1.0).astype(np.intp)
        block = np.arange(len(loop)).repeat(pieces)
        number = np.arange(len(block)) - (pieces.cumsum() - pieces)[block]
        loop, h, again = loop[block], (h / pieces)[block], many[block].nonzero()[0]
        t = t[block] + number * CELLS * h
        fourth = fourth[:, block]
        fourth[:, again] = modes.bounds(loop[again], t[again])[0]
        quartic = HERMITE * h**4
    fresh = np.ones(len(loop), dtype=bool)
    np.not_equal(loop[1:], loop[:-1], out=fresh[1:])
    first = fresh.nonzero()[0]
    return Plan(loop, t, h, fourth * quartic, first, loop[first])
