"""The closest approach is told in exact slack, not in that of the stand-in that leads the search."""

from dataclasses import replace

import numpy as np
import pytest
from sheets import servo

from synth.loop.closed_loop import Rational
from synth.search import Settings, propose
from synth.search.approach import nearest
from synth.search.campaign import Campaign
from synth.search.objective import Objective, compressed

TIGHT = (("settling_time", "max", 0.25), ("overshoot", "max", 2.0), ("control_peak", "max", 6.0))


@pytest.fixture(scope="module")
def short():
    return propose(servo(("P", "PI", "lag"), limits=TIGHT))


def told(outcome, name):
    return next(r for r in outcome.rejections if r.structure == name).closest.worst_slack


def test_no_gain_comes_nearer_than_the_one_told(short):
    objective = Objective(servo(("P",), limits=TIGHT))
    line = objective.rows_of(0, np.exp(np.linspace(-3.0, 6.0, 20_001))[:, None])
    best = objective.score(line).worst().max()
    assert told(short, "P") == pytest.approx(best, abs=2e-3)


@pytest.mark.parametrize("name", ["PI", "lag"])
def test_nothing_drawn_round_it_comes_nearer(short, name):
    objective = Objective(servo((name,), limits=TIGHT))
    closest = next(r for r in short.rejections if r.structure == name).closest
    here = objective.rows_of(0, np.array([list(closest.parameters.values())]))
    size = np.repeat([0.01, 0.1, 0.5, 2.0], 1500)[:, None]
    draws = size * np.random.default_rng(2).normal(size=(6000, here.x.shape[1]))
    around = here.take(np.zeros(6000, dtype=int)).at(np.clip(here.x + draws, *objective.boxes[0]))
    assert objective.score(around).worst().max() <= told(short, name) + 5e-3


def campaign_of(limits):
    campaign = Campaign(servo(("P", "PD"), limits=limits), Settings(budget="quick"))
    campaign.run()
    assert campaign.standings[0].best < 0.0 <= campaign.standings[1].best
    return campaign


def test_where_the_search_steers_by_the_exact_slack_its_best_is_told_for_nothing():
    campaign = campaign_of((("damping_ratio", "min", 0.6), ("bandwidth", "min", 40.0)))
    scored = campaign.objective.evaluations
    rows = nearest(campaign)
    assert campaign.objective.evaluations == scored
    assert rows.structure.tolist() == [0]
    every, slack, _, _ = campaign.objective.archive.all()
    assert campaign.objective.score(rows).worst()[0] == slack[every.structure == 0].min(axis=1).max()


def test_where_a_stand_in_led_elsewhere_the_exact_best_is_looked_for():
    limits = (("settling_time", "max", 0.25), ("overshoot", "max", 2.0), ("sensitivity_peak", "max", 1.8))
    campaign = campaign_of(limits)
    top = campaign.standings[0].tops
    objective = campaign.objective
    line = objective.rows_of(0, np.exp(np.linspace(-3.0, 6.0, 20_001))[:, None])
    best = objective.score(line, remember=False).worst().max()
    assert objective.score(top, remember=False).worst().max() < best - 0.02
    assert objective.score(nearest(campaign)).worst().max() == pytest.approx(best, abs=2e-3)


def test_where_nothing_is_stable_there_is_no_row_to_tell():
    task = replace(servo(("P", "PI"), limits=TIGHT), plants=Rational.of([1.0], [1.0, 0.0, -1.0]))
    campaign = Campaign(task, Settings(budget="quick"))
    campaign.run()
    assert len(nearest(campaign)) == 0


def test_nothing_is_told_where_all_meet_the_sheet():
    campaign = Campaign(servo(("PD", "lead")), Settings(budget="quick"))
    campaign.run()
    assert nearest(campaign) is None


def test_to_the_letter_for_a_while_only():
    objective = Objective(servo(("P",), limits=TIGHT))
    rows = objective.rows_of(0, np.array([[8.0], [12.0]]))
    steered = objective.score(rows)
    with objective.literally():
        literal = objective.score(rows)
    np.testing.assert_array_equal(literal.search, compressed(literal.exact))
    np.testing.assert_array_equal(literal.exact, steered.exact)
    assert (steered.search[:, 0, 0] < literal.search[:, 0, 0]).all()
    np.testing.assert_array_equal(objective.score(rows).search, steered.search)
