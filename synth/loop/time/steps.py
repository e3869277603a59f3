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
    POINTS,
    SPREAD,
    STAGES,
    TO_NODES,
    value_matrix,
)

_REAL_TO_NODES = np.concatenate([TO_NODES.real, -TO_NODES.imag], axis=1)


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
    stacked = some.rows(np.tile(np.arange(most), len(kinds)))
    lengths = np.repeat(kinds, most) * stacked.dead_time
    maps = np.split(_propagator(stacked, np.tile(numerators[:most], (len(kinds), 1, 1)), lengths), len(kinds))
    signals, n = numerators.shape[1], loops.order
    values = np.full((len(loops), end - begin, len(sizes), signals, NODES), np.nan)
    for k in range(begin, end):
        active = int(np.searchsorted(-delays, -k))  # loops followed for more than k delays
        given = np.empty((active, NODES + n, 1))
        for i in range(len(sizes)):
            given[:, :NODES, 0] = (
                drive[:active, i] if k == begin else 1.0 - values[:active, k - begin - 1, i, 0]
            )
            given[:, NODES:, 0] = state[:active]
            found = (maps[which[i]][:active] @ given)[:, :, 0]
            values[:active, k - begin, i] = found[:, : signals * NODES].reshape(active, signals, NODES)
            state[:active] = found[:, signals * NODES :]
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


def _propagator(loops: Loops, numerators: FloatArray, length: FloatArray) -> FloatArray:
    """Maps of (input at 13 nodes, n states) to (S outputs at 13 nodes, n states at the end), one panel.

    length : (M,). Returns (M, 13 S + n, 13 + n).

    States are ξ and its first n - 1 derivatives, D ξ = e. The stages of the Radau method are a rational
    function of the fixed integration matrix; in its eigenvectors the open loop is met at six complex points σ
    = length·SPREAD
    alone: the stages of ξ^(n) are (e - 1 Σ α_i ξ^(i)(0)) / α_n with α_i = Σ_{k<=i} a_k σ^(i-k), and every
    output follows by the like sums γ of its own numerator.
    """
    rows, n, signals = len(loops), loops.order, numerators.shape[1]
    lead = loops.denominator[:, :1]
    a = (loops.denominator / lead)[:, ::-1]
    c = (numerators / lead[:, :, None])[:, :, ::-1]
    direct = c[:, :, n].copy()  # what passes at once is kept exact: v = c_n e + Σ (c_k - c_n a_k) ξ^(k)
    c = c - direct[:, :, None] * a[:, None, :]
    c[:, :, n] = 0.0
    sigma = length[:, None] * SPREAD
    alpha = [total[:, 0] for total in _sums(a[:, None, :], sigma)]
    gamma = _sums(c, sigma)[n]
    ones = FROM_NODES.sum(axis=1)
    highest = np.empty((rows, len(SPREAD), NODES + n), dtype=complex)
    inverse = 1.0 / alpha[n]
    highest[:, :, 0] = 0.0
    highest[:, :, 1:NODES] = FROM_NODES * inverse[:, :, None]
    for i in range(n):
        highest[:, :, NODES + i] = -ones * alpha[i] * inverse
    out = np.zeros((rows, signals * NODES + n, NODES + n))
    read = out[:, : signals * NODES].reshape(rows, signals, NODES, NODES + n)
    read[:, :, 1:] = _to_nodes(highest[:, None] * gamma[:, :, :, None])
    stage = np.arange(1, NODES)
    read[:, :, stage, stage] += direct[:, :, None]
    read[:, :, 0, 0] = direct
    read[:, :, 0, NODES:] = c[:, :, :n]
    if n == 0:
        return out
    # free polynomials of the states: Σ_{k<=i} c_k τ^(i-k)/(i-k)! read off, τ^(i-k)/(i-k)! in the states
    # themselves
    taylor = _taylor(n, length)
    shifted = np.zeros((rows, signals, n, n))
    for j in range(n):
        shifted[:, :, j, j:] = c[:, :, : n - j]
    read[:, :, 1:, NODES:] += taylor[:, None] @ shifted
    powers = sigma[:, None, :] ** np.arange(n, 0, -1)[:, None]
    out[:, signals * NODES :] = ((TO_NODES[-1] * powers) @ highest).real
    for k in range(n):
        out[:, signals * NODES + k, NODES + k :] += taylor[:, -1, : n - k]
    return out


def _sums(coefficients: FloatArray, sigma: ComplexArray) -> list[ComplexArray]:
    """Σ_{k<=i} c_k σ^(i-k) for i = 0 .. n. (M, S, n + 1) ascending, (M, 6) -> n + 1 arrays (M, S, 6)."""
    total = np.repeat(coefficients[:, :, :1].astype(complex), sigma.shape[1], axis=2)
    out = [total]
    for i in range(1, coefficients.shape[2]):
        total = total * sigma[:, None, :] + coefficients[:, :, i, None]
        out.append(total)
    return out


def _to_nodes(stages: ComplexArray) -> FloatArray:
    """(M, S, 6, w) in the eigenvectors to (M, S, 12, w) at the points."""
    both = np.concatenate([stages.real, stages.imag], axis=2)
    out: FloatArray = _REAL_TO_NODES @ both
    return out


def _taylor(n: int, length: FloatArray) -> FloatArray:
    """τ^i / i! at the points, i = 0 .. n - 1: (M, 12, n)."""
    out = np.ones((len(length), STAGES, n))
    for i in range(1, n):
        out[:, :, i] = out[:, :, i - 1] * (length[:, None] * POINTS) / i
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
