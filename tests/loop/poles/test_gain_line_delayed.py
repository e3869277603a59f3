"""Stable gains with dead time: closed forms, and a sweep judged by the count of roots."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.encirclement import delayed_stable
from synth.loop.poles.gain_line import stable_gain_intervals


def unit_gain_loop(num, den, dead_time):
    plant = Rational.of([num], [den], dead_time)
    return close(plant, Rational.of([[1.0]], [[1.0]]), np.array([0]), np.array([0]))


def lag_limit(theta):
    """1/(s + 1) e^(-θs): tan(ωθ) = -ω in (π/2, π), k = √(1 + ω²)."""
    low, high = np.pi / 2 / theta, np.pi / theta
    for _ in range(200):
        w = 0.5 * (low + high)
        low, high = (w, high) if w * theta + np.arctan(w) < np.pi else (low, w)
    return np.sqrt(1.0 + w * w)


@pytest.mark.parametrize(
    ("num", "den", "theta", "expected"),
    [
        ([1.0], [1.0, 0.0], 1.0, [(0.0, np.pi / 2)]),
        ([1.0], [1.0, 0.0], 0.02, [(0.0, np.pi / 0.04)]),
        ([1.0], [1.0, 1.0], 1.0, [(-1.0, lag_limit(1.0))]),
        ([-1.0], [1.0, 1.0], 0.3, [(-lag_limit(0.3), 1.0)]),
        ([1.0], [1.0], 1.0, [(-1.0, 1.0)]),
        ([1.0], [1.0, -1.0], 1.1, []),  # an unstable lag needs θ below its time constant
        ([1.0], [1.0, 0.0, 0.0], 0.5, []),
    ],
)
def test_stable_gains_in_closed_form(num, den, theta, expected):
    (found,) = stable_gain_intervals(unit_gain_loop(num, den, theta))
    assert [(i.low, i.high) for i in found] == [
        (pytest.approx(low, rel=1e-12, abs=1e-14), pytest.approx(high, rel=1e-12)) for low, high in expected
    ]


@given(st.integers(0, 10**6), st.integers(1, 5), st.floats(0.05, 3.0))
@settings(max_examples=30, deadline=None)
def test_stable_gains_are_those_of_a_sweep(seed, n, theta):
    rng = np.random.default_rng(seed)
    roots = list(-np.exp(rng.normal(size=n % 2)))
    for _ in range(n // 2):
        size, ratio = np.exp(rng.normal()), rng.uniform(-0.1, 1.0)
        roots += list(size * (-ratio + 1j * np.sqrt(1 - ratio**2) * np.array([1, -1])))
    num = rng.normal(size=rng.integers(1, n + 2))
    loops = unit_gain_loop(num, np.real(np.poly(roots)), theta)
    (found,) = stable_gain_intervals(loops)
    sweep = np.concatenate([-np.geomspace(1e2, 1e-3, 150), [0.0], np.geomspace(1e-3, 1e2, 150)])
    rows = loops.rows(np.zeros(len(sweep), dtype=int))
    expected = delayed_stable(replace(rows, numerator=sweep[:, None] * rows.numerator))
    got = np.array([any(k in i for i in found) for k in sweep])
    np.testing.assert_array_equal(got, expected)


@pytest.mark.parametrize(("beyond", "windows"), [(1e-6, 2), (1e-9, 2), (-1e-9, 1)])
def test_a_window_of_gains_that_a_hair_of_phase_opens_is_found(beyond, windows):
    # a light mode beside its zero turns the phase back to the negative axis, `beyond` rad past it or short of
    # it: between the two crossings the loop is stable once more
    mode, zero = np.array([1.0, 0.002, 1.0]), np.array([1.0, 0.0021, 1.0])
    w = np.linspace(1.003, 1.008, 400_001)
    phase = np.angle(np.polyval(zero, 1j * w) / np.polyval(mode, 1j * w)) + np.pi / 2

    def excess(delay):
        return (phase - w * delay).max() - beyond

    delay = brentq(excess, 1.54, 1.56, xtol=1e-15, rtol=1e-15)
    top = 1j * w[np.argmax(phase - w * delay)]
    loops = unit_gain_loop(0.3 * zero, np.polymul(mode, [1.0, 0.0]), delay)
    (found,) = stable_gain_intervals(loops)
    assert len(found) == windows
    if windows == 2:
        there = 1.0 / abs(0.3 * np.polyval(zero, top) / np.polyval(mode, top) / top)
        assert there in found[1]
        assert found[1].high - found[1].low < 1e-3
        gains = np.array([found[1].low - 1e-6, there, found[1].high + 1e-6])
        rows = loops.rows(np.zeros(3, dtype=int))
        verdict = delayed_stable(replace(rows, numerator=gains[:, None] * rows.numerator))
        assert verdict.tolist() == [False, True, False]
