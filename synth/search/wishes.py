"""After the worst slack: the preferred quantity, and the alternatives that make a list worth choosing from.

Starts are the tops of each structure and the best of the archive, so little is scored that was not near
already.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.quantities import Measure
from synth.search.archive import Rows, distinct, joined
from synth.search.campaign import Campaign
from synth.search.goals import Goals, benefit
from synth.search.outcome import Aim, Task
from synth.search.polish import Pace, Polished, polish
from synth.search.ranking import APART
from synth.search.scales import response
from synth.search.standing import AGREE, FINE, Standing
from synth.search.starts import plant_band, sample

TWINS = {"PI-lead": "PID", "lead": "PD"}  # the same functions over most of their range, under a simpler name
EXTREMES = ("control_peak", "settling_time")
MARGIN = 1e-6  # of slack kept beyond the reserve, so that the last digits of a polish cannot fall short of it
CASE_TURNS = 8
PENALTIES = (200.0, 2_000.0, 20_000.0)
WISH_PACE = Pace(radius=0.2, iterations=20, least=1e-4, halve=(3, 6), field=4)
AGAIN_PACE = Pace(radius=0.05, iterations=20, least=1e-5, halve=(3,), field=1, second=True)
EXTREME_PACE = Pace(radius=0.3, iterations=8, least=5e-3, halve=())
EXTREME_AGAIN = Pace(radius=0.05, iterations=3, least=2e-3, halve=())
FRESH = 192  # starts a structure drawn for the wish, and how many of them are polished
FRESH_PICKS = 12
FRESH_PENALTY = 2.0  # of a missing slack against an e-fold of the wish, when they are picked
LAST_RADIUS = 0.01  # of the exact steps that follow a stand-in
OTHERS = 3  # rows of the archive looked at for a second candidate of a structure
OTHERS_APART = 0.25
SHORT = 5  # structures that meet the sheet; with fewer, the list may be short of seconds
AROUND = 96  # points scored round the best of each then, at these distances
AROUND_SIZES = (0.05, 0.1, 0.2)


@dataclass(frozen=True, slots=True)
class Wished:
    """rows, what each is best at, the worst slack each has to keep, and the quantity whose digits matter."""

    rows: Rows
    goals: tuple[str, ...]
    need: float
    hold: Measure | None = None


def preferred(campaign: Campaign, earlier: Wished | None = None) -> Wished | None:
    """Improve the preferred quantity in every structure that keeps the reserve; None without a wish.

    earlier : what was found before the last cases came in, to go on from.
    """
    wish = campaign.task.prefer
    if wish is None or wish.measure is None:
        return None
    campaign.enter("preference")
    aim = Aim(wish.measure, wish.sense, wish.reserve + MARGIN)
    parts = [] if earlier is None else [earlier.rows]
    for standing in campaign.standings:
        if standing.tops is None or standing.best < wish.reserve:
            continue
        if earlier is not None and np.any(earlier.rows.structure == standing.number):
            continue
        parts.append(standing.tops.take(np.arange(min(3, len(standing.tops)))))
        parts.append(_from_archive(campaign, standing.number, aim))
        parts.append(_fresh(campaign, standing, aim))
    if not parts:
        return None
    rows = joined(parts)
    done, _ = _confirmed(campaign, rows, Goals.same(len(rows), aim), WISH_PACE, AGAIN_PACE)
    good = np.flatnonzero(done.finished & done.stable & (done.worst >= wish.reserve))
    return Wished(done.rows.take(good), (wish.measure.row.name,) * good.size, wish.reserve, wish.measure)


def extremes(campaign: Campaign) -> Wished | None:
    """From the best of every structure that meets the sheet: least control peak, fastest settling."""
    reserve = _reserve(campaign)
    good_ones = [s for s in campaign.standings if s.tops is not None and s.best >= reserve]
    best = {campaign.task.structures[s.number].name: s.best for s in good_ones}
    heads = [
        s.tops.take(np.array([0]))
        for s in good_ones
        if s.tops is not None
        and best.get(TWINS.get(campaign.task.structures[s.number].name, ""), -np.inf) < s.best - AGREE
    ]
    if not heads:
        return None
    campaign.enter("alternatives")
    measures = _extreme_measures(campaign.task)
    aims = tuple(Aim(m, "min", reserve + MARGIN) for m in measures)
    rows = joined(heads * len(aims))
    goals = Goals(aims, np.repeat(np.arange(len(aims)), len(heads)), np.full(len(rows), np.nan))
    with campaign.objective.asking(measures):
        done, goals = _confirmed(campaign, rows, goals, EXTREME_PACE, EXTREME_AGAIN)
    good = np.flatnonzero(done.stable & (done.worst >= reserve))
    return Wished(
        done.rows.take(good), tuple(f"least {measures[int(a)].row.name}" for a in goals.aim[good]), reserve
    )


def others(campaign: Campaign) -> Wished | None:
    """Scored rows that meet the sheet and lie apart from the best of their structure: seconds for a short
    list."""
    reserve = _reserve(campaign)
    heads = [
        s.tops.take(np.array([0])) for s in campaign.standings if s.tops is not None and s.best >= reserve
    ]
    if not heads:
        return None
    campaign.enter("alternatives")
    if len(heads) < SHORT:
        _look_around(campaign, joined(heads))
    rows, slack, _, _ = campaign.objective.archive.all()
    worst = slack.min(axis=1)
    parts = []
    for standing in campaign.standings:
        if standing.tops is None or standing.best < reserve:
            continue
        fit: IntArray = np.flatnonzero((rows.structure == standing.number) & (worst >= reserve))
        fit = fit[np.argsort(-worst[fit], kind="stable")[:300]]
        if fit.size:
            pick = distinct(rows.take(fit), worst[fit], OTHERS + 1, OTHERS_APART)
            parts.append(rows.take(fit[pick]))
            parts.append(rows.take(fit[_other_loops(campaign, rows.take(fit), joined(heads))][:OTHERS]))
    if not parts:
        return None
    found = joined(parts)
    good = np.flatnonzero(_on_all_cases(campaign, found).min(axis=1) >= reserve)
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
    with np.errstate(divide="ignore", invalid="ignore"):
        first, other = response(objective.realise(heads), w), response(objective.realise(rows), w)
        apart = np.ones(len(rows), dtype=bool)
        for one in first:
            above = np.flatnonzero(np.abs(one * plant) > 1.0)
            crossover = w[above[-1]] if above.size else 1.0 / objective.scales.time
            near = np.abs(np.log10(w / crossover)) <= 1.0
            apart &= np.abs(np.log(other[:, near] / one[near])).max(axis=1, initial=0.0) > APART
    out: IntArray = np.flatnonzero(apart)
    return out


def _reserve(campaign: Campaign) -> float:
    return campaign.task.prefer.reserve if campaign.task.prefer is not None else 0.0


def _extreme_measures(task: Task) -> tuple[Measure, ...]:
    """The quantities whose extremes are offered as alternatives, with the options the sheet uses."""
    out = []
    for key in EXTREMES:
        own = [b.measure for b in task.bounds if b.measure.quantity == key]
        out.append(own[0] if own else Measure(key))
    return tuple(out)


def _on_all_cases(campaign: Campaign, rows: Rows) -> FloatArray:
    """(S, K) exact worst slack of each case."""
    objective = campaign.objective
    everything = [tuple(range(len(objective.case_names)))] * len(objective.structures)
    out: FloatArray = objective.score(rows, everything, remember=False).exact.min(axis=2)
    return out


def _confirmed(
    campaign: Campaign, rows: Rows, goals: Goals, pace: Pace, again: Pace
) -> tuple[Polished, Goals]:
    """Polish, roughly and then to the end, on every case that turns out to bind.

    Where there is dead time the rational stand-in leads all the way there, and the exact quantities only have
    the last steps to make.
    """
    objective = campaign.objective
    with objective.approximating():
        first = polish(objective, rows, goals, pace=pace, stop=campaign.halted)
        kept = np.flatnonzero(first.finished)
        rows, goals = first.rows.take(kept), goals.take(kept)
        if objective.delayed:
            near = _on_binding_cases(campaign, rows, goals, replace(again, second=False, least=1e-3))
            kept = np.flatnonzero(near.finished)
            rows, goals = near.rows.take(kept), goals.take(kept)
            again = replace(again, radius=min(again.radius, LAST_RADIUS))
            if len(objective.case_names) > 1:  # the digits of a table are asked for on one plant
                again = replace(again, second=False, iterations=min(again.iterations, 8), least=5e-4)
    return _on_binding_cases(campaign, rows, goals, again), goals


def _on_binding_cases(campaign: Campaign, rows: Rows, goals: Goals, pace: Pace) -> Polished:
    """Polish; then, as long as a case that is not active is violated, make it active and polish on what has
    lost by it."""
    objective = campaign.objective
    done = _keeping(campaign, rows, goals, pace)
    for _ in range(CASE_TURNS):
        if len(objective.case_names) == 1 or campaign.halted():
            break
        by_case = _on_all_cases(campaign, done.rows)
        changed = set()
        for i in np.flatnonzero(done.finished):
            s, worst = int(done.rows.structure[i]), int(by_case[i].argmin())
            if by_case[i, worst] < done.worst[i] - FINE and worst not in objective.active[s]:
                objective.active[s] = (*objective.active[s], worst)
                changed.add(s)
        if not changed:
            break
        index = np.flatnonzero(done.finished & np.isin(done.rows.structure, list(changed)))
        done = _replaced(done, index, _keeping(campaign, done.rows.take(index), goals.take(index), pace))
    return done


def _keeping(campaign: Campaign, rows: Rows, goals: Goals, pace: Pace) -> Polished:
    """Polish with a penalty that is raised, for the rows that are short of their reserve, until all keep it
    or nearly all there is was tried."""
    reserve = np.array([aim.reserve for aim in goals.aims])[goals.aim] - MARGIN
    done: Polished | None = None
    index: IntArray = np.arange(len(rows))
    for penalty in PENALTIES:
        there = replace(goals.take(index), penalty=penalty)
        from_here = rows.take(index) if done is None else done.rows.take(index)
        part = polish(campaign.objective, from_here, there, pace=pace, stop=campaign.halted)
        done = part if done is None else _replaced(done, index, part)
        index = np.flatnonzero((done.worst < reserve) & done.finished)
        if index.size == 0 or campaign.objective.by_stand_in or campaign.halted():
            break
    if done is None:
        raise ValueError("there is no penalty to polish with")
    return done


def _replaced(done: Polished, index: IntArray, part: Polished) -> Polished:
    """The same with the rows named by `index` exchanged for those of `part`."""
    x = done.rows.x.copy()
    x[index] = part.rows.x
    merit, worst, stable, finished = (
        done.merit.copy(), done.worst.copy(), done.stable.copy(), done.finished.copy(),
    )  # fmt: skip
    merit[index], worst[index] = part.merit, part.worst
    stable[index], finished[index] = part.stable, part.finished
    return Polished(done.rows.at(x), merit, worst, stable, finished)


def _fresh(campaign: Campaign, standing: Standing, aim: Aim) -> Rows:
    """Starts drawn for the wish alone, the best by wish and missing slack together: the best slack may lie in
    another basin than the best of the wish."""
    if aim.measure is None:
        raise ValueError("an aim at the worst slack needs no starts of its own")
    objective = campaign.objective
    drawn = sample(objective, standing.number, FRESH, campaign.settings.seed * 1013 + 7, standing.signs)
    with objective.approximating():
        scores = objective.score(drawn, hasty=True)
    value = scores.values[:, :, objective.measures.index(aim.measure)]
    gain = np.where(scores.case >= 0, benefit(aim.measure, aim.sense, value), np.inf).min(axis=1)
    short = np.minimum(scores.guide() - aim.reserve, 0.0)
    merit = np.where(scores.stable, gain + FRESH_PENALTY * short, -np.inf)
    index: IntArray = np.flatnonzero(np.isfinite(merit))
    if index.size == 0:
        return drawn.take(index)
    return drawn.take(index[distinct(drawn.take(index), merit[index], FRESH_PICKS)])


def _from_archive(campaign: Campaign, number: int, aim: Aim, count: int = 3) -> Rows:
    """Scored rows of a structure with the reserve kept, best by the wish, distinct."""
    rows, slack, values, cases = campaign.objective.archive.all()
    if aim.measure is None:
        raise ValueError("an aim at the worst slack needs no archive")
    judged = cases >= len(campaign.objective.active[number])
    fit: IntArray = np.flatnonzero((rows.structure == number) & judged & (slack.min(axis=1) >= aim.reserve))
    gain = benefit(aim.measure, aim.sense, values[fit, campaign.objective.kept.index(aim.measure)])
    order = np.argsort(-gain, kind="stable")[:200]
    if order.size == 0:
        return rows.take(fit)
    return rows.take(fit[order[distinct(rows.take(fit[order]), gain[order], count)]])
