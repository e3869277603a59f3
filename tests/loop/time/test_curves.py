"""Step responses as curves: closed forms, at 0+ the value after the jump, unstable loops too."""

import numpy as np
import pytest

from synth.loop.closed_loop import Rational, close
from synth.loop.time.curves import step_curves

T = np.linspace(0.0, 6.0, 25)


def curves(plant, compensator):
    """Curves of one loop over SI time, with the plant's gain put back."""
    loops = close(Rational.of(*plant), Rational.of(*compensator), np.array([0]), np.array([0]))
    y, u, d = step_curves(loops, T[None] / loops.time_scale)
    return y[0], u[0] / loops.plant_gain[0], d[0] * loops.plant_gain[0]


def test_first_order():
    y, u, d = curves(([1.0], [1.0, 0.0]), ([2.0], [1.0]))
    np.testing.assert_allclose(y, 1 - np.exp(-2 * T), atol=1e-14)
    np.testing.assert_allclose(u, 2 * np.exp(-2 * T), atol=1e-14)
    np.testing.assert_allclose(d, (1 - np.exp(-2 * T)) / 2, atol=1e-14)


def test_repeated_pole():
    y, _, d = curves(([1.0], [1.0, 0.0]), ([2.0, 1.0], [1.0, 0.0]))
    np.testing.assert_allclose(y, 1 - (1 - T) * np.exp(-T), atol=1e-13)
    np.testing.assert_allclose(d, T * np.exp(-T), atol=1e-13)


def test_jump_and_static_loop():
    y, u, d = curves(([3.0], [1.0]), ([2.0], [1.0]))
    np.testing.assert_allclose(y, 6 / 7)
    np.testing.assert_allclose(u, 2 / 7)
    np.testing.assert_allclose(d, 3 / 7)
    y, _, _ = curves(([0.8, 0.4], [0.2, 0.6]), ([1.0], [1.0]))
    np.testing.assert_allclose(y, 0.4 + 0.4 * np.exp(-T), atol=1e-14)


@pytest.mark.parametrize("gain", [0.5, 5.0])
def test_unstable_plant(gain):
    """Plant 1/(s - 1): y = k/(k - 1) (1 - e^((1 - k) t)), growing for k < 1."""
    y, _, _ = curves(([1.0], [1.0, -1.0]), ([gain], [1.0]))
    np.testing.assert_allclose(y, gain / (gain - 1) * (1 - np.exp((1 - gain) * T)), rtol=1e-12, atol=1e-13)


def test_one_row_of_times_for_all_loops(random_loops):
    loops, _ = random_loops(np.random.default_rng(1), 20, 4)
    together = step_curves(loops, T)
    for i in (0, len(loops) - 1):
        alone = step_curves(loops.rows(np.array([i])), T[None])
        for a, b in zip(together, alone, strict=True):
            np.testing.assert_allclose(a[i], b[0], rtol=1e-12, atol=1e-13)
