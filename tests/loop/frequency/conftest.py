"""Loops to test on, and the way from a plant and a compensator to frequency quantities in SI."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.loop.closed_loop import Loops, Rational, close
from synth.loop.frequency.stage import KEYS, frequency_stage
from synth.loop.quantities import QUANTITIES


def _poles(loops: Loops) -> np.ndarray:
    return np.array([np.roots(row) for row in loops.closed]).reshape(len(loops), -1)


def _measure(plant, compensator, delay=0.0, keys=KEYS) -> dict[str, float]:
    """SI values of one loop from (numerator, denominator) pairs."""
    loops = close(
        Rational.of(*plant, delay), Rational.of(*compensator), np.zeros(1, dtype=int), np.zeros(1, dtype=int)
    )
    found = frequency_stage(loops, _poles(loops), frozenset(keys))
    out = {}
    for key, value in found.items():
        row = QUANTITIES.get(key, QUANTITIES["bandwidth"])  # highest_fall is a frequency too
        out[key] = float(
            value[0] * loops.time_scale[0] ** row.time_power * loops.plant_gain[0] ** row.gain_power
        )
    return out


def _roots(rng, count, light, spread):
    out: list[complex] = []
    while len(out) < count:
        size = np.exp(rng.normal(0, spread))
        if count - len(out) >= 2 and rng.random() < 0.5:
            damping = rng.uniform(1e-4, 0.08) if light else rng.uniform(0.1, 1)
            out += [size * complex(-damping, s * np.sqrt(1 - damping**2)) for s in (1, -1)]
        else:
            out.append(-size)
    return np.array(out)


def _random_loops(seed: int, order: int, count: int, *, light: bool = False, spread: float = 1.0) -> Loops:
    """Stable loops of one order: random plant and compensator of either sign, the gain drawn until it is
    stable.

    Integrators, right-half-plane zeros and unstable plants occur.
    """
    rng = np.random.default_rng(seed)
    second = min(2, order - 1)
    first = order - second
    rows = []
    while len(rows) < count:
        zp, pp = (
            _roots(rng, int(rng.integers(0, max(first, 1))), light, spread),
            _roots(rng, first, light, spread),
        )
        zc, pc = _roots(rng, second, False, spread), _roots(rng, second, False, spread)
        if rng.random() < 0.2:
            zp = -zp
        if rng.random() < 0.15:
            real = np.flatnonzero(pp.imag == 0)
            pp[real[:1]] *= -0.2
        if rng.random() < 0.5:
            pc[np.flatnonzero(pc.imag == 0)[:1]] = 0
        num, den, cnum, cden = (np.atleast_1d(np.real(np.poly(r))) for r in (zp, pp, zc, pc))
        gain = np.exp(rng.normal(0, 2 * spread)) * rng.choice([-1, 1])
        for _ in range(30):
            closed = np.polyadd(np.polymul(den, cden), gain * np.polymul(num, cnum))
            through = 1 + (gain if len(num) == len(den) else 0.0)
            if through > 0 and len(closed) == order + 1 and (np.roots(closed).real < 0).all():
                rows.append((num, den, gain * cnum, cden))
                break
            gain *= np.exp(rng.normal(0, 1.5)) * rng.choice([-1, 1])
    pad = [
        np.array([np.pad(p, (max(len(q[i]) for q in rows) - len(p), 0)) for p in (r[i] for r in rows)])
        for i in range(4)
    ]
    index = np.arange(count)
    return close(Rational.of(pad[0], pad[1]), Rational.of(pad[2], pad[3]), index, index)


def _delayed_loops(seed: int, order: int, count: int, *, light: bool = False) -> Loops:
    """Random loops given a dead time that they stand: less than their delay margin, |L(∞)| < 1."""
    rng = np.random.default_rng(seed)
    loops = _random_loops(seed, order, 3 * count, light=light)
    margin = frequency_stage(loops, _poles(loops), frozenset({"delay_margin"}))["delay_margin"]
    gain = np.abs(loops.numerator[:, 0] / loops.denominator[:, 0])
    use = np.flatnonzero((margin > 0) & (gain < 0.95))[:count]
    delay = np.where(np.isfinite(margin), margin, np.exp(rng.normal(0, 1, len(margin))))
    return replace(loops.rows(use), dead_time=(delay * rng.uniform(0.05, 0.9, len(delay)))[use])


@pytest.fixture
def poles_of():
    return _poles


@pytest.fixture
def measure():
    return _measure


@pytest.fixture
def random_loops():
    return _random_loops


@pytest.fixture
def delayed_loops():
    return _delayed_loops
