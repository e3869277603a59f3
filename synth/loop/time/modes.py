"""The step responses of a loop as sums of modes: residues over the computed poles.

M loops, n poles, m mode slots (a complex pair is one slot, its upper pole), S signals.

    x(t) = x(inf) + Re sum_i r_i e^(p_i t)        a pair's residue counts double

The residues are products over the COMPUTED poles. Those are the exact poles of a nearby loop, so their errors
cancel in the sum; residues from the derivative of the polynomial lose every digit at near-equal poles.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops, exact_degree, trimmed

SIGNALS = ("y", "u", "d")
"""Reference step: output y and control u; step at the plant's input: output d."""


@dataclass(frozen=True, slots=True)
class Modes:
    """Modal form of S signals of M loops.

    pole     (M, m) scaled, upper half plane and reals; -1 in an empty slot
    residue  (M, S, m) doubled for pairs; 0 in an empty slot
    limit    (M, S) value at infinity
    start    (M, S) value at 0+
    """

    pole: ComplexArray
    residue: ComplexArray
    limit: FloatArray
    start: FloatArray

    def rows(self, index: IntArray) -> Modes:
        """The loops named by `index`, with no more slots than they need."""
        return Modes(self.pole[index], self.residue[index], self.limit[index], self.start[index])


def numerator_of(loops: Loops, signal: str) -> FloatArray:
    """(M, n + 1) numerator of T, C S or P S over the characteristic polynomial."""
    return {"y": loops.numerator, "u": loops.control, "d": loops.load}[signal]


def upper_half(poles: ComplexArray) -> tuple[ComplexArray, FloatArray]:
    """(M, n) poles -> (M, m) upper half plane and reals first come, and (M, m) weights: 2 a pair, 1 a real, 0 empty."""
    keep = poles.imag >= 0.0
    m = int(keep.sum(axis=1).max(initial=0))
    order = np.argsort(~keep, axis=1, kind="stable")[:, :m]
    pole = np.take_along_axis(poles, order, axis=1)
    weight = np.where(pole.imag > 0.0, 2.0, 1.0)
    used = np.take_along_axis(keep, order, axis=1)
    return np.where(used, pole, -1.0), np.where(used, weight, 0.0)


def step_modes(loops: Loops, poles: ComplexArray, signals: tuple[str, ...]) -> Modes:
    """Residues of the step responses of the named signals.

    Error relative to the signal: about eps max|r| / max|x|, which is what the switch to clusters looks at.
    """
    n = loops.order
    pole, weight = upper_half(poles)
    m = pole.shape[1]
    lead = loops.closed[:, 0]
    gap = pole[:, :, None] - poles[:, None, :]
    gap[np.arange(len(loops))[:, None], np.arange(m), _own(poles, m)] = 1.0
    with np.errstate(all="ignore"):  # equal poles divide by zero; an empty slot may do anything
        bottom = lead[:, None] * pole * gap.prod(axis=2)
        factor = np.where(weight > 0.0, weight / bottom, 0.0)
    size = (len(loops), len(signals))
    residue = np.zeros((*size, m), dtype=complex)
    limit, start = np.empty(size), np.empty(size)
    for i, name in enumerate(signals):
        top = trimmed(numerator_of(loops, name), n)
        value = np.repeat(top[:, :1].astype(complex), m, axis=1)
        for k in range(1, n + 1):
            value = value * pole + top[:, k, None]
        with np.errstate(all="ignore"):
            residue[:, i] = value * factor
        limit[:, i] = top[:, -1] / loops.closed[:, -1]
        start[:, i] = top[:, 0] / lead
    return Modes(pole, residue, limit, start)


def _own(poles: ComplexArray, m: int) -> IntArray:
    """(M, m) which column of `poles` each slot came from."""
    return np.argsort(~(poles.imag >= 0.0), axis=1, kind="stable")[:, :m]


def at(modes: Modes, loop: IntArray, t: FloatArray, order: int = 0) -> FloatArray:
    """Derivative number `order` (-1 is the primitive of x - limit that vanishes at infinity).

    loop (E,), t (E,) or (E, W) -> (E, S, ...)
    """
    pole = modes.pole[loop]
    grow = np.exp(pole.reshape(pole.shape + (1,) * (t.ndim - 1)) * t[:, None])
    weight = modes.residue[loop] * pole[:, None, :] ** order
    out: FloatArray = np.einsum("esm,em...->es...", weight, grow).real
    if order == 0:
        out = out + modes.limit[loop].reshape(out.shape[:2] + (1,) * (out.ndim - 2))
    return out


__all__ = ["SIGNALS", "Modes", "at", "exact_degree", "numerator_of", "step_modes", "upper_half"]
