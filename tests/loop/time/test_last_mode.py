"""One mode alone: passages, extremes and area beside dense samples, and by hand where the mode is real."""

from itertools import pairwise

import numpy as np
import pytest
from scipy.integrate import quad

from synth.loop.time import last_mode


def modes():
    rng = np.random.default_rng(6)
    pole = -rng.uniform(0.05, 1.0, 30) + 1j * np.where(rng.random(30) < 0.7, rng.uniform(0.2, 5.0, 30), 0.0)
    amplitude = rng.normal(size=30) + 1j * np.where(pole.imag > 0.0, rng.normal(size=30), 0.0)
    return amplitude, pole


def samples(amplitude, pole):
    t = np.linspace(0.0, 12.0 / -pole.real, 40_001)
    return t, (amplitude * np.exp(pole * t)).real


@pytest.mark.parametrize("band", [0.5, 0.05])
def test_last_exit(band):
    amplitude, pole = modes()
    found = last_mode.last_exit(amplitude, pole, np.full(30, band))
    for a, p, got in zip(amplitude, pole, found, strict=True):
        t, wave = samples(a, p)
        outside = np.flatnonzero(np.abs(wave) > band)
        if outside.size == 0:
            assert np.isnan(got)
            continue
        assert t[outside[-1]] - 1e-12 <= got <= t[outside[-1] + 1] + 1e-12
        assert abs((a * np.exp(p * got)).real) == pytest.approx(band, rel=1e-12)


@pytest.mark.parametrize("level", [-0.3, -0.01, 0.0, 0.1])
def test_first_reach(level):
    amplitude, pole = modes()
    found = last_mode.first_reach(amplitude, pole, np.full(30, level))
    for a, p, got in zip(amplitude, pole, found, strict=True):
        t, wave = samples(a, p)
        reached = np.flatnonzero(wave >= level)
        if reached.size == 0:
            assert not got < t[-1]
        elif reached[0] == 0:
            assert got == 0.0
        else:
            assert t[reached[0] - 1] - 1e-12 <= got <= t[reached[0]] + 1e-12


def test_extremes_and_area():
    amplitude, pole = modes()
    top, when, bottom = last_mode.extremes(amplitude, pole)
    area = last_mode.area(amplitude, pole)
    for i, (a, p) in enumerate(zip(amplitude, pole, strict=True)):
        _, wave = samples(a, p)
        assert top[i] == pytest.approx(max(wave.max(), 0.0), abs=1e-4)
        assert bottom[i] == pytest.approx(min(wave.min(), 0.0), abs=1e-4)
        assert when[i] == np.inf or (a * np.exp(p * when[i])).real == pytest.approx(top[i])
        # from zero to zero while e^(Re p t) > 1e-11
        half = np.pi / p.imag if p.imag else 5.0
        edges = np.arange((np.pi / 2.0 - np.angle(a)) / np.pi % 1.0 * half, half + 25.3 / -p.real, half)
        edges = np.append(0.0, edges)
        parts = [quad(lambda s, a=a, p=p: (a * np.exp(p * s)).real, b, e)[0] for b, e in pairwise(edges)]
        assert area[i] == pytest.approx(np.abs(parts).sum(), rel=1e-9)
