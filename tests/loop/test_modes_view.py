"""The list of modes of one loop, with and without dead time."""

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.modes_view import modes_of


def test_a_pair_in_si_units():
    """k/(s (T s + 1)) in milliseconds: ω_n = √(k/T), ζ = 1/(2 √(k T))."""
    view = modes_of(Rational.of([[400.0]], [[1e-3, 1.0, 0.0]]), Rational.of([[1.0]], [[1.0]]))
    (mode,) = view.modes
    natural, ratio = np.sqrt(400.0 / 1e-3), 1.0 / (2.0 * np.sqrt(0.4))
    assert view.stable
    assert mode.counted
    assert abs(mode.pole) == pytest.approx(natural, rel=1e-13)
    assert mode.damping == pytest.approx(ratio, rel=1e-13)
    assert mode.share == pytest.approx(1.0 / np.sqrt(1.0 - ratio**2), rel=1e-12)
    assert mode.decay_time == pytest.approx(2e-3, rel=1e-13)
    assert mode.period == pytest.approx(2.0 * np.pi / (natural * np.sqrt(1.0 - ratio**2)), rel=1e-13)


def test_a_structural_mode_is_listed_but_not_counted():
    mode, dipole = np.array([1.0, 0.2, 1e4]), np.array([1.0, 0.2, 1.01e4])
    plant = Rational.of([dipole / 1.01], [np.polymul([1.0, 1.4, 0.0], mode)])
    view = modes_of(plant, Rational.of([[1.0]], [[1.0]]))
    assert [m.counted for m in view.modes] == [True, False]
    (left_out,) = view.uncounted_below(0.1)
    assert abs(left_out.pole) == pytest.approx(100.0, rel=0.01)
    assert left_out.share < 0.02
    assert view.uncounted_below(1e-4) == ()
    assert all(m.counted for m in modes_of(plant, Rational.of([[1.0]], [[1.0]]), below=200.0).modes)


def test_unstable_loop():
    view = modes_of(Rational.of([[1.0]], [[1.0, -1.0]]), Rational.of([[0.5]], [[1.0]]))
    assert not view.stable
    assert view.modes[0].pole == pytest.approx(0.5)
    assert view.modes[0].decay_time == pytest.approx(-2.0)


@pytest.mark.parametrize("gain", [0.3, 1.0])
def test_dead_time_modes_solve_the_true_equation(gain):
    """k/s e^(-s): every pole listed satisfies p + k e^(-p) = 0, and residues of T/s are 1/(p' ...)."""
    view = modes_of(Rational.of([[gain]], [[1.0, 0.0]], 1.0), Rational.of([[1.0]], [[1.0]]))
    assert view.stable
    assert len(view.modes) >= 1
    for mode in view.modes:
        p = mode.pole
        assert abs(p + gain * np.exp(-p)) < 1e-11 * abs(p)
        slope = 1.0 - gain * np.exp(-p)
        exact = abs(gain * np.exp(-p) / (p * slope)) * (2.0 if p.imag else 1.0)
        assert mode.share == pytest.approx(exact, rel=1e-9)
    assert any(m.counted for m in view.modes)


def test_no_finite_coefficients_is_refused():
    with pytest.raises(ValueError, match="finite"):
        modes_of(Rational.of([[np.nan]], [[1.0]]), Rational.of([[1.0]], [[1.0]]))
