"""Slopes of other points: what they say of a row, and a kink that a polish passes with them."""

import numpy as np
import pytest
from sheets import bounds

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.search import Aim, Task
from synth.search.goals import Goals
from synth.search.objective import Objective
from synth.search.planes import Planes
from synth.search.polish import Pace, polish
from synth.structures import by_name

ROW = np.array([0])


def planes(kept=2):
    return Planes.of(kept, np.zeros((1, 2)), np.array([[0.3]]))


def test_without_a_plane_the_constraints_stand_alone():
    constraint, slope = np.array([[0.3]]), np.ones((1, 1, 2))
    level, slopes = planes(0).beside(ROW, np.zeros((1, 2)), constraint, slope, np.ones(1))
    np.testing.assert_array_equal(level, constraint)
    np.testing.assert_array_equal(slopes, slope)
    level, _ = planes().beside(ROW, np.zeros((1, 2)), constraint, slope, np.ones(1))
    np.testing.assert_array_equal(level, [[0.3, np.inf, np.inf]])


def test_a_plane_near_by_is_carried_over_and_contradicts_nothing():
    """Two peaks: slack min(0.3 + x, 0.5 - 2 x), seen at x = 0 and at x = 0.1, where the second is the
    lower."""
    seen = planes()
    seen.look(ROW, np.array([[0.1, 0.0]]), np.array([[0.3]]))
    seen.add(ROW, np.array([[[-2.0, 0.0]]]))
    here, slope = np.zeros((1, 2)), np.array([[[1.0, 0.0]]])
    level, slopes = seen.beside(ROW, here, np.array([[0.3]]), slope, np.array([0.1]))
    np.testing.assert_allclose(level, [[0.3, 0.5, np.inf]])
    np.testing.assert_allclose(slopes[0, 1], [-2.0, 0.0])
    level, _ = seen.beside(ROW, here, np.array([[0.6]]), slope, np.array([0.1]))
    assert level[0, 1] == 0.6  # moved up: it cannot be lower here than the lowest
    level, _ = seen.beside(ROW, here, np.array([[0.3]]), slope, np.array([0.01]))
    assert level[0, 1] == np.inf  # too far to be trusted


def test_the_oldest_plane_is_forgotten():
    seen = planes()
    for at in (0.1, 0.2, 0.3):
        seen.look(ROW, np.array([[at, 0.0]]), np.array([[at]]))
        seen.add(ROW, np.full((1, 1, 2), at))
    np.testing.assert_allclose(seen.x[0, :, 0], [0.3, 0.2])
    np.testing.assert_allclose(seen.value[0, :, 0], [0.3, 0.2])


def test_a_polish_goes_along_a_kink():
    """The largest integral gain of a PID with Ms at most 1.6 on four lags: two peaks of abs(S) are equally
    high there."""
    wish = Aim(Measure("disturbance_integral"), "min", 1e-6)
    lags = np.polymul(np.polymul([1.0, 1.0], [0.2, 1.0]), np.polymul([0.04, 1.0], [0.008, 1.0]))
    task = Task(
        plants=Rational.of([1.0], lags),
        case_names=("nominal",),
        bounds=bounds(("sensitivity_peak", "max", 1.6)),
        structures=(by_name("PID"),),
    )
    objective = Objective(task, (wish.measure,))
    rows = objective.rows_of(0, np.array([[2.742, 1.3448, 0.6724, 0.03362]]))
    share = {}
    for kept in (0, 4):
        pace = Pace(radius=0.2, iterations=60, least=1e-5, halve=(), planes=kept)
        done = polish(objective, rows, Goals.same(1, wish), pace=pace)
        assert done.worst[0] >= 0.0
        gain, time = objective.theta(done.rows)[0][:2]
        share[kept] = gain / time / 225.3  # by an independent search, tests/references/optimum_pid.toml
    assert share[4] == pytest.approx(1.0, abs=1e-2)
    assert share[0] < 0.9
