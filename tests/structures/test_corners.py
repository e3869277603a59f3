"""Corner angles: the phase they make, the ratio they keep."""

import numpy as np

from synth.structures.corners import bump, corner_angles


def test_angles_make_the_phase_within_the_ratio():
    rng = np.random.default_rng(0)
    phase, share = rng.uniform(-0.2, 1.7, 500), rng.uniform(0, 1, 500)
    larger, smaller = corner_angles(phase, share, 2.0, 101.0)
    found = np.isfinite(smaller)
    ratio = np.tan(larger[found]) / np.tan(smaller[found])
    assert ((ratio > 2.0 - 1e-9) & (ratio < 101.0 + 1e-6)).all()
    np.testing.assert_allclose((larger - smaller)[found], phase[found], atol=1e-14)
    most = np.arcsin(100.0 / 102.0)  # the textbook largest phase of a corner ratio of 101
    np.testing.assert_array_equal(found, (phase > 0) & (phase < most))


def test_share_runs_from_fast_corners_to_slow_ones():
    share = np.linspace(0.001, 0.999, 50)
    _, smaller = corner_angles(np.full(50, 0.6), share, 1.0, 30.0)
    assert (np.diff(smaller) > 0).all()
    assert np.tan(smaller[0]) < 0.05


def test_bump_of_a_lead_and_a_lag():
    """A corner ratio of 3 gives 30 degrees at the geometric mean (sin 30° = (3 - 1)/(3 + 1))."""
    line = bump(2.0, 6.0)
    np.testing.assert_allclose(line["max phase"], 30.0, rtol=1e-12)
    np.testing.assert_allclose(line["at"], np.sqrt(12.0))
    np.testing.assert_allclose(bump(6.0, 2.0)["max phase"], -30.0, rtol=1e-12)
