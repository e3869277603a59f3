"""What each row of a polish is after, as levels that a linear step understands.

S rows, A active cases, C constraint values a row, R requirements.

A row aims at the worst slack, or at one quantity while the worst slack keeps a reserve. The second is
written as an exact penalty: benefit + penalty · min(0, least constraint). Merits of rows with different aims
are not comparable.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.quantities import Measure
from synth.search.objective import Objective, Scores, compressed
from synth.search.outcome import Aim

PENALTY = 20.0  # enough to begin with; who needs a point that surely keeps the reserve raises it
ABSENT = -60.0  # benefit of a quantity that is not there, and the least of any; its opposite is the most
WORST_SLACK = Aim()


@dataclass(frozen=True, slots=True)
class Goals:
    """aims, and for each row which one (S,), and the level (S,) of its second quantity (NaN where it has
    none); penalty, what a unit of slack short of the reserve costs against an e-fold of the quantity."""

    aims: tuple[Aim, ...]
    aim: IntArray
    level: FloatArray
    penalty: float = PENALTY

    @classmethod
    def same(cls, count: int, aim: Aim = WORST_SLACK) -> Goals:
        """One aim for all rows."""
        return cls((aim,), np.zeros(count, dtype=np.intp), np.full(count, np.nan))

    def take(self, index: IntArray) -> Goals:
        """The goals of the rows named by `index`."""
        return Goals(self.aims, self.aim[index], self.level[index], self.penalty)


@dataclass(frozen=True, slots=True)
class Terms:
    """constraint (S, C), +inf where absent; cap (S,); gain (S, A) or None where every row aims at the
    slack."""

    constraint: FloatArray
    cap: FloatArray
    gain: FloatArray | None
    penalty: float = PENALTY

    def merit(self) -> FloatArray:
        """(S,) what a polish makes larger."""
        level: FloatArray = np.minimum(self.constraint.min(axis=1), self.cap)
        if self.gain is None:
            return level
        out: FloatArray = self.penalty * level + self.gain.min(axis=1)
        return out


def terms(objective: Objective, goals: Goals, scores: Scores) -> Terms:
    """Constraints, cap and benefit of every row."""
    rows, cases = scores.search.shape[:2]
    search = scores.search
    if all(a == WORST_SLACK for a in goals.aims):
        return Terms(search.reshape(rows, -1), np.full(rows, np.inf), None)
    search = search.copy()
    cap = np.full(rows, np.inf)
    gain = np.where(scores.case >= 0, 0.0, np.inf)
    beside = np.full((rows, cases), np.inf)
    for number, aim in enumerate(goals.aims):
        index = np.flatnonzero(goals.aim == number)
        if index.size == 0:
            continue
        if aim.without is not None:
            kept = search[index, :, aim.without]
            search[index, :, aim.without] = np.where(kept <= -20.0, kept, np.inf)  # instability still counts
        if aim.measure is not None:
            cap[index] = 0.0
            search[index] -= aim.reserve
            value = scores.values[index, :, objective.measures.index(aim.measure)]
            gain[index] = np.where(scores.case[index] >= 0, benefit(aim.measure, aim.sense, value), np.inf)
        if aim.other is not None:
            value = scores.values[index, :, objective.measures.index(aim.other)]
            level = goals.level[index, None]
            room = (level - value if aim.other_sense == "min" else value - level) / np.maximum(
                np.abs(level), 1e-300
            )
            beside[index] = np.where(scores.case[index] >= 0, compressed(room), np.inf)
    constraint = np.concatenate([search.reshape(rows, -1), beside], axis=1)
    return Terms(constraint, cap, gain, goals.penalty)


def benefit(measure: Measure, sense: str, value: FloatArray) -> FloatArray:
    """What is gained by a value: its logarithm, larger is better; the quantity's own scale keeps 0 finite."""
    scale = measure.row.scale or 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        log = np.log(np.maximum(value, 0.0) + scale)
    log = np.where(np.isnan(log), np.inf if sense == "min" else -np.inf, log)
    out: FloatArray = np.clip(-log if sense == "min" else log, ABSENT, -ABSENT)
    return out
