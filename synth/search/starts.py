"""Where a search sets out from: four sources of starting points for one structure, both signs of gain.

B points, P parameters. Nondimensional logarithms throughout; a low-discrepancy set feeds the first three:

design        crossover, phase margin and the structure's own freedoms drawn; C placed, gain from
              abs(L(jω_c)) = 1
crossover     crossover drawn and gain solved, corners free around it
wide          everything log-uniform, three decades each way round the plant's own scales
rules         published settings on this plant (synth.rules), at several crossovers and closed-loop time
              constants
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray
from synth.requirements import Bound
from synth.search.archive import Rows, joined
from synth.search.gain_line import Intervals, covering
from synth.search.objective import Objective
from synth.search.scales import response
from synth.structures import Structure

PRIMES = (2, 3, 5, 7, 11, 13, 17, 19)
SOURCES = ("design coordinates", "crossover with free corners", "wide log-uniform", "the whole gain line")
DECADE = float(np.log(10.0))


def halton(count: int, dimensions: int, seed: int) -> FloatArray:
    """Low-discrepancy points in (0, 1), shifted at random. (count, dimensions)

    Source: J. H. Halton, Numerische Mathematik 2 (1960) 84-90; the random shift is that of R. Cranley and
    T. N. L. Patterson, SIAM J. Numerical Analysis 13 (1976) 904-914. (scipy.stats has richer ones, at half a
    second of import.)
    """
    out = np.empty((count, dimensions))
    for d in range(dimensions):
        base, number, weight = PRIMES[d], np.arange(1, count + 1), 1.0
        out[:, d] = 0.0
        while number.any():
            weight /= base
            out[:, d] += weight * (number % base)
            number = number // base
    shifted: FloatArray = (out + np.random.default_rng(seed).random(dimensions)) % 1.0
    return np.clip(shifted, 1e-6, 1.0 - 1e-6)


@dataclass(frozen=True, slots=True)
class Band:
    """Frequencies [ln rad/s] to draw the crossover from."""

    low: float
    high: float

    def at(self, u: FloatArray) -> FloatArray:
        """Crossovers [rad/s] for shares u in (0, 1)."""
        out: FloatArray = np.exp(self.low + u * (self.high - self.low))
        return out


def plant_band(objective: Objective) -> Band:
    """One and a half decades beyond the plant's own corners on both sides."""
    marks = np.log(objective.scales.marks)
    return Band(float(marks[0]) - 1.5 * DECADE, float(marks[-1]) + 1.5 * DECADE)


def asked_band(bounds: tuple[Bound, ...]) -> Band | None:
    """Where the requirements point at: half a decade round the crossovers that they suggest, None without
    any.

    Rules of thumb for a loop with a phase margin near 60°: crossover about 0.6 of the bandwidth, 2 over the
    rise time, 4 over the settling time, 4 over the peak time.
    """
    thumbs = {"bandwidth": 0.6, "crossover": 1.0, "decay_rate": 1.5}
    times = {"rise_time": 2.0, "settling_time": 4.0, "peak_time": 4.0}
    points = []
    for bound in bounds:
        name = bound.measure.quantity
        if bound.limit > 0.0 and name in thumbs:
            points.append(np.log(bound.limit * thumbs[name]))
        elif bound.limit > 0.0 and name in times:
            points.append(np.log(times[name] / bound.limit))
    if not points:
        return None
    return Band(float(min(points)) - 0.5 * DECADE, float(max(points)) + 0.5 * DECADE)


def sample(objective: Objective, s: int, count: int, seed: int, signs: tuple[int, ...] = (1, -1)) -> Rows:
    """About `count` points of each sign for structure s, a third from each of the first three sources.

    Row origins are the numbers of SOURCES.
    """
    bands = [plant_band(objective)]
    asked = asked_band(objective.task.bounds)
    if asked is not None:
        bands += [asked, asked]
    third = max(count // 3, 4)
    parts = []
    for sign in signs:
        for k, band in enumerate(bands):
            share = -(-third // len(bands))
            salt = seed * 31 + k * 7 + (3 if sign > 0 else 5)
            parts.append(_design(objective, s, share, salt, band, sign))
            parts.append(_crossover(objective, s, share, salt + 1, band, sign))
        parts.append(_wide(objective, s, third, seed * 31 + 2, sign))
    return joined(parts)


def line(objective: Objective, s: int, intervals: Intervals, signs: tuple[int, ...], count: int) -> Rows:
    """One parameter: the whole gain line, dense on the intervals that stabilise; log-uniform over the reach
    of abs(1/P) where there is none, so that a closest approach can still be told."""
    band = plant_band(objective)
    size = np.abs(response(objective.task.plants, band.at(np.linspace(0.0, 1.0, 60)))) / objective.scales.gain
    size = size[np.isfinite(size) & (size > 0.0)]
    bottom = max(-float(np.log(size.max())) - DECADE, -14.0)
    top = min(-float(np.log(size.min())) + DECADE, 14.0)
    parts = []
    for sign in signs:
        gains = covering(intervals, sign, objective.scales.gain, count)
        logs = np.log(gains * objective.scales.gain) if gains.size else np.linspace(bottom, top, 16)
        parts.append(objective.rows_at(s, logs[:, None], sign, 3))
    return joined(parts)


def _design(objective: Objective, s: int, count: int, seed: int, band: Band, sign: int) -> Rows:
    structure = objective.structures[s]
    u = halton(4 * count, 2 + structure.freedoms, seed)
    crossover = band.at(u[:, 0])
    plant = response(objective.task.plants, crossover)[0]
    margin = np.radians(25.0 + 55.0 * u[:, 1])
    lead = margin - np.pi - np.angle(plant) - (np.pi if sign < 0 else 0.0)
    theta = structure.place(crossover, lead, u[:, 2:])
    with np.errstate(divide="ignore", invalid="ignore"):
        theta[:, 0] = sign / np.abs(plant) * theta[:, 0]
    theta = theta[np.isfinite(theta).all(axis=1) & structure.legal(theta)][:count]
    return objective.rows_of(s, theta, 0)


def _crossover(objective: Objective, s: int, count: int, seed: int, band: Band, sign: int) -> Rows:
    structure = objective.structures[s]
    u = halton(count, 1 + len(structure.parameters), seed)
    crossover = band.at(u[:, 0])
    x = _corners(structure, u[:, 1:], -1.5 * DECADE, 2.0 * DECADE)
    shift = np.log(crossover * objective.scales.time)
    low, high = structure.box()
    for j, parameter in enumerate(structure.parameters):
        if j > 0 and not (np.isfinite(low[j]) and np.isfinite(high[j])):
            x[:, j] += shift if parameter.role == "frequency" else -shift
    x[:, 0] = 0.0
    theta = structure.from_search(x, np.ones(count), objective.scales.time, objective.scales.gain)
    size = np.abs(structure.response(theta, crossover) * response(objective.task.plants, crossover)[0])
    with np.errstate(divide="ignore", invalid="ignore"):
        x[:, 0] = -np.log(size)
    return objective.rows_at(s, x[np.isfinite(x).all(axis=1)], sign, 1)


def _wide(objective: Objective, s: int, count: int, seed: int, sign: int) -> Rows:
    structure = objective.structures[s]
    u = halton(count, len(structure.parameters), seed)
    return objective.rows_at(s, _corners(structure, u, -3.0 * DECADE, 3.0 * DECADE), sign, 2)


def _corners(structure: Structure, u: FloatArray, low: float, high: float) -> FloatArray:
    """Search coordinates: those with a range of their own spread over it, the free ones over (low, high),
    where a time constant runs against its corner frequency."""
    bottom, top = structure.box()
    x = np.empty(u.shape)
    for j, parameter in enumerate(structure.parameters):
        if np.isfinite(bottom[j]) and np.isfinite(top[j]):
            x[:, j] = bottom[j] + u[:, j] * (top[j] - bottom[j])
        elif parameter.role == "time":
            x[:, j] = -(low + u[:, j] * (high - low))
        else:
            x[:, j] = low + u[:, j] * (high - low)
    return x
