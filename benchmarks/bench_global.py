"""Whether a long independent search finds more in some structure than ours did.

scipy's differential evolution on the worst slack, with a hundred times the evaluations that the campaign
spent on the structure; it shares the evaluator and nothing else. What is compared is the exact worst slack;
ceilings of dense scans are in the slack that our search steers by, and so is what is held against them.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

import independent
import numpy as np
from problems import problems
from tables import Table

from synth.search import Settings, Task, propose
from synth.search.campaign import Campaign
from synth.search.dense import MOST_PARAMETERS, cover
from synth.search.objective import Objective, uncompressed
from synth.spec import read_spec

TIMES = 100
LEAST = 30_000  # evaluations, where ours needed few
NEAR = 0.005
FAR = -0.5  # a structure this short is left early, by design, where another one meets the sheet
SAMPLE, SHEETS = 3, 20
HARDEST = ("PID", "lead-lag")


@dataclass(frozen=True)
class Pair:
    """One structure on one sheet: the best slack of ours and of the evolution."""

    name: str
    ours: float
    theirs: float
    kind: str


def pairs(name: str, task: Task, only: tuple[str, ...] = ()) -> Iterator[Pair]:
    """Every structure of two parameters or more (of one, the whole line is walked)."""
    outcome = propose(task, Settings())
    objective = Objective(task)
    objective.active = [tuple(range(len(task.case_names)))] * len(task.structures)
    for n, (structure, scan) in enumerate(zip(task.structures, outcome.scans, strict=True)):
        if len(structure.parameters) == 1 or (only and structure.name not in only):
            continue
        theirs = independent.search(objective, n, max(TIMES * scan.evaluations, LEAST), seed=1).slack
        if max(scan.best_slack, theirs) >= 0.0:
            kind = "meets the sheet"
        elif outcome.verdict == "met" and scan.best_slack < FAR:
            kind = "far off, another meets the sheet"
        else:
            kind = "near, or nothing meets the sheet"
        settled = "settled" if scan.settled else "restarts not agreed"
        yield Pair(f"{name} {structure.name}", scan.best_slack, theirs, f"{kind}; {settled}")


def compared(title: str, found: Iterable[Pair]) -> Table:
    """Share within NEAR and the largest shortfall, by what our search said of the structure."""
    table = Table(
        title,
        ["structures", "of them", f"within {NEAR}", "largest shortfall", "where", "evolution shorter"],
        note=f"Evaluations of the evolution: {TIMES} times those of the campaign, {LEAST} at least.",
    )
    kinds: dict[str, list[Pair]] = {}
    for pair in found:
        kinds.setdefault(pair.kind, []).append(pair)
    for kind, some in sorted(kinds.items()):
        short = np.array([p.theirs - p.ours for p in some])
        worst = int(short.argmax())
        table.rows.append(
            [
                kind,
                len(some),
                int((short <= NEAR).sum()),
                max(float(short[worst]), 0.0),
                some[worst].name if short[worst] > NEAR else "",
                int((short < -NEAR).sum()),
            ]
        )
    return table


def sample() -> Table:
    """The two structures that are hardest to search, on a few sheets."""
    drawn = problems(SAMPLE, 0.03, seed=8100)
    return compared(
        f"A long differential evolution against ours, {' and '.join(HARDEST)} on {SAMPLE} sheets",
        (pair for p in drawn for pair in pairs(p.name, p.task, HARDEST)),
    )


def all_structures() -> Table:
    """Every structure, on tight sheets of every family."""
    drawn = problems(SHEETS, 0.02, push=True, seed=8200)
    return compared(
        f"A long differential evolution against ours, all structures on {SHEETS} sheets",
        (pair for p in drawn for pair in pairs(p.name, p.task)),
    )


def on_sheets(folder: Path) -> Table:
    """The same on the sheets of a folder, and of the folders in it."""
    files = sorted(folder.rglob("*.toml"))
    return compared(
        f"A long differential evolution against ours, all structures on {len(files)} sheets of {folder.name}",
        (pair for file in files for pair in pairs(file.stem, Task.of(read_spec(file)))),
    )


def ceilings() -> Table:
    """Whether the ceiling of a dense scan holds, and how often it says that nothing meets the sheet."""
    told, exceeded, taken = [], 0, []
    for p in problems(SHEETS, 0.02, push=True, seed=8300):
        campaign = Campaign(p.task, Settings())
        campaign.run()
        objective = campaign.objective
        for standing in campaign.standings:
            n = standing.number
            if not 1 < standing.parameters <= MOST_PARAMETERS or standing.best >= 0.0:
                continue
            ours = float(uncompressed(np.array([standing.best]))[0])
            theirs = independent.search(objective, n, LEAST, seed=1, steering=True).slack
            start = time.process_time()
            with objective.approximating():
                found = cover(objective, n, ours)
            taken.append(time.process_time() - start)
            if found.ceiling is not None:
                told.append(found.ceiling)
                exceeded += max(ours, theirs) > found.ceiling + NEAR
    return Table(
        f"Ceilings of dense scans, structures that do not meet one of {SHEETS} sheets",
        ["scans", "with a ceiling", "below zero", "exceeded", "median s", "longest s"],
        [
            [
                len(taken),
                len(told),
                sum(c < 0.0 for c in told),
                exceeded,
                float(np.median(taken)),
                max(taken),
            ]
        ],
        note=f"Exceeded: ours or an evolution of {LEAST} evaluations found more, by {NEAR} at least.",
    )


QUESTIONS = (sample,)
LONG = (all_structures, ceilings)
