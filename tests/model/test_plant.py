"""One plant: the plain constructors, its response, its roots."""

import numpy as np
import pytest

from synth.model import Plant


def test_constructors_agree():
    plants = [
        Plant.from_formula("K*(s + 3)/(s^2 + 4*s + 29) * exp(-0.2*s)", K=2),
        Plant.from_coefficients([2, 6], [1, 4, 29], 0.2),
        Plant.from_roots(2, [-3], [-2 + 5j, -2 - 5j], 0.2),
        Plant.from_matrices([[0, 1], [-29, -4]], [0, 1], [6, 2], dead_time=0.2),
    ]
    s = np.array([[0.5j], [1.0 + 0j]])
    for plant in plants:
        np.testing.assert_allclose(plant.response(s), plants[0].response(s), rtol=1e-14)
        assert plant.response(s).shape == (2, 1)
        assert (plant.order, plant.dead_time) == (2, 0.2)
        assert len(plant.rational()) == 1


def test_roots_of_extreme_scales():
    plant = Plant.from_roots(1e9, [-2e-7], [0, 0, -3e-8, -1e7], 0)
    np.testing.assert_allclose(np.sort(plant.poles().real), [-1e7, -3e-8, 0, 0], rtol=1e-9)
    np.testing.assert_allclose(plant.zeros(), [-2e-7])
    assert (plant.poles() == 0).sum() == 2


def test_leading_zeros_are_dropped():
    assert Plant.from_coefficients([0, 0, 1], [0, 1, 2]).denominator == (1.0, 2.0)
    assert Plant.from_coefficients([0, 0, 1], [0, 1, 2]).numerator == (1.0,)


def test_a_pole_gives_inf():
    assert np.isinf(Plant.from_coefficients([1], [1, 1]).response(np.array([-1 + 0j]))[0])


def test_a_static_plant_has_no_roots():
    assert Plant.from_coefficients([2], [1]).poles().size == 0


def test_frozen():
    with pytest.raises(AttributeError):
        Plant((1.0,), (1.0,)).dead_time = 1.0
