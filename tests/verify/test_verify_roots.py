"""Poles to 50 digits, and those of the delay equation."""

from __future__ import annotations

from fractions import Fraction

import mpmath as mp
import numpy as np
import pytest

from synth.model import forms
from synth.model.plant import Plant
from synth.verify.roots import _complete, _newton_exact, chain, poles, refined, right_of
from synth.verify.subject import Subject


@pytest.mark.parametrize("seed", range(6))
def test_refined_roots_are_right_to_the_last_digit(seed):
    rng = np.random.default_rng(seed)
    pair = np.exp(rng.normal(0, 4, 3)) * np.exp(1j * rng.uniform(1.6, 3.1, 3))
    coefficients = np.real(np.poly(np.concatenate([pair, pair.conj(), -np.exp(rng.normal(0, 4, 2))])))
    found = refined([Fraction(c) for c in coefficients])
    with mp.workdps(60):
        for root in found:
            value = mp.mpc(complex(root))
            for _ in range(6):  # Newton from the answer: it must not move
                p = q = mp.mpc(0)
                for c in coefficients:
                    p, q = p * value + mp.mpf(float(c)), q * value + p
                value -= p / q
            assert abs(complex(value) - root) <= 4e-16 * abs(root)


def test_a_double_root_and_a_root_at_zero_stay():
    found = np.sort_complex(refined([Fraction(c) for c in (1, 4, 4, 0)]))
    np.testing.assert_allclose(found, [-2, -2, 0], atol=1e-8)


@pytest.mark.parametrize("kl", [0.2, 1 / np.e + 1e-3, 1.0, 1.5])
def test_integrator_with_dead_time_has_lambert_roots(kl):
    form, plant = forms.from_formula("exp(-3*s)/s"), Plant.from_formula("exp(-3*s)/s")
    found = poles(Subject(form, {}, plant, (kl / 3,), (1.0,)))
    expected = [complex(mp.lambertw(-kl, k)) / 3 for k in (-2, -1, 0, 1, 2)]
    for root in expected:
        assert np.min(np.abs(found - root)) < 1e-11


def test_poles_of_a_neutral_loop_lie_along_its_chain():
    form, plant = forms.from_formula("exp(-2*s)"), Plant.from_formula("exp(-2*s)")
    subject = Subject(form, {}, plant, (0.5,), (1.0,))
    found = poles(subject, reach=60.0)
    # 1 + e^(-2s)/2 = 0
    expected = -0.5 * np.log(2.0) + 0.5j * np.pi * np.arange(1, 38, 2)
    np.testing.assert_allclose(sorted(found[found.imag > 0], key=abs)[:19], expected, rtol=1e-12)
    assert chain(subject) == pytest.approx(0.5 * np.log(2.0), rel=1e-15)


def test_every_pole_within_reach_is_found_and_none_twice():
    text = "(s^2+0.1*s+30)*exp(-0.4*s)/((s+1)*(0.1*s^2+0.01*s+2)*(0.01*s+1))"
    form, plant = forms.from_formula(text), Plant.from_formula(text)
    found = poles(Subject(form, {}, plant, (0.02,), (1.0,)), reach=200.0)
    inside = found[np.abs(found) <= 200.0]
    top, bottom = np.array(plant.numerator) * 0.02, np.array(plant.denominator)
    box = np.concatenate([200 * np.exp(1j * np.linspace(0, 2 * np.pi, 200001))])
    value = np.polyval(bottom, box) + np.polyval(top, box) * np.exp(-0.4 * box)
    turns = np.angle(value[1:] / value[:-1]).sum() / (2 * np.pi)
    assert len(inside) == round(float(turns))
    value = np.polyval(bottom, inside) + np.polyval(top, inside) * np.exp(-0.4 * inside)
    assert (np.abs(value) < 1e-9 * np.polyval(np.abs(bottom), np.abs(inside))).all()


def test_poles_right_of_a_line_are_counted():
    # a light mode far above 1/θ, beside a slow pole: none may hide
    text = "exp(-0.5*s)/((s+1)*(1e-4*s^2+1e-4*s+1))"
    form, plant = forms.from_formula(text), Plant.from_formula(text)
    subject = Subject(form, {}, plant, (0.01,), (1.0,))
    found = poles(subject)
    decays = np.sort(-found.real)
    assert 90 < np.abs(found[np.argmax(found.real)]) < 110
    assert right_of(subject, decays[0] * 0.999) == 0
    assert right_of(subject, decays[0] * 1.001) == 2
    between = 0.5 * (decays[2] + decays[3])
    assert right_of(subject, between) == 3


def test_an_unstable_loop_has_poles_right_of_the_axis():
    form, plant = forms.from_formula("exp(-s)/s"), Plant.from_formula("exp(-s)/s")
    assert right_of(Subject(form, {}, plant, (1.5,), (1.0,)), 0.0) == 0
    assert right_of(Subject(form, {}, plant, (1.6,), (1.0,)), 0.0) == 2


def test_more_poles_than_can_be_counted_are_declined():
    form, plant = forms.from_formula("exp(-s)/(s+1)"), Plant.from_formula("exp(-s)/(s+1)")
    assert poles(Subject(form, {}, plant, (0.2,), (1.0,)), reach=1e4) is None


def test_a_delayed_root_in_doubt_is_polished():
    # six lags of one size under a tiny gain: the roots crowd, double precision holds few of their digits
    text = "exp(-1e-3*s)/(s+1)^6"
    form, plant = forms.from_formula(text), Plant.from_formula(text)
    subject = Subject(form, {}, plant, (1e-18,), (1.0,))
    with mp.workdps(60):
        delay, gain = mp.mpf(1e-3), mp.mpf(1e-18)
        exact = mp.findroot(lambda s: (s + 1) ** 6 + gain * mp.exp(-s * delay), mp.mpc(-1, 1e-3))
    start = complex(exact) * 1e-3 * (1 + 1e-5)
    slope = complex(6 * (exact + 1) ** 5) * 1e-15
    assert abs(_newton_exact(subject, start, slope) - complex(exact) * 1e-3) < 1e-9


def test_poles_that_are_not_all_there_are_not_given_out():
    closed = [Fraction(c) for c in (1, 3, 3, 1)]
    assert _complete(np.array([-1.0, -1.0, -1.0]), closed)
    assert not _complete(np.array([-1.0, -1.0, -2.0]), closed)
    assert not _complete(np.array([-1.0, -1.0]), closed)
