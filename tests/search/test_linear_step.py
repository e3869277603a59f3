"""The stacked interior point against scipy's linear programming, one programme at a time."""

import numpy as np
import pytest
from scipy.optimize import linprog, minimize

from synth.search.linear_step import maximin_step


def programmes(seed, count, constraints, variables):
    rng = np.random.default_rng(seed)
    slack = rng.normal(size=(count, constraints)) * 10.0 ** rng.uniform(-3, 1, size=(count, 1))
    slope = rng.normal(size=(count, constraints, variables)) * 10.0 ** rng.uniform(
        -2, 1.7, size=(count, 1, variables)
    )
    radius = 10.0 ** rng.uniform(-3, 0, size=(count, 1)) * np.ones((count, variables))
    return slack, slope, -radius, radius


def by_scipy(slack, slope, low, high, gain, gain_slope, weight, cap):
    """The same programme in scipy's words, variables (d, t, u)."""
    columns = np.zeros((len(slack), 1))
    return -linprog(
        np.concatenate([np.zeros(len(low)), [-weight, -1.0]]),
        A_ub=np.vstack(
            [
                np.column_stack([-slope, np.ones(len(slack)), columns]),
                np.column_stack([-gain_slope, np.zeros(len(gain)), np.ones(len(gain))]),
            ]
        ),
        b_ub=np.concatenate([slack, gain]),
        bounds=[*zip(low, high, strict=True), (None, cap), (None, None)],
        method="highs",
    ).fun


@pytest.mark.parametrize("variables", [1, 2, 3, 5])
def test_maximin_level_is_that_of_linprog(variables):
    slack, slope, low, high = programmes(variables, 40, 9, variables)
    step = maximin_step(slack, slope, low, high)
    reached = (slack + np.einsum("scv,sv->sc", slope, step.d)).min(axis=1)
    flat = np.zeros(1), np.zeros((1, variables)), 1.0, None
    expected = [by_scipy(*row, *flat) for row in zip(slack, slope, low, high, strict=True)]
    spread = np.ptp(slack, axis=1) + 1.0
    assert np.all(np.abs(reached - expected) <= 1e-7 * spread)
    assert np.all((step.d >= low) & (step.d <= high))


def test_penalty_with_cap_is_that_of_linprog():
    slack, slope, low, high = programmes(11, 40, 7, 3)
    rng = np.random.default_rng(5)
    gain, gain_slope = rng.normal(size=(40, 4)), rng.normal(size=(40, 4, 3))
    step = maximin_step(slack, slope, low, high, gain=gain, gain_slope=gain_slope, weight=20.0, cap=0.0)
    level = np.minimum((slack + np.einsum("scv,sv->sc", slope, step.d)).min(axis=1), 0.0)
    reached = (gain + np.einsum("scv,sv->sc", gain_slope, step.d)).min(axis=1) + 20.0 * level
    rows = zip(slack, slope, low, high, gain, gain_slope, strict=True)
    expected = [by_scipy(*row, 20.0, 0.0) for row in rows]
    np.testing.assert_allclose(reached, expected, atol=2e-6 * 20.0 * (np.ptp(slack, axis=1).max() + 1.0))
    sums = step.multipliers.sum(axis=1)
    assert np.all(sums <= 20.0 + 1e-5)
    np.testing.assert_allclose(step.gain_multipliers.sum(axis=1), 1.0, atol=1e-5)


def test_curvature_moves_the_step_to_the_quadratic_optimum():
    slack = np.array([[0.3, 0.1]])
    slope = np.array([[[1.0, 2.0], [-2.0, 0.5]]])
    hessian = np.array([[[3.0, 0.4], [0.4, 2.0]]])
    low, high = np.full((1, 2), -1.0), np.full((1, 2), 1.0)
    step = maximin_step(slack, slope, low, high, curvature=hessian)

    def cost(d):
        return 0.5 * d @ hessian[0] @ d - (slack[0] + slope[0] @ d).min()

    grid = min(
        (
            minimize(cost, x, method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-13})
            for x in np.eye(2) * 0.1
        ),
        key=lambda r: r.fun,
    )
    assert cost(step.d[0]) <= grid.fun + 1e-9


def test_missing_constraints_and_frozen_variables():
    slack = np.array([[0.2, np.inf, -0.1]])
    slope = np.array([[[1.0, 0.0], [np.nan, np.nan], [2.0, 5.0]]])
    slope = np.nan_to_num(slope)
    step = maximin_step(slack, slope, np.array([[-0.5, 0.0]]), np.array([[0.5, 0.0]]))
    assert step.d[0, 1] == 0.0
    np.testing.assert_allclose(step.d[0, 0], 0.5, atol=1e-8)
    np.testing.assert_allclose(step.level[0], 0.7, atol=1e-7)
    assert abs(step.multipliers[0].sum() - 1.0) < 1e-6


def test_wrong_shapes_are_named():
    with pytest.raises(ValueError, match="do not fit"):
        maximin_step(np.zeros((2, 3)), np.zeros((2, 4, 1)), np.zeros((2, 1)), np.zeros((2, 1)))
