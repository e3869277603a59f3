"""What the step responses of a batch must be able to tell, whatever form they are kept in.

M loops, S signals counted from their values at infinity, P blocks of CELLS cells, E points.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, Self

from synth.loop.arrays import ComplexArray, FloatArray, IntArray

CELLS = 8
"""Cells of equal width in a block."""

HERMITE = 1.0 / 384.0
"""Error of the cubic through both end values and slopes, per h^4 and fourth derivative."""


@dataclass(frozen=True, slots=True)
class Profile:
    """Coarse course of the signals: what the block plan is made from. K times, the first one 0.

    time       (M, K) increasing from 0, after the first two by a constant factor except for the last one
    deviation  (M, S, K) x - x(inf)
    envelope   (M, S, K) bound of abs(x - x(inf)) from that time on
    fourth     (M, S, K) bound of the fourth derivative from that time on
    rivals     (M, S, K) bound of the slope of all other modes over that of the slowest, where that is real;
               below 1 the signal is monotone from that time on; inf where the slowest is a pair
    area       (M, S, K) bound of the integral of abs(x - x(inf)) from that time on; None when not asked for
    others     (M, S, K) the same without the slowest mode; None when not asked for
    log_convex whether the bounds are sums of decaying exponentials
    """

    time: FloatArray
    deviation: FloatArray
    envelope: FloatArray
    fourth: FloatArray
    rivals: FloatArray
    area: FloatArray | None
    others: FloatArray | None
    log_convex: bool = True


class Signals(Protocol):
    """Sums of decaying modes. `Modes` keeps a residue for each pole, `ClusterModes` a polynomial for each
    cluster.
    """

    pole: ComplexArray

    def __len__(self) -> int: ...

    def rows(self, index: IntArray) -> Self:
        """The loops named by `index`."""

    def scaled(self, factor: FloatArray) -> Self:
        """Signals multiplied by factor (M, S)."""

    def later(self, signals: list[int], delay: FloatArray) -> Self:
        """The chosen signals seen from `delay` (M,) on: x(t + delay)."""

    def largest(self) -> FloatArray:
        """(M, S) size of the largest mode."""

    def profile(self, floor: FloatArray, areas: bool) -> Profile:
        """The signals at widely spaced times, until every mode has decayed below `floor` (M, S)."""

    def bounds(self, loop: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """(S, P) bounds of the fourth derivative and of abs(x) from t on."""

    def cell_misses(self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray) -> FloatArray:
        """(CELLS, P) cubic error in the cells of width h that start at t, for one signal each."""

    def nodes(
        self, loop: IntArray, t: FloatArray, h: FloatArray, signal: IntArray | None = None
    ) -> tuple[FloatArray, FloatArray]:
        """Values and slopes (times h) at the ends of the cells of width h that start at t: (S, CELLS + 1, P)
        each.

        loop, t, h (P,); signal (P,), and then S = 1, or None for all.
        """

    def jet(self, loop: IntArray, signal: IntArray, t: FloatArray, first: int, count: int) -> FloatArray:
        """Derivatives number first, first + 1, ... (-1: the primitive, 0 at infinity), (count, E)."""

    def curves(self, t: FloatArray) -> FloatArray:
        """x at the times t (M, T) of each loop; (M, S, T)."""

    def tail(self, loop: IntArray, signal: IntArray, t: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Integral of abs(x) from t on, and a bound of its error. (E,) each."""
