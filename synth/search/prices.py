"""The price list of a sheet that is not met: for each requirement, what it would have to be for a structure
to meet all the rest, computed by improving that quantity alone while everything else stays met."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from synth.search.archive import joined
from synth.search.campaign import Campaign
from synth.search.finals import Draft, drafts_of, named, realised, rounded, scorecards
from synth.search.goals import Goals
from synth.search.outcome import Aim, Price
from synth.search.polish import Pace, polish

MARGIN = 1e-4  # of slack kept in all the rest: a polish ends on its bounds to a few 1e-6, on either side
FINE = 6  # significant digits where the usual ones would lose that margin
PRICE_PACE = Pace(radius=0.3, iterations=14, least=1e-3, halve=(4,), field=1)


def price_list(campaign: Campaign) -> tuple[Price, ...]:
    """Cheapest first; a structure is left out where a simpler one asks no more of that requirement."""
    task, objective = campaign.task, campaign.objective
    aims = tuple(
        Aim(b.measure, "min" if b.side == "max" else "max", MARGIN, r) for r, b in enumerate(task.bounds)
    )
    parts, aim_of = [], []
    for standing in campaign.standings:
        if standing.tops is None or standing.best <= -15.0:
            continue
        tops = standing.first(2)
        for r in range(len(aims)):
            parts.append(tops)
            aim_of += [r] * len(tops)
    if not parts:
        return ()
    rows = joined(parts)
    goals = Goals(aims, np.array(aim_of), np.full(len(rows), np.nan))
    done = polish(objective, rows, goals, pace=PRICE_PACE, stop=campaign.halted)
    last = np.flatnonzero(done.finished & done.stable)
    if last.size == 0:
        return ()
    drafts = drafts_of(objective, done.rows.take(last), "price", campaign.origins, -np.inf)
    drafts = [named(d, task.structures) for d in drafts]
    return _prices(campaign, [replace(d, need=-np.inf) for d in drafts], [aim_of[i] for i in last])


def _prices(campaign: Campaign, drafts: list[Draft], aim_of: list[int]) -> tuple[Price, ...]:
    task, objective = campaign.task, campaign.objective
    exact = [replace(d, theta=np.array([float(f"{v:.{FINE - 1}e}") for v in d.theta])) for d in drafts]
    drafts, scored = rounded(task, drafts, objective.plants, objective.case_names)
    measures = tuple(dict.fromkeys(b.measure for b in task.bounds))
    cards = scorecards(task, realised(drafts), objective.plants, objective.case_names, measures)
    worst = cards.slack.min(axis=1)  # (B, R)
    lost = [len(task.bounds) > 1 and np.delete(w, r).min() < 0.0 for w, r in zip(worst, aim_of, strict=True)]
    drafts = [e if out else d for e, d, out in zip(exact, drafts, lost, strict=True)]
    cards = scorecards(task, realised(drafts), objective.plants, objective.case_names, measures)
    objective.evaluations += scored + 2 * len(drafts) * len(objective.plants)
    found: list[Price] = []
    for i, r in enumerate(aim_of):
        bound = task.bounds[r]
        slack = cards.slack[i].min(axis=0)
        rest = np.delete(slack, r)
        if not cards.stable[i].all() or (rest.size and rest.min() < 0.0) or slack[r] >= 0.0:
            continue
        column = cards.values[i][:, measures.index(bound.measure)]
        needed = float(column.max() if bound.side == "max" else column.min())
        if not np.isfinite(needed):
            continue
        draft = drafts[i]
        values = {p.key: float(v) for p, v in zip(draft.structure.parameters, draft.theta, strict=True)}
        outward = _outward(needed, bound.side)
        found.append(
            Price(
                bound.id,
                draft.structure.name,
                bound.limit,
                outward,
                abs(outward - bound.limit) / bound.unit,
                values,
                draft.start,
                draft.source,
            )
        )
    return _undominated(found)


def _outward(value: float, side: str) -> float:
    """Four significant digits, on the side that the value itself still meets."""
    if value == 0.0:
        return 0.0
    unit = 10.0 ** (np.floor(np.log10(abs(value))) - 3.0)
    steps = np.ceil(value / unit - 1e-9) if side == "max" else np.floor(value / unit + 1e-9)
    out = float(f"{steps * unit:.4g}")
    if (side == "max" and out < value) or (side == "min" and out > value):
        out = float(f"{(steps + (1.0 if side == 'max' else -1.0)) * unit:.4g}")
    return out


def _undominated(found: list[Price]) -> tuple[Price, ...]:
    """Of each requirement and structure the cheapest; then only structures that ask less than every simpler
    one."""
    out = []
    for requirement in dict.fromkeys(p.requirement for p in found):
        mine = sorted(
            (p for p in found if p.requirement == requirement), key=lambda p: (len(p.parameters), p.cost)
        )
        least = np.inf
        for p in mine:
            if p.cost < least - 1e-3:
                out.append(p)
                least = p.cost
    return tuple(sorted(out, key=lambda p: p.cost))
