"""The scoring call: shapes, stacks of mixed orders, units, screens, and rows that must not disturb each
other."""

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import EVERY_QUANTITY, Screen, evaluate, stacks
from synth.loop.quantities import QUANTITIES, Measure


def second_order(rows=40, seed=0):
    """Plants k/(s (T s + 1)) and proportional compensators."""
    rng = np.random.default_rng(seed)
    lag = np.exp(rng.normal(size=rows))
    den = np.stack([lag, np.ones(rows), np.zeros(rows)], axis=1)
    return Rational.of(np.ones((rows, 1)), den), lag


def test_second_order_quantities_in_closed_form():
    """1/(s (T s + 1)) under k: ω_n = √(k/T), ζ = 1/(2 √(k T)); every printed formula of the trade."""
    plants, lag = second_order(6)
    gain = np.array([0.4, 1.0, 3.0])
    found = evaluate(plants, Rational.of(gain[:, None], np.ones((3, 1))))
    assert found.values.shape == (3, 6, len(EVERY_QUANTITY))
    assert found.stable.all()
    natural = np.sqrt(gain[:, None] / lag)
    ratio = 0.5 / np.sqrt(gain[:, None] * lag)
    under = ratio < 1.0
    damped = natural * np.sqrt(np.where(under, 1.0 - ratio**2, np.nan))
    np.testing.assert_allclose(found["damping_ratio"], np.minimum(ratio, 1.0), rtol=1e-9)
    np.testing.assert_allclose(found["natural_frequency"], np.where(under, natural, np.nan), rtol=1e-9)
    overshoot = 100.0 * np.exp(-np.pi * ratio * natural / damped)
    seen = under & (overshoot > 0.1)
    np.testing.assert_allclose(found["overshoot"][seen], overshoot[seen], rtol=1e-6)
    np.testing.assert_allclose(found["peak_time"][seen], (np.pi / damped)[seen], rtol=1e-6)
    each = np.broadcast_to(gain[:, None], (3, 6))
    np.testing.assert_allclose(found["velocity_error"], 1.0 / each, rtol=1e-12)
    np.testing.assert_allclose(
        found["bandwidth"],
        natural * np.sqrt(1 - 2 * ratio**2 + np.sqrt(4 * ratio**4 - 4 * ratio**2 + 2)),
        rtol=1e-9,
    )
    margin = np.rad2deg(np.arctan(2 * ratio / np.sqrt(np.sqrt(1 + 4 * ratio**4) - 2 * ratio**2)))
    np.testing.assert_allclose(found["phase_margin"], margin, rtol=1e-9)
    np.testing.assert_allclose(found["control_peak"], each, rtol=1e-6)


def test_chosen_pairs_and_the_whole_table_agree():
    plants, _ = second_order(4)
    comps = Rational.of([[0.0, 1.0], [0.2, 1.0], [0.5, 0.3]], [[0.0, 1.0], [0.01, 1.0], [0.1, 1.0]])
    whole = evaluate(plants, comps)
    b, k = np.array([2, 0, 1, 2]), np.array([3, 1, 1, 0])
    some = evaluate(plants, comps, pairs=(b, k))
    np.testing.assert_allclose(some.values, whole.values[b, k], rtol=1e-9)
    np.testing.assert_array_equal(some.stable, whole.stable[b, k])
    np.testing.assert_allclose(some.abscissa, whole.abscissa[b, k], rtol=1e-9)


def test_loops_of_many_orders_in_one_call_score_as_each_for_itself():
    """Orders 0 to 8, repeated poles, a direct path, T(0) = 0 and unstable ones among them."""
    plants = [
        ([2.0], [1.0]),
        ([1.0], [3.0, 1.0]),
        ([1.0, 3.0], [1.0, 1.0]),
        ([1.0, 0.0], [1.0, 1.4, 1.0]),
        ([1.0], [1.0, 3.0, 3.0, 0.0]),
        ([1.0], [1.0, 4.0, 6.0, 4.0, 1.0]),
        ([0.1, 1.0], [1.0, 0.3, 4.0, 0.5, 1.0]),
        ([1.0], list(np.poly([-1.0, -2.0, -2.0, -3.0, -30.0, -0.5]))),
        ([1.0], [1.0, -1.0]),
    ]
    comps = [([0.4], [1.0]), ([1.5, 1.0], [1.5, 0.0]), ([2.0, 1.2, 0.3], [0.05, 1.0, 0.0])]
    wide = [max(len(p[i]) for p in plants) for i in (0, 1)]
    padded = [[[0.0] * (wide[i] - len(p[i])) + list(p[i]) for p in plants] for i in (0, 1)]
    stack = Rational.of(
        [[0.0] * (3 - len(c[0])) + c[0] for c in comps], [[0.0] * (3 - len(c[1])) + c[1] for c in comps]
    )
    measures = (*EVERY_QUANTITY, Measure("late_deviation", after=2.0), Measure("settling_time", band=0.05))
    for screen in (None, Screen(least_damping=0.2, most_peak=3.0)):
        whole = evaluate(Rational.of(*padded), stack, measures=measures, screen=screen)
        assert 0 < whole.stable.sum() < whole.stable.size
        for b, comp in enumerate(comps):
            for k, plant in enumerate(plants):
                alone = evaluate(Rational.of(*plant), Rational.of(*comp), measures=measures, screen=screen)
                np.testing.assert_allclose(whole.values[b, k], alone.values[0, 0], rtol=1e-9, atol=1e-9)
                assert whole.stable[b, k] == alone.stable[0, 0]
                assert whole.reached[b, k] == alone.reached[0, 0]
                np.testing.assert_array_equal(whole.approximate[b, k], alone.approximate[0, 0])


def test_mixed_orders_and_dead_times_are_closed_apart():
    plants = Rational.of(
        [[0, 0, 1.0], [0, 0, 1.0], [0, 0, 2.0]], [[1.0, 1, 1], [0, 1.0, 1], [1.0, 2, 0]], [0, 0.3, 0]
    )
    comps = Rational.of([[0, 1.0], [1.0, 0.5]], [[0, 1.0], [1.0, 0.0]])
    pair = np.arange(6)
    sets = [set(rows.tolist()) for rows in stacks(plants, comps, pair % 3, pair // 3)]
    assert sorted(sets, key=min) == [{0, 2}, {1}, {3, 5}, {4}]
    measures = (Measure("decay_rate"), Measure("final_value"))
    whole = evaluate(plants, comps, measures=measures)
    for k in range(3):
        one = evaluate(plants.rows(np.array([k])), comps, measures=measures)
        np.testing.assert_allclose(one.values[:, 0], whole.values[:, k], rtol=1e-12)


def test_rows_that_cannot_be_used_are_absent_and_harm_nobody():
    plants, _ = second_order(2)
    comps = Rational.of(
        [[0.0, 1.0], [np.nan, 1.0], [0.0, 1.0], [1.0, 1.0], [np.inf, 0.0]],
        [[0.0, 1.0], [0.0, 1.0], [0.0, 0.0], [0.0, 1.0], [1.0, 1.0]],
    )  # good, not finite, no denominator, not proper, infinite
    measures = (Measure("decay_rate"), Measure("velocity_error"))
    found = evaluate(plants, comps, measures=measures)
    assert found.stable[0].all()
    assert not found.stable[1:].any()
    assert np.isnan(found.values[1:]).all()
    alone = evaluate(plants, comps.rows(np.array([0])), measures=measures)
    np.testing.assert_array_equal(found.values[0], alone.values[0])


@pytest.mark.parametrize("power", [-6, 7])
def test_values_follow_the_units_of_time_and_of_the_plant(power):
    """The same loop in other units of time (2^power s) and of gain (2^5): each quantity scales by its table
    row."""
    num, den = np.array([[0.0, 0.2, 1.0]]), np.array([[1.0, 1.2, 0.8]])
    top, bottom = np.array([[0.9, 0.6]]), np.array([[0.1, 0.02]])
    unit, gain = 2.0**power, 2.0**5
    stretch = unit ** np.arange(2.0, -1.0, -1.0)
    base = evaluate(Rational.of(num, den), Rational.of(top, bottom))
    other = evaluate(
        Rational.of(gain * num * stretch, den * stretch),
        Rational.of(top * stretch[1:] / gain, bottom * stretch[1:]),
    )
    for i, measure in enumerate(EVERY_QUANTITY):
        row = QUANTITIES[measure.quantity]
        expected = base.values[0, 0, i] * unit**row.time_power * gain**row.gain_power
        np.testing.assert_allclose(other.values[0, 0, i], expected, rtol=1e-9, err_msg=measure.quantity)


def test_reference_step_scales_the_control_peak_alone():
    plants, _ = second_order(1)
    comps = Rational.of([[1.0]], [[1.0]])
    one, five = (evaluate(plants, comps, reference_step=step) for step in (1.0, -5.0))
    for i, measure in enumerate(EVERY_QUANTITY):
        factor = 5.0 if measure.quantity == "control_peak" else 1.0
        np.testing.assert_array_equal(five.values[0, 0, i], factor * one.values[0, 0, i])


def test_stages_run_as_far_as_the_measures_ask():
    plants, _ = second_order(3)
    comps = Rational.of([[1.0]], [[1.0]])
    for names, last in (
        (("decay_rate", "velocity_error"), 0),
        (("decay_rate", "phase_margin"), 1),
        (("damping_ratio",), 1),
        (("overshoot",), 2),
    ):
        found = evaluate(plants, comps, measures=tuple(Measure(n) for n in names))
        assert (found.reached == last).all()
        assert np.isfinite(found.values[..., 0]).any()


def test_the_screen_ends_a_loop_early_and_leaves_the_others_alone():
    plants, _ = second_order(60, seed=3)
    comps = Rational.of([[2.0]], [[1.0]])
    measures = (Measure("damping_ratio"), Measure("sensitivity_peak"), Measure("settling_time"))
    full = evaluate(plants, comps, measures=measures)
    cut = evaluate(plants, comps, measures=measures, screen=Screen(least_damping=0.2))
    light = full["damping_ratio"][0] < 0.2
    assert 0 < light.sum() < 60
    np.testing.assert_array_equal(cut.reached[0] < 2, light)
    np.testing.assert_allclose(cut["damping_ratio"][0], full["damping_ratio"][0], rtol=1e-12)
    np.testing.assert_allclose(cut.values[0, ~light], full.values[0, ~light], rtol=1e-12)
    assert np.isnan(cut["settling_time"][0, light]).all()
    peak = evaluate(plants, comps, measures=measures, screen=Screen(most_peak=1.5))
    high = full["sensitivity_peak"][0] > 1.5
    np.testing.assert_array_equal(peak.reached[0] < 2, high)
    # the screen needs no measure of its own kind among those asked for
    only = evaluate(plants, comps, measures=(Measure("settling_time"),), screen=Screen(least_damping=0.2))
    np.testing.assert_array_equal(only.reached[0] < 2, light)


def test_an_uncounted_mode_is_no_reason_to_end_a_loop():
    mode, dipole = np.array([1.0, 0.2, 1e4]), np.array([1.0, 0.2, 1.01e4])
    plant = Rational.of([dipole / 1.01], [np.polymul([1.0, 1.4, 0.0], mode)])
    measures = (Measure("damping_ratio"), Measure("overshoot"))
    found = evaluate(
        plant, Rational.of([[1.0]], [[1.0]]), measures=measures, screen=Screen(least_damping=0.5)
    )
    assert found.reached[0, 0] == 2
    assert found["damping_ratio"][0, 0] == pytest.approx(0.7, abs=0.01)


def test_an_unstable_loop_has_damping_decay_and_nothing_else():
    found = evaluate(Rational.of([[1.0]], [[1.0, -1.0, 1.0]]), Rational.of([[0.5]], [[1.0]]))
    assert not found.stable.any()
    assert found.abscissa[0, 0] == pytest.approx(0.5)
    for i, measure in enumerate(EVERY_QUANTITY):
        present = measure.quantity in ("damping_ratio", "decay_rate")
        assert np.isnan(found.values[0, 0, i]) != present


def test_a_name_that_was_not_asked_for_is_a_key_error():
    plants, _ = second_order(1)
    found = evaluate(plants, Rational.of([[1.0]], [[1.0]]), measures=(Measure("overshoot"),))
    with pytest.raises(KeyError):
        found["rise_time"]
