"""Panels, their ladder of lengths, and what is read off a signal."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.linalg import expm

from synth.verify.exponential import ladder
from synth.verify.panels import POINTS, Trace, basis, edges, plan


def trace(signal, start, length):
    start, length = np.asarray(start, dtype=float), np.asarray(length, dtype=float)
    return Trace(start, length, signal(start[:, None] + length[:, None] * POINTS))


RINGING = trace(lambda t: 1 - np.exp(-0.3 * t) * np.cos(2 * t), np.arange(0, 80, 2), np.full(40, 2))


def test_a_polynomial_is_continued_between_nodes_exactly():
    x = np.linspace(0, 1, 41)
    np.testing.assert_allclose(basis(x) @ (POINTS**15 - POINTS**3), x**15 - x**3, atol=2e-14)


def test_the_top_is_where_the_slope_vanishes():
    # tan 2t = -0.3/2 at the first top
    when = 0.5 * (np.pi - np.arctan(0.15))
    value, found = RINGING.top(1.0)
    assert found == pytest.approx(when, rel=1e-10)
    assert value == pytest.approx(1 - np.exp(-0.3 * when) * np.cos(2 * when), rel=1e-13)


def test_a_plateau_is_reached_where_it_begins():
    values = np.repeat([[0.0], [1.0], [1.0]], 16, axis=1)
    steps = Trace(np.array([-2.0, 0.0, 1.0]), np.array([2.0, 1.0, 1.0]), values)
    assert steps.top(1.0) == (pytest.approx(1.0, rel=1e-14), 0.0)
    assert steps.first(0.5) == 0.0
    assert steps.last_outside(1.0, 0.1) == 0.0


def test_passages_solve_their_equation():
    first, last = RINGING.first(0.9), RINGING.last_outside(1.0, 0.02)
    assert np.exp(-0.3 * first) * np.cos(2 * first) == pytest.approx(0.1, rel=1e-8)
    assert abs(np.exp(-0.3 * last) * np.cos(2 * last)) == pytest.approx(0.02, rel=1e-8)
    later = np.linspace(last + 1e-9, 80, 100001)
    assert np.abs(np.exp(-0.3 * later) * np.cos(2 * later)).max() <= 0.02
    assert np.isnan(RINGING.first(2.5))


def test_a_last_exit_just_above_the_band_is_not_passed_over():
    # the summits shrink by 1e-5 each: the last one outside exceeds the band by less than that
    length = 2.2
    start = np.arange(0, 4000 * length, length)
    slow = trace(lambda t: 1 - 0.03 * np.exp(-3.2e-6 * t) * np.cos(2 * t), start, np.full(4000, length))
    band = 0.03 * np.exp(-3.2e-6 * 2000 * np.pi)  # the summit at t = 2000 π, just below its own height
    last = slow.last_outside(1.0, band * (1 - 1e-9))
    assert last == pytest.approx(2000 * np.pi, rel=1e-6)


def test_an_area_counts_both_sides():
    zeros = (np.arange(60) + 0.5) * np.pi / 2
    expected = sum(
        abs(quad(lambda t: np.exp(-0.3 * t) * np.cos(2 * t), a, b)[0])
        for a, b in zip([0, *zeros], zeros, strict=False)
    )
    assert RINGING.area(1.0) == pytest.approx(expected, rel=3e-8)


def test_the_ladder_is_the_exponential_under_a_polynomial():
    a = np.array([[0.0, 1.0, 0.0], [-4.0, -0.3, 1.0], [0.0, 0.0, -30.0]])
    b = np.array([0.0, 0.0, 30.0])
    rungs = ladder(a, b, 0.05, 5)
    assert len(rungs) == 5
    for level, rung in enumerate(rungs):
        h = 0.05 * 2.0**level
        j = 9
        np.testing.assert_allclose(rung.growth[j] + np.eye(3), expm(a * h * POINTS[j]), atol=1e-13)
        v = POINTS**4 - 2 * POINTS + 0.5
        for i in range(3):

            def pushed(s, i=i, h=h, end=h * POINTS[j]):
                return (expm(a * (end - s)) @ b)[i] * ((s / h) ** 4 - 2 * s / h + 0.5)

            driven = quad(pushed, 0, h * POINTS[j], epsabs=1e-13)[0]
            assert rung.driven[j, i] @ v == pytest.approx(driven, abs=1e-12)


def test_slow_modes_keep_their_digits_beside_fast_ones():
    a = np.array([[-1e-9, 1e-9], [0.0, -1e6]])
    rung = ladder(a, None, 1e-6, 30)[-1]
    assert rung.growth[-1, 0, 0] == pytest.approx(np.expm1(-1e-9 * 1e-6 * 2**29), rel=1e-12)


@pytest.mark.parametrize("whole", [None, 64])
def test_panels_join_and_are_short_while_a_mode_lives(whole):
    sizes, decays = np.array([40.0, 3.0, 0.1]), np.array([20.0, 0.5, 0.1])
    base = 1 / 64 if whole else 5 / 40
    stages = plan(sizes, decays, base=base, start=0.0, whole=whole, dead=30.0)
    levels, begins = edges(stages)
    lengths = 1 << levels
    assert begins[0] == 0
    assert (begins[1:] == (begins + lengths)[:-1]).all()
    assert (begins % lengths == 0).all()
    end = (begins[-1] + lengths[-1]) * base
    assert end == 1.0 if whole else end >= 30.0 / 0.1
    for size, decay in zip(sizes, decays, strict=True):
        alive = begins * base * decay < 30.0
        assert (size * lengths[alive] * base <= 5.0 * (1 + 1e-12)).all()
