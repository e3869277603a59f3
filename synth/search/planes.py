"""What the slopes of other points say of a row: cutting planes for a polish that comes to a kink.

A quantity that is the highest of several peaks, of abs(S) or of a response, has a slope of the highest alone.
Where two peaks are equally high the step along that slope raises the other; no step that is not tiny makes
anything better, and a polish shrinks its radius to nothing far from the optimum. The slopes at the point that
it failed to move to are those of the other peak. Minding both, it goes along the kink.

S rows, V search coordinates, C constraint values a row, K planes kept for each.

Source: C. Lemarechal, "Bundle methods in nonsmooth optimization", in: Nonsmooth Optimization, IIASA
Proceedings Series 3 (1978) 79-102: slopes of earlier points kept as cuts. Where a function is not convex a
cut may contradict the value here; it is moved up to where it does not.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray, IntArray

NEAR = 3.0  # radii, within which the slopes of another point count


@dataclass(slots=True)
class Planes:
    """The last first: x (S, K, V) where the slopes were taken, value (S, K, C) of the constraints there, +inf
    for none, slope (S, K, C, V). there (S, V), value_there (S, C): where the next are to be taken."""

    x: FloatArray
    value: FloatArray
    slope: FloatArray
    there: FloatArray
    value_there: FloatArray

    @classmethod
    def of(cls, kept: int, x: FloatArray, value: FloatArray) -> Planes:
        """None yet; the first slopes are taken where the rows are, x (S, V) with value (S, C)."""
        (count, variables), constraints = x.shape, value.shape[1]
        return cls(
            np.zeros((count, kept, variables)),
            np.full((count, kept, constraints), np.inf),
            np.zeros((count, kept, constraints, variables)),
            x.copy(),
            value.copy(),
        )

    def look(self, index: IntArray, x: FloatArray, value: FloatArray) -> None:
        """Take the next slopes of the rows named by `index` at x, where the constraints have that value."""
        self.there[index], self.value_there[index] = x, value

    def add(self, index: IntArray, slope: FloatArray) -> None:
        """Slopes (S, C, V) that were taken there; the oldest are forgotten."""
        parts = ((self.x, self.there), (self.value, self.value_there))
        for kept, new in (*((k, n[index]) for k, n in parts), (self.slope, slope)):
            kept[index] = np.concatenate([new[:, None], kept[index, :-1]], axis=1)

    def beside(
        self, index: IntArray, x: FloatArray, constraint: FloatArray, slope: FloatArray, radius: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """The constraints at x and their slopes, followed by what each plane near x says of them.

        At x a plane says no less than the constraint there: a peak that is lower is all that it can tell of.
        x (S, V), constraint (S, C), slope (S, C, V), radius (S,) -> (S, (1 + K) C), (S, (1 + K) C, V).
        """
        count, kept = len(index), self.x.shape[1]
        if kept == 0:
            return constraint, slope
        away = x[:, None, :] - self.x[index]
        distance = np.abs(away).max(axis=2)
        use = (distance > 0.0) & (distance <= NEAR * radius[:, None])
        value = self.value[index] + np.einsum("skcv,skv->skc", self.slope[index], away)
        value = np.where(use[:, :, None], np.maximum(value, constraint[:, None, :]), np.inf)
        return (
            np.concatenate([constraint, value.reshape(count, -1)], axis=1),
            np.concatenate([slope, self.slope[index].reshape(count, -1, x.shape[1])], axis=1),
        )
