"""Where a polish for the preferred quantity sets out from, beside the tops of a structure.

Points drawn for the wish, the best of the archive, and what the simpler structures inside a larger one
attain, written in the parameters of the larger one. S rows.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.search.archive import Rows, best_each, distinct, joined
from synth.search.campaign import Campaign
from synth.search.embed import embedded
from synth.search.goals import ABSENT, Goals, benefit, terms
from synth.search.objective import Objective, Scores
from synth.search.outcome import Aim
from synth.search.polish import Pace, polish
from synth.search.standing import Standing
from synth.search.starts import sample
from synth.structures import by_name

FRESH = 192  # starts a structure drawn for the wish, and how many of them are polished
FRESH_PICKS = 12
FRESH_PENALTY = 2.0  # of a missing slack against an e-fold of the wish, when they are picked
INSIDE_PICKS = 5  # and of a structure that is searched for the sake of a larger one alone
INSIDE_PACE = Pace(radius=0.3, iterations=12, least=2e-3, halve=(3,), field=2)
LIFT = 2e-4  # of the wish, by which a structure may end worse than one that it contains
NESTED = 4  # points of simpler structures that a larger one is polished from


def fresh(campaign: Campaign, standing: Standing, aim: Aim, count: int = FRESH_PICKS) -> Rows:
    """Starts drawn for the wish alone, the best by wish and missing slack together: the best slack may lie in
    another basin than the best of the wish. None where not one of them has the preferred quantity."""
    objective = campaign.objective
    drawn = sample(objective, standing.number, FRESH, campaign.settings.seed * 1013 + 7, standing.signs)
    with objective.approximating():
        scores = objective.score(drawn, hasty=True)
    gain = _gain(objective, scores, aim)
    short = np.minimum(scores.guide() - aim.reserve, 0.0)
    merit = np.where(scores.stable & (gain > ABSENT), gain + FRESH_PENALTY * short, -np.inf)
    index: IntArray = np.flatnonzero(np.isfinite(merit))
    return drawn.take(index[distinct(drawn.take(index), merit[index], count)])


def from_archive(campaign: Campaign, number: int, aim: Aim, count: int = 3) -> Rows:
    """Scored rows of a structure with the reserve kept, best by the wish, distinct."""
    rows, worst, values = campaign.objective.remembered(number)
    if aim.measure is None:
        raise ValueError("an aim at the worst slack needs no archive")
    fit: IntArray = np.flatnonzero(worst >= aim.reserve)
    gain = benefit(aim.measure, aim.sense, values[fit, campaign.objective.kept.index(aim.measure)])
    order = np.argsort(-gain, kind="stable")[:200]
    return rows.take(fit[order[distinct(rows.take(fit[order]), gain[order], count)]])


def from_inside(campaign: Campaign, begun: list[Standing], aim: Aim) -> Rows | None:
    """What simpler structures that are not in the task attain, for the structures that contain them; None
    where there is none."""
    objective, names = campaign.objective, {s.name for s in campaign.task.structures}
    absent = [n for s in begun for n in objective.structures[s.number].simpler if n not in names]
    if not absent:
        return None
    small = _campaign_of(campaign, begun, tuple(dict.fromkeys(absent)), aim)
    rows = joined([fresh(small, standing, aim, INSIDE_PICKS) for standing in small.standings])
    if len(rows):
        with small.objective.approximating():
            goals = Goals.same(len(rows), aim)
            done = polish(small.objective, rows, goals, pace=INSIDE_PACE, stop=campaign.halted)
        rows = done.rows.take(np.flatnonzero(done.finished & done.stable))
    objective.evaluations += small.objective.evaluations
    parts = [embedded(objective, rows, standing.number, small.objective) for standing in begun]
    return _nearest(objective, [p for p in parts if p is not None], aim)


def lifted(campaign: Campaign, rows: Rows, aim: Aim) -> Rows | None:
    """The best of a structure as a start of each one that contains it and has ended worse; None where there
    is none."""
    objective = campaign.objective
    gain = _gain(objective, objective.score(rows, objective.everywhere(), remember=False), aim)
    best = {
        int(n): max(np.flatnonzero(rows.structure == n), key=lambda i: gain[i])
        for n in np.unique(rows.structure)
    }
    parts = []
    for large in campaign.standings:
        own = gain[best[large.number]] if large.number in best else -np.inf
        for number, i in best.items():
            if gain[i] <= own + LIFT:
                continue
            made = embedded(objective, rows.take(np.array([i])), large.number)
            if made is not None:
                parts.append(made)
                objective.activate(large.number, objective.active[number])
    return _nearest(objective, parts, aim)


def _campaign_of(campaign: Campaign, begun: list[Standing], names: tuple[str, ...], aim: Aim) -> Campaign:
    """One over structures that are not in the task, on the cases and signs of gain that matter to those that
    contain them. Nothing is searched in it yet."""
    objective, task = campaign.objective, campaign.task
    small = Campaign(
        replace(
            task,
            plants=objective.plants,
            case_names=objective.case_names,
            structures=tuple(by_name(n) for n in names),
        ),
        campaign.settings,
        extra=() if aim.measure is None else (aim.measure,),
        stop=campaign.halted,
    )
    for n, name in enumerate(names):
        around = [s for s in begun if name in objective.structures[s.number].simpler]
        cases = [c for s in around for c in objective.active[s.number]]
        small.objective.active[n] = tuple(dict.fromkeys(cases))
        small.standings[n].signs = tuple(dict.fromkeys(sign for s in around for sign in s.signs))
    return small


def _nearest(objective: Objective, parts: list[Rows], aim: Aim) -> Rows | None:
    """Of the rows of each structure those that are best for the wish, less what they are short of."""
    if not parts:
        return None
    rows = joined(parts)
    with objective.approximating():
        merit = terms(objective, Goals.same(len(rows), aim), objective.score(rows)).merit()
    return rows.take(best_each(rows, merit, NESTED))


def _gain(objective: Objective, scores: Scores, aim: Aim) -> FloatArray:
    """(S,) benefit of the preferred quantity on the worst of the cases judged."""
    if aim.measure is None:
        raise ValueError("an aim at the worst slack prefers no quantity")
    value = scores.values[:, :, objective.measures.index(aim.measure)]
    out: FloatArray = np.where(scores.case >= 0, benefit(aim.measure, aim.sense, value), np.inf).min(axis=1)
    return out
