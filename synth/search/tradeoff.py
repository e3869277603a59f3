"""The front of two quantities among candidates that meet the rest: a sweep of the polish.

For levels of the first quantity between its two extremes the second is improved, every level and every
structure in lockstep.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.quantities import Measure, Side
from synth.search.archive import Rows, joined
from synth.search.campaign import Campaign
from synth.search.finals import drafts_of, named, realised, rounded, scorecards
from synth.search.goals import Goals
from synth.search.outcome import Aim, FrontPoint, ProgressCall, Settings, StopCall, Task
from synth.search.polish import Pace, polish

LEVELS = 12
MARGIN = 1e-6
ENDS = Pace(radius=0.3, iterations=25, least=1e-4, halve=(5,), field=1)
SWEEP = Pace(radius=0.25, iterations=20, least=5e-4, halve=())


def tradeoff(
    task: Task,
    first: Measure,
    second: Measure,
    settings: Settings | None = None,
    progress: ProgressCall | None = None,
    stop: StopCall | None = None,
) -> tuple[FrontPoint, ...]:
    """The front of two quantities over all structures, ordered by the first; empty where nothing meets the
    sheet.

    Which way is better is the table's; a quantity without one (crossover) counts as better when smaller.
    """
    settings = settings or Settings()
    campaign = Campaign(task, settings, extra=(first, second), progress=progress, stop=stop)
    campaign.run()
    campaign.enter("front")
    heads = [s.first(1) for s in campaign.standings if s.best >= 0.0]
    if not heads:
        return ()
    senses = (_sense(first), _sense(second))
    ends = (Aim(first, senses[0], MARGIN), Aim(second, senses[1], MARGIN))
    rows = joined(heads * 2)
    goals = Goals(ends, np.repeat([0, 1], len(heads)), np.full(len(rows), np.nan))
    found = [polish(campaign.objective, rows, goals, pace=ENDS, stop=campaign.halted).rows, joined(heads)]
    low, high = _range(campaign, joined(found), first)
    if high > low > 0.0:
        levels = np.exp(np.linspace(np.log(low), np.log(high), LEVELS + 2))[1:-1]
    else:
        levels = np.linspace(low, high, LEVELS + 2)[1:-1]
    begin = joined([_nearest(campaign, found[0], first, float(level), len(heads)) for level in levels])
    aim = Aim(second, senses[1], MARGIN, other=first, other_sense=senses[0])
    at = np.repeat(levels, len(heads))
    sweep = polish(
        campaign.objective,
        begin,
        Goals((aim,), np.zeros(len(begin), dtype=np.intp), at),
        pace=SWEEP,
        stop=campaign.halted,
    )
    return _front(campaign, joined([*found, sweep.rows]), first, second, senses)


def _sense(measure: Measure) -> Side:
    return "max" if measure.row.better == "max" else "min"


def _values(campaign: Campaign, rows: Rows, measure: Measure) -> FloatArray:
    """Worst case of a measure on the active cases, NaN where the sheet is not met."""
    objective = campaign.objective
    scores = objective.score(rows, remember=False)
    column = scores.values[:, :, objective.measures.index(measure)]
    bad = -np.inf if _sense(measure) == "min" else np.inf
    filled = np.where(np.isnan(column), bad, column)
    worst = filled.max(axis=1) if _sense(measure) == "min" else filled.min(axis=1)
    out: FloatArray = np.where((scores.worst() >= 0.0) & np.isfinite(worst), worst, np.nan)
    return out


def _range(campaign: Campaign, rows: Rows, measure: Measure) -> tuple[float, float]:
    values = _values(campaign, rows, measure)
    good = values[np.isfinite(values)]
    return (float(good.min()), float(good.max())) if good.size else (0.0, 0.0)


def _nearest(campaign: Campaign, rows: Rows, measure: Measure, level: float, count: int) -> Rows:
    """For each structure the end from which the level is nearer; `rows` holds both ends, one after the
    other."""
    values = _values(campaign, rows, measure)
    index = []
    for i in range(count):
        gap = [abs(values[j] - level) if np.isfinite(values[j]) else np.inf for j in (i, i + count)]
        index.append(i if gap[0] <= gap[1] else i + count)
    return rows.take(np.array(index))


def _front(
    campaign: Campaign, rows: Rows, first: Measure, second: Measure, senses: tuple[Side, Side]
) -> tuple[FrontPoint, ...]:
    """Rounded, scored on all cases, and those that no other beats in both."""
    task, objective = campaign.task, campaign.objective
    drafts = [named(d, task.structures) for d in drafts_of(objective, rows, "front", campaign.origins)]
    drafts, scored = rounded(
        task, [replace(d, need=0.0) for d in drafts], objective.plants, objective.case_names
    )
    measures = tuple(dict.fromkeys([*(b.measure for b in task.bounds), first, second]))
    cards = scorecards(task, realised(drafts), objective.plants, objective.case_names, measures)
    objective.evaluations += scored + len(drafts) * len(objective.plants)
    worst = cards.slack.min(axis=(1, 2))
    pair = []
    for measure, sense in zip((first, second), senses, strict=True):
        column = cards.values[:, :, measures.index(measure)]
        pair.append(column.max(axis=1) if sense == "min" else column.min(axis=1))
    cost = np.column_stack([v if s == "min" else -v for v, s in zip(pair, senses, strict=True)])
    fit = np.flatnonzero((worst >= 0.0) & np.isfinite(cost).all(axis=1))
    out = []
    for i in undominated(cost[fit]):
        draft, at = drafts[fit[i]], int(fit[i])
        values = {p.key: float(v) for p, v in zip(draft.structure.parameters, draft.theta, strict=True)}
        out.append(
            FrontPoint(draft.structure.name, values, float(pair[0][at]), float(pair[1][at]), float(worst[at]))
        )
    return tuple(sorted(out, key=lambda p: p.first))


def undominated(cost: FloatArray) -> Sequence[int]:
    """Rows of (N, 2) costs that no other row beats or equals in both; of equal rows the first."""
    out: list[int] = []
    least = np.inf
    for i in np.lexsort((cost[:, 1], cost[:, 0])):
        if cost[i, 1] < least:
            out.append(int(i))
            least = float(cost[i, 1])
    return out
