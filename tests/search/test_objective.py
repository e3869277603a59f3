"""What a batch of search points is worth: exact slacks, search slacks, cases."""

import numpy as np
import pytest
from sheets import cases, servo

from synth.loop.evaluate import evaluate
from synth.requirements import slacks
from synth.search.archive import joined
from synth.search.objective import Objective, compressed
from synth.search.starts import sample


def some_rows(objective, count=12, seed=3):
    return joined([sample(objective, s, count, seed) for s in range(len(objective.structures))])


def test_exact_slack_is_that_of_the_requirements():
    task = servo(("PI", "lead"))
    objective = Objective(task)
    rows = some_rows(objective)
    scores = objective.score(rows)
    found = evaluate(task.plants, objective.realise(rows), measures=objective.measures)
    card = slacks(task.bounds, found.values, objective.measures, task.case_names)
    good = scores.stable
    assert good.any()
    assert (~good).any()
    np.testing.assert_allclose(scores.worst()[good], card.worst[good], rtol=1e-6)
    assert np.all(scores.worst()[~good] == -np.inf)


def test_search_slack_has_the_sign_of_the_exact_one():
    objective = Objective(servo())
    scores = objective.score(some_rows(objective))
    np.testing.assert_array_equal(scores.search < 0.0, scores.exact < 0.0)
    assert np.isfinite(scores.search[scores.case >= 0]).all()


def test_an_unstable_loop_scores_below_every_stable_one_and_better_the_nearer_it_is():
    objective = Objective(servo(("PI",)))
    theta = np.array([[-0.01, 3.0], [-0.1, 3.0], [-1.0, 3.0], [1e-6, 3.0]])
    guide = objective.score(objective.rows_of(0, theta)).guide()
    assert guide[0] > guide[1] > guide[2] > -25.0
    assert guide[3] > -20.0 > guide[0]


def test_compression_is_continuous_and_monotone():
    s = np.linspace(-50.0, 1.0, 2001)
    out = compressed(s)
    assert np.all(np.diff(out) > 0.0)
    assert np.abs(np.diff(out)).max() < 0.03
    np.testing.assert_array_equal(out[s >= -1.0], s[s >= -1.0])
    assert compressed(np.array([-np.inf]))[0] == compressed(np.array([np.nan]))[0] == -12.0


def test_settling_stand_in_is_continuous_where_the_exact_slack_jumps():
    """Along a line of gains the settling time jumps as a ripple leaves the band; the search slack does
    not."""
    objective = Objective(servo(("P",), limits=(("settling_time", "max", 0.15),)))

    def largest_steps(count):
        theta = np.linspace(15.0, 60.0, count)[:, None]
        scores = objective.score(objective.rows_of(0, theta))
        exact, guide = scores.worst(), scores.guide()
        short = (exact[1:] < 0.0) & (exact[:-1] < 0.0)
        return np.abs(np.diff(exact))[short].max(), np.abs(np.diff(guide))[short].max()

    coarse, fine = largest_steps(401), largest_steps(1601)
    assert fine[0] > 0.1  # a jump stays a jump on a finer line
    assert fine[1] < 0.35 * coarse[1]
    assert fine[1] < 0.01


def test_rows_are_scored_on_their_structures_active_cases_and_counted():
    task = cases(6, ("PI", "PID"))
    objective = Objective(task)
    objective.active = [(0, 3), (0,)]
    rows = joined(
        [
            objective.rows_of(0, np.array([[1.0, 1.0]])),
            objective.rows_of(1, np.array([[1.0, 1.0, 0.1, 0.02]])),
        ]
    )
    scores = objective.score(rows)
    assert objective.evaluations == 3
    np.testing.assert_array_equal(scores.case, [[0, 3], [0, -1]])
    alone = evaluate(task.plants, objective.realise(rows), measures=objective.measures)
    card = slacks(task.bounds, alone.values, objective.measures, task.case_names)
    np.testing.assert_allclose(
        scores.worst(), [card.slack[0, [0, 3]].min(), card.slack[1, 0].min()], rtol=1e-12
    )


def test_a_search_point_survives_the_way_to_tuned_values_and_back():
    objective = Objective(servo())
    rows = some_rows(objective)
    for i, theta in enumerate(objective.theta(rows)):
        s = int(rows.structure[i])
        back = objective.rows_of(s, theta[None, :])
        np.testing.assert_allclose(back.x[0], rows.x[i], atol=1e-9)
        assert objective.structures[s].legal(theta[None, :])[0]


def test_asking_for_more_measures_is_undone():
    from synth.loop.quantities import Measure

    objective = Objective(servo(("PI",)))
    before = objective.measures
    with objective.asking((Measure("noise_gain"),)):
        assert objective.measures == (*before, Measure("noise_gain"))
        scores = objective.score(objective.rows_of(0, np.array([[8.0, 1.0]])))
        assert scores.values.shape[2] == len(before) + 1
    assert objective.measures == before
    assert pytest.approx(objective.archive.all()[2].shape[1]) == len(before)
