"""The frequencies at which loops with dead time are looked at: close enough to resolve everything in between.

Letters: M loops, G nodes. Node arrays are (G, rows), ω ascending along the first axis.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.frequency.isolation import light_roots
from synth.loop.frequency.response import CLOSED, CONTROL, D, N, Response

PER_OCTAVE = 6
STEP = 0.25  # rad
HIGH = 8.0  # angle where the shared nodes end
_BEND = 2.0  # the shared nodes are logarithmic up to the bend, then linear
SHARED: FloatArray = np.concatenate(
    (
        _BEND * 2.0 ** (-np.arange(PER_OCTAVE * 15, 0, -1) / PER_OCTAVE),
        np.arange(_BEND, HIGH + STEP / 2, STEP),
    )
)
_WINDOW = 128.0  # rad at either end of a long range of falls


def zone_nodes(
    first: FloatArray, last: FloatArray, delay: FloatArray
) -> Iterator[tuple[IntArray, FloatArray]]:
    """Nodes a quarter of a radian apart from `first` to `last` [ω], both (M,): (rows, ω (G, rows)), rows
    repeated.

    Of a long range its two ends: the lowest passage lies within a turn of the first edge where |L| falls
    steadily, the highest within a turn of the last.
    """
    row = np.flatnonzero(first < last)
    low, high = first[row] * delay[row], last[row] * delay[row]
    long = high - low > 2.0 * _WINDOW
    start = np.concatenate((low, high[long] - _WINDOW))
    stop = np.concatenate((np.where(long, low + _WINDOW, high), high[long]))
    row = np.concatenate((row, row[long]))
    count = np.ceil((stop - start) / STEP).astype(np.intp) + 4
    for group in _alike(count):
        steps = np.minimum(np.arange(-2, count[group].max())[:, None], count[group])
        angles = np.maximum(start[group] + STEP * steps, 1e-6)
        yield row[group], angles / delay[row[group]]


def further_nodes(
    response: Response, control: bool, end: FloatArray
) -> Iterator[tuple[IntArray, FloatArray]]:
    """Nodes below the shared list, for slow loops, and round lightly damped roots up to `end`: (rows, ω (G,
    rows)).
    """
    with np.errstate(divide="ignore"):
        depth = np.ceil(np.log2(SHARED[0] / (_slowest(response) * response.dead_time)) * PER_OCTAVE)
    rows = np.flatnonzero(depth > 0)
    if rows.size:
        count = int(min(depth[rows].max(), 200 * PER_OCTAVE))
        ladder = 2.0 ** (np.arange(-count, 2) / PER_OCTAVE)
        yield rows, SHARED[0] / response.dead_time[rows] * ladder[:, None]
    polynomials = (N, D, CONTROL) if control else (N, D)
    m = response.loops
    row, x = light_roots(response.squares[:, polynomials].reshape(len(response.squares), -1))
    row, w = row % m, np.sqrt(np.maximum(x, 0.0))
    near = np.flatnonzero((w > 0.0) & (w < 1.1 * end[row]))
    if near.size:
        yield from _crowded(row[near], w[near], response.dead_time)


def _crowded(row: IntArray, w: FloatArray, delay: FloatArray) -> Iterator[tuple[IntArray, FloatArray]]:
    """Sorted nodes of each row, (rows, ω (G, rows)), with steps of the angle in between; padded with the
    last.
    """
    order = np.lexsort((w, row))
    row, w = row[order], w[order]
    fresh = np.append(
        True, (row[1:] != row[:-1]) | (w[1:] > w[:-1] * (1.0 + 1e-12))
    )  # nested intervals share points
    row, w = row[fresh], w[fresh]
    near = (row[1:] == row[:-1]) & (w[1:] < 1.2 * w[:-1])
    extra = np.where(near, np.minimum(np.ceil((w[1:] - w[:-1]) * delay[row[1:]] / STEP), 64), 1).astype(
        np.intp
    )
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
    """Groups of places with counts within a factor of two, of 200,000 nodes at most: the longest sets the
    size.
    """
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
