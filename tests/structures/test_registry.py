"""A function that two structures can realise goes by the simpler name."""

import numpy as np
import pytest

from synth.structures import REGISTRY, by_name, same_function
from synth.structures.factors import factors_of


def names(num, den):
    return [s.name for s, _ in same_function(np.array(num, float), np.array(den, float))]


def test_order_is_the_order_of_the_table():
    assert list(REGISTRY) == ["P", "PI", "PD", "PID", "lag", "lead", "lead-lag", "PI-lead", "double-lead"]


@pytest.mark.parametrize(
    ("num", "den", "expected"),
    [
        ([3.0], [1.0], ["P"]),
        ([1.0, 2.0], [1.0, 2.0005], ["P"]),  # corners that no one could set apart
        ([2.0, 1.0], [1.0, 0.0], ["PI"]),
        ([1.0, 1.0], [0.1, 1.0], ["PD", "lead"]),  # ratio 10
        ([1.0, 1.0], [0.02, 1.0], ["PD"]),  # ratio 50: more than a lead
        ([1.0, 1.0], [0.6, 1.0], ["lead"]),  # ratio 1.67: less than a PD has
        ([1.0, 1.0], [5.0, 1.0], ["lag"]),
        ([1.0, 1.0], [200.0, 1.0], []),
        ([1.0, 3.0, 2.0], [0.1, 1.0, 0.0], ["PID", "PI-lead"]),
        ([1.0, 1.0, 2.0], [0.1, 1.0, 0.0], ["PID"]),  # complex zeros
        ([1.0, 2.0, 1.0], [0.01, 0.2, 1.0], ["double-lead"]),
        ([1.0, 10.1, 1.0], [1.0, 50.01, 0.5], ["lead-lag"]),
        ([1.0, -1.0], [1.0, 1.0], []),  # a zero in the right half plane
        ([1.0, 1.0], [1.0, 0.0, 0.0], []),
        ([0.0, 1.0, 1.0, 0.0], [0.1, 1.0, 0.0], ["PD", "lead"]),  # padding, and s above and below
        ([-1.0, -1.0], [0.1, 1.0], ["PD", "lead"]),
    ],
)
def test_names_of_a_function(num, den, expected):
    assert names(num, den) == expected


def test_a_lead_lag_whose_corners_meet_is_a_lead():
    theta = np.array([[2.0, 1.0, 10.0, 10.0, 4.0]])
    c = by_name("lead-lag").realise(theta)
    assert names(c.numerator[0], c.denominator[0]) == ["PD", "lead"]


def test_values_are_those_of_the_simpler_structure():
    theta = np.array([[2.0, 5.0, 50.0]])
    c = by_name("lead").realise(theta)
    (first, values), (second, own) = same_function(c.numerator[0], c.denominator[0])
    assert (first.name, second.name) == ("PD", "lead")
    np.testing.assert_allclose(values, [2.0, 0.18, 0.02], rtol=1e-9)
    np.testing.assert_allclose(own, theta[0], rtol=1e-9)


def test_times_far_from_one_second_are_told_apart():
    theta = np.array([[1e6, 3e-9, 2e-10, 1e-11]])
    c = by_name("PID").realise(theta)
    found = dict((s.name, v) for s, v in same_function(c.numerator[0], c.denominator[0]))
    np.testing.assert_allclose(found["PID"], theta[0], rtol=1e-6)


def test_nothing_has_no_factors():
    with pytest.raises(ValueError, match="polynomial of zeros"):
        factors_of(np.zeros(2), np.ones(2))
