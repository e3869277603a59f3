"""Loops that rounding likes least, by kind; loop i is compensator i on plant i. Fixed seeds."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from populations import Population

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Rational, close
from synth.loop.poles.gain_line import stable_gain_intervals

Parts = tuple[list[float], list[float], list[float], list[float]]  # plant N, D; compensator N, D of gain 1


def population(
    kind: str, rows: int, *, share: tuple[float, float] = (0.05, 0.5), seed: int = 5
) -> Population:
    """Loops of one kind; gains log-uniform, as a share of the stability limit (of 1e3 without one)."""
    rng = np.random.default_rng([seed, *kind.encode()])
    drawn = [KINDS[kind](rng) for _ in range(rows)]
    plants = Rational.of(_rows([p[0] for p in drawn]), _rows([p[1] for p in drawn]))
    numerators, denominators = _rows([p[2] for p in drawn]), _rows([p[3] for p in drawn])
    gain = np.ones(rows)
    for i in range(rows):
        one = np.array([0])
        loop = close(Rational.of(*drawn[i][:2]), Rational.of(*drawn[i][2:]), one, one)
        high = max((j.high for j in stable_gain_intervals(loop)[0] if j.low <= 0.0 < j.high), default=1.0)
        gain[i] = min(high, 1e3) * np.exp(rng.uniform(*np.log(share)))
    return Population(plants, Rational.of(numerators * gain[:, None], denominators))


def _fifteen_decades(rng: np.random.Generator) -> Parts:
    """Lags of 1e-9 s and 1e6 s and up to three between, under a P or a PI."""
    times = [1e-9, 1e6, *10.0 ** rng.uniform(-9, 6, size=rng.integers(0, 4))]
    return [1.0], _lags(times), *_pi(10.0 ** rng.uniform(-9, 6), rng)


def _near_cancellation(rng: np.random.Generator) -> Parts:
    """A plant pole under a plant zero and another under a compensator zero, both 1e-6 of their size off."""
    poles = np.exp(rng.normal(scale=0.7, size=3))
    zero = poles[0] * (1.0 + 1e-6 * rng.choice([-1, 1]))
    return [1.0 / zero, 1.0], _lags(1.0 / poles), *_pi((1.0 + 1e-6 * rng.normal()) / poles[1], rng)


def _light_damping(rng: np.random.Generator) -> Parts:
    """One to three modes of damping 1e-4 beside a lag, under a P or a PI."""
    den = np.array([1.0, 1.0])
    for size in np.exp(rng.uniform(0.0, 4.0, size=rng.integers(1, 4))):
        den = np.polymul(den, [1.0 / size**2, 2e-4 / size, 1.0])
    return [1.0], list(den), *_pi(np.exp(rng.normal()), rng)


def _chain(rng: np.random.Generator) -> Parts:
    """Twenty equal lags under a P or a PI."""
    return [1.0], _lags([np.exp(rng.normal())] * 20), *_pi(20.0 * np.exp(rng.normal(scale=0.5)), rng)


def _uneven_chain(rng: np.random.Generator) -> Parts:
    """Twenty lags over two decades under a P or a PI."""
    return [1.0], _lags(10.0 ** rng.uniform(-1, 1, size=20)), *_pi(20.0 * np.exp(rng.normal(scale=0.5)), rng)


def _chain_of_modes(rng: np.random.Generator) -> Parts:
    """Ten modes of damping 1e-4 to 1, collocated (a zero pair below each), under a P or a PI."""
    num, den = np.array([1.0]), np.array([1.0])
    for size in np.cumprod(rng.uniform(1.3, 2.0, size=10)):
        ratio, lower = 10.0 ** rng.uniform(-4, 0), size * rng.uniform(0.8, 0.95)
        den = np.polymul(den, [1.0 / size**2, 2.0 * ratio / size, 1.0])
        num = np.polymul(num, [1.0 / lower**2, 2.0 * ratio / lower, 1.0]) if len(num) < 19 else num
    return list(num), list(den), *_pi(np.exp(rng.normal()), rng)


KINDS: dict[str, Callable[[np.random.Generator], Parts]] = {
    "lags from 1e-9 s to 1e6 s": _fifteen_decades,
    "near cancellations, 1e-6": _near_cancellation,
    "modes of damping 1e-4": _light_damping,
    "20 equal lags": _chain,
    "20 lags over two decades": _uneven_chain,
    "10 modes with zeros between": _chain_of_modes,
}


def _pi(integral_time: float, rng: np.random.Generator) -> tuple[list[float], list[float]]:
    if rng.random() < 0.3:
        return [1.0], [1.0]
    return [float(integral_time), 1.0], [float(integral_time), 0.0]


def _lags(times: FloatArray | list[float]) -> list[float]:
    den = np.array([1.0])
    for time in times:
        den = np.polymul(den, [time, 1.0])
    return [float(c) for c in den]


def _rows(polynomials: list[list[float]]) -> FloatArray:
    width = max(map(len, polynomials))
    return np.array([[0.0] * (width - len(p)) + list(p) for p in polynomials])
