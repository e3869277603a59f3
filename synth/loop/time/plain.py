"""Plain reading of one loop's responses: dense times over every mode's life, then bisection."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.quantities import Measure
from synth.loop.time.modes import Modes

Curve = Callable[[FloatArray], FloatArray]


class Response:
    """One loop: curves, their slopes and the times of all their extrema."""

    def __init__(self, modes: Modes, i: int, tracks: bool) -> None:
        self.pole, self.residue = modes.pole[i], modes.residue[i]
        self.limit, self.start, self.tracks = modes.limit[i], modes.start[i], tracks
        if tracks:
            self.limit = self.limit.copy()
            self.limit[0] = 1.0
        times = [np.zeros(1)]
        for k, p in enumerate(self.pole):
            size = np.abs(self.residue[:, k]).max()
            floor = 1e-12 * max(1e-300, np.abs(self.residue).max())
            life = np.log(max(size / floor, 1.0)) / -p.real if size > 0.0 else 0.0
            life = max(life, 1.0 / abs(p))
            times.append(np.linspace(0.0, life, int(np.clip(life * abs(p) * 12, 50, 40000))))
            times.append(np.geomspace(1e-6 / abs(p), life, 60))
        self.t = np.unique(np.concatenate(times))
        self.cache: dict[tuple[int, int], tuple[FloatArray, FloatArray]] = {}

    def value(self, s: int, t: FloatArray, order: int = 0) -> FloatArray:
        w = self.residue[s] * self.pole**order
        out: FloatArray = (np.exp(np.multiply.outer(t, self.pole)) @ w).real
        return out + self.limit[s] if order == 0 else out

    def nodes(self, s: int) -> tuple[FloatArray, FloatArray]:
        """Times and values at the grid and at every extremum."""
        if (s, 0) not in self.cache:
            slope = self.value(s, self.t, 1)
            extra = roots(lambda t: self.value(s, t, 1), self.t, slope)
            t = np.sort(np.concatenate([self.t, extra]))
            self.cache[s, 0] = t, self.value(s, t)
        return self.cache[s, 0]


def roots(curve: Curve, t: FloatArray, value: FloatArray) -> FloatArray:
    """All sign changes of `curve` between neighbouring times, by bisection."""
    k = np.flatnonzero(np.signbit(value[:-1]) != np.signbit(value[1:]))
    low, high, sign = t[k], t[k + 1], np.signbit(value[k])
    for _ in range(60):
        mid = 0.5 * (low + high)
        same = np.signbit(curve(mid)) == sign
        low, high = np.where(same, mid, low), np.where(same, high, mid)
    return 0.5 * (low + high)


def plain_quantity(r: Response, m: Measure, time_scale: float) -> float:
    """One measure of one loop."""
    name = m.quantity
    if name == "control_peak":
        return float(max(np.abs(r.nodes(1)[1]).max(), abs(r.limit[1]), abs(r.start[1])))
    if name == "disturbance_peak":
        return float(max(np.abs(r.nodes(2)[1]).max(), abs(r.limit[2])))
    if name == "disturbance_area":
        return np.inf if abs(r.limit[2]) > 0.0 else _area(r, 2)
    if name == "tracking_area":
        return _area(r, 0) if r.tracks else np.inf
    if r.limit[0] == 0.0:
        return np.nan
    t, y = r.nodes(0)
    z = y / r.limit[0]
    peak = int(z.argmax())
    if name == "overshoot":
        return 100.0 * max(0.0, float(z[peak]) - 1.0)
    if name == "undershoot":
        return 100.0 * max(0.0, -float(z.min()))
    if name == "peak_time":
        return float(t[peak]) if z[peak] > 1.0 + 1e-12 else np.nan
    if name == "rise_time":
        return _first(r, t, z, m.span[1]) - _first(r, t, z, m.span[0])
    if name == "settling_time":
        outside = np.flatnonzero(np.abs(z - 1.0) > m.band)
        if outside.size == 0:
            return 0.0
        k = int(outside[-1])
        edge = 1.0 + m.band if z[k] > 1.0 else 1.0 - m.band
        return float(_cross(r, t[k : k + 2], z[k : k + 2] - edge, edge)[0]) if k + 1 < t.size else float(t[k])
    after = m.after / time_scale
    first = abs(float(r.value(0, np.array([after]))[0]) / r.limit[0] - 1.0)
    return 100.0 * max(first, float(np.abs(z[t >= after] - 1.0).max(initial=0.0)))


def _cross(r: Response, t: FloatArray, value: FloatArray, level: float) -> FloatArray:
    return roots(lambda x: r.value(0, x) / r.limit[0] - level, t, value)


def _first(r: Response, t: FloatArray, z: FloatArray, level: float) -> float:
    above = np.flatnonzero(z > level) if level <= 0.0 else np.flatnonzero(z >= level)
    if above.size == 0:
        return np.nan if level >= 1.0 else np.inf
    k = int(above[0])
    if k == 0 or level <= 0.0:
        return 0.0
    return float(_cross(r, t[k - 1 : k + 1], z[k - 1 : k + 1] - level, level)[0])


def _area(r: Response, s: int) -> float:
    t, _ = r.nodes(s)
    zero = roots(lambda x: r.value(s, x) - r.limit[s], t, r.value(s, t) - r.limit[s])
    primitive = np.concatenate([r.value(s, np.concatenate([[0.0], zero]), -1), [0.0]])
    return float(np.abs(np.diff(primitive)).sum())
