"""Branches, segments and the gain line: closed forms, laws, and stable gains against a sweep."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.gain_intervals import Interval
from synth.loop.poles.gain_line import axis_crossings, stable_gain_intervals
from synth.loop.poles.locus import (
    asymptotes,
    branches_of,
    break_points,
    departure_angles,
    gains_at_damping,
    real_segments,
    root_locus,
)
from synth.loop.poles.roots import routh_stable


def unit_gain_loop(num, den):
    return close(Rational.of([num], [den]), Rational.of([[1.0]], [[1.0]]), np.array([0]), np.array([0]))


def intervals(num, den):
    (found,) = stable_gain_intervals(unit_gain_loop(num, den))
    return found


@pytest.mark.parametrize(
    ("num", "den", "expected"),
    [
        ([1.0], [1.0, 3.0, 2.0, 0.0], [(0.0, 6.0)]),  # 1/(s (s + 1)(s + 2))
        ([1.0], [1.0, 1.0], [(-1.0, np.inf)]),
        ([-1.0], [1.0, 1.0], [(-np.inf, 1.0)]),  # reverse acting
        ([1.0], [1.0, -1.0], [(1.0, np.inf)]),
        ([1.0], [1.0, 0.0, 0.0], []),
        ([1.0], [1.0, 0.0, 1.0], []),  # no gain damps it
        ([1.0, 0.0], [1.0, 0.0, 1.0], [(0.0, np.inf)]),
        ([2.0], [1.0], [(-0.5, np.inf)]),
        ([-1.0, 1.0], [1.0, 1.0], [(-1.0, 1.0)]),  # pole through infinity at 1, through 0 at -1
        ([1.0], [1.0, 3.0, 3.0, 1.0], [(-1.0, 8.0)]),
    ],
)
def test_stable_gains_in_closed_form(num, den, expected):
    found = intervals(num, den)
    assert len(found) == len(expected)
    for interval, (low, high) in zip(found, expected, strict=True):
        assert interval.low == pytest.approx(low, rel=1e-12, abs=1e-14)
        assert interval.high == pytest.approx(high, rel=1e-12, abs=1e-14)


def test_conditionally_stable_plant_has_two_intervals():
    found = intervals([1.0, 2.0, 4.0], np.polymul([1.0, 4.0, 0.0], np.polymul([1.0, 6.0], [1.0, 1.4, 1.0])))
    assert [(round(i.low, 1), round(i.high, 1)) for i in found] == [(0.0, 15.6), (67.5, 163.6)]
    assert 10.0 in found[0]
    assert 30.0 not in found[0]


def test_a_touch_of_the_axis_parts_the_interval_exactly_there():
    """Built so that at k = 1 the loop is (s² + 1)(s + 1), the poles moving along the axis there."""
    closed = np.polymul([1.0, 0.0, 1.0], [1.0, 1.0])
    direction = np.array([0.0, 1.0, -2.0, 1.0])
    found = intervals(direction, closed - direction)
    gains = [c.gain for c in axis_crossings(direction, closed - direction) if 0.5 < c.frequency < 2.0]
    assert any(gain == pytest.approx(1.0, abs=1e-9) for gain in gains)
    for k in (0.9, 1.1):
        stable = routh_stable((closed + (k - 1.0) * direction)[None, :])[0]
        assert any(k in i for i in found) == stable


@given(st.integers(0, 10**6), st.integers(2, 6))
@settings(max_examples=40, deadline=None)
def test_stable_gains_are_those_of_a_sweep(seed, n):
    rng = np.random.default_rng(seed)
    signs = rng.choice([1.0, 1.0, -1.0], n + 1)
    den = np.append(1.0, np.cumprod(np.exp(rng.normal(scale=0.7, size=n)))) * signs
    den[0] = 1.0
    num = rng.normal(size=rng.integers(1, n + 2))
    found = intervals(num, den)
    sweep = np.concatenate([-np.geomspace(1e3, 1e-3, 200), np.geomspace(1e-3, 1e3, 200)])
    padded = np.pad(num, (n + 1 - len(num), 0))
    closed = den + sweep[:, None] * padded
    expected = routh_stable(closed) & (closed[:, 0] > 0.0)
    got = np.array([any(k in i for i in found) for k in sweep])
    np.testing.assert_array_equal(got, expected)


def test_many_loops_at_once_give_each_its_own():
    plants = Rational.of([[1.0], [1.0], [1.0]], [[1.0, 1.0], [1.0, -1.0], [2.0, 1.0]])
    loops = close(plants, Rational.of([[1.0]], [[1.0]]), np.arange(3), np.zeros(3, dtype=int))
    assert stable_gain_intervals(loops) == [
        (Interval(-1.0, np.inf),),
        (Interval(1.0, np.inf),),
        (Interval(-1.0, np.inf),),
    ]


@given(st.integers(0, 10**6))
@settings(max_examples=15, deadline=None)
def test_every_point_of_a_branch_is_a_root_and_steps_are_short(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 6))
    den = np.real(np.poly(-np.exp(rng.normal(size=n))))
    num = np.atleast_1d(np.real(np.poly(-np.exp(rng.normal(size=rng.integers(0, n))))))
    locus = root_locus(num, den)
    closed = den + locus.gains[:, None] * np.pad(num, (n + 1 - len(num), 0))
    for row, roots in zip(closed, locus.branches.T, strict=True):
        rounding = np.polyval(np.abs(row), np.abs(roots))
        assert (np.abs(np.polyval(row, roots)) <= 1e-12 * rounding).all()
    size = np.maximum(np.quantile(np.abs(locus.branches), 0.75), np.abs(locus.branches[:, 1:]))
    step = np.abs(np.diff(locus.branches, axis=1)) / size
    assert np.quantile(step, 0.99) < 0.05


def test_branches_of_the_circle():
    """k (s + 4)/(s (s + 2)): between its breaks the complex part is the circle round -4 with radius √8."""
    locus = root_locus(np.array([1.0, 4.0]), np.array([1.0, 2.0, 0.0]))
    off_axis = np.abs(locus.branches.imag) > 1e-6
    assert off_axis.sum() > 40
    np.testing.assert_allclose(np.abs(locus.branches[off_axis] + 4.0), np.sqrt(8.0), rtol=1e-9)
    assert [b.point.real for b in locus.breaks] == pytest.approx([-4 + 8**0.5, -4 - 8**0.5])
    assert {b.gain for b in locus.breaks} <= set(locus.gains.tolist())
    # one continuous branch each: from a pole to the zero or away to the left
    ends = sorted(locus.branches[:, -1].real)
    assert ends[1] == pytest.approx(-4.0, abs=0.2)
    assert locus.segments == ((-np.inf, -4.0), (-2.0, 0.0))


def test_branches_keep_apart_where_two_pass_close_by():
    """A notch pair beside a mode: branches that nearly touch are followed, not exchanged."""
    num = np.polymul([1.0, 0.02, 1.0], [1.0, 2.0])
    den = np.polymul([1.0, 0.02, 1.05], [1.0, 0.5, 0.0])
    locus = root_locus(num, den)
    mode = locus.branches[np.argmin(np.abs(locus.branches[:, 0] - 1.0247j))]
    assert np.abs(mode - 1j).max() < 0.2
    assert abs(mode[-1] - (-0.01 + 1j)) < 0.01


def test_complementary_locus_and_its_asymptotes():
    num, den = np.array([1.0]), np.array([1.0, 3.0, 2.0, 0.0])
    assert real_segments(num, den) == ((-np.inf, -2.0), (-1.0, 0.0))
    assert real_segments(num, den, sign=-1) == ((-2.0, -1.0), (0.0, np.inf))
    assert asymptotes(num, den).angles == (-60.0, 60.0, 180.0)
    assert asymptotes(num, den, sign=-1).angles == (-120.0, 0.0, 120.0)
    locus = root_locus(num, den, sign=-1, furthest=5.0)
    assert locus.gains[-1] == -5.0
    assert locus.branches[:, -1].real.max() > 0.9


def test_a_triple_break_is_one_break():
    """k (s + 1)/(s² (s + 9)): three branches meet at -3 with gain 27."""
    (only,) = [b for b in break_points(np.array([1.0, 1.0]), np.array([1.0, 9.0, 0.0, 0.0])) if b.gain > 0.0]
    assert only.point == pytest.approx(-3.0, abs=1e-6)
    assert only.gain == pytest.approx(27.0, rel=1e-9)


def test_complex_breaks_are_found():
    """1/(s (s + 4)(s² + 4s + 20)): breaks at -2 and at -2 ± 2.45j (k = 64 and 100)."""
    breaks = break_points(np.array([1.0]), np.polymul([1.0, 4.0, 0.0], [1.0, 4.0, 20.0]))
    found = sorted(breaks, key=lambda b: b.gain)
    assert [(b.point.real, b.gain) for b in found] == [
        (pytest.approx(-2.0), pytest.approx(64.0)),
        (pytest.approx(-2.0), pytest.approx(100.0)),
    ]
    assert found[1].point.imag == pytest.approx(np.sqrt(6.0))


def test_departure_from_a_double_pole():
    assert departure_angles(np.array([1.0]), np.array([1.0, 0.0, 0.0]), 0.0) == (-90.0, 90.0)
    assert departure_angles(np.array([1.0]), np.array([1.0, 0.0, 0.0]), 0.0, sign=-1) == (0.0, 180.0)


@given(st.floats(0.05, 0.95), st.floats(0.1, 10.0))
@settings(max_examples=30, deadline=None)
def test_gain_at_a_damping_ratio_in_closed_form(ratio, lag):
    """1/(s (lag s + 1)): ζ = 1/(2 √(k lag))."""
    found = gains_at_damping(np.array([1.0]), np.array([lag, 1.0, 0.0]), ratio)
    ((pole, gain),) = [pair for pair in found if pair[1] > 0.0]
    assert gain == pytest.approx(1.0 / (4.0 * ratio**2 * lag), rel=1e-9)
    assert -pole.real / abs(pole) == pytest.approx(ratio, rel=1e-9)


def test_any_parameter_can_move():
    """A zero time T in s² + (1 + T) s + 4: double pole at T = 3, then two real ones."""
    values, branches = branches_of(
        lambda t: np.stack([np.ones_like(t), 1.0 + t, np.full_like(t, 4.0)], axis=1),
        np.linspace(0.0, 6.0, 13),
    )
    assert len(values) > 13
    assert branches.shape == (2, len(values))
    real = values > 3.0
    np.testing.assert_array_equal(branches[:, real].imag, 0.0)
    np.testing.assert_allclose(np.prod(branches, axis=0), 4.0, rtol=1e-12)


def test_a_loop_without_poles_has_an_empty_locus():
    locus = root_locus(np.array([1.0]), np.array([1.0]))
    assert locus.branches.shape[0] == 0
    with pytest.raises(ValueError, match="proper"):
        root_locus(np.array([1.0, 0.0]), np.array([1.0]))
