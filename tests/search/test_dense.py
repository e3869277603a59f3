"""The dense scan: cells that lose nothing of the box, and a ceiling that nothing found otherwise exceeds."""

import numpy as np
import pytest
from sheets import servo

from synth.search.cells import LOST, Cells, on_a_grid, refined
from synth.search.dense import WIDTH, cover
from synth.search.objective import Objective


def square(look, count):
    """Cells of the square from -1 to 1, `count` each way."""
    half = 1.0 / count
    at = -1.0 + half * (2 * np.arange(count) + 1)
    centre = np.array([(a, b) for a in at for b in at])
    found = look(centre, np.ones(len(centre)))
    slack, slope = on_a_grid(found.reshape(count, count, -1), np.array([2.0 * half, 2.0 * half]))
    halves = np.full((len(centre), 2), half)
    return Cells(
        centre, halves, np.ones(len(centre)), slack.reshape(found.shape), ~np.isnan(found),
        slope.reshape(len(centre), 2, -1),
    )  # fmt: skip


def ridge(x, sign):
    """Two slopes against each other along a slanting crest, narrower than a cell: -0.05 at (0.31, 0.17)."""
    across, along = x[:, 0] - x[:, 1] - 0.14, x[:, 0] + x[:, 1] - 0.48
    fall = along**2
    return np.column_stack([-0.05 - 5.0 * across - fall, -0.05 + 5.0 * across - fall])


def edged(x, sign):
    """The same, absent beyond a straight edge close to its top."""
    found = ridge(x, sign)
    found[x[:, 0] > 0.33] = np.nan
    return found


@pytest.mark.parametrize("look", [ridge, edged])
def test_the_top_of_a_narrow_crest_is_closed_in_from_both_sides(look):
    cells = refined(square(look, 5), look, 4000, -np.inf, -np.inf)
    assert cells.best() <= -0.05 <= cells.bound().max()
    assert cells.bound().max() - cells.best() <= 2.1e-3
    top = cells.centre[cells.guide().argmax()]
    np.testing.assert_allclose(top, [0.31, 0.17], atol=0.12)


def test_division_keeps_the_whole_box_and_every_centre_in_its_cell():
    first = square(ridge, 4)
    cells = refined(first, ridge, 1000, -np.inf, -np.inf)
    assert len(cells) > len(first)
    assert np.prod(2.0 * cells.half, axis=1).sum() == pytest.approx(4.0, rel=1e-12)
    points = np.random.default_rng(0).uniform(-1.0, 1.0, (400, 2))
    inside = (np.abs(points[:, None] - cells.centre[None]) <= cells.half[None] * (1.0 + 1e-9)).all(axis=2)
    assert (inside.sum(axis=1) == 1).all()


def test_no_more_is_looked_at_than_allowed_and_nothing_below_what_is_known():
    counted = []

    def look(x, sign):
        counted.append(len(x))
        return ridge(x, sign)

    first = square(ridge, 5)
    refined(first, look, 101, -np.inf, -np.inf)
    assert 0 < sum(counted) <= 101
    counted.clear()
    whole = refined(first, look, 1000, float(first.bound().max()), -np.inf)
    assert not counted
    assert len(whole) == len(first)


def test_what_is_absent_is_taken_from_a_neighbour_or_lost():
    nan = np.nan
    slack, slope = on_a_grid(np.array([[1.0, nan, nan], [3.0, 4.0, nan]])[:, :, None], np.array([2.0, 1.0]))
    np.testing.assert_array_equal(slack[:, :, 0], [[1.0, 4.0, LOST], [3.0, 4.0, 4.0]])
    np.testing.assert_array_equal(slope[:, :, 0, 0], [[1.0, 1.0, 0.0], [1.0, 0.0, 0.0]])
    np.testing.assert_array_equal(slope[:, :, 1, 0], [[0.0, 1.0, 0.0], [1.0, 1.0, 1.0]])


@pytest.fixture(scope="module", params=["PI", "PD", "lag"])
def scanned(request):
    limits = (
        ("damping_ratio", "min", 0.6), ("settling_time", "max", 0.25),
        ("overshoot", "max", 2.0), ("control_peak", "max", 6.0),
    )  # fmt: skip
    objective = Objective(servo((request.param,), limits=limits))
    return objective, cover(objective, 0)


def test_nothing_scored_at_random_exceeds_the_ceiling(scanned):
    objective, found = scanned
    rng = np.random.default_rng(3)
    low, high = objective.boxes[0]
    low, high = np.append(-10.0, low[1:]), np.append(10.0, high[1:])
    x = rng.uniform(low, high, (20_000, len(low)))
    near = found.rows.x[found.guide.argmax()] + rng.normal(scale=0.1, size=(5_000, len(low)))
    rows = found.rows.take(np.zeros(25_000, dtype=int)).at(np.concatenate([x, np.clip(near, low, high)]))
    slack = objective.score(rows).guide()
    slack = np.where(slack < -1.0, -np.exp(-1.0 - slack), slack)
    assert found.guide.max() <= found.ceiling
    assert slack.max() <= found.ceiling
    assert slack.max() >= found.guide.max() - 0.01


# (a PI is unstable at any gain where its integral time is short)
@pytest.mark.parametrize("scanned", ["PD", "lag"], indirect=True)
def test_the_first_grid_reaches_every_end_of_the_box(scanned):
    objective, found = scanned
    low, high = objective.boxes[0]
    assert 1.0 < found.resolution <= np.exp(WIDTH)
    for j in range(1, len(low)):
        reach = 0.5 * np.log(found.resolution)
        assert found.rows.x[:, j].min() <= low[j] + reach + 1e-9
        assert found.rows.x[:, j].max() >= high[j] - reach - 1e-9
        assert np.diff(np.unique(found.rows.x[:, j])).max() <= np.log(found.resolution) + 1e-9


def test_only_the_sign_that_can_be_stable_is_looked_at(scanned):
    _, found = scanned
    assert (found.rows.sign == 1.0).all()  # 1/(s (s/20 + 1)) wants a positive gain


@pytest.mark.parametrize("scanned", ["PI"], indirect=True)
def test_a_pi_that_cannot_is_told_so_for_all_its_settings(scanned):
    _, found = scanned
    assert found.ceiling < -0.4
