"""Slack: the arithmetic of the definitions, what binds, and the order of ties."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.loop.quantities import QUANTITIES, Measure
from synth.requirements import Bound, numbered, order, slack_of, slacks

INF, NAN = np.inf, np.nan


def bound(quantity, side, limit, cases=None):
    return Bound(f"{quantity}.{side}", Measure(quantity), side, limit, cases)


@pytest.mark.parametrize(
    ("quantity", "side", "limit", "value", "slack"),
    [
        ("overshoot", "max", 10.0, 6.0, 0.4),
        ("overshoot", "max", 10.0, 12.0, -0.2),
        ("overshoot", "max", 10.0, 10.0, 0.0),
        ("control_peak", "max", 24.0, 24.000000000000004, 0.0),  # a rounding above is no shortfall
        ("control_peak", "max", 8.0, 8.0 + 2.0**-30, -(2.0**-33)),
        ("overshoot", "max", 10.0, 0.0, 1.0),
        ("overshoot", "min", 5.0, 0.0, -1.0),  # the best value is no help against a floor
        ("bandwidth", "min", 4.0, 5.0, 0.25),
        ("bandwidth", "min", 4.0, 40.0, 1.0),  # never above 1
        ("bandwidth", "min", 4.0, INF, 1.0),
        ("bandwidth", "max", 4.0, INF, -INF),
        ("gain_margin", "min", 6.0, INF, 1.0),
        ("gain_margin", "min", 6.0, NAN, -INF),
        ("disturbance_area", "max", 3.0, INF, -INF),
        ("damping_ratio", "min", 0.6, 1.0, 1.0),  # best, though (1 - 0.6)/0.6 is less
        ("damping_ratio", "max", 0.8, 1.0, -0.25),
        ("damping_ratio", "min", 1.0, 0.9, -0.1),
        ("damping_ratio", "min", 1.0, 1.0, 1.0),
        ("static_error", "max", 0.0, 0.0, 1.0),  # a limit of 0 counts in the own scale, 1 %
        ("static_error", "max", 0.0, 0.5, -0.5),
        ("final_value", "min", 0.0, 0.02, 1.0),
        ("final_value", "min", 0.0, -0.02, -2.0),
        ("final_value", "min", -2.0, -1.5, 0.25),
        ("undershoot", "max", 20.0, 0.0, 1.0),
    ],
)
def test_slack_is_the_definition(quantity, side, limit, value, slack):
    got = slack_of(bound(quantity, side, limit), np.array([value]))
    assert got == pytest.approx([slack], rel=1e-14, abs=1e-17)


def test_a_limit_of_0_without_own_scale_cannot_be_judged():
    with pytest.raises(
        ValueError, match=r"^settling_time.max: a limit of 0 cannot be meant, settling_time has"
    ):
        slack_of(bound("settling_time", "max", 0.0), np.array([1.0]))


@given(
    quantity=st.sampled_from([k for k, q in QUANTITIES.items() if q.listed]),
    side=st.sampled_from(["min", "max"]),
    limit=st.floats(1e-6, 1e6),
    values=st.lists(st.floats(0.0, 1e9) | st.just(INF) | st.just(NAN), min_size=2, max_size=6),
)
def test_slack_tells_met_from_not_met_and_is_monotonic(quantity, side, limit, values):
    values = np.array(values)
    slack = slack_of(bound(quantity, side, limit), values)
    met = values <= limit if side == "max" else values >= limit
    met |= np.abs(values - limit) <= 1e-12 * limit  # what scoring rounds off
    np.testing.assert_array_equal(slack >= 0.0, met)  # NaN compares False
    assert (slack <= 1.0).all()
    present = ~np.isnan(values)
    ranks = np.argsort(values[present] * (-1 if side == "max" else 1), kind="stable")
    ranked = slack[present][ranks]
    assert (ranked[:-1] <= ranked[1:]).all()


def test_what_binds():
    bounds = (bound("overshoot", "max", 10.0), bound("bandwidth", "min", 4.0, ("nominal",)))
    measures = (Measure("bandwidth"), Measure("overshoot"))
    values = np.array(
        [
            [[8.0, 5.0], [1.0, 9.0]],  # bandwidth of the second case is not judged
            [[2.0, 5.0], [9.0, 9.0]],
            [[8.0, NAN], [9.0, 9.0]],
        ]
    )
    card = slacks(bounds, values, measures, ("nominal", "I high"))
    assert card.slack.shape == (3, 2, 2)
    np.testing.assert_allclose(card.slack[0], [[0.5, 1.0], [0.1, INF]])
    np.testing.assert_allclose(card.worst, [0.1, -0.5, -INF])
    np.testing.assert_array_equal(card.requirement, [0, 1, 0])
    np.testing.assert_array_equal(card.case, [1, 0, 0])
    np.testing.assert_array_equal(card.meets_all, [True, False, False])
    np.testing.assert_allclose(card.by_requirement, [[0.1, 1.0], [0.1, -0.5], [-INF, 1.0]])


def test_shapes_that_do_not_fit_are_refused():
    with pytest.raises(ValueError, match=r"^values must have shape \(B, 1, 1\), got \(2, 3\)$"):
        slacks((bound("overshoot", "max", 1.0),), np.zeros((2, 3)), (Measure("overshoot"),), ("nominal",))


def test_ids_are_numbered_from_the_second_on():
    settle = Measure("settling_time")
    parts = [(settle, "max", 1.2, None), (Measure("settling_time", band=0.05), "max", 0.8, None)]
    parts += [(settle, "min", 0.1, None), (Measure("overshoot"), "max", 5.0, ("nominal",))]
    ids = [b.id for b in numbered(parts)]
    assert ids == ["settling_time.max", "settling_time.max.2", "settling_time.min", "overshoot.max"]


def test_ties_within_a_thousandth_go_by_the_next_worst():
    rows = np.array([[0.1000, 0.2], [0.1005, 0.15], [0.1002, 0.9], [0.3, 0.3], [-INF, 1.0]])
    np.testing.assert_array_equal(order(rows), [3, 2, 0, 1, 4])


def test_a_handicap_moves_a_row_down():
    rows = np.array([[0.10, 0.5], [0.11, 0.5]])
    np.testing.assert_array_equal(order(rows), [1, 0])
    np.testing.assert_array_equal(order(rows, np.array([0.02, 0.06])), [0, 1])


@given(st.lists(st.lists(st.floats(-2, 1), min_size=3, max_size=3), min_size=1, max_size=8))
def test_the_order_is_a_permutation_with_the_best_first(rows):
    rows = np.array(rows)
    ranks = order(rows)
    assert sorted(ranks) == list(range(len(rows)))
    worst = rows.min(axis=1)[ranks]
    assert worst[0] >= worst.max() - 1e-3
    assert (worst[:-1] >= worst[1:] - 1e-3).all()
