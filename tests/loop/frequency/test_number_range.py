"""Coefficients and frequencies at the edge of the number range: a value or none, never a warning."""

from dataclasses import replace

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.frequency.response import log_rates, tamed
from synth.loop.frequency.stage import KEYS, frequency_stage


def lags(count):
    out = np.ones(1)
    for _ in range(count):
        out = np.polymul(out, [1.0, 1.0])
    return out


def test_twenty_lags_with_dead_time_under_a_slow_pi():
    plant, pi = Rational.of([1.0], lags(20), 3.0), Rational.of([2.0, 0.1], [20.0, 0.0])
    found = evaluate(plant, pi)
    assert bool(found.stable[0, 0])

    def loop(w):
        s = 1j * w
        return 0.1 * (1.0 + 1.0 / (20.0 * s)) * np.exp(-3.0 * s) / (s + 1.0) ** 20

    w = np.geomspace(1e-3, 1.0, 400_001)
    peak = np.abs(1.0 / (1.0 + loop(w))).max()
    assert found["sensitivity_peak"][0, 0] == pytest.approx(peak, rel=1e-6)
    assert found["noise_gain"][0, 0] == pytest.approx(1.0, rel=1e-6)  # at ω -> 0, 1/P(0)
    assert found["velocity_error"][0, 0] == pytest.approx(200.0)


def test_rates_do_not_feel_the_size_of_the_polynomials():
    rng = np.random.default_rng(0)
    re, im = rng.normal(size=(2, 2, 2, 6))
    size, rate, turn = log_rates(re, im)
    huge = 2.0 ** np.array([0.0, 100.0, 600.0, 900.0, 1000.0, -300.0])
    large_size, large_rate, large_turn = log_rates(*tamed(re * huge, im * huge))
    np.testing.assert_allclose(large_size[0] / large_size[1], size[0] / size[1], rtol=1e-13)
    np.testing.assert_allclose(large_rate, rate, rtol=1e-13)
    np.testing.assert_allclose(large_turn, turn, rtol=1e-13)


@pytest.mark.parametrize("delay", [0.0, 1.0])
def test_a_loop_whose_squares_leave_the_number_range_has_no_frequency_quantities(
    random_loops, poles_of, delay
):
    loops = replace(random_loops(1, 3, 3), dead_time=np.full(3, 0.01 * delay))
    poles = poles_of(loops)
    alone = frequency_stage(loops, poles, KEYS)
    numerator = loops.numerator.copy()
    numerator[1, -1] = 1e250
    found = frequency_stage(replace(loops, numerator=numerator), poles, KEYS)
    for key in KEYS:
        assert np.isnan(found[key][1])
        np.testing.assert_array_equal(found[key][[0, 2]], alone[key][[0, 2]])


@pytest.mark.parametrize(
    ("plant", "compensator"),
    [
        (([1.0], [1.0, 1.0], 0.0), ([1e-250, 1.0], [1e-250, 1.0])),
        (([1.0], [1.0, 1.0], 0.1), ([1e-250, 1.0], [1e-250, 1.0])),
        (([1.0], [1.0, 1.0], 0.1), ([1e250, 1.0], [1e250, 1.0])),
        (([1.0, 1e200], [1.0, 1.0, 1e200], 0.1), ([1e250, 1.0], [1e250, 1.0])),
        (([1e250], [1.0, 1e250, 1e250], 0.0), ([0.1, 0.1], [1.0, 0.0])),
        (([1e250], [1.0, 1e250, 1e250], 1.0), ([0.1, 0.1], [1.0, 0.0])),
        (([1e250], [1.0, 1.0], 0.0), ([1e-250], [1.0, 0.0])),
    ],
)
def test_coefficients_that_reach_over_the_number_range_leave_no_warning(plant, compensator):
    # warnings are errors here
    found = evaluate(Rational.of(*plant), Rational.of(*compensator))
    assert found.stable.shape == (1, 1)
