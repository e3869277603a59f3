"""Where to start looking for the roots of D(s) + N(s) e^(-s θ). M loops; scaled time."""

from __future__ import annotations

from math import comb, factorial

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.newton import columnwise, value_at
from synth.loop.poles.roots import closed_roots

# Order of the rational stand-in of the delay whose roots are the near seeds. A higher one costs more than it
# saves: what is missing is located afterwards.
STAND_IN = 2
# Real roots too far to the left for the stand-in, in units of -1/θ.
LEFT = (4.5, 6.5)
# Rounds that put a seed on the chain; Newton's method does the rest.
ROUNDS = 4


def seeds_of(loops: Loops, pairs: int) -> ComplexArray:
    """Seeds near the origin and of `pairs` chain pairs; with long delays the poles of L too, near which roots
    gather. (M, q), not finite where there is none."""
    left = -np.array(LEFT) / loops.dead_time[:, None]
    seeds = [_near(loops), left.astype(complex), _on_chain(loops, pairs)]
    if pairs > 4:
        seeds.append(closed_roots(loops.denominator))
    return np.concatenate(seeds, axis=1)


def _near(loops: Loops) -> ComplexArray:
    """Roots of D Q + N P with the diagonal Padé quotient P/Q; good for abs(s) θ up to about its order."""
    m = STAND_IN
    powers = loops.dead_time[:, None] ** np.arange(m, -1, -1)
    weights = np.array([comb(m, k) * factorial(2 * m - k) / factorial(2 * m) for k in range(m, -1, -1)])
    below: FloatArray = powers * weights
    above = below * (-1.0) ** np.arange(m, -1, -1)
    order = loops.order
    total = np.zeros((len(loops), order + m + 1))
    for k in range(m + 1):
        total[:, k : k + order + 1] += (
            below[:, k, None] * loops.denominator + above[:, k, None] * loops.numerator
        )
    return closed_roots(total, polish=False)


def _on_chain(loops: Loops, pairs: int) -> ComplexArray:
    """s θ = ln(-N/D) + 2πjk for k = 1 .. pairs, iterated; both halves of each pair."""
    delay = loops.dead_time
    turns = 2.0j * np.pi * np.arange(1, pairs + 1)[:, None]
    lead = (loops.numerator != 0.0).argmax(axis=1)
    first = loops.numerator[np.arange(len(loops)), lead] / loops.denominator[:, 0]
    falls = lead.astype(float)
    above, below = columnwise(loops.numerator), columnwise(loops.denominator) * first
    level = np.log(-first.astype(complex))
    s = (level + turns) / delay
    for _ in range(ROUNDS):
        # the leading ratio by its own logarithm, which turns steadily with s, and the rest by the principal
        # one
        log = np.log(s)
        rest = np.log(value_at(above, s) / value_at(below, s) * np.exp(falls * log))
        better = (level - falls * log + rest + turns) / delay
        s = np.where(np.isfinite(better), better, s)
    return np.concatenate([s, np.conj(s)], axis=0).T
