"""A polish for one quantity, carried through on every plant case that turns out to bind.

S rows, K cases.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.search.archive import Rows
from synth.search.campaign import Campaign
from synth.search.goals import Goals, terms
from synth.search.polish import Pace, Polished, polish
from synth.search.standing import FINE

MARGIN = 1e-6  # of slack kept beyond the reserve, so that the last digits of a polish cannot fall short of it
CASE_TURNS = 8
PENALTIES = (200.0, 2_000.0, 20_000.0)
LAST_RADIUS = 0.01  # of the exact steps that follow a stand-in
STEPS_BACK = np.geomspace(1e-6, 0.1, 11)  # lengths of the steps with which a stuck row regains its reserve


def on_all_cases(campaign: Campaign, rows: Rows) -> FloatArray:
    """(S, K) exact worst slack of each case."""
    objective = campaign.objective
    out: FloatArray = objective.score(rows, objective.everywhere(), remember=False).exact.min(axis=2)
    return out


def confirmed(
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
        by_case = on_all_cases(campaign, done.rows)
        changed = set()
        for i in np.flatnonzero(done.finished):
            s, worst = int(done.rows.structure[i]), int(by_case[i].argmin())
            if by_case[i, worst] < done.worst[i] - FINE and worst not in objective.active[s]:
                objective.activate(s, [worst])
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
    if index.size and not campaign.objective.by_stand_in:
        done = _replaced(done, index, _drawn_back(campaign, done, index, goals.take(index), reserve[index]))
    return done


def _drawn_back(
    campaign: Campaign, done: Polished, index: IntArray, goals: Goals, reserve: FloatArray
) -> Polished:
    """The rows named by `index`, each moved a little to where it keeps its reserve (S,), if it does anywhere.

    A polish gets stuck a hair short of it where several peaks of a curve are equally high, and the slope of
    the highest tells nothing of the others. So steps of many lengths are tried, along every coordinate and
    towards the best of the structure, and of those that keep the reserve the one that gives up least is kept.
    """
    objective = campaign.objective
    rows = done.rows.take(index)
    count, variables = rows.x.shape
    low, high, _ = objective.limits(rows)
    tops = [campaign.standings[int(n)].tops for n in rows.structure]
    best = np.array([x if t is None else t.x[0] for x, t in zip(rows.x, tops, strict=True)])
    sides = np.broadcast_to(
        np.concatenate([np.eye(variables), -np.eye(variables)]), (count, 2 * variables, variables)
    )
    moves = np.concatenate([sides, (best - rows.x)[:, None, :]], axis=1)
    steps = (STEPS_BACK[:, None, None] * moves[:, None, :, :]).reshape(count, -1, variables)
    x = np.clip(rows.x[:, None, :] + steps, low[:, None, :], high[:, None, :])
    of = np.repeat(np.arange(count), steps.shape[1])
    scores = objective.score(rows.take(of).at(x.reshape(-1, variables)))
    merit = terms(objective, replace(goals.take(of), penalty=PENALTIES[-1]), scores).merit()
    merit = np.where(scores.stable & (scores.worst() >= reserve[of]), merit, -np.inf).reshape(count, -1)
    pick, here = merit.argmax(axis=1), np.arange(count)
    found = np.isfinite(merit[here, pick])
    at = here * steps.shape[1] + pick
    return Polished(
        rows.at(np.where(found[:, None], x[here, pick], rows.x)),
        np.where(found, merit[here, pick], done.merit[index]),
        np.where(found, scores.worst()[at], done.worst[index]),
        np.where(found, scores.stable[at], done.stable[index]),
        done.finished[index],
    )


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
