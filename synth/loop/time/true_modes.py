"""Late responses of loops with dead time, as sums over the true roots of D + N e^(-s θ).

M loops, q modes, S signals. Own time τ: u at τ, y and d one delay later, so that no mode carries e^(pθ).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.delayed import characteristic
from synth.loop.polynomials import horner
from synth.loop.time.collocation import GRID, NODES

# Panels are cut so that each mode is a polynomial of degree 12 on them to this part of the signal's unit.
FINE = 1e-10
# A mode below this part of the unit is left out of the cutting of panels.
GONE = 1e-13


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

    def at(self, time: FloatArray) -> FloatArray:
        """Values at own times (M, T) -> (M, S, T)."""
        growth = np.exp(self.pole[:, :, None] * time[:, None, :])
        out: FloatArray = (self.residue @ growth).real + self.final[:, :, None]
        return out


def true_modes(loops: Loops, numerators: FloatArray, poles: ComplexArray) -> TrueModes:
    """Residues at simple roots: numerator(p) / (p Δ'(p)).

    numerators : (M, S, n + 1); poles : (M, q) NaN padded, pairs complete. A double root has no such residue:
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
        parts = [horner(numerators[:, s], safe) * weight for s in range(numerators.shape[1])]
        residue = np.stack(parts, axis=1)
        residue = np.where(there[:, None, :] & np.isfinite(residue), residue, 0.0)
        final = numerators[:, :, -1] / (loops.denominator[:, -1] + loops.numerator[:, -1])[:, None]
    return TrueModes(np.where(there, pole, -1.0 / loops.dead_time[:, None]), residue, final)


def units(modes: TrueModes, delay: FloatArray) -> FloatArray:
    """A size of each signal: its largest sampled value or final value. (M, S).

    Residues are no measure of size: those of close poles are large and cancel.
    """
    slow = 6.0 / np.maximum(-modes.pole[:, 0].real, 1e-300)
    ratio = np.maximum(slow / delay, 2.0)
    time = delay[:, None] * ratio[:, None] ** np.linspace(0.0, 1.0, 20)
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


def late_panels(
    modes: TrueModes, unit: FloatArray, start: FloatArray, end: FloatArray, most: int
) -> tuple[IntArray, FloatArray, FloatArray, FloatArray]:
    """Panels of the modes' sum from `start` to `end` (M,), at most `most` to a loop.

    Returns owner (B,), start (B,), length (B,) and values (B, S, 13), in order of loop and time. Lengths are
    powers of two of the shortest of the loop, so a loop needs few tables of exponentials.
    """
    rate = np.abs(modes.pole)
    first = 2.0 ** np.floor(np.log2(2.0 / rate.max(axis=1)))
    time, active = start.copy(), np.flatnonzero(end > start)
    step = np.zeros(len(start), dtype=np.intp)
    owners, starts, powers = [], [], []
    relative = np.abs(modes.residue) / np.maximum(unit, 1e-300)[:, :, None]
    size = relative.max(axis=1)
    for _ in range(most):
        if active.size == 0:
            break
        left = size[active] * np.exp(modes.pole[active].real * time[active, None])
        # 2 (z/2)^13 / 13! of the mode is the interpolation error with z = abs(p) h / 2
        with np.errstate(divide="ignore", over="ignore"):
            reach = 4.0 * (FINE * 3.1e9 / left) ** (1.0 / 13.0) / rate[active]
        h = np.where(left > GONE, reach, np.inf).min(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            power = np.floor(np.log2(h / first[active]))
        power = np.clip(power, 0.0, step[active] + 1.0)
        step[active] = power.astype(np.intp)
        owners.append(active)
        starts.append(time[active])
        powers.append(step[active])
        time[active] += first[active] * 2.0 ** step[active]
        active = active[time[active] < end[active]]
    if not owners:
        empty = np.zeros(0)
        return np.zeros(0, dtype=np.intp), empty, empty, np.zeros((0, modes.residue.shape[1], NODES))
    owner, begin, kind = np.concatenate(owners), np.concatenate(starts), np.concatenate(powers)
    order = np.lexsort((begin, owner))
    owner, begin, kind = owner[order], begin[order], kind[order]
    values = np.empty((len(owner), modes.residue.shape[1], NODES))
    table, level = np.exp(modes.pole[:, :, None] * (first[:, None, None] * GRID)), 0
    for one in range(int(kind.max()) + 1):
        at = np.flatnonzero(kind == one)
        while level < one:
            table, level = table * table, level + 1
        if at.size:
            who = owner[at]
            weight = modes.residue[who] * np.exp(modes.pole[who] * begin[at, None])[:, None, :]
            values[at] = (weight @ table[who]).real + modes.final[who][:, :, None]
    return owner, begin, first[owner] * 2.0**kind, values
