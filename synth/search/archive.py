"""Every scored candidate of a run: what the picks, the fronts and the outer exploration draw on.

S rows, V search coordinates (padded), R requirements, Q measures.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Rows:
    """Points of the search: several structures side by side.

    structure (S,) number in the task's list; x (S, V) search coordinates, 0 beyond a structure's own;
    sign (S,) of the gain; origin (S,) number of the start they descend from, -1 where there is none.
    """

    structure: IntArray
    x: FloatArray
    sign: FloatArray
    origin: IntArray

    def __len__(self) -> int:
        return int(self.structure.shape[0])

    def take(self, index: IntArray) -> Rows:
        """The rows named by `index` (integers or a mask)."""
        return Rows(self.structure[index], self.x[index], self.sign[index], self.origin[index])

    def first(self, count: int) -> Rows:
        """The first `count` rows, all where there are no more."""
        return self.take(np.arange(min(count, len(self))))

    def at(self, x: FloatArray) -> Rows:
        """The same rows moved to other coordinates."""
        return Rows(self.structure, x, self.sign, self.origin)


def joined(parts: list[Rows]) -> Rows:
    """Rows one after the other; the parts share V."""
    return Rows(
        np.concatenate([p.structure for p in parts]),
        np.concatenate([p.x for p in parts]),
        np.concatenate([p.sign for p in parts]),
        np.concatenate([p.origin for p in parts]),
    )


class Archive:
    """Append-only memory of scored rows.

    slack (S, R) exact, least over the cases each row was judged on; values (S, Q) worst case by the sense of
    the quantity; cases (S,) how many cases that was.
    """

    def __init__(self) -> None:
        self._rows: list[Rows] = []
        self._slack: list[FloatArray] = []
        self._values: list[FloatArray] = []
        self._cases: list[IntArray] = []

    def __len__(self) -> int:
        return sum(len(r) for r in self._rows)

    def add(self, rows: Rows, slack: FloatArray, values: FloatArray, cases: IntArray) -> None:
        """Remember a scored batch."""
        self._rows.append(rows)
        self._slack.append(slack)
        self._values.append(values)
        self._cases.append(cases)

    def all(self) -> tuple[Rows, FloatArray, FloatArray, IntArray]:
        """Everything so far: rows, slack (S, R), values (S, Q), cases (S,)."""
        if not self._rows:
            raise ValueError("nothing was scored yet")
        if len(self._rows) > 1:  # fold the parts together, so that the next call is cheap
            self._rows = [joined(self._rows)]
            self._slack = [np.concatenate(self._slack)]
            self._values = [np.concatenate(self._values)]
            self._cases = [np.concatenate(self._cases)]
        return self._rows[0], self._slack[0], self._values[0], self._cases[0]


def best_each(rows: Rows, guide: FloatArray, count: int) -> IntArray:
    """Numbers of the best `count` rows of every structure, one structure after the other, best first. guide
    (S,), larger is better."""
    parts = [np.flatnonzero(rows.structure == n) for n in np.unique(rows.structure)]
    return np.concatenate([index[np.argsort(-guide[index], kind="stable")[:count]] for index in parts])


def distinct(rows: Rows, guide: FloatArray, count: int, apart: float = 0.15) -> IntArray:
    """Numbers of the best `count` rows of one structure that differ by more than `apart` in some coordinate
    (or in sign), best first. guide (S,), larger is better."""
    chosen: list[int] = []
    for i in np.argsort(-guide, kind="stable"):
        near = [
            rows.sign[i] == rows.sign[j] and float(np.abs(rows.x[i] - rows.x[j]).max()) <= apart
            for j in chosen
        ]
        if not any(near):
            chosen.append(int(i))
            if len(chosen) == count:
                break
    return np.array(chosen, dtype=np.intp)
