"""Alternatives and wishes: what is added to a list is other loops, and still meets the sheet."""

from pathlib import Path

import numpy as np
import pytest
from sheets import servo

from synth.search import Settings, Task, propose
from synth.search.alternatives import _other_loops
from synth.search.archive import joined
from synth.search.campaign import Campaign
from synth.search.ranking import different
from synth.spec import read_spec

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
