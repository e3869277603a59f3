"""The alternatives that make a list worth choosing from: the extremes of two quantities among what meets the
sheet, and other loops than the best.

They set out from the tops of each structure and the best of the archive, so little is scored that was not
near already.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import IntArray
from synth.loop.quantities import Measure
from synth.search.archive import Rows, distinct, joined
from synth.search.campaign import Campaign
from synth.search.confirm import MARGIN, confirmed, on_all_cases
from synth.search.goals import Goals
from synth.search.outcome import Aim, Task
from synth.search.polish import Pace
from synth.search.ranking import APART
from synth.search.scales import response
from synth.search.standing import AGREE
from synth.search.starts import plant_band
from synth.search.wishes import Wished

TWINS = {"PI-lead": "PID", "lead": "PD"}  # the same functions over most of their range, under a simpler name
EXTREMES = ("control_peak", "settling_time")
EXTREME_PACE = Pace(radius=0.3, iterations=8, least=5e-3, halve=())
EXTREME_AGAIN = Pace(radius=0.05, iterations=3, least=2e-3, halve=())
OTHERS = 3  # rows of the archive looked at for a second candidate of a structure
OTHERS_APART = 0.25
SHORT = 5  # structures that meet the sheet; with fewer, the list may be short of seconds
AROUND = 96  # points scored round the best of each then, at these distances
AROUND_SIZES = (0.05, 0.1, 0.2)


def extremes(campaign: Campaign) -> Wished | None:
    """From the best of every structure that meets the sheet: least control peak, fastest settling."""
    reserve = _reserve(campaign)
    best = {campaign.task.structures[s.number].name: s for s in campaign.standings if s.best >= reserve}
    twins = {name: best[simple].best for name, simple in TWINS.items() if simple in best}
    heads = [s.first(1) for name, s in best.items() if twins.get(name, -np.inf) < s.best - AGREE]
    if not heads:
        return None
    campaign.enter("alternatives")
    measures = _extreme_measures(campaign.task)
    aims = tuple(Aim(m, "min", reserve + MARGIN) for m in measures)
    rows = joined(heads * len(aims))
    goals = Goals(aims, np.repeat(np.arange(len(aims)), len(heads)), np.full(len(rows), np.nan))
    with campaign.objective.asking(measures):
        done, goals = confirmed(campaign, rows, goals, EXTREME_PACE, EXTREME_AGAIN)
    good = np.flatnonzero(done.stable & (done.worst >= reserve))
    return Wished(
        done.rows.take(good), tuple(f"least {measures[int(a)].row.name}" for a in goals.aim[good]), reserve
    )


def others(campaign: Campaign) -> Wished | None:
    """Scored rows that meet the sheet and lie apart from the best of their structure: seconds for a short
    list."""
    reserve = _reserve(campaign)
    met = [s for s in campaign.standings if s.best >= reserve]
    if not met:
        return None
    campaign.enter("alternatives")
    heads = joined([s.first(1) for s in met])
    if len(heads) < SHORT:
        _look_around(campaign, heads)
    rows, slack, _, _ = campaign.objective.archive.all()
    worst = slack.min(axis=1)
    parts = []
    for standing in met:
        fit: IntArray = np.flatnonzero((rows.structure == standing.number) & (worst >= reserve))
        fit = fit[np.argsort(-worst[fit], kind="stable")[:300]]
        if fit.size:
            pick = distinct(rows.take(fit), worst[fit], OTHERS + 1, OTHERS_APART)
            parts.append(rows.take(fit[pick]))
            parts.append(rows.take(fit[_other_loops(campaign, rows.take(fit), heads)][:OTHERS]))
    if not parts:
        return None
    found = joined(parts)
    good = np.flatnonzero(on_all_cases(campaign, found).min(axis=1) >= reserve)
    return Wished(found.take(good), ("worst slack",) * good.size, reserve)


def _look_around(campaign: Campaign, heads: Rows) -> None:
    """Score points round the best of every structure: what meets the sheet there joins the archive."""
    objective = campaign.objective
    rng = np.random.default_rng([campaign.settings.seed, 5])
    around = heads.take(np.repeat(np.arange(len(heads)), AROUND))
    low, high, free = objective.limits(around)
    size = np.tile(np.repeat(AROUND_SIZES, AROUND // len(AROUND_SIZES)), len(heads))
    moved = around.x + size[:, None] * rng.normal(size=around.x.shape)
    with objective.approximating():
        objective.score(around.at(np.where(free, np.clip(moved, low, high), around.x)), hasty=True)


def _other_loops(campaign: Campaign, rows: Rows, heads: Rows) -> IntArray:
    """Which rows are other loops than every one of the heads, in the sense of the list."""
    objective = campaign.objective
    w = plant_band(objective).at(np.linspace(0.0, 1.0, 241))
    plant = response(objective.task.plants, w)[0]
    apart: IntArray = np.arange(len(rows))
    with np.errstate(divide="ignore", invalid="ignore"):
        first, other = response(objective.realise(heads), w), response(objective.realise(rows), w)
        for one in first:
            above = np.flatnonzero(np.abs(one * plant) > 1.0)
            crossover = w[above[-1]] if above.size else 1.0 / objective.scales.time
            near = np.abs(np.log10(w / crossover)) <= 1.0
            distance = np.abs(np.log(other[apart][:, near] / one[near])).max(axis=1, initial=0.0)
            apart = apart[distance > APART]
    return apart


def _reserve(campaign: Campaign) -> float:
    return campaign.task.prefer.reserve if campaign.task.prefer is not None else 0.0


def _extreme_measures(task: Task) -> tuple[Measure, ...]:
    """The quantities whose extremes are offered as alternatives, with the options the sheet uses."""
    out = []
    for key in EXTREMES:
        own = [b.measure for b in task.bounds if b.measure.quantity == key]
        out.append(own[0] if own else Measure(key))
    return tuple(out)
