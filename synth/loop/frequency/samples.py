"""Loops with dead time on a list of nodes: what lies between neighbours.

Letters: G nodes, M loops. Node arrays are (G, M) with ω ascending along the first axis.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.frequency.response import CONTROL, D, N, Response
from synth.loop.polynomials import in_strips

_STEEP = 2.0  # tangent of arg(-L) from which on no node is near the negative axis
_TANGENT = 0.02  # how near to it the parabola must come
_NEAR = 4.0  # square of how far below the best a hump is still climbed


@dataclass(frozen=True, slots=True)
class Samples:
    """Values at the nodes, (G, M): ω, |N|², |D|², |control|² (None when not asked for), |Δ|² and N conj(D)
    e^(-jωθ).
    """

    w: FloatArray
    numerator: FloatArray
    denominator: FloatArray
    control: FloatArray | None
    closed: FloatArray
    real: FloatArray
    imaginary: FloatArray


def sample(response: Response, w: FloatArray, *, control: bool) -> Samples:
    """Evaluate at nodes w (G, M)."""
    n_re, n_im = _at(response, N, w)
    d_re, d_im = _at(response, D, w)
    c2 = None
    if control:
        c_re, c_im = _at(response, CONTROL, w)
        c2 = c_re * c_re + c_im * c_im
    angle = w * response.dead_time
    return _assemble(w, np.cos(angle), np.sin(angle), (n_re, n_im), (d_re, d_im), c2)


def sample_shared(response: Response, angle: FloatArray, *, control: bool) -> Samples:
    """Evaluate at ω = angle/θ with the same angles (G,) for every loop: matrix products and one row of
    cosines.
    """
    h = len(response.halves) - 1
    m = response.loops
    # coefficients in powers of the angle: c_k (angle/θ)^k
    scale = np.tile(response.dead_time[None, :] ** -np.arange(0.0, 2 * h + 2)[:, None], 4)
    even = response.halves[:, 0, 0] * scale[0::2]
    odd = response.halves[:, 0, 1] * scale[1::2]
    powers = angle[:, None] ** (2.0 * np.arange(h + 1))
    odd_powers = powers * angle[:, None]

    def at(polynomial: int) -> tuple[FloatArray, FloatArray]:
        columns = slice(polynomial * m, (polynomial + 1) * m)
        return in_strips(powers, even[:, columns]), in_strips(odd_powers, odd[:, columns])

    c2 = None
    if control:
        c_re, c_im = at(CONTROL)
        c2 = c_re * c_re + c_im * c_im
    cosine, sine = np.cos(angle)[:, None], np.sin(angle)[:, None]
    return _assemble(angle[:, None] / response.dead_time, cosine, sine, at(N), at(D), c2)


def _at(response: Response, polynomial: int, w: FloatArray) -> tuple[FloatArray, FloatArray]:
    m = response.loops
    halves = response.halves[:, 0, :, polynomial * m : (polynomial + 1) * m]
    x = w * w
    re, im = np.broadcast_to(halves[-1, 0], w.shape), np.broadcast_to(halves[-1, 1], w.shape)
    for k in range(len(halves) - 2, -1, -1):
        re = re * x + halves[k, 0]
        im = im * x + halves[k, 1]
    return re, im * w


def _assemble(
    w: FloatArray,
    cosine: FloatArray,
    sine: FloatArray,
    n: tuple[FloatArray, FloatArray],
    d: tuple[FloatArray, FloatArray],
    control: FloatArray | None,
) -> Samples:
    n2 = n[0] * n[0] + n[1] * n[1]
    d2 = d[0] * d[0] + d[1] * d[1]
    re = n[0] * d[0] + n[1] * d[1]
    im = n[1] * d[0] - n[0] * d[1]
    real = re * cosine + im * sine
    imaginary = im * cosine - re * sine
    closed = n2 + d2 + 2.0 * real
    return Samples(w, n2, d2, control, closed, real, imaginary)


Brackets = tuple[IntArray, FloatArray, FloatArray, BoolArray]  # row, low ω, high ω, negative just above low


def _between(at: tuple[IntArray, ...], w: FloatArray, negative: BoolArray) -> Brackets:
    node, row = at
    return row, w[node, row], w[node + 1, row], negative[node, row]


def phase_brackets(s: Samples) -> Brackets:
    """Where L crosses the negative real axis between two nodes."""
    negative = s.imaginary < 0.0
    left = s.real < 0.0
    crossing = (negative[1:] != negative[:-1]) & (left[1:] | left[:-1])
    return _between(np.nonzero(crossing), s.w, negative)


def phase_turns(s: Samples) -> Brackets:
    """Where arg(-L) turns back near zero and may cross it twice between the nodes: (row, ω before, ω after,
    negative before).

    A node where |arg(-L)| is smallest among three of one sign and beside which the parabola of its tangent
    comes near zero, with room for four times the dip that equal steps would give.
    """
    negative = s.imaginary < 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        f = np.where(s.real < 0.0, np.minimum(np.abs(s.imaginary / s.real), _STEEP), _STEEP)
    low, middle, high = f[:-2], f[1:-1], f[2:]
    turn = (middle <= low) & (middle <= high) & (middle - 0.5 * (low + high - 2.0 * middle) < _TANGENT)
    turn &= (negative[:-2] == negative[1:-1]) & (negative[2:] == negative[1:-1]) & (middle < _STEEP)
    node, row = np.nonzero(turn)
    return row, s.w[node, row], s.w[node + 2, row], negative[node, row]


def fall_brackets(s: Samples, level: FloatArray) -> tuple[Brackets, tuple[IntArray, FloatArray]]:
    """Where |T|² passes `level` between two nodes, and (row, ω) of turning points that may hide two passages.

    A node that is a local extremum of level |Δ|² - |N|² beside which the parabola through three nodes passes
    zero.
    """
    f = level * s.closed - s.numerator
    negative = f < 0.0
    brackets = _between(np.nonzero((negative[1:] != negative[:-1]) & (level > 0.0)), s.w, negative)
    with np.errstate(divide="ignore", invalid="ignore"):
        f = f / s.numerator  # level / |T|² - 1: of order one, whatever the slope of the polynomials
    low, middle, high = f[:-2], f[1:-1], f[2:]
    same = (negative[:-2] == negative[1:-1]) & (negative[2:] == negative[1:-1]) & (level > 0.0)
    # the parabola through the three nodes goes beyond the middle one by an eighth of its second difference at
    # most
    with np.errstate(invalid="ignore"):
        reach = np.where(negative[1:-1], -1.0, 1.0) * (middle - 0.25 * (low + high - 2.0 * middle))
    turn = same & (np.abs(middle) <= np.abs(low)) & (np.abs(middle) <= np.abs(high)) & (reach < 0.05)
    node, row = np.nonzero(turn)
    return brackets, (row, s.w[node + 1, row])


def humps(
    s: Samples, top: FloatArray, best: FloatArray
) -> tuple[IntArray, tuple[FloatArray, FloatArray, FloatArray], FloatArray]:
    """Local maxima of |P|/|Δ| at the nodes that come near `best`: (row, (ω before, at the top, after), node
    value).

    top : (G, M) |P|². best : (M,) largest value known so far.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = s.closed / top
    floor = np.fmin(np.fmin.reduce(inverse, axis=0), np.maximum(best, 1e-150) ** -2.0)  # P = 0: best is 0
    low, middle, high = inverse[:-2], inverse[1:-1], inverse[2:]
    local = (middle <= low) & (middle < high) & (middle <= floor * _NEAR)
    # |Δ|² less the share of |P|² that would equal the best: smooth even where |P| nearly vanishes near a peak
    rest = s.closed - floor * top
    low, middle, high = rest[:-2], rest[1:-1], rest[2:]
    # the parabola through three nodes goes below the middle one by an eighth of its second difference at most
    hidden = (middle <= low) & (middle < high) & (middle - 0.25 * (low + high - 2.0 * middle) < 0.0)
    # from a node that is a maximum the way leads up, whatever lies beside it; from a hidden one, the vertex
    kind, node, row = np.nonzero(np.stack((local, hidden)))
    a, b, c = rest[node, row], rest[node + 1, row], rest[node + 2, row]
    w0, w1, w2 = s.w[node, row], s.w[node + 1, row], s.w[node + 2, row]
    with np.errstate(divide="ignore", invalid="ignore"):
        up, down = (c - b) / (w2 - w1), (b - a) / (w1 - w0)
        vertex = 0.5 * (w0 + w1) - 0.5 * down * (w2 - w0) / (up - down)
        value = 1.0 / np.sqrt(inverse[node + 1, row])
    start = np.where((kind == 1) & (vertex > w0) & (vertex < w2), vertex, w1)
    return row, (w0, start, w2), value
