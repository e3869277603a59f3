"""Loops whose margins can be written down."""

from __future__ import annotations

import numpy as np
import pytest

P = ([[1.0]], [[1.0]])  # a compensator of gain 1


def gain(k):
    return ([[k]], [[1.0]])


def test_second_order_servo(measure):
    # L = w0²/(s (s + 2 ζ w0)): T is the canonical second-order system
    z, w0 = 0.3, 7.0
    m = measure(([[w0**2]], [[1.0, 2 * z * w0, 0.0]]), P)
    assert m["crossover"] == pytest.approx(w0 * np.sqrt(np.sqrt(1 + 4 * z**4) - 2 * z**2), rel=1e-12)
    assert m["phase_margin"] == pytest.approx(
        np.degrees(np.arctan(2 * z / np.sqrt(np.sqrt(1 + 4 * z**4) - 2 * z**2))), rel=1e-12
    )
    assert m["bandwidth"] == pytest.approx(
        w0 * np.sqrt(1 - 2 * z**2 + np.sqrt(2 - 4 * z**2 + 4 * z**4)), rel=1e-12
    )
    assert m["highest_fall"] == m["bandwidth"]
    assert m["complementary_peak"] == pytest.approx(1 / (2 * z * np.sqrt(1 - z**2)), rel=1e-12)
    assert m["gain_margin"] == m["gain_margin_up"] == m["gain_margin_down"] == np.inf
    assert m["delay_margin"] == pytest.approx(np.radians(m["phase_margin"]) / m["crossover"], rel=1e-12)


def test_three_lags(measure):
    # L = k/(s + 1)³ reaches -180° at √3 with |L| = k/8
    m = measure(([[2.0]], [[1.0, 3.0, 3.0, 1.0]]), P)
    assert m["gain_margin"] == pytest.approx(20 * np.log10(4.0), rel=1e-12)
    crossover = np.sqrt(2.0 ** (2 / 3) - 1)
    assert m["crossover"] == pytest.approx(crossover, rel=1e-12)
    assert m["phase_margin"] == pytest.approx(180 - 3 * np.degrees(np.arctan(crossover)), rel=1e-12)
    assert m["noise_gain"] == pytest.approx(m["sensitivity_peak"], rel=1e-12)  # C = 1


def test_first_order_lag_of_gain_below_one_has_no_crossover(measure):
    m = measure(([[0.5]], [[1.0, 1.0]]), P)
    assert np.isnan(m["crossover"])
    assert m["phase_margin"] == m["gain_margin"] == m["delay_margin"] == np.inf
    assert m["bandwidth"] == pytest.approx(1.5, rel=1e-14)
    assert m["sensitivity_peak"] == pytest.approx(1.0, abs=1e-14)  # a limit: ω -> ∞
    assert m["complementary_peak"] == pytest.approx(1 / 3, rel=1e-14)  # a limit: ω = 0


def test_unit_gain_at_zero_frequency_is_a_crossover(measure):
    m = measure(([[1.0]], [[1.0, 1.0]]), P)
    assert m["crossover"] == 0.0
    assert m["phase_margin"] == 180.0
    assert m["delay_margin"] == np.inf


@pytest.mark.parametrize(("k", "ms", "mt"), [(0.5, 2 / 3, 1 / 3), (4.0, 0.2, 0.8), (-0.25, 4 / 3, 1 / 3)])
def test_pure_gain(measure, k, ms, mt):
    m = measure(([[k]], [[1.0]]), P)
    assert m["sensitivity_peak"] == pytest.approx(ms, rel=1e-15)
    assert m["complementary_peak"] == pytest.approx(mt, rel=1e-15)
    assert m["noise_gain"] == pytest.approx(ms, rel=1e-15)
    assert m["bandwidth"] == np.inf
    assert np.isnan(m["highest_fall"])
    assert np.isnan(m["crossover"])
    assert m["delay_margin"] == (0.0 if abs(k) >= 1 else np.inf)
    assert m["gain_margin"] == (pytest.approx(20 * np.log10(4.0)) if k < 0 else np.inf)


def test_biproper_loop_counts_the_limit_at_infinity(measure):
    # L = -0.5 (s - 1)/(s + 2): L(0) = 0.25, L(∞) = -0.5: the only negative real value is the limit
    m = measure(([[-0.5, 0.5]], [[1.0, 2.0]]), P)
    assert m["gain_margin_up"] == pytest.approx(20 * np.log10(2.0), rel=1e-12)
    assert m["gain_margin_down"] == np.inf
    assert m["sensitivity_peak"] == pytest.approx(2.0, rel=1e-12)
    assert m["complementary_peak"] == pytest.approx(1.0, rel=1e-12)


def test_unstable_plant_has_a_downward_gain_margin(measure):
    # k/(s - 1): stable for k > 1; L(0) = -k
    m = measure(([[3.0]], [[1.0, -1.0]]), P)
    assert m["gain_margin_down"] == pytest.approx(20 * np.log10(3.0), rel=1e-12)
    assert m["gain_margin_up"] == np.inf
    assert m["gain_margin"] == m["gain_margin_down"]
    assert m["crossover"] == pytest.approx(np.sqrt(8.0), rel=1e-12)
    assert m["phase_margin"] == pytest.approx(np.degrees(np.arctan(np.sqrt(8.0))), rel=1e-12)
    assert m["complementary_peak"] == pytest.approx(1.5, rel=1e-12)


def test_conditionally_stable_loop_has_both(measure):
    # k (s + 1)²/s³: L is real at ω = 1 (L = -k (1 - 1 + 2j)/(-j) = ... |L(j)| = 2k): stable for k > 1/2
    # with a further lag (1 + s/20)²: an upper limit too. The limits come from Routh's array by bisection.
    den = np.polymul([1.0, 0, 0, 0], np.polymul([0.05, 1.0], [0.05, 1.0]))

    def stable(k):
        return (np.roots(np.polyadd(den, k * np.array([1.0, 2.0, 1.0]))).real < 0).all()

    def edge(inside, outside):
        for _ in range(80):
            middle = np.sqrt(inside * outside)
            inside, outside = (middle, outside) if stable(middle) else (inside, middle)
        return inside

    m = measure(([[1.0, 2.0, 1.0]], [den.tolist()]), gain(3.0))
    assert m["gain_margin_up"] == pytest.approx(20 * np.log10(edge(3.0, 1e3) / 3), abs=1e-9)
    assert m["gain_margin_down"] == pytest.approx(20 * np.log10(3 / edge(3.0, 1e-3)), abs=1e-9)
    assert m["gain_margin"] == min(m["gain_margin_up"], m["gain_margin_down"])


def test_reverse_acting_loop_is_the_same_loop(measure):
    direct = measure(([[2.0]], [[1.0, 3.0, 1.0]]), ([[1.0, 1.0]], [[1.0, 0.0]]))
    reverse = measure(([[-2.0]], [[1.0, 3.0, 1.0]]), ([[-1.0, -1.0]], [[1.0, 0.0]]))
    assert direct == reverse


def test_no_final_value_no_bandwidth(measure):
    # a washout in the compensator: T(0) = 0
    m = measure(([[1.0]], [[1.0, 1.0]]), ([[2.0, 0.0]], [[1.0, 0.1]]))
    assert np.isnan(m["bandwidth"])
    assert np.isnan(m["highest_fall"])
    assert m["complementary_peak"] > 0.5


def test_two_falls_are_told_apart(measure):
    # a light mode beyond the bandwidth lifts |T| above the level again
    m = measure(([[1.0]], [np.polymul([1.0, 0.0], [0.01, 0.002, 1.0]).tolist()]), gain(0.15))
    w = np.linspace(0.05, 12.0, 400001)
    loop = 0.15 / (1j * w * (0.01 * (1j * w) ** 2 + 0.002j * w + 1))
    above = np.abs(loop / (1 + loop)) > 1 / np.sqrt(2)
    falls = w[np.flatnonzero(above[:-1] & ~above[1:])]
    assert len(falls) == 2
    assert m["bandwidth"] == pytest.approx(falls[0], abs=1e-4)
    assert m["highest_fall"] == pytest.approx(falls[1], abs=1e-4)


@pytest.mark.parametrize("unit", [1e-9, 1e-3, 1e6])
def test_units_of_time_and_gain_change_nothing(measure, unit):
    def loop(t, g):
        plant = ([[g * 3.0]], [[t**3, 2.5 * t**2, t, 0.0]])
        return measure(plant, ([[0.2 * t / g, 0.3 / g]], [[0.1 * t, 1.0]]))

    base, scaled = loop(1.0, 1.0), loop(unit, 1e5)
    for key in ("phase_margin", "gain_margin", "sensitivity_peak", "complementary_peak"):
        assert scaled[key] == pytest.approx(base[key], rel=1e-10)
    for key in ("bandwidth", "crossover"):
        assert scaled[key] * unit == pytest.approx(base[key], rel=1e-11)
    assert scaled["delay_margin"] / unit == pytest.approx(base["delay_margin"], rel=1e-10)
    assert scaled["noise_gain"] * 1e5 == pytest.approx(base["noise_gain"], rel=1e-11)


# ----------------------------------------------------------------------------------------------------------
# dead time


@pytest.mark.parametrize(("k", "theta"), [(0.5, 1.0), (1.2, 0.3), (2e-5, 6e3), (3e6, 2e-7)])
def test_integrator_with_dead_time(measure, k, theta):
    m = measure(([[k]], [[1.0, 0.0]]), P, theta)
    assert m["crossover"] == pytest.approx(k, rel=1e-12)
    assert m["phase_margin"] == pytest.approx(90 - np.degrees(k * theta), abs=1e-10)
    assert m["gain_margin"] == pytest.approx(20 * np.log10(np.pi / 2 / (k * theta)), abs=1e-9)
    assert m["delay_margin"] == pytest.approx(np.pi / 2 / k - theta, rel=1e-9)


def test_gain_with_dead_time_is_ruled_by_its_limits(measure):
    m = measure(([[0.4]], [[1.0]]), P, 2.0)
    assert m["sensitivity_peak"] == pytest.approx(1 / 0.6, rel=1e-14)
    assert m["complementary_peak"] == pytest.approx(0.4 / 0.6, rel=1e-14)
    assert m["noise_gain"] == pytest.approx(1 / 0.6, rel=1e-14)
    assert m["gain_margin"] == pytest.approx(-20 * np.log10(0.4), rel=1e-14)
    assert m["phase_margin"] == m["delay_margin"] == np.inf
    # |T(0)|/√2 = 0.2020 lies below the smallest |T| = 0.4/1.4: it never falls through
    assert m["bandwidth"] == np.inf


def test_falls_that_recur_for_ever_have_no_highest(measure):
    # T(0) = 0.9; |L(∞)| = 0.5 swings |T| between 1/3 and 1
    m = measure(([[0.5, 9.0]], [[1.0, 1.0]]), P, 0.02)
    assert m["highest_fall"] == np.inf
    assert 0 < m["bandwidth"] < np.inf


def test_lag_with_dead_time(measure):
    # L = e^(-s) (s + 1)/(s (s + 1)): the zero sits on the pole, L = e^(-s)/s; Ms where d|1 + L|/dω = 0
    m = measure(([[1.0]], [[1.0, 1.0]]), ([[0.5, 0.5]], [[1.0, 0.0]]), 1.0)
    w = np.linspace(0.9, 1.8, 2_000_001)
    assert m["sensitivity_peak"] == pytest.approx(
        np.max(1 / np.abs(1 + 0.5 * np.exp(-1j * w) / (1j * w))), rel=1e-11
    )
    assert m["phase_margin"] == pytest.approx(90 - np.degrees(0.5), abs=1e-10)


def test_only_what_is_wanted_is_returned(measure):
    assert set(measure(([[1.0]], [[1.0, 1.0]]), P, keys={"crossover", "overshoot"})) == {"crossover"}
    assert measure(([[1.0]], [[1.0, 1.0]]), P, keys={"overshoot"}) == {}


@pytest.mark.parametrize("n", [13, 20, 40, 60])
def test_long_chains_of_equal_lags(measure, n):
    k = 1.05
    m = measure(([[1.0]], [np.poly(-np.ones(n)).tolist()]), gain(k))
    crossover = np.sqrt(k ** (2 / n) - 1)
    assert m["crossover"] == pytest.approx(crossover, rel=1e-10)
    assert m["gain_margin"] == pytest.approx(-20 * np.log10(k * np.cos(np.pi / n) ** n), abs=1e-9)
    assert m["phase_margin"] == pytest.approx(180 - n * np.degrees(np.arctan(crossover)), abs=1e-8)
    w = np.linspace(0, 3 * np.tan(np.pi / n), 200_001)
    assert m["sensitivity_peak"] == pytest.approx(np.max(1 / np.abs(1 + k / (1 + 1j * w) ** n)), rel=1e-6)
