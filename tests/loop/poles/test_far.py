"""Poles of loops with dead time farther out than a list can hold: Lambert's function, a light resonance, no
end."""

import mpmath
import numpy as np
import pytest
from scipy.special import lambertw

from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import evaluate
from synth.loop.poles.delayed import FARTHEST, delayed_poles
from synth.loop.poles.far import far_damping
from synth.loop.quantities import Measure


def damping(num, den, delay, below=None):
    one = Rational.of([[1.0]], [[1.0]])
    measure = Measure("damping_ratio", below=below)
    return float(evaluate(Rational.of(num, den, delay), one, measures=(measure,)).values[0, 0, 0])


def lambert(gain, pole, delay, below):
    turns = int(below * delay / (2.0 * np.pi)) + 3
    s = lambertw(-gain * delay * np.exp(pole * delay), np.arange(-turns, turns + 1)) / delay - pole
    s = s[np.abs(s) <= below]
    return float((-s.real / np.abs(s)).min())


@pytest.mark.parametrize("turns", [63.0, 70.0, 150.0, 1000.0, 30000.0])
def test_first_order_far_poles_are_lamberts(turns):
    # s + 1 + 1/2 e^(-0.1 s): the ratio is ln(2 abs(p)) / (θ abs(p)) or so
    below = 2.0 * np.pi * turns / 0.1
    exact = lambert(0.5, 1.0, 0.1, below)
    assert damping([0.5], [1.0, 1.0], 0.1, below) == pytest.approx(exact, rel=1e-9)


def test_the_usual_rule_counts_beyond_the_listed_poles():
    # a lag of 1/400 of the dead time: abs(T) falls through far out, and the rule reaches five times that
    gain, pole, delay = 0.9 * 400.0, 400.0, 1.0
    measures = (Measure("damping_ratio"), Measure("bandwidth"))
    plant = Rational.of([gain], [1.0, pole], delay)
    found = evaluate(plant, Rational.of([[1.0]], [[1.0]]), measures=measures)
    assert bool(found.stable[0, 0])
    w = np.linspace(1e-3, 3000.0, 3_000_001)
    loop = gain / (1j * w + pole) * np.exp(-1j * w * delay)
    above = np.abs(loop / (1.0 + loop)) > 0.9 / 1.9 / np.sqrt(2.0)
    fall = w[np.flatnonzero(above)[-1]]
    assert 5.0 * fall * delay > 3.0 * FARTHEST
    # e^(400) is beyond what lambertw may be given: every turn of the chain by s = ln(-k/(s + a)) + 2πjk
    turn = 2j * np.pi * np.arange(0, int(fall) + 3)
    s = turn
    for _ in range(60):
        s = np.log(-gain / (s + pole)) + turn
    s = s[np.abs(s) <= 5.0 * fall]
    assert found.values[0, 0, 0] == pytest.approx(float((-s.real / np.abs(s)).min()), rel=1e-6)


def test_a_light_resonance_far_out_holds_the_least_damped_pole():
    # a resonance at 900 / θ of damping 1e-3, which lifts the chain towards the axis there
    w, z, delay = 900.0, 1e-3, 1.0
    num, den = [0.0, 0.0, 0.2 * w * w * 4.0 * z], np.polymul([1.0, 2 * z * w, w * w], [1.0 / w, 1.0])
    loops_below = 1500.0
    value = damping(num, den, delay, loops_below)
    with mpmath.workdps(30):

        def characteristic(s):
            top = sum(mpmath.mpf(float(c)) * s**k for k, c in enumerate(num[::-1]))
            bottom = sum(mpmath.mpf(float(c)) * s**k for k, c in enumerate(den[::-1]))
            return bottom + top * mpmath.exp(-s * delay)

        least = 1.0
        for seed in np.arange(895.0, 905.0, 0.25):
            for depth in (0.1, 0.5, 1.0, 3.0):
                try:
                    root = complex(mpmath.findroot(characteristic, mpmath.mpc(-depth, seed), tol=1e-18))
                except (ValueError, ZeroDivisionError):
                    continue
                least = min(least, -root.real / abs(root))
    assert value == pytest.approx(least, rel=1e-6)


def test_far_damping_is_that_of_the_listed_poles():
    rng = np.random.default_rng(3)
    den = np.c_[np.ones(8), rng.uniform(0.05, 2.0, 8), rng.uniform(0.5, 2.0, 8)]
    plant = Rational.of(rng.normal(size=(8, 2)) * 0.2, den, 10.0 ** rng.uniform(0.0, 2.0, 8))
    rows = np.arange(8)
    loops = close(plant, Rational.of([[1.0]], [[1.0]]), rows, np.zeros(8, dtype=int))
    first, reach = 200.0 / loops.dead_time, 390.0 / loops.dead_time
    poles = delayed_poles(loops, reach)
    with np.errstate(invalid="ignore"):
        inside = (np.abs(poles) > first[:, None]) & (np.abs(poles) <= reach[:, None])
        listed = np.where(inside, -poles.real / np.abs(poles), np.inf).min(axis=1)
    np.testing.assert_allclose(far_damping(loops, first, reach), listed, rtol=1e-9)


@pytest.mark.parametrize(
    ("num", "den"),
    [
        ([0.5], [1.0]),  # T is e^(-s) over 1 + 0.5 e^(-s): falls for ever
        ([0.2, 0.0], [1.0, 1.0]),  # T(0) = 0, with a direct path
        ([0.2, 0.0], [1.0, 1.0, 1.0]),  # T(0) = 0, without one
        ([0.9, 0.1], [1.0, 1.0]),  # abs(T) is least at 0
    ],
)
def test_where_all_of_infinitely_many_poles_count_their_ratios_come_as_near_to_zero_as_one_likes(num, den):
    assert damping(num, den, 1.0) == 0.0


def test_without_feedback_there_is_no_chain():
    assert damping([0.0], [1.0, 1.0], 1.0) == 1.0
