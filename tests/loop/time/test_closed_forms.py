"""Responses whose quantities are known in closed form."""

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure

TIME = tuple(m for m in EVERY_QUANTITY if m.row.stage == "time")


def values(plant, compensator, measures=TIME):
    found = evaluate(Rational.of(*plant), Rational.of(*compensator), measures=measures)
    assert not found.approximate.any()
    return {m.quantity: found.values[0, 0, i] for i, m in enumerate(measures)}


@pytest.mark.parametrize("zeta", [0.05, 0.2, 0.5, 0.7, 0.9, 0.95])
@pytest.mark.parametrize("omega", [1e-3, 1.0, 777.0])
def test_second_order(zeta, omega):
    got = values(([omega**2], [1.0, 2 * zeta * omega, 0.0]), ([1.0], [1.0]))
    root = np.sqrt(1 - zeta**2)
    first = np.exp(-np.pi * zeta / root)
    # 1 - z = e^(-zeta x) sin(root x + angle) / root: zeros every pi / root, the first at (pi - angle) / root
    angle = np.arccos(zeta)
    start = (np.pi - angle) / root

    def primitive(x):  # of (1 - z), vanishing at infinity
        return -np.exp(-zeta * x) * (
            2 * zeta * np.cos(root * x) + (2 * zeta**2 - 1) / root * np.sin(root * x)
        )

    area = abs(primitive(start) - primitive(0)) + abs(primitive(start)) / np.tanh(np.pi * zeta / (2 * root))
    np.testing.assert_allclose(got["overshoot"], 100 * first, rtol=1e-9)
    np.testing.assert_allclose(got["peak_time"], np.pi / root / omega, rtol=1e-7)
    np.testing.assert_allclose(got["tracking_area"], area / omega, rtol=1e-6)
    assert got["undershoot"] == 0.0
    assert got["control_peak"] >= 1.0
    np.testing.assert_allclose(got["disturbance_peak"], 1 + first, rtol=1e-9)
    assert got["disturbance_area"] == np.inf


def test_first_order():
    got = values(([2.0], [1.0, 0.0]), ([1.0], [1.0]), (*TIME, Measure("late_deviation", after=1.5)))
    np.testing.assert_allclose(got["settling_time"], np.log(50) / 2, rtol=1e-9)
    np.testing.assert_allclose(got["rise_time"], np.log(9) / 2, rtol=1e-9)
    np.testing.assert_allclose(got["tracking_area"], 0.5, rtol=1e-12)
    np.testing.assert_allclose(got["late_deviation"], 100 * np.exp(-3), rtol=1e-12)
    np.testing.assert_allclose(got["control_peak"], 1.0, rtol=1e-12)
    np.testing.assert_allclose(got["disturbance_peak"], 1.0, rtol=1e-12)
    assert got["overshoot"] == 0.0
    assert np.isnan(got["peak_time"])


def test_triple_pole():
    """T = 1/(s + 1)^3: 1 - z = e^(-t) (1 + t + t^2/2)."""
    got = values(([1.0], [1.0, 3.0, 3.0, 0.0]), ([1.0], [1.0]))
    assert got["overshoot"] == 0.0
    assert got["undershoot"] == 0.0
    t = got["settling_time"]
    np.testing.assert_allclose(np.exp(-t) * (1 + t + t * t / 2), 0.02, rtol=1e-9)
    np.testing.assert_allclose(got["tracking_area"], 3.0, rtol=1e-9)
    # d: (s^2 + 3 s + 3) is not what comes back: P S = 1/(s+1)^3 steps to 1
    np.testing.assert_allclose(got["disturbance_peak"], 1.0, rtol=1e-9)


def test_disturbance_that_returns():
    """Plant 1/s, PI 2 + 1/s: P S = s/(s + 1)^2, whose step response is t e^(-t)."""
    got = values(([1.0], [1.0, 0.0]), ([2.0, 1.0], [1.0, 0.0]))
    np.testing.assert_allclose(got["disturbance_peak"], np.exp(-1), rtol=1e-12)
    np.testing.assert_allclose(got["disturbance_area"], 1.0, rtol=1e-9)
    # y = 1 - (1 - t) e^(-t): peak at t = 2, error area 2/e
    np.testing.assert_allclose(got["overshoot"], 100 * np.exp(-2), rtol=1e-9)
    np.testing.assert_allclose(got["peak_time"], 2.0, rtol=1e-9)
    np.testing.assert_allclose(got["tracking_area"], 2 * np.exp(-1), rtol=1e-7)


def test_nothing_is_divided_by_a_final_value_of_zero():
    """Plant s/(s + 1), compensator 1: T = s/(2 s + 1), y = e^(-t/2)/2."""
    got = values(([1.0, 0.0], [1.0, 1.0]), ([1.0], [1.0]))
    for name in ("overshoot", "undershoot", "rise_time", "peak_time", "settling_time"):
        assert np.isnan(got[name])
    assert got["tracking_area"] == np.inf
    np.testing.assert_allclose(got["control_peak"], 1.0, rtol=1e-12)
    np.testing.assert_allclose(got["disturbance_peak"], 0.5, rtol=1e-12)
    np.testing.assert_allclose(got["disturbance_area"], 1.0, rtol=1e-12)


def test_negative_final_value():
    """Plant -0.5/(s + 1), compensator 1: T(0) = -1, z = 1 - e^(-t/2) all the same."""
    got = values(([-0.5], [1.0, 1.0]), ([1.0], [1.0]))
    np.testing.assert_allclose(got["settling_time"], np.log(50) / 0.5, rtol=1e-9)
    assert got["overshoot"] == got["undershoot"] == 0.0
    assert got["tracking_area"] == np.inf


def test_static_loop_jumps():
    got = values(([3.0], [1.0]), ([2.0], [1.0]))
    assert got["overshoot"] == got["undershoot"] == got["rise_time"] == got["settling_time"] == 0.0
    assert np.isnan(got["peak_time"])
    np.testing.assert_allclose(got["control_peak"], 2 / 7, rtol=1e-12)
    np.testing.assert_allclose(got["disturbance_peak"], 3 / 7, rtol=1e-12)


def test_value_after_the_jump_counts():
    """T = (0.8 s + 0.4)/(s + 1): y jumps to 0.8 and falls to 0.4."""
    got = values(([0.8, 0.4], [0.2, 0.6]), ([1.0], [1.0]))
    np.testing.assert_allclose(got["overshoot"], 100.0, rtol=1e-12)
    assert got["peak_time"] == 0.0
    assert got["rise_time"] == 0.0
    np.testing.assert_allclose(got["settling_time"], np.log(50), rtol=1e-9)
    assert got["tracking_area"] == np.inf


def test_jump_the_wrong_way():
    """T = (1 - s)/(s + 1): y jumps to -1."""
    # 1 - T = 2 s/(s + 1)
    got = values(([-1.0, 1.0], [2.0, 0.0]), ([1.0], [1.0]))
    np.testing.assert_allclose(got["undershoot"], 100.0, rtol=1e-12)
    np.testing.assert_allclose(got["settling_time"], np.log(100), rtol=1e-9)


def test_hidden_mode_leaves_no_trace():
    """The compensator's zero lies on the plant's slow pole; what is left is first order."""
    got = values(([0.01], [1.0, 0.01]), ([1.0, 0.01], [0.01, 0.0]))
    np.testing.assert_allclose(got["settling_time"], np.log(50), rtol=1e-9)
    assert got["overshoot"] == 0.0
    np.testing.assert_allclose(got["rise_time"], np.log(9), rtol=1e-9)


@pytest.mark.parametrize(("span", "expected"), [((0.0, 0.5), np.log(2)), ((0.05, 0.95), np.log(19))])
def test_span_of_the_rise(span, expected):
    got = values(([1.0], [1.0, 0.0]), ([1.0], [1.0]), (Measure("rise_time", span=span),))
    np.testing.assert_allclose(got["rise_time"], expected, rtol=1e-9)


def test_full_rise_is_absent_where_it_is_never_complete():
    full = (Measure("rise_time", span=(0.0, 1.0)),)
    assert np.isnan(values(([1.0], [1.0, 0.0]), ([1.0], [1.0]), full)["rise_time"])
    zeta = 0.5
    got = values(([1.0], [1.0, 2 * zeta, 0.0]), ([1.0], [1.0]), full)["rise_time"]
    np.testing.assert_allclose(got, (np.pi - np.arccos(zeta)) / np.sqrt(1 - zeta**2), rtol=1e-9)


@pytest.mark.parametrize("zeta", [0.94, 0.9, 0.96])
def test_overshoot_below_a_hundredth_of_a_per_cent(zeta):
    """0.00137 % at 0.9634..., 0.0171 % at 0.94: the tail is followed until nothing can overshoot."""
    got = values(([1.0], [1.0, 2 * zeta, 0.0]), ([1.0], [1.0]))
    np.testing.assert_allclose(
        got["overshoot"], 100 * np.exp(-np.pi * zeta / np.sqrt(1 - zeta**2)), rtol=1e-7
    )


@pytest.mark.parametrize("lead", [0.1, 0.02, 0.014, 1e-3])
def test_undershoot_down_to_a_ten_thousandth_of_a_per_cent(lead):
    """T = (1 - a s)/(s + 1)^2: least at t = a/(1 + a), where z = 1 - (1 + a) e^(-a/(1 + a)), about -a^2/2."""
    got = values(([-lead, 1.0], [1.0, 2.0 + lead, 0.0]), ([1.0], [1.0]))
    expected = -100.0 * (-np.expm1(-lead / (1.0 + lead)) - lead * np.exp(-lead / (1.0 + lead)))
    np.testing.assert_allclose(got["undershoot"], expected, atol=1e-7)
    assert got["overshoot"] == 0.0
