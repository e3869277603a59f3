"""Residues and shares: identities, repeated poles against closed forms and 50-digit partial fractions."""

import mpmath
import numpy as np
import pytest

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.roots import closed_roots
from synth.loop.poles.share import damping_of, residues, share_in_step, spaced


def loop_with(numerator, poles):
    """A loop whose T is numerator(s) / Π (s - p): P = N/(Δ - N), C = 1."""
    closed = np.real(np.poly(poles))
    plant = Rational.of([numerator], [np.polysub(closed, numerator)])
    return close(plant, Rational.of([[1.0]], [[1.0]]), np.array([0]), np.array([0]))


def test_residues_of_a_step_add_up_to_the_first_value():
    rng = np.random.default_rng(0)
    for n in (2, 4, 6, 8):
        poles = list(-(10.0 ** rng.normal(scale=0.5, size=n)))
        numerator = rng.normal(size=n + 1)
        loops = loop_with(numerator, poles)
        found = closed_roots(loops.closed)
        final = loops.numerator[:, -1] / loops.closed[:, -1]
        first = loops.numerator[:, 0] / loops.closed[:, 0]
        each = residues(loops, found)
        rounding = 1e-13 * np.abs(each).max()
        np.testing.assert_allclose(each.sum(axis=1) + final, first, rtol=0, atol=rounding)


def test_share_of_a_damped_pair_is_the_amplitude_of_its_oscillation():
    """y = 1 - e^(-ζωt) sin(...)/√(1 - ζ²): the pair's two residues add up to that amplitude."""
    for ratio in (0.05, 0.4, 0.9):
        loops = loop_with([1.0], np.roots([1.0, 2.0 * ratio, 1.0]))
        share = share_in_step(loops, closed_roots(loops.closed))
        np.testing.assert_allclose(share, 1.0 / np.sqrt(1.0 - ratio**2), rtol=1e-12)


@pytest.mark.parametrize("multiplicity", [2, 3, 4, 5])
def test_a_repeated_real_pole_has_one_share_and_is_real(multiplicity):
    """T = 1/(s + 1)^m: the coefficient of 1/(s + 1) in T/s is -1, whatever m is."""
    loops = loop_with([1.0], [-1.0] * multiplicity)
    poles = closed_roots(loops.closed)
    np.testing.assert_allclose(share_in_step(loops, poles), 1.0, rtol=1e-8)
    np.testing.assert_array_equal(damping_of(loops, poles), 1.0)


def test_a_repeated_pair_has_the_residue_of_its_partial_fraction():
    """T = 25/(s² + 2s + 5)²: residue of T/s at -1 + 2j from the derivative of 25/(s (s + 1 + 2j)²)."""
    p, q = -1.0 + 2.0j, -1.0 - 2.0j
    exact = 25.0 * (-1.0 / (p**2 * (p - q) ** 2) - 2.0 / (p * (p - q) ** 3))
    loops = loop_with([25.0], [p, q, p, q])
    poles = closed_roots(loops.closed)
    np.testing.assert_allclose(share_in_step(loops, poles), 2.0 * abs(exact), rtol=1e-7)
    np.testing.assert_allclose(damping_of(loops, poles), 1.0 / np.sqrt(5.0), rtol=1e-6)


def at(coefficients, point):
    value = mpmath.mpf(0)
    for c in coefficients:
        value = value * point + c
    return value


@pytest.mark.parametrize("gap", [1e-2, 1e-3, 1e-4])
def test_poles_that_are_near_but_apart_keep_their_own_residues(gap):
    poles = [-1.0, -1.0 - gap, -4.0]
    loops = loop_with([2.0, 4.0 * (1.0 + gap)], poles)
    found = closed_roots(loops.closed)
    assert spaced(loops, found).rows.size == 0
    with mpmath.workdps(50):  # of the very coefficients the loop has
        closed = [mpmath.mpf(float(c)) for c in loops.closed[0]]
        top = [mpmath.mpf(float(c)) for c in loops.numerator[0]]
        slope = [c * k for c, k in zip(closed[:-1], range(3, 0, -1), strict=True)]
        exact = []
        for start in found[0].real:
            root = mpmath.mpf(float(start))
            for _ in range(10):
                root -= at(closed, root) / at(slope, root)
            residue = at(top, root) / (root * at(slope, root))
            exact.append(abs(residue * closed[-1] / top[-1]))
    np.testing.assert_allclose(share_in_step(loops, found)[0], [float(e) for e in exact], rtol=1e-10 / gap)


def test_rows_with_and_without_repeated_poles_keep_to_themselves():
    plants = Rational.of([[0.0, 0.0, 1.0]] * 2, [[1.0, 2.0, 0.0], [1.0, 1.0, 0.0]])
    loops = close(plants, Rational.of([[1.0]], [[1.0]]), np.array([0, 1]), np.array([0, 0]))
    share = share_in_step(loops, closed_roots(loops.closed))
    np.testing.assert_allclose(share[0], 1.0, rtol=1e-10)  # 1/(s + 1)²
    np.testing.assert_allclose(share[1], 1.0 / np.sqrt(0.75), rtol=1e-12)  # ζ = 0.5


def test_padding_has_no_share_and_a_pole_at_zero_no_damping():
    loops = loop_with([1.0], [-1.0, -2.0])
    poles = np.array([[-1.0, np.nan]], dtype=complex)
    assert np.isnan(share_in_step(loops, poles)[0, 1])
    assert damping_of(loops, np.array([[0.0, -2.0]], dtype=complex)).tolist() == [[0.0, 1.0]]
