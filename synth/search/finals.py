"""From search points to candidates: simplest name, rounded values, and the full scorecard on every case.

B compensators, K cases, Q measures (every quantity of the table, and each requirement's own), R requirements.
What is printed is what was scored: nothing below touches a value after `scorecards`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.requirements import judged, slack_of
from synth.search.archive import Rows
from synth.search.objective import Objective, placed
from synth.search.outcome import Candidate, Fragility, Task
from synth.structures import Structure, same_function

ALIKE = 0.02  # ln: a pole and a zero nearer than this are struck when a simpler name is looked for
FEWEST_DIGITS, MOST_DIGITS = 4, 12
ROUNDING_LOSS = 1e-3
HOLD = 1e-4  # relative
NUDGE = 0.10  # of one tuned value, for the fragility


@dataclass(frozen=True, slots=True)
class Draft:
    """A search point on its way to become a candidate."""

    structure: Structure
    theta: FloatArray
    also: tuple[str, ...] = ()
    goal: str = "worst slack"
    start: str = ""
    source: str = ""
    need: float = 0.0  # worst slack that rounding must not lose
    hold: Measure | None = None  # quantity of which rounding may lose HOLD at most


@dataclass(frozen=True, slots=True)
class Scorecards:
    """values, approximate (B, K, Q), stable (B, K), slack (B, K, R)."""

    measures: tuple[Measure, ...]
    values: FloatArray
    approximate: BoolArray
    stable: BoolArray
    slack: FloatArray


def all_measures(task: Task) -> tuple[Measure, ...]:
    """Every quantity of the table, then what requirements and preference ask for with options of their
    own."""
    own = [b.measure for b in task.bounds]
    if task.prefer is not None and task.prefer.measure is not None:
        own.append(task.prefer.measure)
    return tuple(dict.fromkeys([*EVERY_QUANTITY, *own]))


def scorecards(
    task: Task,
    compensators: Rational,
    plants: Rational,
    case_names: tuple[str, ...],
    measures: tuple[Measure, ...] | None = None,
) -> Scorecards:
    """Score B compensators on K plants; `measures` defaults to all of them."""
    measures = measures or all_measures(task)
    found = evaluate(plants, compensators, measures=measures, reference_step=task.reference_step)
    column = {m: i for i, m in enumerate(measures)}
    slack = np.stack([slack_of(b, found.values[:, :, column[b.measure]]) for b in task.bounds], axis=2)
    slack[~found.stable] = -np.inf
    slack[:, ~judged(task.bounds, case_names)] = np.inf
    slack[~found.stable, 0] = -np.inf  # a case on which nothing is asked must still be stable
    return Scorecards(measures, found.values, found.approximate, found.stable, slack)


def realised(drafts: list[Draft]) -> Rational:
    """C(s) of every draft, padded to one width."""
    if not drafts:
        raise ValueError("no draft to realise")
    parts = []
    for structure in {d.structure.name: d.structure for d in drafts}.values():
        index = np.flatnonzero([d.structure.name == structure.name for d in drafts])
        parts.append((index, structure.realise(np.array([drafts[i].theta for i in index]))))
    return placed(parts)


def named(draft: Draft, structures: tuple[Structure, ...]) -> Draft:
    """The same function under the simplest of the given structures, with the other names beside it."""
    made = draft.structure.realise(draft.theta[None, :])
    allowed = {s.name for s in structures}
    found = same_function(made.numerator[0], made.denominator[0], ALIKE)
    names = [(s, t) for s, t in found if s.name in allowed]
    if not names:
        return draft
    first, theta = names[0]
    others = tuple(dict.fromkeys(s.name for s, _ in names if s.name != first.name))
    if draft.structure.name not in (first.name, *others):
        others = (*others, draft.structure.name)
    if first.name == draft.structure.name:
        return replace(draft, also=others)
    return replace(draft, structure=first, theta=theta, also=others)


def simplest(
    task: Task, drafts: list[Draft], plants: Rational, case_names: tuple[str, ...]
) -> tuple[list[Draft], int]:
    """Each draft under its simplest name, where that costs less than ROUNDING_LOSS of its worst slack and
    nothing that it needs. Returns the drafts and how many loops were scored for it."""
    renamed = [named(d, task.structures) for d in drafts]
    index = [
        i for i, (a, b) in enumerate(zip(drafts, renamed, strict=True)) if a.structure is not b.structure
    ]
    if not index:
        return renamed, 0
    measures = tuple(dict.fromkeys(b.measure for b in task.bounds))
    both = [drafts[i] for i in index] + [renamed[i] for i in index]
    worst = scorecards(task, realised(both), plants, case_names, measures).slack.min(axis=(1, 2))
    for k, i in enumerate(index):
        if not _keeps(float(worst[k]), float(worst[k + len(index)]), drafts[i].need):
            renamed[i] = drafts[i]
    return renamed, len(both) * len(plants)


def rounded(
    task: Task, drafts: list[Draft], plants: Rational, case_names: tuple[str, ...]
) -> tuple[list[Draft], int]:
    """Each draft with as few digits as lose less than ROUNDING_LOSS of its worst slack and nothing that it
    needs.

    Returns the drafts and how many loops were scored for it.
    """
    held = [d.hold for d in drafts if d.hold is not None]
    measures = tuple(dict.fromkeys([*(b.measure for b in task.bounds), *held]))

    def scored_as(some: list[Draft]) -> tuple[FloatArray, FloatArray]:
        """Worst slack, and the held quantity on its worst case (NaN where none is held)."""
        cards = scorecards(task, realised(some), plants, case_names, measures)
        kept = np.full(len(some), np.nan)
        for i, d in enumerate(some):
            if d.hold is not None:
                kept[i] = np.abs(cards.values[i, :, measures.index(d.hold)]).max()
        return cards.slack.min(axis=(1, 2)), kept

    before, kept_before = scored_as(drafts)
    result = list(drafts)
    scored = len(drafts)
    pending = list(range(len(drafts)))
    for digits in (range(FEWEST_DIGITS, FEWEST_DIGITS + 1), range(5, 8), range(8, MOST_DIGITS + 1)):
        if not pending:
            break
        tries = [
            (i, replace(drafts[i], theta=drafts[i].structure.rounded(drafts[i].theta[None, :], d)[0]))
            for i in pending
            for d in digits
        ]
        after, kept_after = scored_as([t for _, t in tries])
        with np.errstate(invalid="ignore"):
            moved = np.abs(kept_after / kept_before[[i for i, _ in tries]] - 1.0) > HOLD
        scored += len(tries)
        left = []
        for i in pending:
            mine = [(t, a, m) for (j, t), a, m in zip(tries, after, moved, strict=True) if j == i]
            kept = [t for t, a, m in mine if not m and _keeps(float(before[i]), float(a), drafts[i].need)]
            if kept:
                result[i] = kept[0]
            else:
                left.append(i)
                result[i] = mine[-1][0]
        pending = left
    return result, scored * len(plants)


def _keeps(before: float, after: float, need: float) -> bool:
    if before >= need:
        return after >= need and after > before - ROUNDING_LOSS
    return after > before - ROUNDING_LOSS or not np.isfinite(before)


def candidates(
    task: Task, drafts: list[Draft], plants: Rational, case_names: tuple[str, ...]
) -> tuple[Candidate, ...]:
    """Scored candidates, in the order of the drafts, not yet ranked. `drafts` hold rounded values already."""
    if not drafts:
        return ()
    made = realised(drafts)
    cards = scorecards(task, made, plants, case_names)
    return tuple(_candidate(task, draft, made, cards, b, case_names) for b, draft in enumerate(drafts))


def _candidate(
    task: Task, draft: Draft, made: Rational, cards: Scorecards, b: int, case_names: tuple[str, ...]
) -> Candidate:
    slack = cards.slack[b]
    case, requirement = np.unravel_index(int(slack.argmin()), slack.shape)
    worst = float(slack.min())
    numerator, denominator = (np.trim_zeros(p[b], "f") for p in (made.numerator, made.denominator))
    return Candidate(
        structure=draft.structure.name,
        also=draft.also,
        parameters={p.key: float(v) for p, v in zip(draft.structure.parameters, draft.theta, strict=True)},
        numerator=tuple(float(c) for c in numerator),
        denominator=tuple(float(c) for c in denominator),
        meets_all=bool(worst >= 0.0),
        measures=cards.measures,
        values=cards.values[b],
        approximate=cards.approximate[b],
        stable=cards.stable[b],
        slack=slack,
        worst_slack=worst,
        binding=(task.bounds[int(requirement)].id, case_names[int(case)]),
        start=draft.start,
        source=draft.source,
        goal=draft.goal,
    )


def with_fragility(
    task: Task, found: tuple[Candidate, ...], plants: Rational, case_names: tuple[str, ...]
) -> tuple[Candidate, ...]:
    """Worst slack, on all the cases, when each tuned value alone moves by -10 % and +10 %."""
    by_name = {s.name: s for s in task.structures}
    moved: list[Draft] = []
    for c in found:
        theta = np.array(list(c.parameters.values()))
        for p in range(len(theta)):
            for factor in (1.0 - NUDGE, 1.0 + NUDGE):
                other = theta.copy()
                other[p] *= factor
                moved.append(Draft(by_name[c.structure], other))
    if not moved:
        return found
    measures = tuple(dict.fromkeys(b.measure for b in task.bounds))
    worst = scorecards(task, realised(moved), plants, case_names, measures).slack.min(axis=(1, 2))
    out, at = [], 0
    for c in found:
        pairs = []
        for key in c.parameters:
            pairs.append(Fragility(key, float(worst[at]), float(worst[at + 1])))
            at += 2
        out.append(replace(c, fragility=tuple(pairs)))
    return tuple(out)


def drafts_of(
    objective: Objective, rows: Rows, goal: str, origins: list[tuple[str, str]], need: float = 0.0
) -> list[Draft]:
    """Drafts of search rows; origins are (start, source) by the number that rows carry."""
    out = []
    for i, theta in enumerate(objective.theta(rows)):
        origin = int(rows.origin[i])
        start, source = origins[origin] if origin >= 0 else ("", "")
        out.append(Draft(objective.structures[int(rows.structure[i])], theta, (), goal, start, source, need))
    return out
