"""Last exits and suprema with dead time beside a dense march of another kind (synth.verify): random loops."""

import numpy as np
import pytest
from scipy.signal import step

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure
from synth.model import forms
from synth.model.plant import Plant
from synth.verify import second_opinion

MEASURES = (
    Measure("overshoot"),
    Measure("undershoot"),
    Measure("settling_time"),
    Measure("settling_time", band=0.05),
    Measure("settling_time", band=0.005),
    Measure("control_peak"),
    Measure("disturbance_peak"),
    Measure("disturbance_area"),
    Measure("sensitivity_peak"),
    Measure("complementary_peak"),
    Measure("noise_gain"),
)


def random_pair(rng):
    """A plant with dead time, some with a light mode, a zero or an integrator, under a PI or PID."""
    poles = -np.exp(rng.normal(scale=0.7, size=rng.integers(1, 4))).astype(complex)
    if rng.random() < 0.4:
        size, ratio = np.exp(rng.normal(scale=0.7)), rng.uniform(0.03, 0.6)
        poles = np.append(poles[:2], size * (-ratio + np.sqrt(1.0 - ratio**2) * np.array([1j, -1j])))
    below = np.real(np.poly(poles))
    above = [below[-1]] if rng.random() < 0.6 else [below[-1] * rng.uniform(-0.5, 1.0), below[-1]]
    if rng.random() < 0.2:
        below = np.append(below, 0.0)
    theta = float(np.exp(rng.uniform(np.log(0.03), np.log(5.0))))
    reset, gain = (
        np.exp(rng.normal(scale=0.7)) * (1.0 + theta),
        np.exp(rng.uniform(np.log(0.02), np.log(3.0))),
    )
    num, den = [gain * reset, gain], [reset, 0.0]
    if rng.random() < 0.5:
        rate = reset * rng.uniform(0.05, 0.4)
        num, den = np.polymul(num, [rate, 1.0]), np.polymul(den, [rate / rng.uniform(3.0, 20.0), 1.0])
    return above, below, theta, num, den


def differences(seed, rows):
    """Largest differences on `rows` stable loops that are not too long to march, by measure; and details."""
    rng = np.random.default_rng(seed)
    worst, details, seen = {m: 0.0 for m in MEASURES}, [], 0
    while seen < rows:
        above, below, theta, num, den = random_pair(rng)
        found = evaluate(Rational.of([above], [below], theta), Rational.of([num], [den]), measures=MEASURES)
        if not found.stable[0, 0] or not 0.02 < -found.abscissa[0, 0] * max(theta, 1.0):
            continue
        above, below = tuple(float(v) for v in above), tuple(float(v) for v in below)
        form = forms.from_coefficients(above, below, theta)
        plant = Plant.from_coefficients(above, below, theta)
        assert not found.approximate.any()
        seen += 1
        for i, measure in enumerate(MEASURES):
            value = found.values[0, 0, i : i + 1]
            opinion = second_opinion(form, {}, plant, (num, den), (measure,), value)
            worst[measure] = max(worst[measure], opinion.largest_relative_difference)
            if not opinion.agrees:
                details.append((seed, seen, *opinion.details))
    return worst, details


@pytest.mark.parametrize("seed", range(3))
def test_nothing_is_missed(seed):
    worst, details = differences(seed, 8)
    assert not details
    assert max(worst.values()) < 1e-4


def test_an_undershoot_that_lies_on_a_jump():
    # a lag with a direct path under a filtered PID: y falls to its least value in a jump at 2 θ and rises
    above, below, theta = [0.6534724708096705, 0.7446870649221047], [1.0, 0.7446870649221047], 0.0457356
    num, den = [0.00989068, 0.07371324, 0.10897028], [0.01439329, 0.49195367, 0.0]
    found = evaluate(
        Rational.of([above], [below], theta), Rational.of([num], [den]), measures=(Measure("undershoot"),)
    )
    # until 2 θ y is the open loop's step response w; there it jumps down by L(∞)²
    gain = above[0] * num[0] / den[0]
    open_loop = (np.polymul(above, num), np.polymul(below, den))
    _, w = step(open_loop, T=np.linspace(0.0, theta, 2001))
    assert found.values[0, 0, 0] == pytest.approx(-100.0 * (w[-1] - gain**2), rel=1e-6)
