"""The poles' stage: statics that are exact, which poles count, and what an unstable loop still has."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.delayed import delayed_poles, further_poles
from synth.loop.poles.stage import counted_poles, pole_stage
from synth.loop.quantities import EVERY_QUANTITY, Measure

POLES_STAGE = tuple(m for m in EVERY_QUANTITY if m.row.stage == "poles")


def loop(plant_num, plant_den, comp_num=(1.0,), comp_den=(1.0,), dead_time=0.0):
    plant, comp = Rational.of([plant_num], [plant_den], dead_time), Rational.of([comp_num], [comp_den])
    return close(plant, comp, np.array([0]), np.array([0]))


def si(loops, stage, quantity):
    """One value of the stage in SI units."""
    measure = Measure(quantity)
    row = measure.row
    return float(
        (stage.values[measure] * loops.time_scale**row.time_power * loops.plant_gain**row.gain_power)[0]
    )


def test_pi_on_a_first_order_plant_by_hand():
    """P = 3/(5s + 1), C = 2(1 + 1/(4s)): Δ = 5s² + 7s + 1.5."""
    loops = loop([3.0], [5.0, 1.0], [8.0, 2.0], [4.0, 0.0])
    stage = pole_stage(loops, POLES_STAGE)
    assert stage.stable.all()
    assert si(loops, stage, "final_value") == 1.0
    assert si(loops, stage, "static_error") == 0.0
    assert si(loops, stage, "velocity_error") == pytest.approx(1.0 / 1.5, rel=1e-15)
    assert si(loops, stage, "disturbance_residue") == 0.0
    assert si(loops, stage, "disturbance_integral") == pytest.approx(4.0 / 2.0, rel=1e-15)  # 1/ki
    slow = (7.0 - np.sqrt(49.0 - 30.0)) / 10.0
    assert si(loops, stage, "decay_rate") == pytest.approx(slow, rel=1e-14)


def test_proportional_loop_by_hand():
    """P = 3/(5s + 1), C = 2: T(0) = 6/7, y(∞) = 3/7 for a unit step of d."""
    loops = loop([3.0], [5.0, 1.0], [2.0])
    stage = pole_stage(loops, POLES_STAGE)
    assert si(loops, stage, "final_value") == pytest.approx(6.0 / 7.0, rel=1e-15)
    assert si(loops, stage, "static_error") == pytest.approx(100.0 / 7.0, rel=1e-15)
    assert si(loops, stage, "velocity_error") == np.inf
    assert si(loops, stage, "disturbance_residue") == pytest.approx(3.0 / 7.0, rel=1e-15)
    assert si(loops, stage, "disturbance_integral") == np.inf
    assert si(loops, stage, "decay_rate") == pytest.approx(7.0 / 5.0, rel=1e-14)


def test_type_two_has_exactly_no_velocity_error_and_a_plant_zero_at_zero_no_residue():
    stage = pole_stage(two := loop([1.0], [1.0, 1.0, 0.0], [2.0, 0.2], [0.1, 1.0, 0.0]), POLES_STAGE)
    assert stage.stable.all()
    assert si(two, stage, "velocity_error") == 0.0
    washout = loop([1.0, 0.0], [1.0, 2.0, 3.0], [2.0])
    stage = pole_stage(washout, POLES_STAGE)
    assert si(washout, stage, "final_value") == 0.0
    assert si(washout, stage, "static_error") == 100.0
    assert si(washout, stage, "velocity_error") == np.inf
    assert si(washout, stage, "disturbance_residue") == 0.0
    assert si(washout, stage, "disturbance_integral") == pytest.approx(1.0 / 3.0, rel=1e-15)


@given(
    st.lists(st.floats(0.05, 20.0), min_size=1, max_size=4),
    st.floats(0.01, 5.0),
    st.floats(0.1, 10.0),
    st.floats(-5.0, 5.0),
)
@settings(max_examples=60, deadline=None)
def test_statics_are_limits_of_the_transfer_functions(lags, gain, reset, time_power):
    """Against S/s and P S/s evaluated straight from P and C at a small s, in any unit of time."""
    unit = 10.0**time_power
    den = np.real(np.poly([-1.0 / (unit * lag) for lag in lags]))
    num = [den[-1] * 2.0]
    loops = loop(num, den, [gain * reset * unit, gain], [reset * unit, 0.0])
    stage = pole_stage(loops, POLES_STAGE)
    if not stage.stable.all():
        return
    s = 1e-9 / unit
    p, c = np.polyval(num, s) / np.polyval(den, s), gain * (1.0 + 1.0 / (reset * unit * s))
    assert si(loops, stage, "velocity_error") == pytest.approx(abs(1.0 / (s * (1.0 + p * c))), rel=1e-5)
    assert si(loops, stage, "disturbance_integral") == pytest.approx(abs(p / (s * (1.0 + p * c))), rel=1e-5)


def test_an_unstable_loop_has_damping_and_decay_alone():
    loops = loop([1.0], [1.0, -1.0, 2.0, 5.0], [0.1])
    stage = pole_stage(loops, POLES_STAGE)
    assert not stage.stable.any()
    assert si(loops, stage, "decay_rate") < 0.0
    assert si(loops, stage, "damping_ratio") < 0.0
    kept = ("decay_rate", "damping_ratio", "natural_frequency")
    absent = [m.quantity for m in POLES_STAGE if m.quantity not in kept]
    for quantity in absent:
        assert np.isnan(si(loops, stage, quantity))


@pytest.mark.parametrize(("direct", "stable"), [(-0.4, True), (-1.0, False), (-2.0, False), (3.0, True)])
def test_one_plus_the_gain_at_infinity_must_be_positive(direct, stable):
    """L = direct (s + 2)/(s + 1): at -2 the polynomial, -s - 3, would pass; any lag makes it unstable."""
    loops = loop([1.0, 2.0], [1.0, 1.0], [direct])
    stage = pole_stage(loops, POLES_STAGE)
    assert stage.stable[0] == stable
    assert np.isfinite(stage.abscissa).all()
    static = loop([1.0], [1.0], [direct])
    assert pole_stage(static, POLES_STAGE).stable[0] == stable


def test_a_loop_without_poles_is_as_good_as_can_be():
    loops = loop([2.0], [1.0], [3.0])
    stage = pole_stage(loops, POLES_STAGE)
    assert si(loops, stage, "decay_rate") == np.inf
    assert si(loops, stage, "final_value") == pytest.approx(6.0 / 7.0)
    counted = stage.count(loops, POLES_STAGE, np.array([np.nan]))
    assert counted[Measure("damping_ratio")][0] == 1.0
    assert np.isnan(counted[Measure("natural_frequency")][0])


def structural_mode_loop(ratio=0.001):
    """Unit loop with poles near -1 and a mode of small share near 100 rad/s."""
    mode = np.array([1.0, 2.0 * ratio * 100.0, 1e4])
    dipole = np.array([1.0, 2.0 * ratio * 100.0, 1.01e4])
    num = np.polymul([1.0], dipole) / 1.01
    return loop(num, np.polymul([1.0, 1.4, 0.0], mode))


def test_a_far_mode_of_small_share_is_not_counted_a_near_or_a_large_one_is():
    loops = structural_mode_loop()
    stage = pole_stage(loops, POLES_STAGE)
    fall = np.array([1.2]) * loops.time_scale
    poles, share, counted = counted_poles(loops, stage.poles, fall)
    far = np.abs(poles[0]) > 50.0 * loops.time_scale[0]
    assert far.sum() == 2
    assert (share[0, far] < 0.02).all()
    assert not counted[0, far].any()
    assert counted[0, ~far].all()
    found = stage.count(loops, POLES_STAGE, fall)
    assert found[Measure("damping_ratio")][0] == pytest.approx(0.7, abs=0.01)
    assert found[Measure("natural_frequency")][0] / loops.time_scale[0] == pytest.approx(1.0, abs=0.01)
    # a fall beyond a fifth of the mode's frequency counts it
    near = stage.count(loops, POLES_STAGE, np.array([21.0]) * loops.time_scale)
    assert near[Measure("damping_ratio")][0] == pytest.approx(0.001, rel=0.2)
    # no fall at all: everything counts
    everything = stage.count(loops, POLES_STAGE, np.array([np.nan]))
    assert everything[Measure("damping_ratio")][0] == pytest.approx(0.001, rel=0.2)
    # the pair with the largest share keeps the natural frequency
    assert everything[Measure("natural_frequency")][0] / loops.time_scale[0] == pytest.approx(1.0, abs=0.01)


def test_a_far_pole_with_two_per_cent_of_the_step_counts_whatever_its_size():
    """T = (0.96/(s+1) + 0.04·100²·.../...): a mode at 100 rad/s carrying 4 % of the step."""
    mode = np.array([1.0, 2.0, 1e4])
    num = np.polyadd(0.96 * mode, 0.04 * 1e4 * np.array([1.0, 1.0]))
    closed = np.polymul([1.0, 1.0], mode)
    loops = loop(num, np.polysub(closed, num))
    stage = pole_stage(loops, POLES_STAGE)
    _, share, counted = counted_poles(loops, stage.poles, np.array([1.0]) * loops.time_scale)
    assert counted.all()
    far = stage.poles[0].imag != 0.0
    np.testing.assert_allclose(share[0, far], 0.04, rtol=1e-3)


def test_below_counts_exactly_the_poles_within():
    loops = structural_mode_loop()
    measures = (*(Measure("damping_ratio", below=limit) for limit in (50.0, 200.0)), Measure("damping_ratio"))
    stage = pole_stage(loops, measures)
    assert stage.values[measures[0]][0] == pytest.approx(0.7, abs=0.01)
    assert stage.values[measures[1]][0] == pytest.approx(0.001, rel=0.2)
    assert np.isnan(stage.values[measures[2]][0])  # waits for the fall of abs(T)
    assert list(stage.count(loops, measures, np.array([1.2]) * loops.time_scale)) == [measures[2]]
    assert pole_stage(loops, (Measure("damping_ratio", below=1e-3),)).values[
        Measure("damping_ratio", below=1e-3)
    ].tolist() == [1.0]


def test_with_no_final_value_every_pole_counts():
    loops = loop([1.0, 0.0], np.polymul([1.0, 2.0, 3.0], [1.0, 0.2, 1e4]), [100.0])
    stage = pole_stage(loops, POLES_STAGE)
    _, _, counted = counted_poles(loops, stage.poles, np.array([0.1]))
    assert counted.all()


def test_a_repeated_real_pole_is_no_oscillation():
    loops = loop([1.0], [1.0, 4.0, 6.0, 4.0, 0.0])  # Δ = (s + 1)^4
    found = pole_stage(loops, POLES_STAGE).count(loops, POLES_STAGE, np.array([np.nan]))
    assert found[Measure("damping_ratio")][0] == 1.0
    assert np.isnan(found[Measure("natural_frequency")][0])


def test_a_gain_beyond_the_number_range_is_an_unstable_loop_and_no_warning():
    plants = Rational.of([[1e300, 1e300]], [[1e-300, 1.0]])
    comps = Rational.of([[1e300]], [[1e-300]])
    stage = pole_stage(close(plants, comps, np.array([0]), np.array([0])), POLES_STAGE)
    assert not stage.stable.any()
    assert not np.isposinf(stage.abscissa).any()


def test_dead_time_statics_do_not_know_the_dead_time():
    """PI on 3 e^(-2s)/(5s + 1): the same limits as without dead time."""
    rational, delayed = (loop([3.0], [5.0, 1.0], [2.4, 0.3], [8.0, 0.0], theta) for theta in (0.0, 2.0))
    stages = [pole_stage(one, POLES_STAGE) for one in (rational, delayed)]
    assert all(stage.stable.all() for stage in stages)
    statics = ("final_value", "static_error", "velocity_error", "disturbance_integral", "disturbance_residue")
    for quantity in statics:
        values = [si(one, stage, quantity) for one, stage in zip((rational, delayed), stages, strict=True)]
        assert values[0] == values[1]


def test_dead_time_round_a_loop_of_nothing_is_the_open_loop():
    for den, stable in (([1.0, 2.0, 1.0], True), ([1.0, 0.0, 0.157], False), ([1.0, -1.0], False)):
        assert pole_stage(loop([0.0], den, [2.0], dead_time=0.5), POLES_STAGE).stable[0] == stable


def test_decay_rate_with_dead_time_takes_in_the_chain():
    """L = 0.4 e^(-2s) (with a cancelled root at -5): the chain at ln 0.4 / θ is the slowest."""
    loops = loop([1.0, 5.0], [1.0, 5.0], [0.4], dead_time=2.0)
    stage = pole_stage(loops, POLES_STAGE)
    assert stage.stable.all()
    assert si(loops, stage, "decay_rate") == pytest.approx(-np.log(0.4) / 2.0, rel=1e-12)


def test_dominant_root_of_an_integrator_with_dead_time():
    """k e^(-s)/s: p + k e^(-p) = 0 has a real root between -1 and 0 for k below 1/e."""
    loops = loop([1.0], [1.0, 0.0], [0.2], dead_time=1.0)
    stage = pole_stage(loops, POLES_STAGE)
    root = -si(loops, stage, "decay_rate")
    assert root + 0.2 * np.exp(-root) == pytest.approx(0.0, abs=1e-14)
    assert -1.0 < root < 0.0


def test_poles_with_dead_time_are_found_where_something_asks_for_them():
    stable, unstable = loop([1.0], [1.0, 0.0], dead_time=0.5), loop([9.0], [1.0, 0.0], dead_time=0.5)
    for loops, verdict in ((stable, True), (unstable, False)):
        whole = pole_stage(loops, ())
        few = pole_stage(loops, (Measure("sensitivity_peak"), Measure("static_error")))
        assert whole.stable[0] == few.stable[0] == verdict
        assert np.isfinite(whole.abscissa[0])
        if verdict:
            assert few.poles.shape == (1, 0)
            assert np.isnan(few.abscissa[0])
        else:
            np.testing.assert_array_equal(few.poles, whole.poles)
            assert few.abscissa[0] == whole.abscissa[0]
    # a count that is asked for after all fetches what it needs
    few = pole_stage(stable, (Measure("sensitivity_peak"),))
    whole = pole_stage(stable, ())
    for fall in (3.0, np.nan):
        asked = (Measure("damping_ratio"), Measure("natural_frequency"))
        late = few.count(stable, asked, np.full(1, fall))
        at_once = whole.count(stable, asked, np.full(1, fall))
        for measure in asked:
            assert late[measure][0] == pytest.approx(at_once[measure][0], rel=1e-12)


def test_poles_further_out_join_the_known_ones():
    loops = loop([0.5, 1.0], [1.0, 0.3, 0.0], dead_time=0.8)
    known = delayed_poles(loops, np.zeros(1))
    for reach in (0.0, 20.0, 90.0):
        wanted = np.full(1, reach) * loops.time_scale
        found = further_poles(loops, known, wanted)[0]
        whole = delayed_poles(loops, wanted)[0]
        found = found[np.isfinite(found)]
        inside = whole[np.abs(whole) <= wanted[0]]
        assert len(found) >= len(inside)
        assert all(np.abs(found - p).min() < 1e-12 * np.abs(p) for p in inside)
        assert all(np.abs(found - p).min() < 1e-12 * np.abs(p) for p in known[0][np.isfinite(known[0])])
        assert (np.abs(found[:, None] - found[None, :]) + np.eye(len(found)) > 1e-9).all()


def test_counting_with_dead_time_reaches_as_far_as_the_rule_says():
    loops = loop([1.0], [1.0, 0.0], [0.6], dead_time=1.0)
    stage = pole_stage(loops, POLES_STAGE)
    near = stage.count(loops, POLES_STAGE, np.array([1.0]) * loops.time_scale)
    far = stage.count(loops, POLES_STAGE, np.array([20.0]) * loops.time_scale)
    damping = Measure("damping_ratio")
    assert far[damping][0] < near[damping][0]  # the chain's ratio falls with frequency
    poles, _, counted = counted_poles(loops, stage.poles, np.array([20.0]) * loops.time_scale)
    size = np.abs(poles[0][counted[0]]) / loops.time_scale[0]
    assert 90.0 < size.max() <= 100.0
    assert counted.sum() == 2 * 16  # one pair in each turn of 2π up to 100 rad/s
