"""Names, rounding, full scorecards and ranking of what is proposed."""

from dataclasses import replace

import numpy as np
import pytest
from sheets import bounds, cases, servo

from synth.search import Aim
from synth.search.finals import (
    Draft,
    candidates,
    named,
    realised,
    rounded,
    scorecards,
    simplest,
    with_fragility,
)
from synth.search.ranking import chosen, different, ranked, reaches_little
from synth.structures import REGISTRY, by_name


def draft(name, *theta, **more):
    return Draft(by_name(name), np.array(theta), **more)


def made(task, *drafts):
    return list(candidates(task, list(drafts), task.plants, task.case_names))


def test_a_function_goes_under_its_simplest_name():
    every = tuple(REGISTRY.values())
    series = named(draft("PI-lead", 8.0, 2.0, 5.0, 60.0), every)
    assert series.structure.name == "PID"
    assert "PI-lead" in series.also
    same = realised([draft("PI-lead", 8.0, 2.0, 5.0, 60.0), series])
    w = 1j * np.logspace(-2, 3, 50)
    a, b = (np.polyval(same.numerator[i], w) / np.polyval(same.denominator[i], w) for i in (0, 1))
    np.testing.assert_allclose(a, b, rtol=1e-9)
    alone = named(draft("PI-lead", 8.0, 2.0, 5.0, 60.0), (by_name("PI-lead"),))
    assert alone.structure.name == "PI-lead"
    assert named(draft("lag", 3.0, 1.001, 1.0), every).structure.name == "P"


def test_a_simpler_name_may_not_cost_slack():
    """A lag of ratio 1.015 is nearly a P, but here static error is counted to the last per mille."""
    task = servo(limits=(("velocity_error", "max", 0.1),))
    keen = draft("lag", 10.05, 1.015, 1.0)
    kept, _ = simplest(task, [keen], task.plants, task.case_names)
    assert kept[0].structure.name == "P"
    keen = draft("lag", 10.0, 1.015, 1.0, need=0.0)
    assert simplest(task, [keen], task.plants, task.case_names)[0][0].structure.name == "P"
    strict = servo(limits=(("crossover", "max", 9.1), ("velocity_error", "max", 0.1)))
    tight = draft("lag", 10.0001, 1.015, 1.0)
    before = scorecards(strict, realised([tight]), strict.plants, strict.case_names).slack.min()
    kept, _ = simplest(strict, [tight], strict.plants, strict.case_names)
    after = scorecards(strict, realised(kept), strict.plants, strict.case_names).slack.min()
    assert after >= before - 1e-3


def test_rounding_keeps_what_is_met_and_loses_little():
    task = servo(limits=(("velocity_error", "max", 0.1), ("overshoot", "max", 60.0)))
    tight = draft("P", 10.0 + 3e-7)  # velocity error is 1/K: four digits are enough here ...
    kept, scored = rounded(task, [tight, draft("P", 10.123456789)], task.plants, task.case_names)
    assert kept[0].theta[0] == 10.0
    assert kept[1].theta[0] == 10.12
    assert scored > 2
    sharp = servo(limits=(("velocity_error", "max", 0.09878),))
    kept, _ = rounded(sharp, [draft("P", 10.1235068)], sharp.plants, sharp.case_names)  # ... and not here
    card = scorecards(sharp, realised(kept), sharp.plants, sharp.case_names)
    assert card.slack.min() >= 0.0
    assert 10.1235 <= kept[0].theta[0] <= 10.124


def test_what_is_printed_is_what_was_scored():
    task = cases(3, ("PI",))
    one = made(task, draft("PI", 1.2, 1.1))[0]
    again = made(task, draft("PI", *one.parameters.values()))[0]
    np.testing.assert_array_equal(one.slack, again.slack)
    np.testing.assert_array_equal(one.values, again.values)
    assert one.worst_slack == one.slack.min()
    assert one.slack.shape == (3, 4)
    assert one.binding[1] in task.case_names
    keys = [m.quantity for m in one.measures]
    assert {"gain_margin_up", "disturbance_area", "rise_time"} <= set(keys)


def test_fragility_is_the_slack_of_the_moved_values():
    task = servo()
    one = with_fragility(
        task, tuple(made(task, draft("PD", 8.0, 0.05, 0.005))), task.plants, task.case_names
    )[0]
    assert [f.parameter for f in one.fragility] == list(one.parameters)
    moved = made(task, draft("PD", 8.0 * 1.1, 0.05, 0.005), draft("PD", 8.0, 0.05 * 0.9, 0.005))
    assert one.fragility[0].up == pytest.approx(moved[0].worst_slack, rel=1e-12)
    assert one.fragility[1].down == pytest.approx(moved[1].worst_slack, rel=1e-12)


def test_order_counts_slack_less_complexity_and_puts_what_is_met_first():
    task = servo(limits=(("velocity_error", "max", 0.2), ("sensitivity_peak", "max", 2.0)))
    found = made(task, draft("PD", 8.0, 0.05, 0.005), draft("P", 8.0), draft("P", 2.0), draft("P", 6.0))
    order = ranked(task, found)
    scores = [c.worst_slack - 0.02 * len(c.parameters) for c in order if c.meets_all]
    assert [c.meets_all for c in order] == [True, True, True, False]
    assert scores == sorted(scores, reverse=True)
    assert "tuned value" in order[0].ranked
    assert "closest approach" in order[-1].ranked


def test_a_wish_orders_by_its_quantity_among_those_that_keep_the_reserve():
    task = servo(limits=(("velocity_error", "max", 0.2), ("sensitivity_peak", "max", 2.0)))
    task = replace(task, prefer=Aim(bounds(("control_peak", "max", 1.0))[0].measure, "min", 0.1))
    order = ranked(task, made(task, draft("P", 8.0), draft("P", 5.1), draft("P", 6.0), draft("P", 12.0)))
    assert [c.parameters["gain"] for c in order[:3]] == [6.0, 8.0, 12.0]
    assert order[-1].parameters["gain"] == 5.1
    assert "reserve" in order[-1].ranked


def test_what_hardly_follows_comes_after_the_others_unless_its_error_is_bounded():
    task = cases(1, ("P", "PI"))
    free = replace(task, bounds=bounds(("sensitivity_peak", "max", 3.0)))
    found = made(free, draft("P", 0.2), draft("PI", 2.0, 0.4))
    order = ranked(free, found)
    assert order[0].structure == "PI"
    assert found[0].worst_slack > found[1].worst_slack
    assert "static error" in order[1].ranked
    assert reaches_little(found[0], free.bounds)
    assert not reaches_little(found[0], bounds(("static_error", "max", 90.0)))


def test_the_list_holds_different_loops_only_and_two_of_a_structure():
    task = servo(limits=(("sensitivity_peak", "max", 3.0),))
    gains = [2.0, 2.05, 4.0, 8.0, 12.0]
    picked = chosen(task, made(task, *[draft("P", g) for g in gains]), 1.0)
    assert len(picked) == 2
    assert all(c.meets_all for c in picked)
    one, near, far = made(task, draft("P", 2.0), draft("P", 2.05), draft("P", 4.0))
    assert not different(one, near, 1.0)
    assert different(one, far, 1.0)


def test_closest_approaches_are_listed_where_nothing_is_met():
    task = servo(limits=(("velocity_error", "max", 1e-4), ("sensitivity_peak", "max", 1.2)))
    picked = chosen(task, made(task, draft("P", 8.0), draft("PD", 8.0, 0.05, 0.005)), 1.0)
    assert picked
    assert not any(c.meets_all for c in picked)


def test_a_closest_approach_goes_under_the_simpler_of_two_names_for_one_loop():
    """A PD that is a P at every frequency that matters, and nearer by a hair."""
    task = servo(limits=(("velocity_error", "max", 1e-2),))
    rich, plain, other = made(task, draft("PD", 8.1, 1e-4, 1e-4), draft("P", 8.0), draft("P", 4.0))
    assert 0.0 < rich.worst_slack - plain.worst_slack < 0.2
    near = replace(rich, worst_slack=plain.worst_slack + 0.01)
    assert [c.structure for c in chosen(task, [other, near, plain], 1.0)] == ["P", "P"]
    far = replace(rich, worst_slack=plain.worst_slack + 0.05)
    assert chosen(task, [other, far, plain], 1.0)[0].structure == "PD"


def test_a_structure_is_listed_with_its_closest_approach_or_not_at_all():
    task = servo(limits=(("velocity_error", "max", 1e-2),))
    found = made(task, draft("PD", 8.0, 1e-4, 1e-4), draft("P", 8.0), draft("PD", 5.0, 0.05, 0.005))
    assert found[0].worst_slack > found[2].worst_slack
    # what is left of the PD is another loop, and farther than the PD comes
    assert [c.structure for c in chosen(task, found, 1.0)] == ["P"]
    assert [c.structure for c in chosen(task, found[1:], 1.0)] == ["P", "PD"]


def test_what_does_not_stabilise_comes_near_nothing():
    task = cases(1, ("P", "PI"))
    task = replace(task, bounds=bounds(("sensitivity_peak", "max", 1.0001)))
    stable, unstable = made(task, draft("P", 2.0), draft("PI", -2.0, 0.4))
    assert not unstable.stable.all()
    assert [c.structure for c in chosen(task, [unstable, stable], 1.0)] == ["P"]
    assert chosen(task, [unstable], 1.0) == []


def test_under_a_wish_one_loop_goes_under_its_simpler_name_and_a_structure_is_at_its_best():
    task = servo(limits=(("velocity_error", "max", 0.2), ("sensitivity_peak", "max", 2.0)))
    task = replace(task, prefer=Aim(bounds(("control_peak", "max", 1.0))[0].measure, "min"))
    plain, rich, more = made(
        task, draft("P", 6.0), draft("PD", 5.9999, 1e-7, 1e-7), draft("PD", 8.0, 0.05, 0.01)
    )
    control = plain.measures.index(task.prefer.measure)
    plain = replace(plain, values=np.where(np.arange(len(plain.measures)) == control, 6.0, plain.values))
    rich = replace(rich, values=np.where(np.arange(len(rich.measures)) == control, 5.999, rich.values))
    assert [c.structure for c in chosen(task, [more, plain, rich], 1.0)] == ["P", "PD"]  # a list too short
    others = made(task, *[draft("lag", g, 1.0 / r, 1.0) for g, r in ((5.5, 1.5), (5.5, 3.0))])
    others += made(task, draft("lead", 6.5, 9.0, 30.0), draft("P", 8.0), draft("lead", 9.0, 9.0, 60.0))
    full = chosen(task, [more, plain, rich, *others], 1.0)
    assert len(full) >= 5
    assert "PD" not in [c.structure for c in full]
    better = replace(rich, values=np.where(np.arange(len(rich.measures)) == control, 5.9, rich.values))
    assert chosen(task, [more, plain, better], 1.0)[0].structure == "PD"
