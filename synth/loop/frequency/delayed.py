"""Frequency quantities of loops with dead time, exactly: L = N/D e^(-jωθ), rotated, never approximated.

Gain crossovers do not feel the dead time and stay roots of a polynomial. Everything else is read between nodes that
resolve the loop: L is smooth between them, so what is sought there is a sign change or the turning point of a smooth
function, refined by Newton's method on the exact expression. The nodes are
  - logarithmic up to an angle ωθ of 2 rad, then a quarter of a radian apart; one list for all loops;
  - crowded round every lightly damped root of N, D and the control path, found in Bernstein form;
  - continued downwards to below the smallest root, and upwards for as long as anything can still change an answer.

The upper end: |S| <= 1/(1 - |L|), |T| <= |L|/(1 - |L|), |C S| <= |C|/(1 - |L|), and a gain margin is |L|; so beyond the
frequency where all bounds stay under what has been found there is nothing left to find.

Letters: M loops, G nodes, F crossings or humps.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.crossings import FALL, PHASE, Crossings, fall_level, loop_at, newton
from synth.loop.frequency.isolation import isolate, light_roots
from synth.loop.frequency.peaks import CURVES, climb
from synth.loop.frequency.response import CLOSED, CONTROL, D, N, Response, evaluate, log_rates
from synth.loop.frequency.samples import (
    Samples,
    fall_brackets,
    humps,
    phase_brackets,
    sample,
    sample_shared,
)

_PER_OCTAVE = 6
_STEP = 0.25  # rad
_LOW, _BEND, _HIGH = 2.0**-14, 2.0, 8.0  # angles of the shared nodes: logarithmic, then linear
_FARTHEST = 2000.0  # rad: where the search for ever smaller ripples ends
_SHARED = np.concatenate(
    (
        _BEND * 2.0 ** (-np.arange(_PER_OCTAVE * 15, 0, -1) / _PER_OCTAVE),
        np.arange(_BEND, _HIGH + _STEP / 2, _STEP),
    )
)
_WINDOW = 128.0  # rad at either end of a long range of falls
_SPAN = 20  # octaves of x below and, twice, above 1 in the table of the bound of |C S|


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
                    ends[0, CURVES[k]] / np.abs(response.ends[0, CLOSED]), ends[1, CURVES[k]] / ends[1, D] * largest
                )
                for k in keys
            ]
        ).reshape(len(keys), self.m)
        self.largest_up = gain  # |L| of the nearest crossing below 1; the circle |L(∞)| is one
        self.gain_end = gain

    def upper_end(self) -> FloatArray:
        """(M,) frequency above which |L| is so small that nothing found can be bettered; 0 where that is everywhere.

        The highest root of a polynomial, |N|² = g² |D|², with the g that each answer allows. noise_gain is left with
        a tenth: what ripples above that is looked for by `envelope_top`.
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
        """(M,) lowest and highest ω above the shared nodes where |T| may pass the level; an empty range is (inf, 0).

        |T| lies between |L|/(1 + |L|) and |L|/(1 - |L|), so |L| lies between s/(1 + s) and s/(1 - s) where it passes.
        """
        size = np.sqrt(self.level)
        low, high = size / (1.0 + size), np.where(size < 1.0, size / np.maximum(1.0 - size, 1e-300), 0.0)
        squares, m = self.response.squares, self.m
        limits = ((low * 0.999, low > 0.0), (high * 1.001, high > 0.0))
        polynomials = [(g * g * squares[:, D] - squares[:, N]) * keep for g, keep in limits]
        brackets = isolate(np.concatenate(polynomials, axis=1))
        floor = _HIGH / self.response.dead_time
        row, edge, start = brackets.row % m, np.sqrt(brackets.high), np.sqrt(brackets.low)
        beyond = edge > floor[row]
        first, last = np.full(m, np.inf), np.zeros(m)
        np.minimum.at(first, row[beyond], np.maximum(start, floor[row])[beyond])
        np.maximum.at(last, row[beyond], edge[beyond])
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
        """(rows, ω) where |C|/(1 - |L|), which bounds |C S|, is largest above `above` [ω] and exceeds what is known.

        It is smooth, and |C S| touches it once a turn: no more than the turns beside its top need a look.
        """
        i = self.keys.index("noise_gain")
        x = 2.0 ** np.arange(-_SPAN, 2 * _SPAN + 1.0)
        powers = x[:, None] ** np.arange(len(self.response.squares))[None, :]
        squares = self.response.squares
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            inverse = 1.0 / (powers @ squares[:, D])
            gain = np.sqrt((powers @ squares[:, N]) * inverse)
            bound = np.sqrt((powers @ squares[:, CONTROL]) * inverse) / np.maximum(1.0 - gain, 1e-300)
        w = np.sqrt(x)
        bound = np.where((w[:, None] > above) & (gain < 1.0) & np.isfinite(bound), bound, 0.0)
        top = bound.argmax(axis=0)
        rows = np.flatnonzero(bound[top, np.arange(self.m)] > self.best[i] * (1.0 + 1e-8))
        return rows, w[top[rows]]

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

    def _refine(self, kind: int, row: IntArray, low: FloatArray, high: FloatArray, negative: BoolArray) -> None:
        if not row.size:
            return
        equation = _Delayed(self.response, kind, row, self.level)
        with np.errstate(divide="ignore"):
            bottom = np.maximum(np.log(low), np.log(high) - 50.0)
        w = np.exp(newton(equation, bottom, np.log(high), negative))
        found = Crossings(np.full(len(row), kind, dtype=np.intp), row, w, negative, loop_at(self.response, row, w))
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
        self.columns, self.delay, self.offset = self.columns[..., index], self.delay[index], self.offset[index]

    def at(self, u: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        w = np.exp(u)
        re, im = evaluate(self.columns, w)
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
    response: Response, kinds: tuple[int, ...], keys: tuple[str, ...]
) -> tuple[list[Crossings], dict[str, FloatArray], BoolArray]:
    """FALL and PHASE crossings that matter, suprema of the curves in `keys`, and whether falls recur for ever.

    response : M stable loops, every dead time positive. Crossings beyond the frequency where they could be the
    nearest are left out; a crossing may be listed twice.
    """
    findings = _Findings(response, kinds, keys)
    control = "noise_gain" in keys
    everyone = np.arange(response.loops)
    findings.read(sample_shared(response, _SHARED, control=control), everyone)
    zone = findings.fall_zone() if FALL in kinds else (np.full(response.loops, np.inf), np.zeros(response.loops))
    end = np.maximum(np.maximum(findings.upper_end(), zone[1]), _HIGH / response.dead_time)
    for rows, nodes in _further_nodes(response, control, end):
        findings.read(sample(response.rows(rows), nodes, control=control), rows)
    high = np.full(response.loops, _HIGH)
    while True:
        end = np.minimum(findings.upper_end() * response.dead_time, _FARTHEST)
        rows = np.flatnonzero(end > high)
        if not rows.size:
            break
        start = high[rows].min()
        rows = rows[high[rows] < 1.5 * start]
        reach = min(float(end[rows].max()), 4.0 * start)
        angles = np.arange(start - 2.0 * _STEP, reach + _STEP, _STEP)
        findings.read(sample_shared(response.rows(rows), angles, control=control), rows)
        high[rows] = reach
    if FALL in kinds:
        for rows, nodes in _zone_nodes(*zone, response.dead_time):
            findings.read_falls(sample(response.rows(rows), nodes, control=False), rows)
    if control:
        rows, top = findings.envelope_top(high / response.dead_time)
        if rows.size:
            centre = top * response.dead_time[rows]
            angles = np.maximum(centre + np.arange(-13.0, 13.0, _STEP)[:, None], 1e-3)
            findings.read(sample(response.rows(rows), angles / response.dead_time[rows], control=True), rows)
    gain, size = np.abs(response.ends[1, N] / response.ends[1, D]), np.sqrt(findings.level)
    with np.errstate(divide="ignore"):
        recurring = (gain / np.maximum(1.0 - gain, 0.0) > size) & (size > gain / (1.0 + gain)) & (gain > 0.0)
    return findings.found, {k: findings.best[i] for i, k in enumerate(keys)}, recurring


def _zone_nodes(
    first: FloatArray, last: FloatArray, delay: FloatArray
) -> Iterator[tuple[IntArray, FloatArray]]:
    """Nodes a quarter of a radian apart from `first` to `last` [ω], both (M,): (rows, ω (G, rows)), rows repeated.

    Of a long range its two ends: the lowest passage lies within a turn of the first edge where |L| falls steadily,
    the highest within a turn of the last.
    """
    row = np.flatnonzero(first < last)
    low, high = first[row] * delay[row], last[row] * delay[row]
    long = high - low > 2.0 * _WINDOW
    start = np.concatenate((low, high[long] - _WINDOW))
    stop = np.concatenate((np.where(long, low + _WINDOW, high), high[long]))
    row = np.concatenate((row, row[long]))
    count = np.ceil((stop - start) / _STEP).astype(np.intp) + 4
    for group in _alike(count):
        steps = np.minimum(np.arange(-2, count[group].max())[:, None], count[group])
        angles = np.maximum(start[group] + _STEP * steps, 1e-6)
        yield row[group], angles / delay[row[group]]


def _further_nodes(
    response: Response, control: bool, end: FloatArray
) -> Iterator[tuple[IntArray, FloatArray]]:
    """Nodes below the shared list, for slow loops, and round lightly damped roots up to `end`: (rows, ω (G, rows))."""
    with np.errstate(divide="ignore"):
        depth = np.ceil(np.log2(_SHARED[0] / (_slowest(response) * response.dead_time)) * _PER_OCTAVE)
    rows = np.flatnonzero(depth > 0)
    if rows.size:
        count = int(min(depth[rows].max(), 200 * _PER_OCTAVE))
        ladder = 2.0 ** (np.arange(-count, 2) / _PER_OCTAVE)
        yield rows, _SHARED[0] / response.dead_time[rows] * ladder[:, None]
    polynomials = (N, D, CONTROL) if control else (N, D)
    m = response.loops
    row, x = light_roots(response.squares[:, polynomials].reshape(len(response.squares), -1))
    row, w = row % m, np.sqrt(np.maximum(x, 0.0))
    near = np.flatnonzero((w > 0.0) & (w < 1.1 * end[row]))
    if near.size:
        yield from _crowded(row[near], w[near], response.dead_time)


def _crowded(row: IntArray, w: FloatArray, delay: FloatArray) -> Iterator[tuple[IntArray, FloatArray]]:
    """Sorted nodes of each row, (rows, ω (G, rows)), with steps of the angle in between; padded with the last."""
    order = np.lexsort((w, row))
    row, w = row[order], w[order]
    fresh = np.append(True, (row[1:] != row[:-1]) | (w[1:] > w[:-1] * (1.0 + 1e-12)))  # nested intervals share points
    row, w = row[fresh], w[fresh]
    near = (row[1:] == row[:-1]) & (w[1:] < 1.2 * w[:-1])
    extra = np.where(near, np.minimum(np.ceil((w[1:] - w[:-1]) * delay[row[1:]] / _STEP), 64), 1).astype(np.intp)
    if (extra > 1).any():
        start = np.repeat(np.arange(len(extra)), extra)
        within = np.arange(len(start)) - np.repeat(np.cumsum(extra) - extra, extra)
        inserted = w[start] + (w[start + 1] - w[start]) * (within / extra[start])
        row, w = np.append(row[start], row[-1]), np.append(inserted, w[-1])
    rows, first, count = np.unique(row, return_index=True, return_counts=True)
    for group in _alike(count):
        nodes = np.minimum(np.arange(int(count[group].max()))[:, None], count[group] - 1) + first[group]
        yield rows[group], w[nodes]


def _alike(count: IntArray) -> Iterator[IntArray]:
    """Groups of places with counts within a factor of two, of 200,000 nodes at most: the longest sets the size."""
    order = np.argsort(count, kind="stable")
    while order.size:
        many = count[order] <= max(2 * int(count[order[0]]), 64)
        group = order[many][: max(1, 200_000 // int(count[order[many][-1]]))]
        order = order[len(group) :]
        yield group


def _slowest(response: Response) -> FloatArray:
    """(M,) a lower bound of the magnitudes of all nonzero roots of N, D and N + D, over 4."""
    out = np.full(response.loops, np.inf)
    squares = response.squares
    degree = np.arange(len(squares), dtype=float)
    for p in (N, D, CLOSED):
        size = np.abs(squares[:, p])
        first = (size > 0.0).argmax(axis=0)
        lowest = size[first, np.arange(response.loops)]
        power = degree[:, None] - first
        with np.errstate(divide="ignore", invalid="ignore"):
            # Fujiwara's bound on the reciprocal polynomial in x = ω²
            bound = np.where(power > 0, (lowest / size) ** (1.0 / power), np.inf).min(axis=0)
        out = np.minimum(out, np.sqrt(0.5 * bound))
    return 0.25 * out
