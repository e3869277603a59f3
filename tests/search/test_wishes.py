"""Alternatives and wishes: what is added to a list is other loops, and still meets the sheet."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from sheets import bounds, servo

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.search import Aim, Settings, Task, propose
from synth.search.alternatives import _other_loops
from synth.search.archive import joined
from synth.search.campaign import Campaign
from synth.search.confirm import MARGIN, _drawn_back
from synth.search.goals import Goals
from synth.search.polish import Pace, polish
from synth.search.ranking import different
from synth.search.wish_starts import from_inside, lifted
from synth.search.wishes import AGAIN_PACE, WISH_PACE, preferred
from synth.spec import read_spec
from synth.structures import by_name

AIM = Aim(Measure("disturbance_integral"), "min", MARGIN)
OPTIMUM = 1.0 / 24.0  # K/Ti of the best PI there: K = (Ms - 1)/(Ms + 1), Ti = 4 Ms/(Ms - 1), exact
SPECS = Path(__file__).parents[2] / "specs"


def test_other_loops_are_those_apart_from_every_head():
    campaign = Campaign(servo(("PD",)), Settings())
    objective = campaign.objective
    heads = objective.rows_of(0, np.array([[8.0, 0.05, 0.005], [20.0, 0.05, 0.005]]))
    rows = joined([heads, objective.rows_of(0, np.array([[8.4, 0.05, 0.005], [12.0, 0.05, 0.005]]))])
    assert list(_other_loops(campaign, rows, heads)) == [3]


def test_a_short_list_has_seconds():
    found = propose(servo(("PD", "lead-lag")), Settings(budget="quick")).candidates
    assert len(found) == 4
    for i, a in enumerate(found):
        assert a.meets_all
        assert not any(not different(a, b, 1.0) for b in found[:i])


@pytest.mark.parametrize("name", ["boiler_level", "dough_cooler"])
def test_a_wish_on_the_edge_of_the_sheet_still_meets_it_when_rounded(name):
    spec = read_spec(SPECS / f"{name}.toml")
    out = propose(Task.of(spec), Settings(budget="quick"))
    assert out.verdict == "met"
    for c in out.candidates:
        assert c.meets_all
        assert c.slack.min() >= 0.0


def double_lag(*structures):
    """A campaign on 1/(s (s + 1)²), Ms at most 2, integral gain preferred; not searched yet."""
    task = Task(
        plants=Rational.of([1.0], [1.0, 2.0, 1.0, 0.0]),
        case_names=("nominal",),
        bounds=bounds(("sensitivity_peak", "max", 2.0)),
        structures=tuple(by_name(name) for name in structures),
        prefer=AIM,
    )
    return Campaign(task, Settings(budget="quick"), extra=(AIM.measure,))


def integral_gain(campaign, rows):
    return np.array([theta[0] / theta[1] for theta in campaign.objective.theta(rows)])


def test_a_structure_sets_out_from_the_optimum_of_one_inside_it_that_is_not_in_the_task():
    campaign = double_lag("PID")
    rows = from_inside(campaign, campaign.standings, AIM)
    assert campaign.objective.evaluations > len(rows)
    keep = campaign.objective.score(rows).worst() >= -2e-3
    assert integral_gain(campaign, rows)[keep].max() == pytest.approx(OPTIMUM, rel=1e-2)
    every = double_lag("P", "PI", "PD", "PID")
    assert from_inside(every, every.standings, AIM) is None


def test_a_structure_is_lifted_to_what_it_contains_where_that_has_more():
    campaign = double_lag("PI", "PID")
    objective = campaign.objective
    best, poor = np.array([[1.0 / 3.0, 8.0]]), np.array([[0.1, 20.0, 0.1, 0.01]])
    rows = joined([objective.rows_of(0, best), objective.rows_of(1, poor)])
    raised = lifted(campaign, rows, AIM)
    assert set(raised.structure) == {1}
    assert integral_gain(campaign, raised).max() >= 0.999 * OPTIMUM
    rich = np.array([[1.5, 4.0, 1.5, 0.015]])
    assert lifted(campaign, joined([rows.take(np.array([0])), objective.rows_of(1, rich)]), AIM) is None


@pytest.mark.parametrize("structures", [("PID",), ("PI", "PID")])
def test_what_contains_another_ends_no_worse_whatever_its_own_starts_lead_to(structures, monkeypatch):
    """Nothing drawn, nothing polished: the PID has one poor start, and what the PI is known to attain."""
    monkeypatch.setattr("synth.search.wishes.fresh", lambda campaign, standing, aim: standing.tops)
    monkeypatch.setattr("synth.search.wishes.from_archive", lambda campaign, number, aim: poor)
    for name, pace in (("WISH_PACE", WISH_PACE), ("AGAIN_PACE", AGAIN_PACE)):
        monkeypatch.setattr(f"synth.search.wishes.{name}", replace(pace, iterations=0))
    campaign = double_lag(*structures)
    objective, last = campaign.objective, len(structures) - 1
    poor = objective.rows_of(last, np.array([[0.1, 20.0, 0.1, 0.01]]))
    campaign.standings[last].record(poor, objective.score(poor).guide(), 1)
    if last:
        best = objective.rows_of(0, np.array([[0.33333, 8.0]]))
        campaign.standings[0].record(best, objective.score(best).guide(), 1)
    rows = preferred(campaign).rows
    rows = rows.take(rows.structure == last)
    assert (objective.score(rows).worst() >= 0.0).all()
    assert integral_gain(campaign, rows).max() == pytest.approx(OPTIMUM, rel=1e-2)


def test_a_row_short_of_its_reserve_is_drawn_back_to_where_it_keeps_it():
    campaign = double_lag("PI")
    objective = campaign.objective
    rows = objective.rows_of(0, np.array([[1.0003 / 3.0, 8.0], [50.0, 0.1]]))
    goals = Goals.same(2, AIM)
    stuck = polish(objective, rows, goals, pace=Pace(iterations=0))
    assert stuck.worst[0] < 0.0
    back = _drawn_back(campaign, stuck, np.arange(2), goals, np.zeros(2))
    assert back.worst[0] >= 0.0
    assert integral_gain(campaign, back.rows)[0] == pytest.approx(OPTIMUM, rel=5e-3)
    np.testing.assert_array_equal(back.rows.x[1], rows.x[1])  # nothing near it stabilises
    assert back.worst[1] == stuck.worst[1]
