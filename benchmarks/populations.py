"""Random loops to measure on: stable designs, clouds round one design, clouds that reach beyond stability.

M plants and M compensators; loop i is compensator i on plant i. Fixed seeds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.closed_loop import Rational, close
from synth.loop.poles.gain_line import stable_gain_intervals
from synth.loop.poles.stage import pole_stage


@dataclass(frozen=True)
class Population:
    plants: Rational
    compensators: Rational

    @property
    def pairs(self) -> tuple[IntArray, IntArray]:
        index = np.arange(len(self.plants))
        return index, index

    def rows(self, count: int) -> Population:
        index = np.arange(count) % len(self.plants)
        return Population(self.plants.rows(index), self.compensators.rows(index))


def designs(
    order: int, rows: int, *, dead_time: bool = False, seed: int = 1, least_damping: float = 0.03
) -> Population:
    """Stable loops of closed-loop order `order`: a random plant of order - 2 under a PID with filter.

    The gain lies at 10 to 50 % of the stability limit; no loop has a pole damped below least_damping.
    Dead time, where asked for, is 0.1 to 1 times the plant's typical time.
    """
    rng = np.random.default_rng(seed + 1000 * order)
    plants, comps, delays = [], [], []
    while len(plants) < rows:
        count = 2 * rows
        batch = [_draw(order, rng) for _ in range(count)]
        theta = np.exp(rng.uniform(np.log(0.1), 0.0, size=count)) if dead_time else np.zeros(count)
        plant = Rational.of([b[0] for b in batch], [b[1] for b in batch], theta)
        comp = Rational.of([b[2] for b in batch], [b[3] for b in batch])
        index = np.arange(count)
        limits = stable_gain_intervals(close(plant, comp, index, index))
        high = np.array([next((i.high for i in found if i.low <= 0.0 < i.high), np.nan) for found in limits])
        gain = np.minimum(high, 1e3) * rng.uniform(0.1, 0.5, size=count)
        usable = np.flatnonzero(np.isfinite(gain) & (gain > 0.0))
        closed = close(
            plant.rows(usable),
            _scaled(comp.rows(usable), gain[usable]),
            np.arange(len(usable)),
            np.arange(len(usable)),
        )
        stage = pole_stage(closed, ())
        with np.errstate(invalid="ignore"):
            damping = np.nanmin(-stage.poles.real / np.abs(stage.poles), axis=1)
        for i in usable[stage.stable & (damping > least_damping)]:
            plants.append(batch[i][:2])
            comps.append((gain[i] * batch[i][2], batch[i][3]))
            delays.append(theta[i])
    return Population(
        Rational.of([p[0] for p in plants[:rows]], [p[1] for p in plants[:rows]], delays[:rows]),
        Rational.of([c[0] for c in comps[:rows]], [c[1] for c in comps[:rows]]),
    )


def starts(order: int, rows: int, *, seed: int = 3) -> Population:
    """Random plants and PIDs, gains log-uniform from 1/30 to 3 times the limit: what a search begins with."""
    rng = np.random.default_rng(seed)
    base = designs(order, rows, seed=seed, least_damping=0.0)
    index = np.arange(rows)
    limits = stable_gain_intervals(close(base.plants, base.compensators, index, index))
    high = np.array([next(i.high for i in found if 1.0 in i) for found in limits])
    gain = np.minimum(high, 1e3) * np.exp(rng.uniform(np.log(1.0 / 30.0), np.log(3.0), size=rows))
    return Population(base.plants, _scaled(base.compensators, gain))


def cloud(order: int, rows: int, spread: float, *, dead_time: bool = False, seed: int = 2) -> Population:
    """Compensators round one good design, every coefficient times e^(spread × normal)."""
    rng = np.random.default_rng(seed)
    base = designs(order, 1, dead_time=dead_time, seed=seed, least_damping=0.3)
    index = np.zeros(rows, dtype=np.intp)
    comps = base.compensators.rows(index)
    shaken = [
        part * np.exp(spread * rng.normal(size=part.shape)) for part in (comps.numerator, comps.denominator)
    ]
    return Population(base.plants.rows(index), Rational.of(*shaken))


def _scaled(comps: Rational, gain: FloatArray) -> Rational:
    return Rational(comps.numerator * gain[:, None], comps.denominator, comps.dead_time)


def _draw(order: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Plant of order - 2 with roots near 1 rad/s, and a PID with filter of gain 1."""
    poles: list[complex] = []
    while len(poles) < order - 2:
        size = float(np.exp(rng.normal(scale=0.5)))
        if order - 2 - len(poles) >= 2 and rng.random() < 0.4:
            ratio = rng.uniform(0.1, 1.0)
            poles += [size * (-ratio + s * 1j * np.sqrt(1.0 - ratio**2)) for s in (1, -1)]
        else:
            poles.append(-size)
    zeros = -np.exp(rng.normal(scale=0.5, size=rng.integers(0, max(1, order - 3)))) * 2.0
    den = np.real(np.poly(poles))
    num = np.atleast_1d(np.real(np.poly(zeros)))
    num = np.pad(num * den[-1] / num[-1], (order - 1 - len(num), 0))
    reset, rate = np.exp(rng.normal(scale=0.4, size=2)) * np.array([2.0, 0.4])
    lag = rate / rng.uniform(5.0, 20.0)
    top = np.array([reset * (rate + lag), reset + lag, 1.0])
    return num, den, top, np.array([reset * lag, reset, 0.0])
