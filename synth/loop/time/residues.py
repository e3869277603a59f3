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


def numerator_of(loops: Loops, signal: str) -> FloatArray:
    """(M, n + 1) numerator of T ("y"), C S ("u") or P S ("d") over the characteristic polynomial."""
    rows = {"y": loops.numerator, "u": loops.control, "d": loops.load}[signal]
    return trimmed(rows, loops.order)


def upper_half(poles: ComplexArray) -> tuple[ComplexArray, FloatArray, IntArray]:
    """Poles (M, n) of the upper half plane and the real ones, in their order.

    Returns (M, m) poles with -1 in empty slots, (M, m) weights (2 a pair, 1 a real, 0 an empty slot) and the
    column (M, m) each came from.
    """
    keep = (poles.imag >= 0.0) & ~np.isnan(poles)
    m = int(keep.sum(axis=1).max(initial=0))
    column: IntArray = np.argsort(~keep, axis=1, kind="stable")[:, :m]
    pole = np.take_along_axis(poles, column, axis=1)
    used = np.take_along_axis(keep, column, axis=1)
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
        gap[np.broadcast_to(padding[:, None, :], gap.shape)] = 1.0
    np.put_along_axis(gap, column[:, :, None], 1.0, axis=2)
    with np.errstate(all="ignore"):
        factor = weight / (loops.leading(loops.closed)[:, None] * pole * gap.prod(axis=2))
        factor[weight == 0.0] = 0.0
        residue = np.empty((m, len(signals), slots), dtype=complex)
        for i, name in enumerate(signals):
            top = numerator_of(loops, name)
            value = np.zeros((m, slots), dtype=complex)
            value += top[:, :1]
            for k in range(1, top.shape[1]):
                value *= pole
                value += top[:, k, None]
            np.multiply(value, factor, out=residue[:, i])
    return Modes(pole, residue)


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
    top = [numerator_of(loops, name) for name in signals]
    closed = loops.leading(loops.closed)
    start = np.stack([loops.leading(p) / closed for p in top], axis=1)
    end = np.stack([p[:, -1] / loops.closed[:, -1] for p in top], axis=1)
    return start, end
