"""Frequency quantities of loops with dead time, exactly: L = N/D e^(-jωθ), rotated, never approximated.

Gain crossovers do not feel the dead time and stay roots of a polynomial. Everything else is read between
nodes that resolve the loop: L is smooth between them, so what is sought there is a sign change or the turning
point of a smooth function, refined by Newton's method on the exact expression. The nodes are
  - logarithmic up to an angle ωθ of 2 rad, then a quarter of a radian apart; one list for all loops;
  - crowded round every lightly damped root of N, D and the control path, found in Bernstein form;
  - continued downwards to below the smallest root, and upwards for as long as anything can still change an
    answer.

The upper end: |S| <= 1/(1 - |L|), |T| <= |L|/(1 - |L|), |C S| <= |C|/(1 - |L|), and a gain margin is |L|; so
beyond the frequency where all bounds stay under what has been found there is nothing left to find.

Letters: M loops, G nodes, F crossings or humps.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.frequency.crossings import (
    FALL,
    PHASE,
    Crossings,
    fall_level,
    gain_frequencies,
    loop_at,
    newton,
)
from synth.loop.frequency.isolation import isolate
from synth.loop.frequency.nodes import HIGH, SHARED, STEP, further_nodes, zone_nodes
from synth.loop.frequency.peaks import CURVES, climb
from synth.loop.frequency.response import (
    CLOSED,
    CONTROL,
    D,
    N,
    Response,
    evaluate,
    log_rates,
    polynomial,
    tamed,
)
from synth.loop.frequency.samples import (
    Samples,
    fall_brackets,
    humps,
    phase_brackets,
    phase_turns,
    sample,
    sample_shared,
)

_LIGHT = 0.3  # damping below which a closed-loop pole is a resonance
_BLOCK = 200_000  # nodes, times loops, looked at in one go
_FARTHEST = 20_000.0  # rad: where the search for ever smaller ripples ends
_TOUCH = 1e-13  # arg(-L) that rounding cannot tell from zero
_SPAN = 20  # octaves of x, times three, over which the bound of |C S| is followed upwards


class _Findings:
    """What has been found so far, and what could still be."""

    def __init__(self, response: Response, kinds: tuple[int, ...], keys: tuple[str, ...]) -> None:
        self.response, self.kinds, self.keys = response, kinds, keys
        self.level = fall_level(response)
        self.m = response.loops
        self.found: list[Crossings] = []
        self.at = np.zeros((len(keys), self.m))
        ends = np.abs(response.ends)
        gain = ends[1, N] / ends[1, D]
        with np.errstate(divide="ignore"):
            largest = 1.0 / np.maximum(1.0 - gain, 0.0)
        self.best = np.array(
            [
                np.maximum(
                    ends[0, CURVES[k]] / np.abs(response.ends[0, CLOSED]),
                    ends[1, CURVES[k]] / ends[1, D] * largest,
                )
                for k in keys
            ]
        ).reshape(len(keys), self.m)
        self.largest_up = gain.copy()  # |L| of the nearest crossing below 1; the circle |L(∞)| is one
        self.gain_end = gain

    def upper_end(self) -> FloatArray:
        """(M,) frequency above which |L| is so small that nothing found can be bettered; 0 where that is
        everywhere.

        The highest root of a polynomial, |N|² = g² |D|², with the g that each answer allows. noise_gain is
        left with a tenth: what ripples above that is looked for by `envelope_top`.
        """
        limits = []
        for i, key in enumerate(self.keys):
            if key == "sensitivity_peak":
                limits.append(1.0 - 1.0 / np.maximum(self.best[i], 1.0))
            elif key == "complementary_peak":
                limits.append(self.best[i] / (1.0 + self.best[i]))
            else:
                limits.append(np.full(self.m, 0.1))
        if PHASE in self.kinds:
            limits.append(self.largest_up)
        if not limits:
            return np.zeros(self.m)
        # a limit that |L| only tends to is passed for ever: the circle |L(∞)| itself is among the findings
        limit = np.maximum(np.min(limits, axis=0), self.gain_end) * (1.0 + 1e-9)
        out = np.zeros(self.m)
        brackets = isolate(limit * limit * self.response.squares[:, D] - self.response.squares[:, N])
        np.maximum.at(out, brackets.row, np.sqrt(brackets.high))
        out[limit == 0.0] = np.inf  # no crossing of the negative axis so far
        return out

    def fall_zone(self) -> tuple[FloatArray, FloatArray]:
        """(M,) lowest and highest ω above the shared nodes where |T| may pass the level; an empty range is
        (inf, 0).

        |T| lies between |L|/(1 + |L|) and |L|/(1 - |L|), so |L| lies between s/(1 + s) and s/(1 - s) where it
        passes.
        """
        size = np.sqrt(self.level)
        low, high = size / (1.0 + size), np.where(size < 1.0, size / np.maximum(1.0 - size, 1e-300), 0.0)
        floor = HIGH / self.response.dead_time
        first, last = np.full(self.m, np.inf), np.zeros(self.m)
        for limit in (low * (1.0 - 1e-9), high * (1.0 + 1e-9)):
            row, edge = gain_frequencies(self.response, limit)
            row, edge = row[edge > floor[row]], edge[edge > floor[row]]
            np.minimum.at(first, row, edge)
            np.maximum.at(last, row, edge)
        n_at, d_at = (_magnitude(self.response, p, floor) for p in (N, D))
        inside = (n_at > low * d_at) & ((n_at < high * d_at) | (high == 0.0)) & (low > 0.0)
        first[inside] = floor[inside]
        # a passage that recurs has no last; the first of them is not far
        gain = self.gain_end
        recurring = (gain > low) & ((gain < high) | (high == 0.0)) & (low > 0.0)
        first[recurring] = np.minimum(first, np.maximum(floor, last))[recurring]
        last[recurring] = np.maximum(last, first + 64.0 / self.response.dead_time)[recurring]
        return first, last

    def envelope_top(self, above: FloatArray) -> tuple[IntArray, FloatArray]:
        """(rows, ω) where |C|/(1 - |L|), which bounds |C S|, is largest above `above` [ω] and exceeds what is
        known.

        It is smooth, and |C S| touches it once a turn: no more than the turns beside its top need a look.
        """
        i = self.keys.index("noise_gain")
        # the bound at the frequency from which on it is asked for, then at every octave of x above
        x = above * above * 2.0 ** np.arange(0.0, 3 * _SPAN)[:, None]
        bound = self._noise_bound(x, np.arange(self.m))
        top = bound.argmax(axis=0)
        rows = np.flatnonzero(bound[top, np.arange(self.m)] > self.best[i] * (1.0 + 1e-8))
        if not rows.size:
            return rows, np.empty(0)
        centre, width = x[top[rows], rows], 1.0
        for _ in range(3):
            near = centre * 2.0 ** (width * np.linspace(-1.0, 1.0, 33))[:, None]
            near = np.maximum(near, above[rows] ** 2)
            centre = near[self._noise_bound(near, rows).argmax(axis=0), np.arange(len(rows))]
            width /= 16.0
        return rows, np.sqrt(centre)

    def _noise_bound(self, x: FloatArray, rows: IntArray) -> FloatArray:
        """|C|/(1 - |L|) at x (G, rows); 0 where |L| >= 1."""
        squares = self.response.squares
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            n2, d2, c2 = (polynomial(squares[:, p, rows], x) for p in (N, D, CONTROL))
            rest = np.sqrt(d2) - np.sqrt(n2)
            bound: FloatArray = np.where(rest > 0.0, np.sqrt(c2) / rest, 0.0)
        return np.where(np.isfinite(bound), bound, 0.0)

    def climb_resonances(self, poles: ComplexArray) -> None:
        """Start at every lightly damped closed-loop pole that is known, (M, q) padded with NaN."""
        with np.errstate(invalid="ignore"):
            row, place = np.nonzero((poles.imag > 0.0) & (-poles.real < _LIGHT * poles.imag))
        w = poles.imag[row, place]
        for i, key in enumerate(self.keys if row.size else ()):
            curve = np.full(len(row), CURVES[key], dtype=np.intp)
            around = (w / 1.2, w, w * 1.2)
            climb(_DelayedCurve(self.response, curve, row), row, around, self.best[i], self.at[i])

    def read(self, s: Samples, rows: IntArray) -> None:
        """Take in what lies between the nodes of loops `rows` (columns of `s`)."""
        for i, key in enumerate(self.keys):
            top = {"sensitivity_peak": s.denominator, "complementary_peak": s.numerator}.get(key, s.control)
            assert top is not None
            row, around, value = humps(s, top, self.best[i, rows])
            row = rows[row]
            np.maximum.at(self.best[i], row, value)
            curve = np.full(len(row), CURVES[key], dtype=np.intp)
            climb(_DelayedCurve(self.response, curve, row), row, around, self.best[i], self.at[i])
        if PHASE in self.kinds:
            row, low, high, negative = phase_brackets(s)
            self._refine(PHASE, rows[row], low, high, negative)
            row, low, high, negative = phase_turns(s)
            self._phase_turning(rows[row], low, high, negative)
        if FALL in self.kinds:
            self.read_falls(s, rows)

    def read_falls(self, s: Samples, rows: IntArray) -> None:
        """The passages of |T| through its level alone."""
        (row, low, high, negative), (turn_row, turn) = fall_brackets(s, self.level[rows])
        self._refine(FALL, rows[row], low, high, negative)
        if turn_row.size:
            self._turning(s, rows, turn_row, turn)

    def _turning(self, s: Samples, rows: IntArray, column: IntArray, w: FloatArray) -> None:
        """A closer look, at 32 nodes round each point, where |T| may touch the level between two nodes."""
        index = (s.w[:, column] < w * (1.0 - 1e-12)).sum(axis=0)
        low = s.w[np.maximum(index - 1, 0), column]
        high = s.w[np.minimum(index + 1, len(s.w) - 1), column]
        nodes = low + (high - low) * np.linspace(0.0, 1.0, 33)[:, None]
        close = sample(self.response.rows(rows[column]), nodes, control=False)
        (row, a, b, negative), _ = fall_brackets(close, self.level[rows[column]])
        self._refine(FALL, rows[column][row], a, b, negative)

    def _phase_turning(self, row: IntArray, low: FloatArray, high: FloatArray, negative: BoolArray) -> None:
        """The two crossings of the negative axis either side of a point where arg(-L) turns back, if it does
        so beyond the axis; where rounding does not tell, the point itself counts as one.
        """
        if not row.size:
            return
        u, turns = newton(_Turning(self.response, row), np.log(low), np.log(high), negative)
        row, low, high, negative, w = row[turns], low[turns], high[turns], negative[turns], np.exp(u[turns])
        loop = loop_at(self.response, row, w)
        sine = loop.imag / np.abs(loop)
        beyond = ((sine < 0.0) != negative) & (loop.real < 0.0)
        two = beyond & (low < w) & (w < high)
        low, high, middle, before = low[two], high[two], w[two], negative[two]
        self._refine(PHASE, row[two], low, middle, before)
        self._refine(PHASE, row[two], middle, high, ~before)
        self._take(PHASE, np.flatnonzero((np.abs(sine) <= _TOUCH) & (loop.real < 0.0)), row, w, negative)

    def _refine(
        self, kind: int, row: IntArray, low: FloatArray, high: FloatArray, negative: BoolArray
    ) -> None:
        if not row.size:
            return
        equation = _Delayed(self.response, kind, row, self.level)
        with np.errstate(divide="ignore"):
            bottom = np.maximum(np.log(low), np.log(high) - 50.0)
        u, holds = newton(equation, bottom, np.log(high), negative)
        self._take(kind, np.flatnonzero(holds), row, np.exp(u), negative)

    def _take(self, kind: int, index: IntArray, row: IntArray, w: FloatArray, down: BoolArray) -> None:
        """Note the crossings named by `index`."""
        if not index.size:
            return
        row, w, down = row[index], w[index], down[index]
        kinds = np.full(len(row), kind, dtype=np.intp)
        found = Crossings(kinds, row, w, down, loop_at(self.response, row, w))
        self.found.append(found)
        if kind == PHASE:
            size = np.where(found.loop.real < 0.0, -found.loop.real, 0.0)
            below = size <= 1.0
            np.maximum.at(self.largest_up, row[below], size[below])


def _magnitude(response: Response, polynomial: int, w: FloatArray) -> FloatArray:
    row = np.arange(response.loops)
    re, im = evaluate(response.columns(polynomial, row, 0), w)
    out: FloatArray = np.hypot(re[0], im[0])
    return out


class _Delayed:
    """The angle of -L nearest to zero, or ln|T|² less its level, with dead time."""

    def __init__(self, response: Response, kind: int, row: IntArray, level: FloatArray) -> None:
        self.columns = np.stack((response.columns(N, row, 1), response.columns(D, row, 1)), axis=3)
        self.delay = response.dead_time[row]
        self.phase = kind == PHASE
        self.offset = np.log(level[row]) if kind == FALL else np.zeros(len(row))

    def keep(self, index: IntArray) -> None:
        self.columns, self.delay, self.offset = (
            self.columns[..., index],
            self.delay[index],
            self.offset[index],
        )

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        w = np.exp(u)
        re, im = tamed(*evaluate(self.columns, w))
        angle = w * self.delay
        if self.phase:
            _, _, turn = log_rates(re, im)
            cosine = re[0, 0] * re[0, 1] + im[0, 0] * im[0, 1]
            sine = im[0, 0] * re[0, 1] - re[0, 0] * im[0, 1]
            x = cosine * np.cos(angle) + sine * np.sin(angle)
            y = sine * np.cos(angle) - cosine * np.sin(angle)
            return np.arctan2(-y, -x), turn[0] - turn[1] - angle, -y
        rotated = (re[:, 0] + 1j * im[:, 0]) * np.exp(-1j * angle)
        rotated[1] -= 1j * angle * rotated[0]
        value = np.stack((rotated, rotated + re[:, 1] + 1j * im[:, 1]), axis=1)
        size, rate, _ = log_rates(value.real, value.imag)
        with np.errstate(divide="ignore"):
            excess = np.log(size[0] / size[1]) - self.offset
        return excess, 2.0 * (rate[0] - rate[1]), excess


class _Turning:
    """The slope of arg L in ln ω, zero where the phase turns back."""

    def __init__(self, response: Response, row: IntArray) -> None:
        self.columns = np.stack((response.columns(N, row, 2), response.columns(D, row, 2)), axis=3)
        self.delay = response.dead_time[row]

    def keep(self, index: IntArray) -> None:
        self.columns, self.delay = self.columns[..., index], self.delay[index]

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        w = np.exp(u)
        re, im = tamed(*evaluate(self.columns, w))
        size, rate, turn = log_rates(re, im)
        with np.errstate(divide="ignore", invalid="ignore"):
            bend = (im[2] * re[0] - re[2] * im[0]) / size - 2.0 * rate * turn
        slope = turn[0] - turn[1] - w * self.delay
        return slope, bend[0] - bend[1] - w * self.delay, -slope


class _DelayedCurve:
    """P and Δ = D + N e^(-jωθ) with two derivatives in ln ω."""

    def __init__(self, response: Response, curve: IntArray, row: IntArray) -> None:
        self.columns = np.stack([response.columns(p, row, 2) for p in (curve, N, D)], axis=3)
        self.delay = response.dead_time[row]

    def keep(self, index: IntArray) -> None:
        self.columns, self.delay = self.columns[..., index], self.delay[index]

    def at(self, w: FloatArray) -> tuple[FloatArray, FloatArray]:
        re, im = evaluate(self.columns, w)
        angle = 1j * w * self.delay
        n = (re[:, 1] + 1j * im[:, 1]) * np.exp(-angle)
        n[2] += angle * (angle * n[0] - 2.0 * n[1] - n[0])
        n[1] -= angle * n[0]
        closed = n + re[:, 2] + 1j * im[:, 2]
        return np.stack((re[:, 0], closed.real), axis=1), np.stack((im[:, 0], closed.imag), axis=1)


def delayed_quantities(
    response: Response, poles: ComplexArray, kinds: tuple[int, ...], keys: tuple[str, ...]
) -> tuple[list[Crossings], dict[str, FloatArray], BoolArray]:
    """FALL and PHASE crossings that matter, suprema of the curves in `keys`, and whether falls recur for
    ever.

    response : M stable loops, every dead time positive. Crossings beyond the frequency where they could be
        the
    nearest are left out; a crossing may be listed twice.
    """
    findings = _Findings(response, kinds, keys)
    control = "noise_gain" in keys
    everyone = np.arange(response.loops)
    findings.climb_resonances(poles)
    findings.read(sample_shared(response, SHARED, control=control), everyone)
    zone = (
        findings.fall_zone() if FALL in kinds else (np.full(response.loops, np.inf), np.zeros(response.loops))
    )
    end = np.maximum(np.maximum(findings.upper_end(), zone[1]), HIGH / response.dead_time)
    for rows, nodes in further_nodes(response, control, end):
        findings.read(sample(response.rows(rows), nodes, control=control), rows)
    high = np.full(response.loops, HIGH)
    while True:
        end = np.minimum(findings.upper_end() * response.dead_time, _FARTHEST)
        rows = np.flatnonzero(end > high)
        if not rows.size:
            break
        start = high[rows].min()
        rows = rows[high[rows] < 1.5 * start]
        reach = min(float(end[rows].max()), 4.0 * start)
        piece = max(64, _BLOCK // len(rows)) * STEP
        for low in np.arange(start, reach, piece):
            angles = np.arange(low - 2.0 * STEP, min(low + piece, reach) + STEP, STEP)
            findings.read(sample_shared(response.rows(rows), angles, control=control), rows)
        high[rows] = reach
    if FALL in kinds:
        for rows, nodes in zone_nodes(zone[0], zone[1], response.dead_time):
            findings.read_falls(sample(response.rows(rows), nodes, control=False), rows)
    if control:
        rows, top = findings.envelope_top(high / response.dead_time)
        if rows.size:
            centre = top * response.dead_time[rows]
            angles = np.maximum(centre + np.arange(-13.0, 13.0, STEP)[:, None], 1e-3)
            findings.read(sample(response.rows(rows), angles / response.dead_time[rows], control=True), rows)
    gain, size = np.abs(response.ends[1, N] / response.ends[1, D]), np.sqrt(findings.level)
    with np.errstate(divide="ignore"):
        recurring = (gain / np.maximum(1.0 - gain, 0.0) > size) & (size > gain / (1.0 + gain)) & (gain > 0.0)
    return findings.found, {k: findings.best[i] for i, k in enumerate(keys)}, recurring
