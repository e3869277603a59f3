"""A sheet's task in, an outcome out: the whole search in its order."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from synth.loop.arrays import FloatArray
from synth.model.cases import PlantCase
from synth.search.alternatives import extremes, others
from synth.search.approach import nearest
from synth.search.archive import Rows, joined
from synth.search.campaign import Campaign
from synth.search.dense import dense_scans
from synth.search.finals import (
    Draft,
    candidates,
    drafts_of,
    named,
    realised,
    rounded,
    scorecards,
    simplest,
    with_fragility,
)
from synth.search.nesting import nest
from synth.search.outcome import (
    Candidate,
    Outcome,
    Price,
    ProgressCall,
    Rejection,
    Scan,
    Settings,
    StopCall,
    Task,
)
from synth.search.prices import price_list
from synth.search.ranking import best_of, chosen, different
from synth.search.wishes import Wished, preferred
from synth.structures import by_name

Seed = tuple[str, Sequence[float]]
BOX_TURNS = 4  # how often points inside the tolerance box may send the search on


def propose(
    task: Task,
    settings: Settings | None = None,
    progress: ProgressCall | None = None,
    stop: StopCall | None = None,
    *,
    seeds: Sequence[Seed] = (),
) -> Outcome:
    """Search every structure of the task and rank what is found.

    seeds : (structure, tuned values in SI) of earlier candidates to set out from as well.
    stop : asked often; True ends the search and keeps what is best so far (`interrupted`).
    The same task, settings and seeds give the same outcome bit for bit, unless a time limit or `stop` ends
    it.
    """
    settings = settings or Settings()
    wish = task.prefer
    extra = (wish.measure,) if wish is not None and wish.measure is not None else ()
    campaign = Campaign(task, settings, extra=extra, progress=progress, stop=stop)
    campaign.run(_seed_rows(campaign, seeds))
    found, listed, wish_rows = _listed(campaign)
    if not any(c.meets_all for c in listed) and not campaign.halted():
        campaign.enter("dense scans")
        if dense_scans(campaign):
            campaign.examine(list(range(len(campaign.standings))))
            nest(campaign)
            found, listed, wish_rows = _listed(campaign, wish_rows)
    examined = 0
    for _ in range(BOX_TURNS):
        if task.interior is None or not listed:
            break
        listed, failing = _inside(campaign, listed)
        examined = len(task.interior)
        if not failing or campaign.halted():
            break
        found, listed, wish_rows = _listed(campaign, wish_rows)
    else:
        listed, _ = _inside(campaign, listed)
    objective = campaign.objective
    campaign.enter("prices")
    met = any(c.meets_all for c in listed)
    prices = () if met or campaign.halted() else price_list(campaign)
    if prices:
        found, listed = _with_prices(campaign, found, listed, prices)
    campaign.enter("fragility")
    final = with_fragility(task, tuple(listed), objective.plants, objective.case_names)
    scans = tuple(_scan(campaign, n, found) for n in range(len(task.structures)))
    campaign.enter("end")
    return Outcome(
        candidates=final,
        rejections=_rejections(campaign, found, final, scans),
        scans=scans,
        prices=prices,
        verdict="met" if met else "not met",
        case_names=objective.case_names,
        plants=objective.plants,
        cases=task.cases + _added(campaign),
        interior_examined=examined,
        seed=settings.seed,
        budget=settings.budget,
        evaluations=objective.evaluations,
        seconds=time.perf_counter() - campaign.begun,
        interrupted=campaign.interrupted,
        limited=campaign.limited,
        stages=dict(campaign.stages),
        explored=campaign.explored,
    )


def rescore(task: Task, given: Sequence[Seed]) -> tuple[Candidate, ...]:
    """Score compensators of known structures on the task's cases as they are: nothing is rounded, renamed or
    ranked.

    given : (structure, tuned values in SI) each; a structure need not be among the task's. Raises KeyError
    for one that there is not.
    """
    made = [Draft(by_name(name), np.asarray(theta, dtype=float), goal="given") for name, theta in given]
    return candidates(task, made, task.plants, task.case_names)


def _seed_rows(campaign: Campaign, seeds: Sequence[Seed]) -> Rows | None:
    names = [s.name for s in campaign.task.structures]
    parts = []
    for name, theta in seeds:
        if name in names:
            origin = np.array([campaign.origin("an earlier candidate")])
            values = np.asarray(theta, dtype=float)[None, :]
            parts.append(campaign.objective.rows_of(names.index(name), values, origin))
    return joined(parts) if parts else None


def _listed(
    campaign: Campaign, earlier: Wished | None = None
) -> tuple[list[Candidate], list[Candidate], Wished | None]:
    """Every candidate found, the list to report, and where the preference led (to go on from, as
    `earlier`)."""
    task, objective = campaign.task, campaign.objective
    best = preferred(campaign, earlier)
    wished = [w for w in (best, extremes(campaign), others(campaign)) if w is not None]
    campaign.enter("finals")
    drafts: list[Draft] = []
    for standing in campaign.standings:
        if standing.tops is not None:
            several = standing.tops.first(2 if standing.best >= 0.0 else 1)
            drafts += drafts_of(objective, several, "worst slack", campaign.origins)
    near = nearest(campaign)
    if near is not None:
        drafts += drafts_of(objective, near, "worst slack", campaign.origins)
    for wish in wished:
        drafts += _wished_drafts(campaign, wish)
    drafts, looked = simplest(task, drafts, objective.plants, objective.case_names)
    drafts, scored = rounded(task, drafts, objective.plants, objective.case_names)
    objective.evaluations += looked
    found = list(candidates(task, drafts, objective.plants, objective.case_names))
    objective.evaluations += scored + len(drafts) * len(objective.plants)
    return found, chosen(task, found, 1.0 / objective.scales.time), best


def _with_prices(
    campaign: Campaign, found: list[Candidate], listed: list[Candidate], prices: Sequence[Price]
) -> tuple[list[Candidate], list[Candidate]]:
    """The same with the settings behind the prices: one that misses a single limit by little may be nearer
    than all that the search, which steers by stand-ins, has held to be nearest."""
    task, objective = campaign.task, campaign.objective
    drafts = [
        Draft(
            by_name(p.structure),
            np.array(list(p.parameters.values())),
            goal="price",
            start=p.start,
            source=p.source,
        )
        for p in prices
    ]
    drafts = [named(d, task.structures) for d in drafts]
    found = [*found, *candidates(task, drafts, objective.plants, objective.case_names)]
    objective.evaluations += len(drafts) * len(objective.plants)
    again = chosen(task, found, 1.0 / objective.scales.time)
    if [c.parameters for c in again] == [c.parameters for c in listed]:
        return found, listed
    return found, _inside(campaign, again)[0]  # nothing meets the sheet, so no point inside becomes a case


def _wished_drafts(campaign: Campaign, wish: Wished) -> list[Draft]:
    made = drafts_of(campaign.objective, wish.rows, "", campaign.origins, wish.need)
    return [replace(d, goal=g, hold=wish.hold) for d, g in zip(made, wish.goals, strict=True)]


def _inside(campaign: Campaign, listed: list[Candidate]) -> tuple[list[Candidate], bool]:
    """Judge the list on the points inside the tolerance box. The worst failing point of each candidate
    becomes a case of the search, which goes on from there; True when that happened."""
    task, objective = campaign.task, campaign.objective
    if task.interior is None:
        return listed, False
    campaign.enter("inside the box")
    names = tuple(c.name for c in task.interior_cases)
    drafts = _again(campaign, listed)
    measures = tuple(dict.fromkeys(b.measure for b in task.bounds))
    cards = scorecards(task, realised(drafts), task.interior, names, measures)
    objective.evaluations += len(drafts) * len(task.interior)
    worst = cards.slack.min(axis=2)
    out = [
        replace(c, interior_met=int((worst[b] >= 0.0).sum()), interior_total=len(names))
        for b, c in enumerate(listed)
    ]
    fails = sorted(
        {int(worst[b].argmin()) for b, c in enumerate(listed) if c.meets_all and worst[b].min() < 0.0}
    )
    fails = [i for i in fails if names[i] not in objective.case_names]
    if not fails:
        return out, False
    index = np.array(fails, dtype=np.intp)
    objective.add_cases(task.interior.rows(index), tuple(names[i] for i in fails))
    with objective.approximating():
        campaign.examine(list(range(len(campaign.standings))))
    campaign.settle_exactly()
    return out, True


def _again(campaign: Campaign, listed: list[Candidate]) -> list[Draft]:
    return [Draft(by_name(c.structure), np.array(list(c.parameters.values()))) for c in listed]


def _added(campaign: Campaign) -> tuple[PlantCase, ...]:
    extra = campaign.objective.case_names[len(campaign.task.case_names) :]
    inside = {c.name: c for c in campaign.task.interior_cases}
    return tuple(inside[name] for name in extra)


def _scan(campaign: Campaign, n: int, found: list[Candidate]) -> Scan:
    standing, name = campaign.standings[n], campaign.task.structures[n].name
    return Scan(
        structure=name,
        exhaustive="exact" if standing.parameters == 1 else "dense" if standing.resolution else "search",
        resolution=standing.resolution,
        ceiling=standing.ceiling,
        restarts=standing.restarts,
        agreeing=standing.agreeing,
        settled=standing.settled,
        best_slack=max((c.worst_slack for c in _of(found, name)), default=-np.inf),
        evaluations=standing.evaluations,
        signs=standing.signs,
        gain_intervals=campaign.gains if standing.parameters == 1 else (),
    )


def _of(found: list[Candidate], structure: str) -> list[Candidate]:
    """Those that this structure can be."""
    return [c for c in found if structure in (c.structure, *c.also)]


def _rejections(
    campaign: Campaign, found: list[Candidate], final: Sequence[Candidate], scans: Sequence[Scan]
) -> tuple[Rejection, ...]:
    """Structures without a place in the list, nearest first, and why."""
    out = []
    for scan in scans:
        mine = _of(found, scan.structure)
        if any(c.structure == scan.structure and c.meets_all for c in final):
            continue
        closest = best_of(campaign.task, mine) if mine else None
        out.append(_rejection(campaign, scan, closest, final))
    out.sort(key=lambda r: -(r.closest.worst_slack if r.closest is not None else -np.inf))
    return tuple(out)


def _rejection(
    campaign: Campaign, scan: Scan, closest: Candidate | None, final: Sequence[Candidate]
) -> Rejection:
    if closest is None or not bool(closest.stable.all()):
        reason = "no setting found that stabilises every case"
        if scan.exhaustive == "exact":
            reason = "no gain of either sign stabilises every case"
        return Rejection(scan.structure, reason, None, {}, scan)
    by_requirement: FloatArray = closest.worst_by_requirement()
    short = {b.id: float(s) for b, s in zip(campaign.task.bounds, by_requirement, strict=True) if s < 0.0}
    if not short:
        twins = [c for c in final if scan.structure in c.also]
        fallback = 1.0 / campaign.objective.scales.time
        near = twins or [c for c in final if not different(c, closest, fallback)]
        if twins:
            reason = f"the same function is listed as {twins[0].structure}"
        elif near:
            reason = f"its best setting is no other loop than that of {near[0].structure}, listed already"
        else:
            reason = "it meets the sheet, and the list is long enough without it"
        return Rejection(scan.structure, reason, closest, {}, scan)
    worst = min(short, key=lambda k: short[k])
    verb = "comes no nearer" if scan.settled else "was left, before its restarts agreed, no nearer"
    reason = f"{verb} than {short[worst]:.3g} of slack, short of {', '.join(short)}"
    return Rejection(scan.structure, reason, closest, short, scan)
