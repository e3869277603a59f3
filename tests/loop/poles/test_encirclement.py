"""The count of roots right of a line: closed forms, a plain dense contour, and laws."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.crossing_count import count_by_crossings, squared_on_axis
from synth.loop.poles.encirclement import (
    _argument_change,
    chain_abscissa,
    delayed_stable,
    moved,
    roots_right_of,
)


def closed(num, den, delay):
    """Loops of L = num/den e^(-delay s), one row per delay or per polynomial."""
    plant = Rational.of(num, den, delay)
    rows = np.arange(len(plant))
    return close(plant, Rational.of([[1.0]], [[1.0]]), rows, np.zeros(len(plant), dtype=int))


def contour_count(loops, row, line):
    """Right-half-plane roots by unwrapping the argument along a dense line; retarded or mildly neutral
    loops."""
    d, n, delay = loops.denominator[row], loops.numerator[row], loops.dead_time[row]
    w = np.concatenate([np.linspace(0.0, 40.0, 20_001), np.geomspace(40.0, 4e4, 20_001)[1:]])
    s = line + 1j * w
    phase = np.unwrap(np.angle(np.polyval(d, s) + np.polyval(n, s) * np.exp(-s * delay)))
    return (loops.order - 2.0 * (phase[-1] - phase[0]) / np.pi) / 2.0


@pytest.mark.parametrize("delay", [0.01, 1.0, 37.0])
def test_integrator_is_stable_up_to_a_quarter_turn(delay):
    # K/s e^(-θs): stable for 0 < K θ < π/2, then a further pair each 2π
    gains = (
        np.array([-1e-3, 1e-6, 0.3, 1.0, np.pi / 2 - 1e-9, np.pi / 2 + 1e-9, 2.0, 5 * np.pi / 2 + 0.01])
        / delay
    )
    loops = closed(gains[:, None], [[1.0, 0.0]], delay)
    assert delayed_stable(loops).tolist() == [False, True, True, True, True, False, False, False]
    count, _ = roots_right_of(loops, np.zeros(len(loops)))
    assert count.tolist() == [1, 0, 0, 0, 0, 2, 2, 4]


def test_a_root_on_the_axis_is_not_stable():
    _, touching = roots_right_of(closed([[np.pi / 2]], [[1.0, 0.0]], 1.0), np.zeros(1))
    assert touching[0]
    assert not delayed_stable(closed([[np.pi / 2]], [[1.0, 0.0]], 1.0))[0]
    # D(0) + N(0) = 0: a root at the origin, whatever the delay
    assert not delayed_stable(closed([[-1.0]], [[1.0, 1.0]], 0.7))[0]


def test_gain_and_delay_alone():
    gains = np.array([[0.5], [-0.999], [1.0], [-1.0], [1.5]])
    loops = closed(gains, np.ones((5, 1)), 2.0)
    assert delayed_stable(loops).tolist() == [True, True, False, False, False]
    np.testing.assert_allclose(chain_abscissa(loops) / loops.time_scale, np.log(np.abs(gains[:, 0])) / 2.0)


def test_unstable_first_order_plant_with_proportional_gain():
    # K e^(-θs)/(s - 1): stable for 1 < K < sqrt(1 + w²), w the first root of atan(w) = w θ
    from scipy.optimize import brentq

    for delay in (0.2, 0.5, 0.9):
        w = brentq(lambda x, delay=delay: np.arctan(x) - x * delay, 1e-3, np.pi / 2 / delay)
        most = np.hypot(1.0, w)
        gains = np.array([0.99, 1.01, 0.999 * most, 1.001 * most])
        stable = delayed_stable(closed(gains[:, None], [[1.0, -1.0]], delay))
        assert stable.tolist() == [False, True, True, False]
    # no gain stabilises it from a delay of one time constant on
    gains = np.geomspace(0.5, 10.0, 30)
    assert not delayed_stable(closed(gains[:, None], [[1.0, -1.0]], 1.0 + 1e-6)).any()


def test_pockets_of_stability_as_the_delay_grows():
    # a lightly damped plant under a small negative gain is stable in windows of delay:
    # crossings where |D| = |N| are at two frequencies, entering at one and leaving at the other.
    delays = np.linspace(0.05, 25.0, 120)
    loops = closed(np.full((120, 1), -0.2), [[1.0, 0.1, 1.0]], delays)
    count, _ = roots_right_of(loops, np.zeros(len(loops)))
    some = range(0, len(loops), 9)
    assert count[::9].tolist() == [round(contour_count(loops, i, 0.0)) for i in some]
    assert 3 <= np.sum(np.diff(delayed_stable(loops).astype(int)) != 0)


@pytest.mark.parametrize("line", [0.0, 0.25, -0.4])
def test_count_agrees_with_a_dense_contour(line):
    rng = np.random.default_rng(7)
    m = 25
    den = np.c_[
        np.ones(m), rng.uniform(-0.5, 2, m), rng.uniform(0, 2, m), rng.uniform(-0.3, 1, m), np.zeros(m)
    ]
    num = np.c_[
        rng.uniform(-0.8, 1, m), rng.uniform(-1, 1, m), rng.uniform(-1, 2, m), rng.uniform(-0.2, 0.5, m)
    ]
    loops = closed(num, den, rng.uniform(0.1, 3.0, m))
    count, _ = roots_right_of(loops, np.full(m, line))
    expected = np.array([contour_count(loops, i, line) for i in range(m)])
    assert np.abs(expected - np.round(expected)).max() < 0.01
    assert np.array_equal(count, np.round(expected))
    assert len(np.unique(count)) > 2


@pytest.mark.parametrize("order", [1, 2, 3, 6, 9])
def test_crossings_with_the_growing_delay_give_the_count_of_the_argument(order):
    # two ways to one number: the argument on the axis, and the roots met as the delay grows from 0
    rng = np.random.default_rng(order)
    m = 200
    den = np.c_[np.ones(m), rng.normal(0.6, 1.0, (m, order))]
    num = rng.normal(0.0, 1.0, (m, order + 1)) * np.r_[0.3, np.ones(order)]
    loops = closed(num, den, np.exp(rng.uniform(-3.0, 3.0, m)))
    use = np.flatnonzero(np.abs(loops.numerator[:, 0]) < loops.denominator[:, 0])
    part = (loops.denominator[use], loops.numerator[use], loops.dead_time[use])
    found = count_by_crossings(*part)
    change, _ = _argument_change(*part)
    assert np.array_equal(found, np.round(0.5 * order - change / np.pi))
    assert len(np.unique(found)) > 3


def test_what_rounding_could_decide_is_left_to_the_argument():
    # s² + 1 has its roots on the axis without delay; s + 1 - 1 one at 0; 1/s at a quarter turn one at jω
    delay = np.ones(1)
    assert np.isnan(count_by_crossings(np.array([[1.0, 0.0, 0.0]]), np.array([[0.0, 0.0, 1.0]]), delay))
    unsure = count_by_crossings(np.array([[1.0, 1.0]]), np.array([[0.0, -1.0]]), delay)
    assert np.isnan(unsure)
    quarter = count_by_crossings(np.array([[1.0, 0.0]]), np.array([[0.0, np.pi / 2]]), delay)
    assert np.isnan(quarter)
    # the delay pushes the double integrator's roots to the right, whatever its sign
    assert roots_right_of(closed([[1.0], [-1.0]], [[1.0, 0.0, 0.0]] * 2, 1.0), np.zeros(2))[0].tolist() == [
        2,
        1,
    ]


def test_far_chain_right_of_the_line_is_infinitely_many():
    loops = closed([[0.5, 1.0]], [[1.0, 2.0]], 1.0)
    line = chain_abscissa(loops)
    assert np.isinf(roots_right_of(loops, line - 1e-3)[0][0])
    assert np.isfinite(roots_right_of(loops, line + 1e-3)[0][0])


def test_rows_that_are_not_finite_are_not_stable_and_stop_nobody():
    loops = closed([[0.5], [0.5]], [[1.0, 1.0], [1.0, 1.0]], 1.0)
    loops.numerator[1] = np.nan
    assert delayed_stable(loops).tolist() == [True, False]


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.floats(-2.0, 2.0), min_size=4, max_size=4),
    st.floats(0.1, 4.0),
    st.integers(-6, 6),
)
def test_the_verdict_does_not_depend_on_the_unit_of_time(coefficients, delay, power):
    a, b, c, k = coefficients
    unit = 2.0**power
    one = closed([[k]], [[1.0, a, b, c]], delay)
    other = closed([[k * unit**3]], [[1.0, a * unit, b * unit**2, c * unit**3]], delay / unit)
    assert delayed_stable(one)[0] == delayed_stable(other)[0]


def test_polynomial_tools():
    p = np.array([[2.0, -1.0, 3.0, 0.5]])
    assert np.allclose(np.polyval(moved(p, np.array([0.7]))[0], 1.3), np.polyval(p[0], 2.0))
    assert np.isclose(np.polyval(squared_on_axis(p)[0], 1.7**2), abs(np.polyval(p[0], 1.7j)) ** 2)
