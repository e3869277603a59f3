"""How near the search comes to the best there is: published optimum settings, and a long independent search.

The long search is scipy's differential evolution on the exact worst slack, each structure for itself, both
signs, with about a hundred times the evaluations; it knows nothing of starts or slopes.
"""

from __future__ import annotations

import time
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
from problems import problems
from scipy.optimize import differential_evolution
from tables import Table

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.search import Aim, Task, propose
from synth.search.campaign import Campaign
from synth.search.objective import Objective
from synth.search.outcome import Settings
from synth.structures import by_name

TABLE = Path(__file__).parents[1] / "tests" / "references" / "optimum_pi.toml"
SHEETS = 3
STRUCTURES = ("PI", "PD", "lead", "lag", "PID", "PI-lead", "double-lead", "lead-lag")
LONG = 100  # times the evaluations of the search


def published() -> Table:
    """Largest integral gain under a bound on Ms, the whole table."""
    table = Table(
        "Largest integral gain of a PI under a bound on Ms",
        ["set", "worst relative error", "median", "seconds each"],
    )
    errors, taken = [], []
    for row in tomllib.loads(TABLE.read_text(encoding="utf-8"))["optimum"]:
        bound = Bound("sensitivity_peak.max", Measure("sensitivity_peak"), "max", row["sensitivity_peak"])
        task = Task(
            Rational.of(row["numerator"], row["denominator"], row["dead_time"]),
            ("nominal",),
            (bound,),
            (by_name("PI"),),
            prefer=Aim(Measure("disturbance_integral"), "min"),
        )
        start = time.process_time()
        best = propose(task).candidates[0].parameters
        taken.append(time.process_time() - start)
        errors.append(abs(best["gain"] / best["integral_time"] / float(row["integral_gain"]) - 1.0))
    table.rows.append(
        [f"{len(errors)} plants and bounds", max(errors), float(np.median(errors)), float(np.median(taken))]
    )
    return table


def long_search(task: Task, evaluations: int) -> float:
    """Best worst slack of one structure by differential evolution."""
    objective = Objective(task)
    low, high = objective.boxes[0]
    box = [(max(a, -12.0), min(b, 12.0)) for a, b in zip(low, high, strict=True)]
    size = 30 * len(box)

    def cost(x: np.ndarray, sign: float) -> np.ndarray:
        structure, scales = task.structures[0], objective.scales
        theta = structure.from_search(x.T, np.full(x.shape[1], sign), scales.time, scales.gain)
        return -objective.score(objective.rows_of(0, theta), remember=False).guide()

    found = [
        differential_evolution(
            lambda x, s=sign: cost(x, s),
            box,
            seed=1,
            popsize=30,
            maxiter=max(evaluations // (2 * size), 5),
            tol=1e-9,
            polish=False,
            vectorized=True,
            updating="deferred",
        ).fun
        for sign in (1.0, -1.0)
    ]
    return -min(found)


def against_a_long_search() -> Table:
    """Slack that the search leaves behind, per structure."""
    table = Table(
        f"Best slack against a search of {LONG} times the evaluations, {SHEETS} sheets a structure",
        ["structure", "most behind", "most ahead", "evaluations of ours, mean"],
        note="Behind: the long search found more. Sheets whose best slack is below -1 are left out.",
    )
    drawn = [p for p in problems(40, 0.02, push=True) if p.task.plants.dead_time[0] == 0.0]
    for name in STRUCTURES:
        gaps, counts = [], []
        for problem in drawn:
            task = replace(problem.task, structures=(by_name(name),))
            campaign = Campaign(task, Settings())
            campaign.run()
            if campaign.standings[0].best < -1.0:
                continue
            counts.append(campaign.objective.evaluations)
            gaps.append(long_search(task, LONG * counts[-1]) - campaign.standings[0].best)
            if len(gaps) == SHEETS:
                break
        table.rows.append([name, float(max(gaps)), float(-min(gaps)), float(np.mean(counts))])
    return table


QUESTIONS = (published, against_a_long_search)
