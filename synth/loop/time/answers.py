"""From modes to answers: a plan, one pass over its blocks, the proof of what is left, and the long ones from
their end.

A lightly damped loop takes thousands of blocks to die away. Its plan stops after LONG of them: what comes
first has been seen by then, a last exit is looked for backwards from where the envelope meets the band, and
an area's tail is that of the slowest mode.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.time.outlook import RESOLUTION
from synth.loop.time.plan import TAIL, Plan, blocks
from synth.loop.time.questions import Answers, Area, Passage, Questions, Supremum
from synth.loop.time.scan import scan
from synth.loop.time.signals import CELLS, HERMITE, Signals
from synth.loop.time.survey import Survey

FINE = 5e-3
"""Cubic error allowed in a cell, relative to the size of the signal. Cells that matter are split further."""

PASS_BLOCKS = 2500
"""Blocks handled at once, so that a pass stays in cache."""

LONG = 128
"""Blocks after which a plan stops."""

WINDOW = 24
"""Blocks of the first window in which a last exit is looked for."""

MOST = 8192
"""Blocks that such a window may grow to."""

AREA_ERROR = 1e-5
"""Relative error bound above which more blocks are spent on an area, and above which it is flagged."""

AREA_MOST, AT_ONCE = 1024, 64
"""Those blocks, and the loops that are given them at once."""

SEGMENTS = 32
"""Stretches of LONG blocks that a supremum or a first passage is followed over before it is given up as
unproven.
"""


def answer(modes: Signals, unit: FloatArray, asked: Questions, segments: int = SEGMENTS) -> Answers:
    """Answer the questions for every loop.

    unit : (M, S) a size of each signal that is known beforehand (its value at 0+ or at infinity), or 0.
    """
    found = _direct(modes, unit, asked, LONG)
    if np.isinf(found.seen).all():
        return found
    for w, q in enumerate(asked.suprema):
        rows = np.flatnonzero(found.supremum_ends[w] > found.seen)
        if rows.size:
            _follow_supremum(modes, unit, found, w, q, rows, segments)
    for k, r in enumerate(asked.areas):
        _go_on_with_area(modes, unit, found, k, r)
    for v, p in enumerate(asked.passages):
        rows = np.flatnonzero(found.passage_ends[v] > found.seen)
        if rows.size == 0:
            continue
        if p.last:
            time, open_ = _last_passage(modes, p, rows, found.seen[rows], found.passage_ends[v][rows])
            later = (time > found.seen[rows]) | open_
            found.passages[v][rows[later]], found.open_passages[v][rows] = time[later], open_
        else:
            _follow_passage(modes, unit, found, v, p, rows[np.isinf(found.passages[v][rows])], segments)
    return found


def _direct(modes: Signals, unit: FloatArray, asked: Questions, most: int) -> Answers:
    """Answers as far as `most` blocks a loop reach."""
    floor = np.maximum(RESOLUTION * unit, 1e-13 * modes.largest()) + 1e-300
    profile = modes.profile(floor, bool(asked.areas))
    unit = np.maximum(unit, np.abs(profile.deviation).max(axis=2)) + 1e-300
    survey = Survey(modes, profile, unit, asked)
    plan = blocks(modes, profile, survey.outlook.ends, FINE * unit, most)
    for a, b in _passes(plan):
        low = plan.first[a]
        high = plan.first[b] if b < len(plan.first) else len(plan.loop)
        part = slice(low, high)
        place = plan.loop[part], plan.t[part], plan.h[part], plan.miss[:, part]
        survey.look(scan(modes, plan.owner[a:b], plan.first[a:b] - low, *place))
    return survey.finish(plan)


def _passes(plan: Plan) -> list[tuple[int, int]]:
    """Stretches of whole loops with about PASS_BLOCKS blocks each."""
    out, start = [], 0
    while start < len(plan.owner):
        stop = int(np.searchsorted(plan.first, plan.first[start] + PASS_BLOCKS))
        stop = max(stop, start + 1)
        out.append((start, stop))
        start = stop
    return out


def _go_on_with_area(modes: Signals, unit: FloatArray, found: Answers, k: int, r: Area) -> None:
    """More blocks for the loops whose tail is not that of one mode."""
    rows = np.flatnonzero(found.doubts[k] > AREA_ERROR)
    for some in np.split(rows, range(AT_ONCE, len(rows), AT_ONCE)):
        if some.size:
            part = _direct(modes.rows(some), unit[some], Questions(areas=[r]), AREA_MOST)
            found.areas[k][some], found.doubts[k][some] = part.areas[0], part.doubts[0]


def _follow_supremum(
    modes: Signals,
    unit: FloatArray,
    found: Answers,
    w: int,
    q: Supremum,
    rows: IntArray,
    segments: int,
) -> None:
    """Go on from where the plan stopped, for the loops whose envelope still allows more."""
    seen, best = found.seen[rows], found.suprema[w][rows]
    if q.since is not None:
        seen = np.maximum(seen, q.since[rows])
    top = np.maximum.reduce([sign * q.offset[rows] for sign in q.signs])
    envelope = modes.bounds(rows, seen)[1][q.signal]
    more = envelope + top > best + RESOLUTION * unit[rows, q.signal]
    rows, seen, best = rows[more], seen[more], best[more]
    if segments == 0:
        found.open_suprema[w][rows] = True
    if segments == 0 or rows.size == 0:
        return
    later = modes.rows(rows).later([q.signal], seen)
    on = Supremum(0, q.signs, q.offset[rows], best)
    part = answer(later, unit[rows][:, [q.signal]], Questions(suprema=[on]), segments - 1)
    found.open_suprema[w][rows] = part.open_suprema[0]
    higher = part.suprema[0] > best
    found.suprema[w][rows] = part.suprema[0]
    found.times[w][rows[higher]] = (seen + part.times[0])[higher]


def _follow_passage(
    modes: Signals,
    unit: FloatArray,
    found: Answers,
    v: int,
    p: Passage,
    rows: IntArray,
    segments: int,
) -> None:
    """Go on from where the plan stopped, for the loops that have not arrived yet."""
    if segments == 0:
        found.open_passages[v][rows] = True
    if segments == 0 or rows.size == 0:
        return
    seen = found.seen[rows]
    later = modes.rows(rows).later([p.signal], seen)
    on = Passage(0, p.low, p.high, False)
    part = answer(later, unit[rows][:, [p.signal]], Questions(passages=[on]), segments - 1)
    found.passages[v][rows] = seen + part.passages[0]
    found.open_passages[v][rows] = part.open_passages[0]


def _last_passage(
    modes: Signals, p: Passage, rows: IntArray, seen: FloatArray, end: FloatArray
) -> tuple[FloatArray, BoolArray]:
    """Last time outside, looked for in windows that reach further and further back from `end`, to `seen`,
    (A,) each; `seen` where there is none.

    Also returns where a window took more blocks than are allowed, so that its end was not seen.
    """
    out, open_ = seen.copy(), np.zeros(len(rows), dtype=bool)
    fourth, envelope = modes.bounds(rows, end)
    width = np.sqrt(np.sqrt(TAIL * envelope[p.signal] / (HERMITE * fourth[p.signal])))
    window = np.where(np.isfinite(width), WINDOW * CELLS * width, end)
    pending = np.arange(len(rows))
    on = Questions(passages=[Passage(0, p.low, p.high, True)])
    while pending.size:
        start = np.maximum(end[pending] - window[pending], seen[pending])
        later = modes.rows(rows[pending]).later([p.signal], start)
        part = _direct(later, np.zeros((len(pending), 1)), on, MOST)
        out[pending] = start + part.passages[0]
        open_[pending] = part.passage_ends[0] > part.seen
        again = (part.passages[0] == 0.0) & (start > seen[pending]) & ~open_[pending]
        pending = pending[again]
        window[pending] *= 4.0
    return out, open_
