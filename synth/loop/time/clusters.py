"""Step responses of loops whose poles nearly or exactly coincide.

Apart, the residues of close poles are large and cancel; a multiple pole has none at all. So close poles are
taken together: the share of a cluster of poles p_j = c + delta_j in a response with the transform G(s) /
prod (s - p_j) is the divided difference of G(s) e^(s t) over its poles. With G(c + delta) = sum gamma_j
delta^j and the complete homogeneous symmetric sums H_i of the delta's (the divided differences of powers) it
is

    e^(c t) sum_k alpha_k t^k / k!         alpha_k = sum_j gamma_j H_(j + k - size + 1)

whatever the multiplicity, and without cancellation.
Source: C. de Boor, Divided differences, Surveys in Approximation Theory 1 (2005), for the rules used.

M loops, C cluster slots (upper half plane and real centres), S signals, TERMS powers of t.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.time.residues import numerators_of
from synth.loop.time.signals import CELLS, HERMITE, Profile

TERMS = 32
"""Powers of t and of delta that are kept: enough for a cluster a third as wide as it is far from anything
else, and as its decay rate.
"""

REACHES = (1e-5, 1e-3, 1e-2, 0.04, 0.1, 0.2, 0.35)
"""Distances, relative to their magnitude, up to which two poles are taken together; the best of them is
used.
"""

STEPS = 4
"""Times of the profile an octave."""


class ClusterModes:
    """Like `Modes`, with a polynomial of t for each cluster instead of a residue for each pole.

    pole   (M, C) centres; -1 in an empty slot
    alpha  (M, S, C, TERMS) coefficients of t^k / k!, doubled for clusters with a mirror image
    """

    def __init__(self, pole: ComplexArray, alpha: ComplexArray) -> None:
        self.pole, self.alpha = pole, alpha
        self._derived: dict[int, ComplexArray] = {0: alpha}

    def __len__(self) -> int:
        return int(self.pole.shape[0])

    def rows(self, index: IntArray) -> ClusterModes:
        """The loops named by `index`."""
        return ClusterModes(self.pole[index], self.alpha[index])

    def scaled(self, factor: FloatArray) -> ClusterModes:
        """Signals multiplied by factor (M, S)."""
        return ClusterModes(self.pole, self.alpha * factor[:, :, None, None])

    def later(self, signals: list[int], delay: FloatArray) -> ClusterModes:
        """The chosen signals seen from `delay` (M,) on."""
        weight = _basis(self.pole, delay[:, None])
        alpha = np.zeros((len(self), len(signals), *self.alpha.shape[2:]), dtype=complex)
        for i in range(TERMS):
            alpha[..., : TERMS - i] += self.alpha[:, signals, :, i:] * weight[i][:, :, :, None]
        return ClusterModes(self.pole, alpha)

    def largest(self) -> FloatArray:
        """(M, S) bound of abs(x - x(inf))."""
        return self._bound(np.abs(self.alpha), np.arange(len(self)), np.zeros(len(self))).T

    def _coefficients(self, order: int) -> ComplexArray:
        """Those of derivative number `order`; -1 is the primitive that vanishes at infinity."""
        if order not in self._derived:
            c = self.pole[:, None, :, None]
            if order == -1:
                out = self.alpha / c
                for k in range(TERMS - 2, -1, -1):
                    out[..., k] -= out[..., k + 1] / c[..., 0]
            else:
                before = self._coefficients(order - 1)
                out = before * c
                out[..., :-1] += before[..., 1:]
            self._derived[order] = out
        return self._derived[order]

    def _area_coefficients(self) -> FloatArray:
        """(M, S, C, TERMS) of a bound of the integral of abs(x) from t on: sum_j a_j t^j / j! e^(-sigma
        t).
        """
        fall = -self.pole.real[:, None, :]
        out = np.abs(self.alpha) / fall[..., None]
        for k in range(TERMS - 2, -1, -1):
            out[..., k] += out[..., k + 1] / fall
        return out

    def _bound(self, size: FloatArray, loop: IntArray, t: FloatArray) -> FloatArray:
        """(S, P) sum of size_k sup over s >= t of s^k / k! e^(-sigma s)."""
        fall = -self.pole.real[loop]
        k = np.arange(TERMS)
        # t^k e^(-sigma t) rises until k / sigma
        when = np.maximum(t[:, None, None], k / fall[:, :, None])
        power = k * np.log(np.maximum(when, 1e-300))
        factor = np.exp(power - _LOG_FACTORIAL - fall[:, :, None] * when)
        out: FloatArray = np.einsum("psck,pck->sp", size[loop], factor)
        return out

    def bounds(self, loop: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """(S, P) bounds of the fourth derivative and of abs(x) from t on."""
        fourth = self._bound(np.abs(self._coefficients(4)), loop, t)
        return fourth, self._bound(np.abs(self.alpha), loop, t)

    def profile(self, floor: FloatArray, areas: bool) -> Profile:
        """As `Modes.profile`. The slowest mode is never told apart."""
        m, s = self.alpha.shape[:2]
        t0 = 0.25 / np.abs(self.pole).max(axis=1)
        end = (2.0 * TERMS + 40.0) / -self.pole.real.max(axis=1)
        count = int(np.clip(np.ceil(STEPS * np.log2(end / t0).max(initial=2.0)) + 1, 2, 120 * STEPS))
        time = np.zeros((m, count + 1))
        time[:, 1:] = t0[:, None] * np.exp2(np.arange(count) / STEPS)
        loop, t = np.repeat(np.arange(m), count + 1), time.ravel()

        def shaped(rows: FloatArray) -> FloatArray:
            return rows.reshape(s, m, count + 1).transpose(1, 0, 2)

        fourth, envelope = self.bounds(loop, t)
        area = shaped(self._bound(self._area_coefficients(), loop, t)) if areas else None
        rivals = np.full((m, s, count + 1), np.inf)
        return Profile(
            time, self.curves(time), shaped(envelope), shaped(fourth), rivals, area, area, log_convex=False
        )

    def cell_misses(self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray) -> FloatArray:
        """(8, P) cubic error in the cells of width h that start at t, for one signal each."""
        starts = (t + h * np.arange(CELLS)[:, None]).ravel()
        many = np.tile(loop, CELLS)
        fourth = self._bound(np.abs(self._coefficients(4)), many, starts)
        out: FloatArray = fourth[np.tile(signal, CELLS), np.arange(len(starts))].reshape(CELLS, -1)
        return out * (HERMITE * h**4)

    def nodes(
        self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray | None = None
    ) -> tuple[FloatArray, FloatArray]:
        """Values and slopes (times h) at the 9 ends of the 8 cells of width h that start at t: (S, 9, P)
        each.
        """
        basis = _basis(self.pole[loop], t[:, None] + h[:, None] * np.arange(CELLS + 1))
        out = []
        for order in (0, 1):
            part = self._coefficients(order)
            part = part[loop] if signal is None else part[loop, signal][:, None]
            out.append(np.ascontiguousarray(np.einsum("psck,kpwc->swp", part, basis).real))
        return out[0], out[1] * h

    def jet(self, loop: IntArray, signal: IntArray, t: FloatArray, first: int, count: int) -> FloatArray:
        """Derivatives number first, first + 1, ... (-1: the primitive, 0 at infinity), (count, E)."""
        basis = _basis(self.pole[loop], t[:, None])[:, :, 0]
        return np.array(
            [
                np.einsum("eck,kec->e", self._coefficients(order)[loop, signal], basis).real
                for order in range(first, first + count)
            ]
        )

    def curves(self, t: FloatArray) -> FloatArray:
        """x - x(inf) at the times t (M, T) of each loop; (M, S, T)."""
        out: FloatArray = np.einsum("msck,kmtc->mst", self.alpha, _basis(self.pole, t)).real
        return out

    def tail(self, loop: IntArray, signal: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Integral of abs(x) from t on, taken as that of x, and a bound of the error. (E,) each."""
        bound = self._bound(self._area_coefficients(), loop, t)[signal, np.arange(len(loop))]
        return np.abs(self.jet(loop, signal, t, -1, 1)[0]), bound


_LOG_FACTORIAL: FloatArray = np.concatenate([[0.0], np.cumsum(np.log(np.arange(1.0, TERMS)))])


def _basis(pole: ComplexArray, t: FloatArray) -> ComplexArray:
    """e^(c t) t^k / k!; pole (P, C), t (P, W) -> (TERMS, P, W, C)."""
    with np.errstate(over="ignore", invalid="ignore"):
        first = np.exp(pole[:, None, :] * t[:, :, None])
        out = np.empty((TERMS, *first.shape), dtype=complex)
        out[0] = first
        for k in range(1, TERMS):
            np.multiply(out[k - 1], t[:, :, None] / k, out=out[k])
    return out


def cluster_modes(loops: Loops, poles: ComplexArray, signals: tuple[str, ...]) -> ClusterModes:
    """The step responses of the named signals, each loop with the grouping of its poles that loses least.

    poles : (M, n), n >= 1, of stable loops, padded with NaN where the orders differ. They are found anew:
    what matters here is that all of them together are the exact poles of a nearby loop, as eigenvalues are.
    Polishing each by itself moves repeated poles within the circle of their own uncertainty, eps^(1/k), and
    what they then belong to is that far off.
    """
    order = np.count_nonzero(~np.isnan(poles), axis=1)
    kinds = [(order == n).nonzero()[0] for n in np.unique(order)]
    parts = [_of_one_order(loops.rows(rows).cut(), signals) for rows in kinds]
    slots = max(part.pole.shape[1] for part in parts)
    pole = np.full((len(loops), slots), -1.0, dtype=complex)
    alpha = np.zeros((len(loops), len(signals), slots, TERMS), dtype=complex)
    for rows, part in zip(kinds, parts, strict=True):
        pole[rows, : part.pole.shape[1]], alpha[rows, :, : part.pole.shape[1]] = part.pole, part.alpha
    return ClusterModes(pole, alpha)


def _of_one_order(loops: Loops, signals: tuple[str, ...]) -> ClusterModes:
    """The modes of loops of one order n."""
    poles = _eigenvalues(loops.closed)
    m, n = poles.shape
    size = np.abs(poles)
    gap = np.abs(poles[:, :, None] - poles[:, None, :])
    smaller = np.minimum(size[:, :, None], size[:, None, :])
    larger = np.maximum(size[:, :, None], size[:, None, :])
    grouped = gap <= np.array(REACHES)[:, None, None, None] * smaller
    for _ in range(int(np.ceil(np.log2(max(n, 2))))):  # friends of friends
        grouped = np.matmul(grouped, grouped)
    apart = np.where(grouped, 1.0, np.minimum(gap / larger, 1.0)).prod(axis=3).min(axis=2)
    ratio = _geometry(poles, grouped)[1]
    loss = np.finfo(float).eps / apart + np.minimum(ratio, 1.0) ** TERMS
    return _clustered(loops, poles, signals, grouped[loss.argmin(axis=0), np.arange(m)])


def _eigenvalues(closed: FloatArray) -> ComplexArray:
    """Poles (M, n) as eigenvalues of the companion matrices: pairs exactly conjugate and side by side."""
    rows, n = closed.shape[0], closed.shape[1] - 1
    matrix = np.zeros((rows, n, n))
    matrix[:, 0] = -closed[:, 1:] / closed[:, :1]
    index = np.arange(n - 1)
    matrix[:, index + 1, index] = 1.0
    return np.linalg.eigvals(matrix).astype(complex)


def _geometry(poles: ComplexArray, near: BoolArray) -> tuple[ComplexArray, FloatArray]:
    """Centre of each pole's cluster, (..., M, n), and how wide the clusters are for their distance from all
    else, (..., M), for groupings near (..., M, n, n).
    """
    mirrored = np.abs(poles[:, :, None] - poles[:, None, :].conj()) == 0.0
    folded = (near & mirrored).any(axis=-1)  # a cluster with its own mirror image has a real centre
    centre = np.matmul(near, poles[:, :, None])[..., 0] / near.sum(axis=-1)
    centre = np.where(folded, centre.real, centre)
    away = np.abs(centre[..., None] - poles[:, None, :])
    width = np.where(near, away, 0.0).max(axis=-1)
    # powers of delta meet those of 1/(distance of other poles) and, until the cluster decays, of 1/sigma
    clear = np.minimum(np.where(near, np.inf, away).min(axis=-1), np.abs(centre.real))
    return centre, (width / np.maximum(clear, 1e-300)).max(axis=-1)


def _clustered(loops: Loops, poles: ComplexArray, signals: tuple[str, ...], near: BoolArray) -> ClusterModes:
    """The modes for one grouping (M, n, n) of the poles."""
    m, n = poles.shape
    centre, _ = _geometry(poles, near)
    chief = near.argmax(axis=2) == np.arange(n)
    keep = chief & (centre.imag >= 0.0)
    slots = int(keep.sum(axis=1).max())
    order = np.argsort(~keep, axis=1, kind="stable")[:, :slots]
    used = np.take_along_axis(keep, order, axis=1)
    centre = np.where(used, np.take_along_axis(centre, order, axis=1), -1.0)
    inside = np.take_along_axis(near, order[:, :, None], axis=1)  # (M, slot, n)
    offset = poles[:, None, :] - centre[:, :, None]
    # H_i of the members' delta, and H_(i - size + 1), i = 0 .. 2 TERMS - 1
    delta = np.where(inside, offset, 0.0)
    sums = _chain(np.eye(1, 2 * TERMS)[0] + 0j, delta, np.ones((m, slots, n)))
    shift = np.arange(2 * TERMS) - (inside.sum(axis=2)[:, :, None] - 1)
    sums = np.where(shift >= 0, np.take_along_axis(sums, np.maximum(shift, 0), axis=2), 0.0)

    weight = np.where(used, np.where(centre.imag > 0.0, 2.0, 1.0), 0.0)
    with np.errstate(all="ignore"):
        tops = numerators_of(loops, signals).transpose(0, 2, 1)
        gamma = _taylor(tops, centre) / loops.closed[:, :1, None, None]
        # over s and over s - p of the poles outside
        here = np.zeros((m, slots, 1), dtype=bool)
        skip = np.concatenate([here, inside], axis=2)
        root = np.where(skip, 1.0, np.concatenate([centre[:, :, None], -offset], axis=2))
        gamma = _chain(gamma, np.where(skip, 0.0, -1.0)[:, None], root[:, None])
        hankel = np.lib.stride_tricks.sliding_window_view(sums, TERMS, axis=2)[:, None, :, :TERMS]
        alpha = np.matmul(hankel, gamma[..., None])[..., 0] * weight[:, None, :, None]
    alpha[~np.broadcast_to(used[:, None, :, None], alpha.shape)] = 0.0
    return ClusterModes(centre, alpha)


def _chain(
    series: ComplexArray, back: ComplexArray | FloatArray, root: ComplexArray | FloatArray
) -> ComplexArray:
    """A series through n stages, each of which makes out_k = (in_k + back · out_(k-1)) / root.

    series : (..., K), broadcast against (...) of back and root, (..., n). Returns (..., K). All stages run at
    once, each one step behind the one before. With back = delta_j they multiply by 1 / (1 - delta_j x), with
    -1 they divide by (root + x).
    """
    count, n = series.shape[-1], root.shape[-1]
    shape = np.broadcast_shapes(series.shape[:-1], root.shape[:-1])
    out = np.empty((count, *shape), dtype=complex)
    state = np.zeros((*shape, n + 1), dtype=complex)
    for step in range(count + n - 1):
        state[..., 0] = series[..., step] if step < count else 0.0
        state[..., 1:] = (state[..., :-1] + back * state[..., 1:]) / root
        if step >= n - 1:
            out[step - n + 1] = state[..., n]
    return np.moveaxis(out, 0, -1)


def _taylor(polynomials: FloatArray, centre: ComplexArray) -> ComplexArray:
    """Coefficients of p(c + delta), ascending powers of delta, (M, S, C, TERMS); p (M, S, n + 1) descending.

    Synthetic division by s - c again and again: all the divisions run at once, each a step behind.
    """
    m, s, width = polynomials.shape
    state = np.zeros((m, s, centre.shape[1], 1 + max(TERMS, width)), dtype=complex)
    for k in range(width):
        state[..., 0] = polynomials[:, :, None, k]
        state[..., 1 : k + 2] = state[..., : k + 1] + centre[:, None, :, None] * state[..., 1 : k + 2]
    return state[..., 1 : TERMS + 1]
