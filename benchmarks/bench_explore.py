"""What the outer exploration by Optuna adds to starts and polish alone, and what it costs.

Sheets on which a basin is easily missed: plants that only a conditionally stable loop can control, light
resonances, and several plant cases at once; the structures of four and five parameters. The same campaign,
then the exploration.
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
from bench_cases import with_cases
from problems import problems
from tables import Table

from synth.search import Settings
from synth.search.campaign import Campaign
from synth.search.explore import explore
from synth.structures import by_name

COUNT = 8
TRIALS = 40
WIDE = ("lead-lag", "PID", "PI-lead")
ADDED = 0.002  # of slack, from which on something counts as added


def gains() -> Table:
    """Best slack before and after, per kind of sheet."""
    table = Table(
        f"The outer exploration, {TRIALS} trials over {len(WIDE)} structures, {COUNT} sheets a row",
        ["sheets", "sheets improved", "largest gain of slack", "seconds before", "seconds of it"],
        note="A bare quick campaign (one round) comes before it; loading Optuna is not counted.",
    )
    kinds = {
        "unstable, pushed to their optimum": problems(COUNT, 0.01, push=True, families=("unstable",)),
        "flexible and resonant": problems(COUNT, 0.01, push=True, families=("flex", "resonant")),
        "eight plant cases": problems(COUNT, 0.1, families=("lag2", "chain", "zero", "integrating")),
    }
    for kind, drawn in kinds.items():
        added, before, after = [], [], []
        for i, problem in enumerate(drawn):
            task = (
                with_cases(problem.task, problem.structure, 8, i)
                if kind.startswith("eight")
                else problem.task
            )
            task = replace(task, structures=tuple(by_name(n) for n in WIDE))
            campaign = Campaign(task, Settings(budget="quick"))
            start = time.process_time()
            campaign.run()
            middle = time.process_time()
            best = [s.best for s in campaign.standings]
            explore(campaign, [s.number for s in campaign.standings], TRIALS)
            campaign.examine([s.number for s in campaign.standings])
            added.append(max(s.best - b for s, b in zip(campaign.standings, best, strict=True)))
            before.append(middle - start)
            after.append(time.process_time() - middle)
        improved = sum(a > ADDED for a in added)
        table.rows.append(
            [
                kind,
                f"{improved}/{len(drawn)}",
                float(max(added)),
                float(np.median(before)),
                float(np.median(after)),
            ]
        )
    return table


QUESTIONS = (gains,)
