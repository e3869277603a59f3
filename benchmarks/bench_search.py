"""The search against what an engineer would write in an afternoon, on problems that can be met by
construction.

The afternoon's ways: one Optuna study (TPE) over raw gains, and scipy's differential evolution over raw
gains; each trial scored with scipy.signal off grids; structure known, 400 trials. Ours scores exactly and is
given nothing: all nine structures, or the witness's one alone, to a verdict. A problem counts as found when
an exact evaluation of what was returned meets every requirement.
"""

from __future__ import annotations

import statistics
import time
import warnings

import numpy as np
import plain_scipy
from problems import Problem, problems
from scipy.optimize import differential_evolution
from tables import Table

from synth.search import Settings, Task, propose, rescore
from synth.search.objective import Objective
from synth.structures import by_name

COUNT = 10
AFTERNOON = 3  # of them for the ways of an afternoon, which take ten times as long
MANY = 60  # for the long question
TRIALS = 400
LEVELS = (("10 %", 0.10, False), ("3 %", 0.03, False), ("pushed to its optimum, 2 %", 0.02, True))


def alone(problem: Problem) -> Task:
    """The problem with the witness's structure only."""
    task = problem.task
    return Task(task.plants, task.case_names, task.bounds, (by_name(problem.structure),))


def plain_cost(problem: Problem, theta: np.ndarray) -> float:
    """Worst slack, its sign turned, of one raw parameter vector by scipy.signal."""
    structure = by_name(problem.structure)
    if not structure.legal(theta[None, :])[0]:
        return 50.0
    made, plants = structure.realise(theta[None, :]), problem.task.plants
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore")
        try:
            values = plain_scipy.score(
                np.trim_zeros(plants.numerator[0], "f"),
                plants.denominator[0],
                np.trim_zeros(made.numerator[0], "f"),
                made.denominator[0],
                float(plants.dead_time[0]),
            )
        except (ValueError, FloatingPointError, np.linalg.LinAlgError):
            return 50.0
    if values["decay_rate"] <= 0.0:
        return 20.0
    worst = 1.0
    for b in problem.task.bounds:
        value = values.get(b.measure.quantity, np.nan)
        gap = b.limit - value if b.side == "max" else value - b.limit
        worst = min(worst, gap / b.unit if np.isfinite(gap) else (1.0 if gap == np.inf else -30.0))
    return -max(worst, -30.0)


def raw_box(problem: Problem) -> list[tuple[float, float]]:
    """Six decades of every raw parameter round the plant's scales (logarithms), as one would set it up by
    hand."""
    objective = Objective(alone(problem))
    structure = by_name(problem.structure)
    units = {
        "gain": 1.0 / objective.scales.gain,
        "time": objective.scales.time,
        "frequency": 1.0 / objective.scales.time,
    }
    return [(np.log(units[p.role]) - 6.9, np.log(units[p.role]) + 6.9) for p in structure.parameters]


def by_optuna(problem: Problem) -> np.ndarray:
    import optuna

    optuna.logging.set_verbosity(optuna.logging.ERROR)
    study = optuna.create_study(sampler=optuna.samplers.TPESampler(seed=0))
    box = raw_box(problem)

    def trial(t: optuna.Trial) -> float:
        x = [t.suggest_float(f"p{i}", np.exp(a), np.exp(b), log=True) for i, (a, b) in enumerate(box)]
        return plain_cost(problem, np.array(x))

    study.optimize(
        trial, n_trials=TRIALS, callbacks=[lambda s, t: s.stop() if (t.value or 0.0) < 0.0 else None]
    )
    return np.array([study.best_params[f"p{i}"] for i in range(len(box))])


def by_evolution(problem: Problem) -> np.ndarray:
    box = raw_box(problem)
    size = 10 * len(box)
    best = differential_evolution(
        lambda x: plain_cost(problem, np.exp(x)),
        box,
        seed=0,
        popsize=10,
        maxiter=max(TRIALS // size, 2),
        polish=False,
        callback=lambda intermediate_result: bool(intermediate_result.fun < 0.0),
    )
    return np.exp(best.x)


def meets(problem: Problem, structure: str, theta: np.ndarray) -> bool:
    return bool(rescore(problem.task, [(structure, list(theta))])[0].meets_all)


def ours(problem: Problem, task: Task) -> bool:
    first = propose(task, Settings()).candidates[0]
    return first.meets_all and meets(problem, first.structure, np.array(list(first.parameters.values())))


def found_rates(count: int = COUNT, afternoon: int = AFTERNOON) -> Table:
    """Share of problems found and median seconds."""
    table = Table(
        "Problems found",
        ["way", "loosened by", "found", "median s", "90 % s"],
        note="All nine: every structure searched to its verdict, alternatives and final scoring included.",
    )
    for words, loosen, push in LEVELS:
        drawn = problems(count, loosen, push=push)
        ways = {
            "ours, all nine structures": (lambda p: ours(p, p.task), count),
            "ours, structure known": (lambda p: ours(p, alone(p)), count),
            "Optuna, raw gains, structure known": (lambda p: meets(p, p.structure, by_optuna(p)), afternoon),
            "differential evolution, structure known": (
                lambda p: meets(p, p.structure, by_evolution(p)),
                afternoon,
            ),
        }
        for name, (way, share) in ways.items():
            taken, good = [], 0
            for problem in drawn[:share]:
                start = time.process_time()
                good += way(problem)
                taken.append(time.process_time() - start)
            late = float(np.quantile(taken, 0.9))
            table.rows.append([name, words, f"{good}/{len(taken)}", statistics.median(taken), late])
    return table


def where_time_goes() -> Table:
    """Seconds of each stage of a search over all nine structures."""
    table = Table("Where the seconds go, all nine structures", ["stage", "median s"])
    stages: dict[str, list[float]] = {}
    for problem in problems(COUNT, 0.03):
        for stage, value in propose(problem.task, Settings()).stages.items():
            stages.setdefault(stage, []).append(value)
    table.rows = [[stage, statistics.median(values)] for stage, values in stages.items()]
    return table


def many_found() -> Table:
    """The same on more problems."""
    return found_rates(MANY, COUNT)


QUESTIONS = (found_rates, where_time_goes)
LONG = (many_found,)
