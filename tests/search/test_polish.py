"""The polish against a brute-force optimum, and its parts."""

import numpy as np
import pytest
from scipy.optimize import differential_evolution
from sheets import cases, servo

from synth.search.archive import distinct, joined
from synth.search.goals import Goals
from synth.search.objective import Objective
from synth.search.outcome import Aim
from synth.search.polish import Pace, polish, positive, updated
from synth.search.starts import sample


def best_by_evolution(objective, s, sign=1.0):
    """Long independent search on the exact worst slack."""
    low, high = objective.boxes[s]
    low, high = np.maximum(low, -8.0), np.minimum(high, 8.0)

    def cost(x):
        wide = np.zeros((x.shape[1], objective.width))
        wide[:, : len(low)] = x.T
        theta = objective.structures[s].from_search(
            x.T, np.full(x.shape[1], sign), objective.scales.time, objective.scales.gain
        )
        return -np.maximum(objective.score(objective.rows_of(s, theta), remember=False).guide(), -30.0)

    found = differential_evolution(
        cost,
        list(zip(low, high, strict=True)),
        seed=1,
        maxiter=120,
        popsize=12,
        vectorized=True,
        updating="deferred",
        polish=False,
        tol=1e-10,
    )
    return -found.fun


@pytest.mark.parametrize("name", ["PI", "lead", "PID"])
def test_polished_starts_reach_the_global_optimum(name):
    objective = Objective(servo((name,)))
    rows = sample(objective, 0, 96, 1)
    guide = objective.score(rows).guide()
    done = polish(objective, rows.take(distinct(rows, guide, 6)))
    assert done.merit.max() >= best_by_evolution(objective, 0) - 5e-3


def test_no_row_ends_worse_than_it_began_nor_outside_its_box():
    objective = Objective(servo())
    rows = joined([sample(objective, s, 6, 2) for s in range(9)])
    before = objective.score(rows).guide()
    done = polish(objective, rows, pace=Pace(iterations=5, halve=()))
    assert np.all(done.merit >= before)
    low, high, free = objective.limits(done.rows)
    assert np.all((done.rows.x >= low) & (done.rows.x <= high))
    np.testing.assert_array_equal(done.rows.x[~free], 0.0)


def test_rows_do_not_influence_each_other():
    objective = Objective(servo(("PI", "lead-lag")))
    rows = joined([sample(objective, s, 4, 5) for s in range(2)])
    pace = Pace(iterations=4, halve=())
    together = polish(objective, rows, pace=pace)
    some = np.array([1, len(rows) - 1])
    alone = polish(objective, rows.take(some), pace=pace)
    np.testing.assert_allclose(alone.merit, together.merit[some], rtol=1e-6, atol=1e-9)


def test_the_field_is_halved_per_structure():
    objective = Objective(servo(("PI", "lead")))
    rows = joined([sample(objective, s, 12, 4).take(np.arange(10)) for s in range(2)])
    done = polish(objective, rows, pace=Pace(iterations=7))
    for s in range(2):
        mine = done.rows.structure == s
        assert done.finished[mine].sum() == 5
        assert done.merit[mine & done.finished].min() >= done.merit[mine & ~done.finished].max() - 1.0


def test_a_quantity_is_improved_down_to_the_reserve():
    task = servo(("PD",))
    objective = Objective(task)
    rows = sample(objective, 0, 60, 1)
    first = polish(objective, rows.take(distinct(rows, objective.score(rows).guide(), 4)))
    start = first.rows.take(np.array([int(first.merit.argmax())]))
    aim = Aim(task.bounds[4].measure, "min", 0.05)
    goals = Goals((aim,), np.zeros(1, dtype=np.intp), np.full(1, np.nan), 2000.0)
    done = polish(objective, start, goals, pace=Pace(iterations=25, halve=(), second=True))
    assert done.worst[0] == pytest.approx(0.05, abs=2e-4)
    q = objective.measures.index(task.bounds[4].measure)
    assert objective.score(done.rows).values[0, 0, q] < 0.97 * objective.score(start).values[0, 0, q]


def test_curvature_of_a_quadratic_is_exact_after_as_many_moves_as_coordinates():
    rng = np.random.default_rng(0)
    root = rng.normal(size=(3, 3))
    true = root @ root.T - 2.0 * np.eye(3)
    curvature = np.zeros((1, 3, 3))
    for _ in range(3):
        move = rng.normal(size=(1, 3))
        curvature = updated(curvature, move, move @ true, np.array([True]))
    np.testing.assert_allclose(curvature[0], true, atol=1e-9)
    np.testing.assert_array_equal(updated(curvature, move, 0.0 * move, np.array([False])), curvature)
    values = np.linalg.eigvalsh(true)
    np.testing.assert_allclose(np.linalg.eigvalsh(positive(curvature)[0]), np.maximum(values, 0.0), atol=1e-9)


def test_several_cases_are_held_at_once():
    objective = Objective(cases(3))
    objective.active = [(0, 1, 2)]
    rows = sample(objective, 0, 48, 1)
    done = polish(objective, rows.take(distinct(rows, objective.score(rows).guide(), 4)))
    best = done.rows.take(np.array([int(done.merit.argmax())]))
    scores = objective.score(best)
    assert scores.exact.shape[1] == 3
    assert scores.worst()[0] == scores.exact[0].min()
    assert done.merit.max() >= best_by_evolution(objective, 0) - 5e-3
