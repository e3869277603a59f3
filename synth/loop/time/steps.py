"""The method of steps: the loop's own output of one delay ago drives the open loop over the next.

M loops, n order, P panels to a delay, S signals. Scaled time. Each delay is cut into panels so short that the
open loop's response on one is a polynomial of degree 12 to about 1e-10; the open loop is carried over a panel
by the Radau IIA method of 12 stages (order 23 at the panel's end, and as stable as the open loop is for poles
too fast to resolve).
"""

from __future__ import annotations

from dataclasses import dataclass

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

# Cuts of a delay go no finer than 2^-this, kept up all along or behind a kink alone.
COARSEST, FINEST = 8, 40


@dataclass(frozen=True, slots=True)
class March:
    """Signals over successive delays of each loop, in own time τ: u at τ, and y and d one delay later, at τ +
    θ.

    begin   number of the first delay held
    sizes   (P,) lengths of the panels of a delay, parts of θ
    values  (M, K, P, S, 13) at the nodes of each panel; NaN beyond a loop's own number of delays
    """

    begin: int
    sizes: FloatArray
    values: FloatArray


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


def march(
    loops: Loops, numerators: FloatArray, delays: IntArray, fine: FloatArray, smooth: FloatArray, kinks: int
) -> list[March]:
    """Step responses over the first `delays` delays of each loop.

    numerators : (M, S, n + 1), what is read off: N first (it closes the loop), then control or load or both.
    delays : (M,) how many delays each loop is followed for, descending.
    fine, smooth : (P,) panel lengths, parts of a delay, over the first `kinks` delays and after them. The
    kink at each multiple of θ is the smoother the later, and in the end excites the fast poles no more.

    The error e of a unit reference step drives all: y = (N/D) e and d = (load/D) e, a delay later, as P S =
    P·S.
    """
    most = int(delays.max(initial=0))
    kinks = min(kinks, most)
    state = np.zeros((len(loops), loops.order))
    first = _leg(loops, numerators, delays, 0, kinks, fine, np.ones((len(loops), len(fine), NODES)), state)
    if kinks == most:
        return [first]
    active = int(np.searchsorted(-delays, -kinks))
    drive = np.ones((len(loops), len(smooth), NODES))
    drive[:active] = 1.0 - _recut(first.values[:active, -1, :, 0], fine, smooth)
    return [first, _leg(loops, numerators, delays, kinks, most, smooth, drive, state)]


def _leg(
    loops: Loops,
    numerators: FloatArray,
    delays: IntArray,
    begin: int,
    end: int,
    sizes: FloatArray,
    drive: FloatArray,
    state: FloatArray,
) -> March:
    """Delays begin .. end - 1 with one cutting. drive (M, P, 13) is e over the first of them; state moves
    on."""
    most = int(np.searchsorted(-delays, -begin))
    kinds, which = np.unique(sizes, return_inverse=True)
    some = loops.rows(np.arange(most))
    panels = [_Panel.of(some, numerators[:most], kind * some.dead_time) for kind in kinds]
    values = np.full((len(loops), end - begin, len(sizes), numerators.shape[1], NODES), np.nan)
    for k in range(begin, end):
        active = int(np.searchsorted(-delays, -k))  # loops followed for more than k delays
        here = [panel.rows(active) for panel in panels]
        for i in range(len(sizes)):
            given = drive[:active, i] if k == begin else 1.0 - values[:active, k - begin - 1, i, 0]
            values[:active, k - begin, i], state[:active] = here[which[i]].over(given, state[:active])
    return March(begin, sizes, values)


def _recut(values: FloatArray, old: FloatArray, new: FloatArray) -> FloatArray:
    """A signal over one delay, (M, P, 13) on panels `old`, at the nodes of panels `new`, (M, P', 13)."""
    edges = np.concatenate([[0.0], np.cumsum(old)])
    out = np.empty((len(values), len(new), NODES))
    start = 0.0
    for j, size in enumerate(new):
        place = start + size * GRID
        # a node on an edge belongs to the panel it opens, but the last node to the panel it ends
        at = np.clip(np.searchsorted(edges, place, side="right") - 1, 0, len(old) - 1)
        at[-1] = np.clip(np.searchsorted(edges, place[-1], side="left") - 1, 0, len(old) - 1)
        for i in np.unique(at):
            here = at == i
            out[:, j, here] = values[:, i] @ value_matrix((place[here] - edges[i]) / old[i])
        start += size
    return out


@dataclass(frozen=True, slots=True)
class _Panel:
    """The open loop over one panel of a length of its own for each loop.

    States are ξ and its first n - 1 derivatives, D ξ = e. The stages of the Radau method are a rational
    function of the fixed integration matrix; in its eigenvectors the open loop is met at six complex points σ
    = length·SPREAD alone: the stages of ξ^(n) are (e - 1 Σ α_i ξ^(i)(0)) / α_n with α_i = Σ_{k<=i} a_k
    σ^(i-k), and every output follows by the like sums γ of its own numerator. What is particular to a loop is
    small; the large products are with matrices that all loops share.

    inverse   (M, 6) 1/α_n
    gamma     (M, S, 6)
    direct    (M, S) what passes at once is kept exact: v = c_n e + Σ (c_k - c_n a_k) ξ^(k)
    of_state  (M, 12 + S n + n, n): the state's part in the stages, the outputs and the state at the end
    to_state  (M, n, 12): the stages' part in the state at the end
    shared    (12 + n, 13): stages and free polynomials to the nodes
    """

    inverse: ComplexArray
    gamma: ComplexArray
    direct: FloatArray
    of_state: FloatArray
    to_state: FloatArray
    shared: FloatArray

    @classmethod
    def of(cls, loops: Loops, numerators: FloatArray, length: FloatArray) -> _Panel:
        """numerators (M, S, n + 1); length (M,)."""
        rows, n, signals = len(loops), loops.order, numerators.shape[1]
        lead = loops.denominator[:, :1]
        a = (loops.denominator / lead)[:, ::-1]
        c = (numerators / lead[:, :, None])[:, :, ::-1]
        direct = c[:, :, n].copy()
        c = c - direct[:, :, None] * a[:, None, :]
        c[:, :, n] = 0.0
        sigma = length[:, None] * SPREAD
        alpha = [total[:, 0] for total in _sums(a[:, None, :], sigma)]
        gamma = _sums(c, sigma)[n]
        inverse = 1.0 / alpha[n]
        of_state = np.zeros((rows, 2 * len(SPREAD) + signals * n + n, n))
        to_state = np.empty((rows, n, 2 * len(SPREAD)))
        ones = FROM_NODES.sum(axis=1)
        free = of_state[:, 12 : 12 + signals * n].reshape(rows, signals, n, n)
        last = of_state[:, 12 + signals * n :]
        taylor = np.ones(rows)  # length^i / i!
        for i in range(n):
            stage = ones * alpha[i] * inverse
            of_state[:, 0:12:2, i], of_state[:, 1:12:2, i] = stage.real, stage.imag
            end = TO_NODES[-1] * sigma ** (n - i)
            to_state[:, i, 0::2], to_state[:, i, 1::2] = end.real, -end.imag
            # free polynomials: Σ_{k<=j} c_k τ^(j-k)/(j-k)! read off, τ^(j-k)/(j-k)! in the states themselves
            free[:, :, i, i:] = c[:, :, : n - i] * taylor[:, None, None]
            for k in range(n - i):
                last[:, k, k + i] = taylor
            taylor = taylor * length / (i + 1)
        shared = np.zeros((12 + n, NODES))
        shared[:12, 1:] = _TO_NODES
        shared[12:] = GRID ** np.arange(n)[:, None]
        return cls(inverse, gamma, direct, of_state, to_state, shared)

    def rows(self, count: int) -> _Panel:
        """The first so many loops."""
        if count == len(self.inverse):
            return self
        return _Panel(
            self.inverse[:count],
            self.gamma[:count],
            self.direct[:count],
            self.of_state[:count],
            self.to_state[:count],
            self.shared,
        )

    def over(self, drive: FloatArray, state: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Outputs (M, S, 13) at the nodes and states (M, n) at the end; drive (M, 13) is e."""
        rows, n = state.shape
        signals = self.direct.shape[1]
        own = (self.of_state @ state[:, :, None])[:, :, 0]
        stages = (drive[:, 1:] @ _FROM_NODES).view(complex) * self.inverse
        stages -= np.ascontiguousarray(own[:, :12]).view(complex)
        both = np.empty((rows, signals, 12 + n))
        both[:, :, :12] = (self.gamma * stages[:, None, :]).view(float)
        both[:, :, 12:] = own[:, 12 : 12 + signals * n].reshape(rows, signals, n)
        out = (both.reshape(-1, 12 + n) @ self.shared).reshape(rows, signals, NODES)
        if self.direct.any():
            out += self.direct[:, :, None] * drive[:, None, :]
        end: FloatArray = (self.to_state @ stages.view(float)[:, :, None])[:, :, 0]
        return out, end + own[:, 12 + signals * n :]


def _sums(coefficients: FloatArray, sigma: ComplexArray) -> list[ComplexArray]:
    """Σ_{k<=i} c_k σ^(i-k) for i = 0 .. n. (M, S, n + 1) ascending, (M, 6) -> n + 1 arrays (M, S, 6)."""
    total = np.repeat(coefficients[:, :, :1].astype(complex), sigma.shape[1], axis=2)
    out = [total]
    for i in range(1, coefficients.shape[2]):
        total = total * sigma[:, None, :] + coefficients[:, :, i, None]
        out.append(total)
    return out


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
