"""From values to slack, and from slack to what binds.

Letters: B compensators, K plant cases, Q measures, R requirements.

    max:  slack = (limit - value) / abs(limit)        min:  slack = (value - limit) / abs(limit)

at most 1; exactly 1 at the best value the quantity can take and where it is infinite on the good side; -inf
where it is absent or infinite on the bad side. A requirement is met where its slack is >= 0.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.quantities import Measure
from synth.requirements.bounds import Bound

# Worst slacks nearer than this are one; the next-worst decides.
TIE = 1e-3
# A value as near to its limit as this, relative, stands on it: a control peak that is the limit to the last
# digit but one is met. Far below what the values are exact to.
ROUNDING = 1e-12


def slack_of(bound: Bound, values: FloatArray) -> FloatArray:
    """Slack of each value, same shape. NaN (absent) gives -inf."""
    with np.errstate(invalid="ignore", over="ignore"):
        gap = bound.limit - values if bound.side == "max" else values - bound.limit
        slack = np.minimum(gap / bound.unit, 1.0)
        slack = np.where(np.abs(slack) < ROUNDING, 0.0, slack)
        slack = np.where(np.isnan(values), -np.inf, slack)
        row = bound.measure.row
        # the best value is on the good side of a "max" where smaller is better, of a "min" where larger is
        if row.best is not None and row.better not in (None, bound.side):
            slack = np.where((values == row.best) & (slack >= 0.0), 1.0, slack)
    return slack


def judged(bounds: Sequence[Bound], case_names: Sequence[str]) -> BoolArray:
    """Whether a requirement counts on a case, (K, R)."""
    flags = [[bound.judged_on(name) for bound in bounds] for name in case_names]
    return np.array(flags, dtype=bool).reshape(len(case_names), len(bounds))


@dataclass(frozen=True, slots=True)
class Scorecard:
    """Slacks of B compensators.

    slack        (B, K, R); +inf where a requirement is not judged on a case
    worst        (B,) the least of them
    requirement  (B,) number of the binding requirement
    case         (B,) number of the binding case
    """

    slack: FloatArray
    worst: FloatArray
    requirement: IntArray
    case: IntArray

    @property
    def by_requirement(self) -> FloatArray:
        """Worst slack of each requirement over the cases, (B, R)."""
        out: FloatArray = self.slack.min(axis=1)
        return out

    @property
    def meets_all(self) -> BoolArray:
        """(B,) True where every requirement is met on every case."""
        out: BoolArray = self.worst >= 0.0
        return out


def slacks(
    bounds: Sequence[Bound], values: FloatArray, measures: Sequence[Measure], case_names: Sequence[str]
) -> Scorecard:
    """Judge values (B, K, Q) of the Q measures against R bounds. Raises ValueError: shapes do not fit."""
    expected = (len(case_names), len(measures))
    if values.ndim != 3 or values.shape[1:] != expected:
        raise ValueError(f"values must have shape (B, {expected[0]}, {expected[1]}), got {values.shape}")
    if not bounds:
        raise ValueError("there is no requirement to judge by")
    column = {measure: i for i, measure in enumerate(measures)}
    slack = np.stack([slack_of(b, values[:, :, column[b.measure]]) for b in bounds], axis=2)
    slack[:, ~judged(bounds, case_names)] = np.inf
    flat = slack.reshape(len(slack), -1)
    binding = flat.argmin(axis=1)
    worst: FloatArray = flat[np.arange(len(flat)), binding]
    case, requirement = np.divmod(binding, len(bounds))
    return Scorecard(slack, worst, requirement, case)


def order(by_requirement: FloatArray, handicap: FloatArray | None = None) -> IntArray:
    """Best first: rows of (B, R) worst slacks by their least entry, less `handicap` (B,) where given.

    Rows whose least entries lie within TIE of the best of them are ordered by the next-worst entry, and so on
    down; rows alike in all of them keep their order.
    """
    sorted_rows = np.sort(by_requirement, axis=1)
    if handicap is not None:
        sorted_rows = sorted_rows - handicap[:, None]

    def ranked(rows: list[int], level: int) -> list[int]:
        if len(rows) < 2 or level == sorted_rows.shape[1]:
            return rows
        rows = sorted(rows, key=lambda i: -sorted_rows[i, level])
        out: list[int] = []
        start = 0
        while start < len(rows):
            best = sorted_rows[rows[start], level]
            stop = start + 1
            while stop < len(rows) and (
                sorted_rows[rows[stop], level] >= best - TIE or sorted_rows[rows[stop], level] == best
            ):
                stop += 1
            out.extend(ranked(sorted(rows[start:stop]), level + 1))
            start = stop
        return out

    return np.array(ranked(list(range(len(sorted_rows))), 0), dtype=np.intp)
