"""After the worst slack: the preferred quantity, and the extremes that make a list worth choosing from.

Starts are the tops of each structure and the best of the archive, so little is scored that was not near already.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import IntArray
from synth.loop.quantities import Measure
from synth.search.archive import Rows, distinct, joined
from synth.search.campaign import Campaign
from synth.search.goals import Goals, benefit
from synth.search.outcome import Aim, Task
from synth.search.polish import Pace, polish

EXTREMES = ("control_peak", "settling_time")
MARGIN = 1e-6  # of slack kept beyond the reserve, so that the last digits of a polish cannot fall short of it
WISH_PACE = Pace(radius=0.2, iterations=40, least=1e-5, halve=(4, 8), field=2, second=True)
EXTREME_PACE = Pace(radius=0.3, iterations=8, least=2e-3, halve=())


@dataclass(frozen=True, slots=True)
class Wished:
    """rows, what each is best at, and the worst slack each has to keep."""

    rows: Rows
    goals: tuple[str, ...]
    need: float


def extreme_measures(task: Task) -> tuple[Measure, ...]:
    """The quantities whose extremes are offered as alternatives; with the options the sheet uses."""
    out = []
    for key in EXTREMES:
        own = [b.measure for b in task.bounds if b.measure.quantity == key]
        out.append(own[0] if own else Measure(key))
    return tuple(out)


def preferred(campaign: Campaign) -> Wished | None:
    """Improve the preferred quantity in every structure that keeps the reserve, or nearly; None without a wish."""
    wish = campaign.task.prefer
    if wish is None or wish.measure is None:
        return None
    campaign.enter("preference")
    aim = Aim(wish.measure, wish.sense, wish.reserve + MARGIN)
    parts = []
    for standing in campaign.standings:
        if standing.tops is None or standing.best < wish.reserve:
            continue
        parts.append(standing.tops.take(np.arange(min(3, len(standing.tops)))))
        parts.append(_from_archive(campaign, standing.number, aim))
    parts = [p for p in parts if len(p)]
    if not parts:
        return None
    rows = joined(parts)
    done = polish(campaign.objective, rows, Goals.same(len(rows), aim), pace=WISH_PACE, stop=campaign.halted)
    good = np.flatnonzero(done.finished & done.stable & (done.worst >= wish.reserve))
    return Wished(done.rows.take(good), (wish.measure.row.name,) * good.size, wish.reserve)


def extremes(campaign: Campaign) -> Wished | None:
    """From the best of every structure that meets the sheet: least control peak, fastest settling."""
    heads = [s for s in campaign.standings if s.tops is not None and s.best >= 0.0]
    if not heads:
        return None
    campaign.enter("alternatives")
    reserve = campaign.task.prefer.reserve if campaign.task.prefer is not None else 0.0
    aims = tuple(Aim(m, "min", reserve + MARGIN) for m in extreme_measures(campaign.task))
    tops = [s.tops.take(np.array([0])) for s in heads if s.tops is not None]
    rows = joined(tops * len(aims))
    goals = Goals(aims, np.repeat(np.arange(len(aims)), len(tops)), np.full(len(rows), np.nan))
    with campaign.objective.asking(tuple(a.measure for a in aims if a.measure is not None)):
        done = polish(campaign.objective, rows, goals, pace=EXTREME_PACE, stop=campaign.halted)
    good = np.flatnonzero(done.stable & (done.worst >= reserve))
    names = [f"least {aims[int(a)].measure.row.name}" for a in goals.aim[good]]  # type: ignore[union-attr]
    return Wished(done.rows.take(good), tuple(names), reserve)


def _from_archive(campaign: Campaign, number: int, aim: Aim, count: int = 3) -> Rows:
    """Scored rows of a structure with the reserve kept, best by the wish, distinct."""
    rows, slack, values, cases = campaign.objective.archive.all()
    if aim.measure is None:
        raise ValueError("an aim at the worst slack needs no archive")
    judged = cases >= len(campaign.objective.active[number])
    fit: IntArray = np.flatnonzero((rows.structure == number) & judged & (slack.min(axis=1) >= aim.reserve))
    gain = benefit(aim.measure, aim.sense, values[fit, campaign.objective.measures.index(aim.measure)])
    order = fit[np.argsort(-gain, kind="stable")[:200]]
    gain = np.sort(gain)[::-1][:200]
    return rows.take(order[distinct(rows.take(order), gain, count)] if order.size else order)
