"""What plant cases cost: the search works on the active few and confirms on all."""

from __future__ import annotations

import time

import numpy as np
from problems import problems
from tables import Table

from synth.loop.closed_loop import Rational
from synth.requirements import Bound
from synth.search import Settings, Task
from synth.search.campaign import Campaign
from synth.structures import by_name

CASES = (1, 8, 64, 512)
COUNT = 6
SPREAD = 0.08


def with_cases(task: Task, structure: str, count: int, seed: int) -> Task:
    """The plant's coefficients moved by up to SPREAD, independently; bounds opened so that room is left."""
    rng = np.random.default_rng(seed)
    plants = task.plants
    shake = 1.0 + SPREAD * rng.uniform(-1.0, 1.0, (count, plants.denominator.shape[1]))
    shake[0] = 1.0
    gain = 1.0 + SPREAD * rng.uniform(-1.0, 1.0, (count, 1))
    gain[0] = 1.0
    rows = Rational.of(
        plants.numerator * gain, plants.denominator * shake, np.repeat(plants.dead_time, count)
    )
    bounds = tuple(_opened(b) for b in task.bounds)
    names = ("nominal", *(f"case {i}" for i in range(1, count)))
    return Task(rows, names, bounds, (by_name(structure),))


def _opened(bound: Bound) -> Bound:
    wide = 1.25 if bound.side == "max" else 0.75
    return Bound(bound.id, bound.measure, bound.side, bound.limit * wide)


def cost_of_cases() -> Table:
    """Evaluations, seconds, and active cases at the end."""
    table = Table(
        f"Cost of plant cases, means of {COUNT} sheets, one structure",
        ["cases", "loops scored", "of them to confirm", "seconds", "active at the end"],
        note="Confirming is one pass over all cases for each case that is made active.",
    )
    drawn = [p for p in problems(3 * COUNT, 0.1) if p.task.plants.dead_time[0] == 0.0][:COUNT]
    for count in CASES:
        scored, confirmed, taken, active = [], [], [], []
        for i, problem in enumerate(drawn):
            campaign = Campaign(with_cases(problem.task, problem.structure, count, i), Settings())
            start = time.process_time()
            campaign.run()
            taken.append(time.process_time() - start)
            scored.append(campaign.objective.evaluations)
            active.append(len(campaign.objective.active[0]))
            confirmed.append(count * active[-1] if count > 1 else 0)
        means = [float(np.mean(v)) for v in (scored, confirmed, taken, active)]
        table.rows.append([count, round(means[0]), round(means[1]), means[2], means[3]])
    return table


QUESTIONS = (cost_of_cases,)
