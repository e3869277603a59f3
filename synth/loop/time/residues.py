"""Residues of the step responses of T, C S and P S over the computed poles, and whether they can be trusted.

M loops, n poles, m mode slots, S signals. The residues are products over the COMPUTED poles. Those are the
exact poles of a nearby loop, so their errors cancel in the sum; residues from the derivative of the
polynomial lose every digit at near-equal poles.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops, trimmed
from synth.loop.time.modes import Modes

CROWDED = 1e5
"""Crowding of the poles from which on close poles are taken together."""


def numerators_of(loops: Loops, signals: tuple[str, ...]) -> FloatArray:
    """(M, n + 1, S) numerators of T ("y"), C S ("u") and P S ("d") over the characteristic polynomial."""
    rows = {"y": loops.numerator, "u": loops.control, "d": loops.load}
    out = np.empty((*loops.closed.shape, len(signals)))
    for i, signal in enumerate(signals):
        out[:, :, i] = trimmed(rows[signal], loops.order)
    return out


def upper_half(poles: ComplexArray) -> tuple[ComplexArray, FloatArray, IntArray]:
    """Poles (M, n) of the upper half plane and the real ones, in their order.

    Returns (M, m) poles with -1 in empty slots, (M, m) weights (2 a pair, 1 a real, 0 an empty slot) and the
    column (M, m) each came from.
    """
    keep = (poles.imag >= 0.0) & ~np.isnan(poles)
    m = int(keep.sum(axis=1).max(initial=0))
    column: IntArray = np.argsort(~keep, axis=1, kind="stable")[:, :m]
    row = np.arange(len(poles))[:, None]
    pole, used = poles[row, column], keep[row, column]
    weight = np.where(used, np.where(pole.imag > 0.0, 2.0, 1.0), 0.0)
    return np.where(used, pole, -1.0), weight, column


def step_modes(loops: Loops, poles: ComplexArray, signals: tuple[str, ...]) -> Modes:
    """Residues of the step responses of the named signals.

    Error relative to the signal: about eps max abs(r) / max abs(x); infinite residues where poles coincide
    exactly.
    """
    if poles.shape[1] == 0:  # a static loop
        return Modes(
            np.full((len(loops), 1), -1.0 + 0.0j), np.zeros((len(loops), len(signals), 1), dtype=complex)
        )
    pole, weight, column = upper_half(poles)
    m, slots = pole.shape
    gap = pole[:, :, None] - poles[:, None, :]
    padding = np.isnan(poles)
    if padding.any():
        np.copyto(gap, 1.0, where=padding[:, None, :])
    gap[np.arange(m)[:, None], np.arange(slots), column] = 1.0
    tops = numerators_of(loops, signals)[:, :, :, None]
    value = np.zeros((m, len(signals), slots), dtype=complex)
    value += tops[:, 0]
    with np.errstate(all="ignore"):
        factor = weight / (loops.leading(loops.closed)[:, None] * pole * gap.prod(axis=2))
        factor[weight == 0.0] = 0.0
        for k in range(1, tops.shape[1]):
            value *= pole[:, None]
            value += tops[:, k]
        value *= factor[:, None]
    return Modes(pole, value)


def crowding(poles: ComplexArray) -> FloatArray:
    """(M,) about how much larger residues are than they would be with the poles apart: the loss of digits.

    The product of the relative distances of the most crowded pole, where they are below 1, inverted. inf
    where poles coincide.
    """
    size = np.abs(poles)
    gap = np.abs(poles[:, :, None] - poles[:, None, :])
    gap /= np.maximum(size[:, :, None], size[:, None, :])
    index = np.arange(poles.shape[1])
    gap[:, index, index] = 1.0
    with np.errstate(divide="ignore", over="ignore"):
        out: FloatArray = 1.0 / np.fmin(gap, 1.0).prod(axis=2).min(axis=1, initial=1.0)
    return out


def limits(loops: Loops, signals: tuple[str, ...]) -> tuple[FloatArray, FloatArray]:
    """Values of the named signals at 0+ and at infinity, (M, S) each."""
    top = numerators_of(loops, signals)
    start: FloatArray = loops.leading(top) / loops.leading(loops.closed)[:, None]
    end: FloatArray = top[:, -1] / loops.closed[:, -1:]
    return start, end
