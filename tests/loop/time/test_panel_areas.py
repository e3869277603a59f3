"""Areas of panels: every zero counts, also those that two looks of one sign hide."""

from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from synth.loop.time.collocation import GRID, value_matrix
from synth.loop.time.panel_areas import panel_areas
from synth.loop.time.panels import Panels


def area(values):
    """By panel_areas, of panels of length 1 with these values (B, 13)."""
    many = len(values)
    none = np.zeros(many, dtype=int)
    return panel_areas(Panels(none, np.arange(many) * 1.0, np.ones(many), values, none[:1]))


def exact(values):
    """∫ abs of the polynomial through the values, split at its real roots."""
    x = np.cos(np.pi * (np.arange(13) + 0.5) / 13)
    fit = np.polynomial.chebyshev.Chebyshev.fit(x, values @ value_matrix(0.5 * (x + 1.0)), 12)
    roots = fit.roots()
    inside = np.sort(roots.real[(np.abs(roots.imag) < 1e-9) & (np.abs(roots.real) < 1.0)])
    edges = np.concatenate([[-1.0], inside, [1.0]])
    return 0.5 * sum(abs(quad(fit, a, b, epsabs=1e-13)[0]) for a, b in pairwise(edges))


@pytest.mark.parametrize("turn", [0.5, 2.0, 4.0])
def test_swings(turn):
    rng = np.random.default_rng(2)
    phase, fall = rng.uniform(0.0, 7.0, size=(2, 40, 1))
    values = np.exp(-0.3 * fall * GRID) * np.sin(turn * GRID + phase) + rng.normal(size=(40, 1)) * 0.3
    np.testing.assert_allclose(area(values), [exact(v) for v in values], rtol=1e-9)


@pytest.mark.parametrize("depth", [1e-2, 1e-4, 1e-6, 0.0, -1e-4])
@pytest.mark.parametrize("place", [0.01, 7.4 / 16.0, 0.5, 15.7 / 16.0])
@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_dip_between_two_looks(depth, place, sign):
    """A parabola that goes below zero by `depth` between two looks, touches it, or just does not."""
    values = sign * (8.0 * (GRID - place) ** 2 - depth)[None]
    half = np.sqrt(max(depth, 0.0) / 8.0)
    low, high = max(place - half, 0.0), min(place + half, 1.0)

    def whole(x):
        return 8.0 / 3.0 * (x - place) ** 3 - depth * x

    expected = whole(1.0) - whole(0.0) - 2.0 * (whole(high) - whole(low))
    np.testing.assert_allclose(area(values), [expected], rtol=1e-8)


def test_no_panel_has_no_area():
    assert area(np.zeros((0, 13))).shape == (0,)
