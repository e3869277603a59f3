"""What kind of plant: every fact against a plant made to have it."""

import numpy as np
import pytest

from synth.model import Plant, character_of, characters
from synth.model.exact import polynomial_of_roots


def test_a_plain_lag():
    c = character_of(Plant.from_coefficients([3], [0.5, 1]))
    assert c.stable
    assert (c.integrators, c.differentiators, c.excess) == (0, 0, 1)
    assert (c.dc_gain, c.sign, c.time_scale) == (3.0, 1.0, 0.5)
    np.testing.assert_allclose(c.gain_scale, 3 / np.sqrt(2))


def test_type_counts_poles_less_zeros_at_the_origin():
    c = character_of(Plant.from_coefficients([-2], [1, 1, 0, 0]))
    assert (c.integrators, c.dc_gain, c.sign) == (2, -np.inf, -1.0)
    c = character_of(Plant.from_coefficients([1, 0], [1, 1]))
    assert (c.differentiators, c.dc_gain) == (1, 0.0)


def test_right_half_plane_and_axis():
    c = character_of(Plant.from_roots(1, [2, 3 + 4j, 3 - 4j], [1, 1, 2j, -2j, -5]))
    np.testing.assert_allclose(sorted(c.right_zeros, key=abs), [2, 3 - 4j, 3 + 4j], rtol=1e-9)
    np.testing.assert_allclose(c.right_poles, [1, 1], rtol=1e-6)
    assert len(c.axis_poles) == 2
    assert not c.stable


@pytest.mark.parametrize(
    ("zeros", "poles", "hidden"),
    [
        ([1], [1, -2], [1]),
        ([1, 1], [1, 1, -2], [1, 1]),
        ([1, -4], [1, 1, -2], [1]),
        ([0], [0, -1], [0]),
        ([3j, -3j], [3j, -3j, -1], [3j, -3j]),
        ([-1], [-1, -2], []),  # hidden, but stable
        ([1], [1.001, -2], []),  # close is not the same
        ([1], [1 + 1e-9, -2], []),
    ],
)
def test_hidden_unstable_modes(zeros, poles, hidden):
    num, den = (
        polynomial_of_roots([complex(z) for z in zeros]),
        polynomial_of_roots([complex(p) for p in poles]),
    )
    c = character_of(Plant.from_coefficients(tuple(3.7 * num), tuple(0.3 * den)))
    np.testing.assert_allclose(
        sorted(c.hidden_unstable, key=lambda r: r.imag),
        sorted(hidden, key=lambda r: complex(r).imag),
        atol=1e-6,
    )
    for root in c.hidden_unstable:
        assert root not in c.right_poles


def test_hidden_mode_of_a_state_space():
    plant = Plant.from_matrices(
        [[0.4, 0.1], [0, -1]], [0, 1], [1, 1]
    )  # observable, driven by nothing it can steer
    assert character_of(plant).hidden_unstable == ()
    plant = Plant.from_matrices([[0.4, 0], [0, -1]], [0, 1], [1, 1])
    np.testing.assert_allclose(character_of(plant).hidden_unstable, [0.4], rtol=1e-9)


def test_light_modes_and_scales():
    c = character_of(Plant.from_coefficients([1], [1 / 400, 2 * 0.02 / 20, 1], 0.5))
    np.testing.assert_allclose(c.light_modes, [(20, 0.02)], rtol=1e-9)
    np.testing.assert_allclose(c.time_scale, (20 * 20 * 2) ** (-1 / 3))
    undamped = character_of(Plant.from_coefficients([1], [1, 0, 1]))
    assert undamped.gain_scale > 0.0
    assert np.isfinite(undamped.gain_scale)


def test_integrators_alone_have_a_time_scale():
    c = character_of(Plant.from_coefficients([4], [1, 0, 0]))
    np.testing.assert_allclose((c.time_scale, c.gain_scale), (0.5, 1.0))


def test_scales_follow_the_units():
    """A plant in units of 1000 s: time scale 1000 times larger, the same gain."""
    a = character_of(Plant.from_coefficients([3, 1], [2, 3, 1, 0]))
    b = character_of(Plant.from_coefficients([3e3, 1], [2e9, 3e6, 1e3, 0]))
    np.testing.assert_allclose((b.time_scale, b.gain_scale), (1e3 * a.time_scale, a.gain_scale), rtol=1e-12)


def test_one_for_each_row():
    rows = Plant.from_coefficients([1], [1, 1]).rational()
    assert len(characters(rows)) == 1
