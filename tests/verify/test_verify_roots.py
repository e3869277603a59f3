"""Poles to 50 digits, and those of the delay equation."""

from __future__ import annotations

from fractions import Fraction

import mpmath as mp
import numpy as np
import pytest

from synth.model import forms
from synth.model.plant import Plant
from synth.verify.roots import poles, refined
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


def test_a_neutral_loop_is_declined():
    form, plant = forms.from_formula("exp(-s)"), Plant.from_formula("exp(-s)")
    assert poles(Subject(form, {}, plant, (0.2, 0.5), (1.0, 0.0))) is None
