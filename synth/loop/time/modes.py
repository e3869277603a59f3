"""The step responses of a loop as sums of modes.

M loops, m mode slots (a complex pair is one slot, its upper pole), S signals, P blocks, E points. Signals
are counted from their values at infinity:

    x(t) - x(inf) = Re sum_i r_i e^(p_i t)        the residue of a pair counts double
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.time import last_mode
from synth.loop.time.signals import CELLS, HERMITE, Profile

OCTAVES = 120
"""Times of a profile at most; what lies further off is left to one step, and to a profile of what is then
left of the modes."""


class Modes:
    """Modal form of S signals of M loops.

    pole     (M, m) scaled, upper half plane and reals by decreasing real part; -1 in an empty slot
    residue  (M, S, m) doubled for pairs; 0 in an empty slot
    """

    def __init__(self, pole: ComplexArray, residue: ComplexArray) -> None:
        self.pole = pole
        self.residue = residue
        self.size = np.abs(residue)
        self.swing = np.abs(pole)
        m, s, slots = residue.shape
        self._pole = np.ascontiguousarray(pole.T)
        self._residue = np.ascontiguousarray(residue.reshape(m * s, slots).T)
        self._by_signal = np.ascontiguousarray(residue.transpose(1, 0, 2))
        self.fourth = self.size * (self.swing**4)[:, None]

    def __len__(self) -> int:
        return int(self.pole.shape[0])

    def readable(self) -> BoolArray:
        """(M,) whether residues and fourth powers of the poles lie within the number range."""
        inside = (self.swing > 1e-75) & (self.swing < 1e75)
        return np.asarray(inside.all(axis=1) & np.isfinite(self.residue).all(axis=(1, 2)))

    def rows(self, index: IntArray) -> Modes:
        """The loops named by `index`."""
        return Modes(self.pole[index], self.residue[index])

    def scaled(self, factor: FloatArray) -> Modes:
        """Signals multiplied by factor (M, S)."""
        return Modes(self.pole, self.residue * factor[:, :, None])

    def largest(self) -> FloatArray:
        """(M, S) largest abs(r)."""
        out: FloatArray = self.size.max(axis=2, initial=0.0)
        return out

    def later(self, signals: list[int], delay: FloatArray) -> Modes:
        """The chosen signals seen from `delay` (M,) on: x(t + delay)."""
        return Modes(self.pole, self.residue[:, signals] * np.exp(self.pole * delay[:, None])[:, None])

    @np.errstate(all="ignore")  # empty slots have no life
    def profile(self, floor: FloatArray, areas: bool) -> Profile:
        """The signals at times doubling, until every mode has decayed below `floor` (M, S)."""
        m, s, slots = self.residue.shape
        fall = -self.pole.real
        carried = self.size > 0.0
        present = carried.any(axis=1)
        t0 = 0.25 / np.where(present, self.swing, 0.0).max(axis=1, initial=1e-9)
        life = np.log(self.size * (slots / floor[:, :, None])).max(axis=1) / fall
        end = np.where(present, life, 0.0).max(axis=1, initial=0.0)
        octaves = float(np.log2((end / t0).max(initial=1.0)))
        count = int(max(octaves, 1.0)) + 2 if octaves < OCTAVES else OCTAVES
        time = np.zeros((m, count + 1))
        time[:, 1:] = t0[:, None] * np.exp2(np.arange(count))
        if count == OCTAVES:  # the way that is left in one step
            time[:, -1] = np.maximum(time[:, -1], end)
        grow = np.empty((count + 1, m, slots), dtype=complex)
        decay = np.empty(grow.shape)
        for k in range(count + 1):
            if k < 2 or k % 16 == 0 or k == OCTAVES:  # squaring doubles the rounding each time
                grow[k] = np.exp(self.pole * time[:, k, None])
                decay[k] = np.abs(grow[k])
                continue
            np.multiply(grow[k - 1], grow[k - 1], out=grow[k])
            np.multiply(decay[k - 1], decay[k - 1], out=decay[k])
        deviation = np.matmul(_real(self.residue.conj()), _real(grow).transpose(1, 2, 0))
        slot = carried.argmax(axis=2)  # of the slowest mode that the signal carries
        slow = np.arange(slots) == slot[:, :, None]
        speed = np.where(slow, 0.0, self.size * self.swing[:, None])
        weights = [self.size, self.fourth, speed]
        if areas:
            integral = self.size / fall[:, None]
            weights += [integral, np.where(slow, 0.0, integral)]
        bound = np.matmul(np.concatenate(weights, axis=1), decay.transpose(1, 2, 0))
        parts = [bound[:, k * s : (k + 1) * s] for k in range(len(weights))]
        row, column = np.arange(m)[:, None], np.arange(s)
        first = np.where(self.pole.imag == 0.0, fall, 0.0)[row, slot] * self.size[row, column, slot]
        rivals = parts[2] / (first[:, :, None] * decay.transpose(1, 2, 0)[row, slot])
        rivals[~(rivals >= 0.0)] = np.inf
        area, others = parts[3:] if areas else (None, None)
        return Profile(time, deviation, parts[0], parts[1], rivals, area, others)

    def bounds(self, loop: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """(S, P) bounds of the fourth derivative and of abs(x) from t on."""
        decay = np.exp(self.pole.real[loop] * t[:, None])[:, :, None]
        fourth: FloatArray = np.matmul(self.fourth[loop], decay)[:, :, 0].T
        envelope: FloatArray = np.matmul(self.size[loop], decay)[:, :, 0].T
        return fourth, envelope

    def cell_misses(self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray) -> FloatArray:
        """(8, P) cubic error in the cells of width h that start at t, for one signal each."""
        fall = self.pole.real[loop]
        weight = self.fourth[loop, signal] * np.exp(fall * t[:, None])
        powers = np.exp(fall[:, :, None] * (h[:, None] * np.arange(CELLS))[:, None])
        out: FloatArray = np.matmul(weight[:, None], powers)[:, 0].T * (HERMITE * h**4)
        return out

    def nodes(
        self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray | None = None
    ) -> tuple[FloatArray, FloatArray]:
        """Values and slopes (times h) at the 9 ends of the 8 cells of width h that start at t.

        loop, t, h (P,); signal (P,) or None for all. Returns two arrays (S, 9, P).

        The matrix of e^(p t) r by that of e^(p h k), k = 0..8, made by doubling: two exponentials a mode.
        """
        m, s, slots = self.residue.shape
        blocks = len(loop)
        if signal is None:
            residue = self._by_signal.take(loop, axis=1)
        else:
            residue = self.residue.reshape(m * s, slots).take(loop * s + signal, axis=0)[None]
        s = len(residue)
        pole = self.pole.take(loop, axis=0)
        step = pole * h[:, None]
        right = np.empty((CELLS + 1, blocks, slots), dtype=complex)
        right[0] = 1.0
        np.exp(step, out=right[1])
        for k in range(2, CELLS + 1):
            np.multiply(right[k // 2], right[k - k // 2], out=right[k])
        left = np.empty((2 * s, blocks, slots), dtype=complex)
        np.multiply(residue, np.exp(pole * t[:, None]), out=left[:s])
        np.multiply(left[:s], step, out=left[s:])
        np.conjugate(left, out=left)
        table = np.matmul(left.view(np.float64).transpose(1, 0, 2), right.view(np.float64).transpose(1, 2, 0))
        turned = np.ascontiguousarray(table.reshape(blocks, 2 * s * (CELLS + 1)).T)
        turned = turned.reshape(2 * s, CELLS + 1, blocks)
        return turned[:s], turned[s:]

    def jet(self, loop: IntArray, signal: IntArray, t: FloatArray, first: int, count: int) -> FloatArray:
        """Derivatives number first, first + 1, ... (-1: the primitive, 0 at infinity), (count, E)."""
        pole = self._pole.take(loop, axis=1)
        term = np.exp(pole * t)
        term *= self._residue.take(loop * self.residue.shape[1] + signal, axis=1)
        if first == -1:
            term /= pole
        elif first > 0:
            term *= pole**first
        out = np.empty((count, len(t)))
        np.add.reduce(term.real, axis=0, out=out[0])
        for k in range(1, count):
            term *= pole
            np.add.reduce(term.real, axis=0, out=out[k])
        return out

    def curves(self, t: FloatArray) -> FloatArray:
        """x - x(inf) at the times t (M, T) of each loop; (M, S, T)."""
        grow = np.exp(self.pole[:, :, None] * t[:, None, :])
        out: FloatArray = np.matmul(self.residue, grow).real
        return out

    def tail(self, loop: IntArray, signal: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Integral of abs(x) from t on, and a bound of its error. (E,) each.

        Where the slowest mode is real and its slope outweighs all others', x keeps its sign: exact. Else the
        slowest mode stands for all, and the others' areas bound the error.
        """
        slots = self.pole.shape[1]
        slot = (self.size[loop, signal] > 0.0).argmax(axis=1)
        pole, now = self.pole[loop], self.residue[loop, signal] * np.exp(self.pole[loop] * t[:, None])
        size = np.abs(now)
        others = np.where(np.arange(slots) == slot[:, None], 0.0, size)
        row = np.arange(len(loop))
        p, x = pole[row, slot], now[row, slot]
        steady = (p.imag == 0.0) & (size[row, slot] * -p.real > (others * np.abs(pole)).sum(axis=1))
        exact = np.abs((now / pole).real.sum(axis=1))
        area = np.where(steady, exact, last_mode.area(x, p))
        return area, np.where(steady, 0.0, (others / -pole.real).sum(axis=1))


def _real(array: ComplexArray) -> FloatArray:
    """A complex array (..., k) as a real one (..., 2 k), no copy when it is contiguous."""
    out: FloatArray = np.ascontiguousarray(array).view(np.float64)
    return out
