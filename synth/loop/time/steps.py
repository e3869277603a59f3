"""The method of steps: the loop's own output of one delay ago drives the open loop over the next.

M loops, n order, P panels to a delay, S signals. Scaled time. Each delay is cut into panels so short that the
open loop's response on one is a polynomial of degree 12 to about 1e-10; the open loop is carried over a panel
by the Radau IIA method of 12 stages (order 23 at the panel's end, and as stable as the open loop is for poles
too fast to resolve).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.polynomials import horner
from synth.loop.time.collocation import (
    FROM_NODES,
    GRID,
    NODES,
    SPREAD,
    STAGES,
    TO_NODES,
    value_matrix,
)

# The same matrices for six complex numbers seen as twelve real ones, real and imaginary parts in turn.
_FROM_NODES = np.ascontiguousarray(FROM_NODES.T).view(float)
_TO_NODES = np.stack([TO_NODES.real.T, -TO_NODES.imag.T], axis=1).reshape(2 * len(SPREAD), STAGES)
_PARTS = 2 * len(SPREAD)

# Cuts of a delay go no finer than 2^-this, kept up all along or behind a kink alone.
COARSEST, FINEST = 8, 40


def ladder(fine: int, coarse: int, hold: int = 0) -> FloatArray:
    """Panel lengths of a delay: 2^-fine behind the kink at its start, then growing to 2^-coarse at most.

    There are about 2^hold panels to every doubling of the time since the kink; with 0 each is as long as all
    before it.
    """
    sizes = [2.0**-fine]
    done = sizes[0]
    while done < 1.0:
        # a power of two that still fits the grid of its own size, so that the delay comes out whole
        size = min(max(2.0 ** np.floor(np.log2(done)) / 2**hold, 2.0**-fine), 2.0**-coarse)
        sizes.append(size)
        done += size
    return np.array(sizes)


@dataclass(slots=True)
class Walk:
    """m loops on their way from delay to delay, all cut alike, in own time τ: u at τ, y and d at τ + θ.

    loops (M), numerators (S, M, n + 1): what is read off, N first (it closes the loop), then control or load
    or both; index (m,) which of the loops are still on their way.
    sizes (P,) lengths of the panels, parts of a delay.
    drive (m, P, 13), the error e of a unit reference step over the coming delay, drives all: y = (N/D) e and
    d = (load/D) e, a delay later, as P S = P·S. state (m, n) is the open loop's.
    """

    loops: Loops
    numerators: FloatArray
    index: IntArray
    sizes: FloatArray
    drive: FloatArray
    state: FloatArray
    _panels: _Panels

    @classmethod
    def start(cls, loops: Loops, numerators: FloatArray, index: IntArray, sizes: FloatArray) -> Walk:
        """At rest, when the reference steps."""
        drive = np.ones((len(index), len(sizes), NODES))
        state = np.zeros((len(index), loops.order))
        panels = _Panels.of(loops, numerators, index, sizes)
        return cls(loops, numerators, index, sizes, drive, state, panels)

    def over(self) -> FloatArray:
        """Over one delay: the signals at the nodes of its panels, (S, m, P, 13)."""
        out, self.state = self._panels.over(self.drive, self.state)
        self.drive = 1.0 - out[0]
        return out

    def rows(self, number: IntArray) -> Walk:
        """The loops on the way that are named by `number` alone."""
        drive, state = self.drive[number], self.state[number]
        index, panels = self.index[number], self._panels.rows(number)
        return Walk(self.loops, self.numerators, index, self.sizes, drive, state, panels)

    def cut(self, sizes: FloatArray) -> Walk:
        """The same loops, cut otherwise from here on."""
        if np.array_equal(sizes, self.sizes):
            return self
        drive = recut(self.drive, self.sizes, sizes)
        panels = _Panels.of(self.loops, self.numerators, self.index, sizes)
        return Walk(self.loops, self.numerators, self.index, sizes, drive, self.state, panels)


@lru_cache(maxsize=64)
def resampling(sizes: tuple[float, ...], places: tuple[float, ...]) -> FloatArray:
    """(13 P, places): values on all panels of a delay to those at `places`, parts of the delay. A place on an
    edge belongs to the panel it opens."""
    begin = np.cumsum(sizes) - sizes
    panel = np.searchsorted(begin, places, side="right") - 1
    out = np.zeros((len(sizes), NODES, len(places)))
    out[panel, :, np.arange(len(places))] = value_matrix((places - begin[panel]) / np.array(sizes)[panel]).T
    return out.reshape(len(sizes) * NODES, len(places))


def recut(values: FloatArray, old: FloatArray, new: FloatArray) -> FloatArray:
    """A signal over one delay, (M, P, 13) on panels `old`, at the nodes of panels `new`, (M, P', 13)."""
    places = (np.cumsum(new) - new)[:, None] + new[:, None] * GRID
    matrix = resampling(tuple(old), tuple(places.ravel()))
    out: FloatArray = (values.reshape(len(values), -1) @ matrix).reshape(len(values), len(new), NODES)
    return out


@dataclass(frozen=True, slots=True)
class _Panels:
    """The open loop over the panels of a delay.

    States are ξ and its first n - 1 derivatives, D ξ = e. The stages of the Radau method are a rational
    function of the fixed integration matrix; in its eigenvectors the open loop is met at six complex points σ
    = length·SPREAD alone: the stages of ξ^(n) are (e - 1 Σ α_i ξ^(i)(0)) / α_n with α_i = Σ_{k<=i} a_k
    σ^(i-k), and every output follows by the like sums γ of its own numerator. What is particular to a loop is
    small; the large products are with matrices that all loops share. P is 1 here where all panels are alike.

    inverse   (M, P, 6) 1/α_n
    gamma     (S, M, P, 6)
    direct    (S, M) what passes at once is kept exact: v = c_n e + Σ (c_k - c_n a_k) ξ^(k)
    of_state  (M, P, n, 12 + S n): the state's part in the stages, and in the outputs' free polynomials
    of_stages (M, P, n, 12): the stages' part in the state at the end
    carry     (M, P, n, n): the state's part in it, its way through the stages included
    shared    (12 + n, 13): stages and free polynomials to the nodes
    """

    inverse: ComplexArray
    gamma: ComplexArray
    direct: FloatArray
    of_state: FloatArray
    of_stages: FloatArray
    carry: FloatArray
    shared: FloatArray

    @classmethod
    def of(cls, loops: Loops, numerators: FloatArray, index: IntArray, sizes: FloatArray) -> _Panels:
        """The loops `index` of these; numerators (S, M, n + 1); sizes (P,)."""
        kinds, which = np.unique(sizes, return_inverse=True)
        length = loops.dead_time[index, None] * kinds
        (rows, n), signals, many = (len(index), loops.order), len(numerators), len(kinds)
        denominator = loops.denominator[index]
        lead = denominator[:, :1]
        a = (denominator / lead)[:, ::-1, None, None]
        c = (numerators[:, index] / lead)[:, :, ::-1]
        direct = c[:, :, n].copy()
        c = c - direct[:, :, None] * a[:, :, 0, 0]
        c[:, :, n] = 0.0
        sigma = length[:, :, None] * SPREAD
        alpha = list(_sums(a.swapaxes(0, 1), sigma))
        *_, gamma = _sums(c.transpose(2, 0, 1)[..., None, None], sigma)
        inverse = 1.0 / alpha[n]
        of_state = np.zeros((rows, many, n, _PARTS + signals * n))
        of_stages = np.empty((rows, many, n, len(SPREAD)), dtype=complex)
        of_begin = np.zeros((rows, many, n * n))
        stages = of_state[..., :_PARTS]
        free = of_state[..., _PARTS:].reshape(rows, many, n, signals, n)
        by_row = c.swapaxes(0, 1)[:, None]
        weight, ratio = FROM_NODES.sum(axis=1) * inverse, np.conj(sigma)
        end = np.conj(TO_NODES[-1]) * ratio
        taylor = np.ones((rows, many, 1, 1))  # length^i / i!
        for i in range(n):
            stages[:, :, i] = (weight * alpha[i]).view(float)
            of_stages[:, :, n - 1 - i] = end
            end = end * ratio
            # free polynomials: Σ_{k<=j} c_k τ^(j-k)/(j-k)! read off, τ^(j-k)/(j-k)! in the states themselves
            free[:, :, i:, :, i] = (by_row[..., : n - i] * taylor).swapaxes(2, 3)
            of_begin[:, :, i * n :: n + 1] = taylor[..., 0]
            taylor = taylor * (length / (i + 1))[:, :, None, None]
        to_end = of_stages.view(float)
        carry = of_begin.reshape(rows, many, n, n) - stages @ to_end.swapaxes(2, 3)
        shared = np.zeros((_PARTS + n, NODES))
        shared[:_PARTS, 1:] = _TO_NODES
        shared[_PARTS:] = GRID ** np.arange(n)[:, None]
        found = cls(inverse, gamma, direct, of_state, to_end, carry, shared)
        return found if many == 1 else found._of_panels(which)

    def _of_panels(self, which: IntArray) -> _Panels:
        """Every panel by itself, (P,) numbers of kinds."""
        return _Panels(
            self.inverse[:, which],
            self.gamma[:, :, which],
            self.direct,
            self.of_state[:, which],
            self.of_stages[:, which],
            self.carry[:, which],
            self.shared,
        )

    def rows(self, index: IntArray) -> _Panels:
        """The loops named by `index`."""
        return _Panels(
            self.inverse[index],
            self.gamma[:, index],
            self.direct[:, index],
            self.of_state[index],
            self.of_stages[index],
            self.carry[index],
            self.shared,
        )

    def over(self, drive: FloatArray, state: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Outputs (S, M, P, 13) at the nodes and states (M, n) at the end; drive (M, P, 13) is e.

        From panel to panel only the state is handed on; all else is done for the whole delay at once.
        """
        (rows, count), n, signals = drive.shape[:2], state.shape[1], len(self.direct)
        stages = (drive[:, :, 1:] @ _FROM_NODES).view(complex) * self.inverse
        push = (self.of_stages @ stages.view(float)[..., None])[..., 0]
        begin = np.empty((rows, count, 1, n))
        state = state[:, None, :]
        for i in range(count):
            begin[:, i] = state
            state = state @ self.carry[:, i if self.carry.shape[1] > 1 else 0]
            state += push[:, i, None]
        own = (begin @ self.of_state)[:, :, 0]
        stages -= np.ascontiguousarray(own[..., :_PARTS]).view(complex)
        both = np.empty((signals, rows, count, _PARTS + n))
        both[..., :_PARTS] = (self.gamma * stages).view(float)
        both[..., _PARTS:] = own[..., _PARTS:].reshape(rows, count, signals, n).transpose(2, 0, 1, 3)
        out = (both.reshape(-1, _PARTS + n) @ self.shared).reshape(signals, rows, count, NODES)
        if self.direct.any():
            out += self.direct[:, :, None, None] * drive
        return out, state[:, 0]


def _sums(coefficients: FloatArray, sigma: ComplexArray) -> Iterator[ComplexArray]:
    """Σ_{k<=i} c_k σ^(i-k) for i = 0 .. n. (n + 1, ..., M, 1, 1) ascending, (M, P, 6) -> (..., M, P, 6)."""
    total = coefficients[0] + np.zeros_like(sigma)
    yield total
    for one in coefficients[1:]:
        total = total * sigma + one
        yield total


def resolution(
    loops: Loops, open_poles: ComplexArray, slow_poles: ComplexArray
) -> tuple[IntArray, IntArray, IntArray]:
    """How finely each loop's delay must be cut: (fine, coarse, hold) of `ladder`, (M,) each.

    open_poles : (M, r) roots of D; slow_poles : (M, q) closed-loop poles that stay; NaN padded.

    The panel behind a kink must resolve the fastest open-loop pole. One that is well damped has died out
    where the panels grow. One that is not lets them grow more slowly, or, where that is cheaper, not at all.
    """
    delay = loops.dead_time[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        turns = np.nan_to_num(np.abs(open_poles) * delay)
        damping = np.where(turns > 0.0, -open_poles.real / np.abs(open_poles), 1.0)
        even = np.log2(np.maximum(turns / 4.0, 1.0))
        slower = np.ceil(np.log2(np.clip(1.5 / damping, 1.0, 1e6)))
        lasting = (damping < 0.75) & (turns > 0.0)
        holding = lasting & (damping > 0.0) & (slower + 2.0 < even)
        swings = np.where(lasting & ~holding, even, 0.0).max(axis=1, initial=0.0)
        grows = np.where(holding, slower, 0.0).max(axis=1, initial=0.0)
        needed = np.log2(np.maximum(turns / 3.5, 1.0)).max(axis=1, initial=0.0)
        staying = slow_poles.real * delay > -3.0
        moves = np.where(staying, np.abs(slow_poles) * delay / 5.0, 1.0).max(axis=1, initial=1.0)
    coarse = np.ceil(np.maximum(swings, np.log2(np.maximum(moves, 1.0)))).astype(np.intp)
    coarse = np.minimum(coarse, COARSEST)
    fine = np.maximum(np.minimum(np.ceil(needed).astype(np.intp), FINEST), coarse)
    return fine, coarse, np.minimum(grows.astype(np.intp), COARSEST)


def lasting_kinks(loops: Loops, open_poles: ComplexArray, coarse: IntArray) -> FloatArray:
    """Delays after which kinks excite no pole that 2^-coarse of a delay leaves far from resolved. (M,).

    Each delay passes them through N/D once more, which at such a pole's frequency is small.
    """
    size = np.abs(open_poles)
    with np.errstate(all="ignore"):
        fast = size * loops.dead_time[:, None] > 12.0 * 2.0 ** coarse[:, None]
        s = np.where(fast, 1.0j * size, 1.0j)
        ratio = np.abs(horner(loops.numerator, s) / horner(loops.denominator, s))
        most = np.where(fast, np.nan_to_num(ratio), 0.0).max(axis=1, initial=0.0)
        out: FloatArray = np.ceil(21.0 / -np.log(np.clip(most, 1e-4, 0.985))) + 1.0
    return out
