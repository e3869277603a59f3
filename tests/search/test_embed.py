"""Structures that contain simpler ones: their points carried over, and what that secures."""

import numpy as np
import pytest
from sheets import bounds, servo

from synth.loop.closed_loop import Rational
from synth.search import Settings, Task, propose
from synth.search.embed import embedded
from synth.search.objective import Objective
from synth.structures import REGISTRY, by_name

POINTS = {
    "P": (3.0,),
    "PI": (3.0, 0.7),
    "PD": (3.0, 0.2, 0.02),
    "lag": (3.0, 1.4, 0.2),
    "lead": (3.0, 2.0, 11.0),
}
PAIRS = [(small, large.name) for large in REGISTRY.values() for small in large.simpler]


@pytest.mark.parametrize(("small", "large"), PAIRS)
def test_what_a_structure_contains_it_can_be(small, large):
    task = servo((small, large))
    objective = Objective(task)
    rows = embedded(objective, objective.rows_of(0, np.array([POINTS[small]])), 1)
    structure = by_name(large)
    w = np.logspace(-0.5, 1.5, 30)
    want = by_name(small).response(np.tile(POINTS[small], (30, 1)), w)
    nearest = np.inf
    for theta in objective.theta(rows):
        assert structure.legal(theta[None, :])[0]
        have = structure.response(np.tile(theta, (30, 1)), w)
        nearest = min(nearest, float(np.abs(np.log(have / want)).max()))
    assert nearest < 0.02


def test_the_same_function_is_carried_over_exactly():
    objective = Objective(servo(("PI-lead", "PID", "P")))
    theta = np.array([[3.0, 2.0, 4.0, 40.0]])
    rows = embedded(objective, objective.rows_of(0, theta), 1)
    w = np.logspace(-2, 3, 20)
    one = by_name("PI-lead").response(np.tile(theta, (20, 1)), w)
    other = by_name("PID").response(np.tile(objective.theta(rows)[0], (20, 1)), w)
    np.testing.assert_allclose(one, other, rtol=1e-6)
    assert embedded(objective, objective.rows_of(0, theta), 2) is None


def test_a_structure_comes_out_no_worse_than_those_it_contains():
    task = Task(
        plants=Rational.of([1.0], [0.2, 1.0, 0.0, 0.0]),
        case_names=("nominal",),
        bounds=bounds(
            ("settling_time", "max", 4.0),
            ("overshoot", "max", 5.0),
            ("control_peak", "max", 3.0),
            ("phase_margin", "min", 60.0),
        ),
        structures=tuple(REGISTRY.values()),
        reference_step=2.0,
    )
    best = {s.structure: s.best_slack for s in propose(task, Settings(budget="quick")).scans}
    for small, large in [*PAIRS, ("lead", "PID")]:
        if best[small] > -20.0:
            assert best[large] >= best[small] - 0.01, (small, large)


def test_a_narrow_miss_is_doubted_longer():
    """An optimum that misses by 0.002 and on which nine restarts agree stands beside another that meets."""
    task = Task(
        plants=Rational.of([1.0], [0.5, 1.5, 1.0, 0.0]),
        case_names=("nominal",),
        bounds=bounds(
            ("velocity_error", "max", 0.2004),
            ("settling_time", "max", 22.036400350426),
            ("phase_margin", "min", 41.528564401855),
            ("bandwidth", "min", 0.822126091117),
            ("control_peak", "max", 0.516116448286),
        ),
        structures=(by_name("lag"),),
    )
    for seed in (0, 3):
        assert propose(task, Settings(seed=seed)).verdict == "met"
