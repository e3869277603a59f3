"""A batch of search points in, slacks out. The active cases live here.

S rows, A active cases at most (padded), R requirements, Q measures, K cases known.

Two slacks are kept. The exact one decides what is met. The search slack has the same sign and a slope where
the exact one has none: compressed below -1, a continuous stand-in for a settling time that is not met, and
far below everything a bounded term in the spectral abscissa for a loop that is not stable.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray, IntArray
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import Screen, evaluate
from synth.loop.quantities import Measure
from synth.requirements import judged, slack_of
from synth.search.archive import Archive, Rows
from synth.search.outcome import Task
from synth.search.scales import Scales, scales_of
from synth.structures import Structure

ABSENT = -12.0  # search slack of a quantity that a stable loop does not have; below any compressed slack
REACH = 3.5 * float(np.log(10.0))  # of corners, beyond the slowest and the fastest mark
SLOWER = 2.0 * float(np.log(10.0))  # and of an integral time beyond even that
UNSTABLE = -20.0  # and of every requirement on a loop that is not stable, less a term in the abscissa


@dataclass(frozen=True, slots=True)
class Scores:
    """What a batch scored.

    case    (S, A) case number, -1 where a row has fewer active cases
    exact   (S, A, R) slack, -inf where absent, +inf where not judged
    search  (S, A, R) slack with slopes, +inf where not judged
    values  (S, A, Q), NaN absent
    stable  (S,) on all the cases judged
    """

    case: IntArray
    exact: FloatArray
    search: FloatArray
    values: FloatArray
    stable: BoolArray

    def worst(self) -> FloatArray:
        """(S,) exact worst slack over requirements and the cases judged."""
        out: FloatArray = self.exact.min(axis=(1, 2))
        return out

    def guide(self) -> FloatArray:
        """(S,) worst search slack."""
        out: FloatArray = self.search.min(axis=(1, 2))
        return out

    def take(self, index: IntArray) -> Scores:
        """The rows named by `index`."""
        return Scores(
            self.case[index], self.exact[index], self.search[index], self.values[index], self.stable[index]
        )


class Objective:
    """Scores rows of any structure against the sheet, on the cases that are active for each structure.

    measures   Q: those of the requirements, then what else is asked for at the moment
    kept       those of them that the archive remembers
    active     for each structure the case numbers it is judged on; starts with the nominal
    evaluations  loops scored so far (one compensator on one plant)
    delayed    whether some case has dead time; by_stand_in: whether time responses with dead time come from
               the rational stand-in at the moment, as they do while the search is on its way
    by_the_letter  whether a settling time that is not met counts as it is at the moment, without its stand-in
    """

    def __init__(self, task: Task, extra: tuple[Measure, ...] = ()) -> None:
        self.task = task
        self.structures = task.structures
        self.width = max(len(s.parameters) for s in task.structures)
        self.plants = task.plants
        self.case_names = task.case_names
        self.scales: Scales = scales_of(task.plants)
        self.boxes = [_box(s, task, self.scales) for s in task.structures]
        self.active: list[tuple[int, ...]] = [(0,) for _ in task.structures]
        self.archive = Archive()
        self.evaluations = 0
        self.delayed = bool((task.plants.dead_time > 0.0).any())
        self.by_stand_in = False
        self.by_the_letter = False
        wanted = [b.measure for b in task.bounds] + list(extra)
        self.measures = self.kept = tuple(dict.fromkeys(wanted))
        self.column = [self.measures.index(b.measure) for b in task.bounds]
        self._late: dict[int, int] = {}  # requirement -> number of its stand-in
        late: list[Measure] = []
        for r, bound in enumerate(task.bounds):
            if bound.measure.quantity == "settling_time" and bound.side == "max" and bound.limit > 0.0:
                self._late[r] = len(late)
                late.append(Measure("late_deviation", after=bound.limit))
        self._stand_ins = tuple(late)
        self.screen = _screen(task)
        self.judged = judged(self.task.bounds, self.case_names)

    @contextmanager
    def asking(self, extra: tuple[Measure, ...]) -> Iterator[None]:
        """Score further measures for a while, those that are not asked for anyway."""
        before = self.measures
        self.measures = tuple(dict.fromkeys([*before, *extra]))
        try:
            yield
        finally:
            self.measures = before

    @contextmanager
    def approximating(self) -> Iterator[None]:
        """Let time responses with dead time come from the rational stand-in for a while."""
        before = self.by_stand_in
        self.by_stand_in = self.delayed
        try:
            yield
        finally:
            self.by_stand_in = before

    @contextmanager
    def literally(self) -> Iterator[None]:
        """Let a settling time that is not met count as it is for a while, jumps and all."""
        before = self.by_the_letter
        self.by_the_letter = True
        try:
            yield
        finally:
            self.by_the_letter = before

    def add_cases(self, plants: Rational, names: tuple[str, ...]) -> None:
        """Make further plants cases of the search (points inside the tolerance box that failed)."""
        self.plants = stacked(self.plants, plants)
        self.case_names = self.case_names + names
        self.judged = judged(self.task.bounds, self.case_names)

    def everywhere(self) -> list[tuple[int, ...]]:
        """All the cases, for each structure."""
        return [tuple(range(len(self.case_names)))] * len(self.structures)

    def activate(self, s: int, cases: Sequence[int]) -> None:
        """Judge structure s on these cases too from now on."""
        self.active[s] = tuple(dict.fromkeys([*self.active[s], *cases]))

    def theta(self, rows: Rows) -> list[FloatArray]:
        """Tuned values in SI, one array (P,) a row."""
        out: list[FloatArray] = [np.zeros(0)] * len(rows)
        for s in np.unique(rows.structure):
            index = np.flatnonzero(rows.structure == s)
            for i, one in zip(index, self._theta(rows, int(s), index), strict=True):
                out[int(i)] = one
        return out

    def _theta(self, rows: Rows, s: int, index: IntArray) -> FloatArray:
        structure = self.structures[s]
        x = rows.x[index, : len(structure.parameters)]
        return structure.from_search(x, rows.sign[index], self.scales.time, self.scales.gain)

    def rows_of(self, s: int, theta: FloatArray, origin: IntArray | int = -1) -> Rows:
        """Rows of structure s from tuned values (B, P), brought inside its box."""
        x, sign = self.structures[s].to_search(theta, self.scales.time, self.scales.gain)
        return self.rows_at(s, x, sign, origin)

    def rows_at(self, s: int, x: FloatArray, sign: FloatArray | float, origin: IntArray | int = -1) -> Rows:
        """Rows of structure s from search coordinates (B, P), brought inside its box. One sign and one origin
        for all, or (B,) of them."""
        count = len(x)
        wide = np.zeros((count, self.width))
        wide[:, : x.shape[1]] = np.clip(x, *self.boxes[s])
        return Rows(np.full(count, s), wide, np.full(count, sign, dtype=float), np.full(count, origin))

    def limits(self, rows: Rows) -> tuple[FloatArray, FloatArray, BoolArray]:
        """(S, V) lower and upper ends of the coordinates, and which of them the row has."""
        low, high = np.zeros(rows.x.shape), np.zeros(rows.x.shape)
        free = np.zeros(rows.x.shape, dtype=bool)
        for s in np.unique(rows.structure):
            index = rows.structure == s
            box = self.boxes[int(s)]
            low[index, : len(box[0])], high[index, : len(box[1])] = box
            free[index, : len(box[0])] = True
        return low, high, free

    def realise(self, rows: Rows) -> Rational:
        """C(s) of every row, padded to one width."""
        parts = []
        for s in np.unique(rows.structure):
            index = np.flatnonzero(rows.structure == s)
            parts.append((index, self.structures[int(s)].realise(self._theta(rows, int(s), index))))
        return placed(parts)

    def score(
        self,
        rows: Rows,
        cases: list[tuple[int, ...]] | None = None,
        *,
        remember: bool = True,
        hasty: bool = False,
    ) -> Scores:
        """Score every row on the active cases of its structure, or on the cases given for each structure.

        hasty : do not follow the responses of loops that ring for long or come near to instability; what is
        not looked at counts as absent. For starts, of which the best are wanted.
        """
        judged_on = self.active if cases is None else cases
        count = np.array([len(judged_on[s]) for s in range(len(self.structures))])[rows.structure]
        most = max(
            (len(chosen) for chosen in judged_on), default=1
        )  # one width, whichever rows are asked for
        table = np.full((len(self.structures), most), -1)
        for s, chosen in enumerate(judged_on):
            table[s, : min(len(chosen), most)] = chosen[:most]
        case = table[rows.structure]
        real = case >= 0
        row, slot = np.nonzero(real)
        found = evaluate(
            self.plants,
            self.realise(rows),
            measures=(*self.measures, *self._stand_ins, *((Measure("damping_ratio"),) if hasty else ())),
            reference_step=self.task.reference_step,
            pairs=(row, case[row, slot]),
            screen=self.screen if hasty else None,
            rational=self.by_stand_in,
        )
        self.evaluations += len(row)
        exact, search = self.slacks(found.values, found.stable, found.abscissa, case[row, slot])
        shape = (len(rows), most)
        scores = Scores(
            case,
            _spread(exact, row, slot, shape, np.inf),
            _spread(search, row, slot, shape, np.inf),
            _spread(found.values[:, : len(self.measures)], row, slot, shape, np.nan),
            np.bincount(row[~found.stable], minlength=len(rows)) == 0,
        )
        if remember:
            self.archive.add(rows, scores.exact.min(axis=1), self._worst_values(scores), count)
        return scores

    def slacks(
        self, values: FloatArray, stable: BoolArray, abscissa: FloatArray, case: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """Exact and search slacks of M loops. values (M, Q), stable, abscissa, case (M,) -> (M, R) twice."""
        exact = np.empty((len(values), len(self.task.bounds)))
        search = np.empty_like(exact)
        for r, bound in enumerate(self.task.bounds):
            s = slack_of(bound, values[:, self.column[r]])
            exact[:, r] = s
            if r in self._late and not self.by_the_letter:
                band = 100.0 * bound.measure.band
                with np.errstate(invalid="ignore"):
                    stand_in = (band - values[:, len(self.measures) + self._late[r]]) / band
                s = np.where((s < 0.0) & np.isfinite(stand_in), np.minimum(stand_in, -1e-9), s)
            search[:, r] = compressed(s)
        growth = np.maximum(np.nan_to_num(abscissa, nan=np.inf, posinf=np.inf), 0.0) * self.scales.time
        exact[~stable] = -np.inf
        with np.errstate(invalid="ignore"):
            term = np.where(np.isinf(growth), 1.0, growth / (1.0 + growth))
        search[~stable] = (UNSTABLE - 5.0 * term)[~stable, None]
        exact[~self.judged[case]] = np.inf
        search[~self.judged[case] & stable[:, None]] = np.inf
        return exact, search

    def remembered(self, s: int) -> tuple[Rows, FloatArray, FloatArray]:
        """The scored rows of structure s that were judged on all the cases now active: rows, exact worst
        slack (S,), values (S, kept)."""
        rows, slack, values, cases = self.archive.all()
        index = np.flatnonzero((rows.structure == s) & (cases >= len(self.active[s])))
        return rows.take(index), slack[index].min(axis=1), values[index]

    def _worst_values(self, scores: Scores) -> FloatArray:
        """(S, kept) each on its worst case: the largest, or the smallest where large is good."""
        out = np.empty((scores.values.shape[0], len(self.kept)))
        absent = np.isnan(scores.values[:, :, : len(self.kept)]) & (scores.case >= 0)[:, :, None]
        for q, measure in enumerate(self.kept):
            column = scores.values[:, :, q]
            if measure.row.better == "max":
                out[:, q] = np.where(np.isnan(column), np.inf, column).min(axis=1)
            else:
                out[:, q] = np.where(np.isnan(column), -np.inf, column).max(axis=1)
        out[absent.any(axis=1)] = np.nan
        return out


def _screen(task: Task) -> Screen:
    """Far on the wrong side of what the sheet asks, or of what any sheet would."""
    damping = [b.limit for b in task.bounds if b.measure.quantity == "damping_ratio" and b.side == "min"]
    peak = [b.limit for b in task.bounds if b.measure.quantity == "sensitivity_peak" and b.side == "max"]
    return Screen(
        least_damping=min(0.02, *[0.1 * d for d in damping]) if damping else 0.02,
        most_peak=max(30.0, *[1.0 + 20.0 * (p - 1.0) for p in peak]) if peak else 30.0,
    )


def _box(structure: Structure, task: Task, scales: Scales) -> tuple[FloatArray, FloatArray]:
    """Range of every search coordinate: the structure's own, and REACH beyond all that plant and sheet speak
    of.

    A corner further out than that is no corner: it only blurs the arithmetic. The gain is left free.
    """
    marks = [*np.log(scales.marks * scales.time)]
    for bound in task.bounds:
        row = bound.measure.row
        if row.time_power and not row.gain_power and 0.0 < bound.limit < np.inf:
            marks.append(np.log(bound.limit / scales.time) * -row.time_power)
    bottom, top = min(marks) - REACH, max(marks) + REACH
    low, high = structure.box()
    for j, parameter in enumerate(structure.parameters):
        if j > 0 and parameter.role == "time" and not np.isfinite(low[j]):
            low[j], high[j] = -top, -bottom
            if parameter.key == "integral_time":  # so slow that a structure without it is contained
                high[j] += SLOWER
        elif j > 0 and parameter.role == "frequency" and not np.isfinite(low[j]):
            low[j], high[j] = bottom, top
    return low, high


def compressed(slack: FloatArray) -> FloatArray:
    """Slack with a slope everywhere: -1 - ln(-slack) below -1, and a floor for what is absent."""
    with np.errstate(divide="ignore", invalid="ignore"):
        deep = -1.0 - np.log(np.where(slack < -1.0, -slack, 1.0))
    out: FloatArray = np.where(
        np.isnan(slack), ABSENT, np.where(slack < -1.0, np.maximum(deep, ABSENT), slack)
    )
    return out


def uncompressed(slack: FloatArray) -> FloatArray:
    """The slack that was `compressed`, where it is not absent."""
    out: FloatArray = np.where(slack < -1.0, -np.exp(-1.0 - slack), slack)
    return out


def placed(parts: Sequence[tuple[IntArray, Rational]]) -> Rational:
    """Rows without dead time, each part at the places named beside it, padded to one width."""
    count = sum(len(made) for _, made in parts)
    width = max((p.shape[1] for _, made in parts for p in (made.numerator, made.denominator)), default=1)
    numerator, denominator = np.zeros((count, width)), np.zeros((count, width))
    for index, made in parts:
        numerator[index, width - made.numerator.shape[1] :] = made.numerator
        denominator[index, width - made.denominator.shape[1] :] = made.denominator
    return Rational(numerator, denominator, np.zeros(count))


def stacked(a: Rational, b: Rational) -> Rational:
    """Rows of a, then rows of b."""

    def wide(p: FloatArray, width: int) -> FloatArray:
        return np.pad(p, ((0, 0), (width - p.shape[1], 0)))

    top = max(a.numerator.shape[1], b.numerator.shape[1])
    low = max(a.denominator.shape[1], b.denominator.shape[1])
    return Rational(
        np.concatenate([wide(a.numerator, top), wide(b.numerator, top)]),
        np.concatenate([wide(a.denominator, low), wide(b.denominator, low)]),
        np.concatenate([a.dead_time, b.dead_time]),
    )


def _spread(
    flat: FloatArray, row: IntArray, slot: IntArray, shape: tuple[int, int], fill: float
) -> FloatArray:
    out = np.full((*shape, flat.shape[1]), fill)
    out[row, slot] = flat
    return out
