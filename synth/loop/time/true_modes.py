"""Late responses of loops with dead time, as sums over the true roots of D + N e^(-s θ).

M loops, q modes, S signals. Own time τ: u at τ, y and d one delay later, so that no mode carries e^(pθ).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.newton import characteristic
from synth.loop.polynomials import horner
from synth.loop.time.collocation import GRID, NODES

# Panels are cut so that each mode is a polynomial of degree 12 on them to this part of the signal's unit.
FINE = 1e-10
# A mode below this part of the unit is left out of the cutting of panels.
GONE = 1e-13
# Panels made at once: few enough to stay in the cache of a core.
BLOCK = 1024


@dataclass(frozen=True, slots=True)
class TrueModes:
    """signal = final + Re Σ residue e^(pole τ), over the roots of the upper half plane and the real ones.

    pole (M, q), residue (M, S, q) (doubled for pairs, 0 where there is no mode), final (M, S).
    The first mode is the rightmost.
    """

    pole: ComplexArray
    residue: ComplexArray
    final: FloatArray

    def rows(self, index: IntArray) -> TrueModes:
        """The loops named by `index`."""
        return TrueModes(self.pole[index], self.residue[index], self.final[index])

    def signals(self, number: IntArray) -> TrueModes:
        """The signals numbered alone."""
        return TrueModes(self.pole, self.residue[:, number], self.final[:, number])

    def at(self, time: FloatArray) -> FloatArray:
        """Values at own times (M, T) -> (M, S, T)."""
        growth = np.exp(self.pole[:, :, None] * time[:, None, :])
        out: FloatArray = (self.residue @ growth).real + self.final[:, :, None]
        return out


def true_modes(loops: Loops, numerators: FloatArray, poles: ComplexArray) -> TrueModes:
    """Residues at simple roots: numerator(p) / (p Δ'(p)).

    numerators : (S, M, n + 1); poles : (M, q) NaN padded, pairs complete. A double root has no such residue:
    the caller compares the sum with the marched response and sees that it does not fit.
    """
    if poles.shape[1] == 0:  # a static loop of nothing: one mode without a residue stands in
        poles = np.full((len(poles), 1), np.nan, dtype=complex)
    upper = (poles.imag >= 0.0) & np.isfinite(poles.real)
    order = np.argsort(np.where(upper, -poles.real, np.inf), axis=1, kind="stable")
    width = int(upper.sum(axis=1).max(initial=1))
    pole = np.take_along_axis(np.where(upper, poles, np.nan), order, axis=1)[:, :width]
    there = np.isfinite(pole.real)
    safe = np.where(there, pole, -1.0)
    with np.errstate(all="ignore"):
        _, slope = characteristic(loops, safe)
        weight = np.where(safe.imag > 0.0, 2.0, 1.0) / (safe * slope)
        parts = [horner(one, safe) * weight for one in numerators]
        residue = np.stack(parts, axis=1)
        residue = np.where(there[:, None, :] & np.isfinite(residue), residue, 0.0)
        final = (numerators[:, :, -1] / (loops.denominator[:, -1] + loops.numerator[:, -1])).T
    return TrueModes(np.where(there, pole, -1.0 / loops.dead_time[:, None]), residue, final)


def units(modes: TrueModes, delay: FloatArray) -> FloatArray:
    """A size of each signal: its largest sampled value or final value. (M, S).

    Residues are no measure of size: those of close poles are large and cancel.
    """
    slow = 6.0 / np.maximum(-modes.pole[:, 0].real, 1e-300)
    ratio = np.maximum(slow / delay, 2.0)
    time = delay[:, None] * ratio[:, None] ** np.linspace(0.0, 1.0, 12)
    out: FloatArray = np.fmax(np.abs(modes.at(time)).max(axis=2), np.abs(modes.final))
    return out


def alone_from(modes: TrueModes, unit: FloatArray, fine: float) -> FloatArray:
    """Own time from which the rightmost mode alone is left in every signal, or not even it, to `fine` units.
    (M,)."""
    with np.errstate(all="ignore"):
        size = np.abs(modes.residue) * modes.pole.shape[1] / (fine * unit[:, :, None])
        fade = np.where(size > 1.0, np.log(size), 0.0) / -modes.pole.real[:, None, :]
    others = fade[:, :, 1:].max(axis=2, initial=0.0)
    out: FloatArray = np.minimum(others, fade.max(axis=2)).max(axis=1)
    return out


def geometric(first: ComplexArray, ratio: ComplexArray, count: int) -> ComplexArray:
    """first · ratio^k for k = 0 .. count - 1: (M, q) -> (M, count, q), by doubling."""
    out = np.empty((len(first), count, first.shape[1]), dtype=complex)
    out[:, 0] = first
    done, step = 1, ratio
    while done < count:
        more = min(done, count - done)
        np.multiply(out[:, :more], step[:, None], out=out[:, done : done + more])
        done, step = done + more, step * step
    return out


@dataclass(frozen=True, slots=True)
class LatePanels:
    """Panels of late responses in order of loop and time: owner, start, length, level (B,); the length is
    base (M,) times 2^level."""

    owner: IntArray
    start: FloatArray
    length: FloatArray
    level: IntArray
    base: FloatArray


def late_panels(
    modes: TrueModes, unit: FloatArray, start: FloatArray, end: FloatArray, most: int
) -> LatePanels:
    """Panels for the modes' sum from `start` to `end` (M,), at most `most` to a loop.

    A mode A e^(pτ) is a polynomial of degree 12 on a panel of length h to 2 (abs(p) h / 4)^13 / 13! of its
    size: h may grow by e^(abs(Re p) τ / 13) until the mode is gone. Lengths are powers of two of the first,
    so a loop needs few tables of exponentials.
    """
    rate, fall = np.abs(modes.pole), -modes.pole.real / NODES
    size = (np.abs(modes.residue) / np.maximum(unit, 1e-300)[:, :, None]).max(axis=1)
    with np.errstate(all="ignore"):
        # logs of the length allowed at τ = 0, and the time from which the mode is gone
        reach = np.log(4.0 * (FINE * 3.1e9 / size) ** (1.0 / NODES) / rate)
        gone = np.where(size > GONE, np.log(size / GONE), -np.inf) / (NODES * fall)
        begin = np.where(gone > start[:, None], reach + fall * start[:, None], np.inf).min(axis=1)
        base = np.minimum(np.exp(begin), end - start)
        levels = int(np.ceil(np.log2(((end - start) / base).clip(max=1e18).max(initial=1.0)))) + 1
        step = base[:, None] * 2.0 ** np.arange(levels)
        # from when on every mode allows a level
        allowed = (np.log(step)[:, :, None] - reach[:, None]) / fall[:, None]
        allowed = np.minimum(allowed, gone[:, None]).max(axis=2)
    until = np.minimum(np.append(allowed[:, 1:], end[:, None], axis=1), end[:, None])
    until[:, -1] = end
    count = np.empty((len(start), levels), dtype=np.intp)
    first = np.empty((len(start), levels))
    time, room = start.copy(), np.full(len(start), most)
    for k in range(levels):
        first[:, k] = time
        count[:, k] = np.clip(np.ceil((until[:, k] - time) / step[:, k]), 0, room)
        time, room = time + count[:, k] * step[:, k], room - count[:, k]
    flat = count.ravel()
    which = np.repeat(np.arange(len(flat)), flat)
    within = np.arange(len(which)) - np.repeat(np.cumsum(flat) - flat, flat)
    length = step.ravel()[which]
    owner, level = np.divmod(which, levels)
    return LatePanels(owner, first.ravel()[which] + within * length, length, level, base)


def fill(modes: TrueModes, panels: LatePanels, out: FloatArray, place: IntArray) -> None:
    """The signals on late panels, written to the panels `place` (S, B) of out (B', 13)."""
    # Re Σ weight · exponential as one real product: the weights and the conjugate exponentials, seen as real
    exponent = np.conj(modes.pole) * panels.base[:, None]
    table, level = np.exp(exponent[:, None, :] * GRID[:, None]), 0
    for one in range(int(panels.level.max(initial=-1)) + 1):
        same = np.flatnonzero(panels.level == one)
        while same.size and level < one:
            np.multiply(table, table, out=table)
            level += 1
        for begin in range(0, same.size, BLOCK):
            at = same[begin : begin + BLOCK]
            who = panels.owner[at]
            growth = np.exp(modes.pole[who] * panels.start[at, None])
            weight = (modes.residue[who] * growth[:, None]).view(float)
            found = weight @ table.view(float)[who].swapaxes(1, 2)
            found += modes.final[who][:, :, None]
            out[place[:, at]] = found.swapaxes(0, 1)
