"""Loops to test on, and two independent readings of their responses: dense in floats, exact in 40 digits."""

import mpmath as mp
import numpy as np
import pytest

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.stage import pole_stage


def unity_loop(poles, zeros=()):
    """(loops, poles) of the unity loop whose T has these poles and zeros, and an integrator in L."""
    closed = np.real(np.poly(poles))
    top = np.atleast_1d(np.real(np.poly(zeros))) if len(zeros) else np.ones(1)
    top = np.concatenate([np.zeros(len(closed) - len(top)), top * closed[-1] / top[-1]])
    bottom = closed - top
    bottom[-1] = 0.0
    loops = close(Rational.of(top, bottom), Rational.of([1.0], [1.0]), np.array([0]), np.array([0]))
    return loops, pole_stage(loops, ()).poles


def random_loops(rng, count, order, light=False, least_damping=0.02):
    """Stable loops of filtered PI and PID compensators round random plants of widely spread poles."""
    plants, compensators = [], []
    for _ in range(count):
        roots = []
        while len(roots) < max(order - 2, 0):
            size = 10.0 ** rng.uniform(-1.5, 1.8)
            if len(roots) + 2 <= order - 2 and rng.random() < 0.5:
                zeta = rng.uniform(0.01, 0.08) if light else rng.uniform(0.1, 1.0)
                roots += [
                    size * complex(-zeta, np.sqrt(1 - zeta**2)),
                    size * complex(-zeta, -np.sqrt(1 - zeta**2)),
                ]
            else:
                roots.append(-size)
        den = np.real(np.poly(roots)) if roots else np.ones(1)
        zeros = [
            -(10.0 ** rng.uniform(-1, 1.5)) * rng.choice([1, 1, 1, -1]) for _ in range(rng.integers(0, order))
        ]
        zeros = zeros[: max(len(roots) - 1, 0)]
        num = np.atleast_1d(np.real(np.poly(zeros))) if zeros else np.ones(1)
        num = num * den[-1] / num[-1]
        gain, ti, td = 10.0 ** rng.uniform([-1, -1, -2], [1, 1, 0])
        tf = td / 10.0 ** rng.uniform(0.5, 1.5)
        if order >= 3:
            top, bottom = gain * np.array([ti * (tf + td), ti + tf, 1.0]), np.array([ti * tf, ti, 0.0])
        elif order == 2:
            top, bottom = gain * np.array([ti, 1.0]), np.array([ti, 0.0])
            den, num = np.array([1.0, rng.uniform(0.1, 3.0)]), np.ones(1)
        else:
            top, bottom = np.array([gain]), np.array([1.0, 0.0])
        width = order + 2
        plants.append((np.pad(num, (width - len(num), 0)), np.pad(den, (width - len(den), 0))))
        compensators.append((np.pad(top, (3 - len(top), 0)), np.pad(bottom, (3 - len(bottom), 0))))
    plant = Rational.of(*(np.array(x) for x in zip(*plants, strict=True)))
    compensator = Rational.of(*(np.array(x) for x in zip(*compensators, strict=True)))
    loops = close(plant, compensator, np.arange(count), np.arange(count))
    stage = pole_stage(loops, ())
    with np.errstate(invalid="ignore"):
        zeta = np.where(stage.stable, (-stage.poles.real / np.abs(stage.poles)).min(axis=1, initial=1.0), 0.0)
    keep = np.flatnonzero(zeta > least_damping)
    return loops.rows(keep), stage.poles[keep]


class Exact:
    """The three responses of one loop in 40 digits: roots and residues anew from the coefficients."""

    def __init__(self, loops, i):
        with mp.workdps(60):
            closed = [mp.mpf(float(c)) for c in loops.closed[i]]
            slope = [c * (len(closed) - 1 - k) for k, c in enumerate(closed[:-1])]
            self.roots = _roots(closed, slope)
            self.residues, self.limit = {}, {}
            for name, top in (("y", loops.numerator), ("u", loops.control), ("d", loops.load)):
                row = [mp.mpf(float(c)) for c in top[i]]
                self.residues[name] = [_horner(row, p) / (p * _horner(slope, p)) for p in self.roots]
                self.limit[name] = row[-1] / closed[-1]

    def __call__(self, name, t, order=0):
        """Derivative number `order` (-1: primitive of x - x(inf) that vanishes at infinity) at one time."""
        with mp.workdps(40):
            total = mp.fsum(
                r * p**order * mp.exp(p * mp.mpf(float(t)))
                for r, p in zip(self.residues[name], self.roots, strict=True)
            )
            return mp.re(total) + (self.limit[name] if order == 0 else 0)

    def dense(self, name, t):
        """Floats at many times, from the exact roots and residues."""
        p = np.array([complex(x) for x in self.roots])
        r = np.array([complex(x) for x in self.residues[name]])
        return (np.exp(np.multiply.outer(np.asarray(t), p)) @ r).real + float(self.limit[name])

    def times(self, digits=12):
        """Times dense over the life of every mode: 24 a radian, and spread evenly in their logarithm."""
        parts = [np.zeros(1)]
        for k, p in enumerate(self.roots):
            p = complex(p)
            size = max(abs(complex(r[k])) for r in self.residues.values())
            life = np.log(max(size, 1.0) * 10.0**digits) / -p.real
            parts.append(np.linspace(0.0, life, int(np.clip(life * abs(p) * 24, 100, 20000))))
            parts.append(np.geomspace(1e-5 / abs(p), life, 100))
        return np.unique(np.concatenate(parts))


def _horner(row, x):
    value = mp.mpf(0)
    for c in row:
        value = value * x + c
    return value


def _roots(row, slope):
    """All roots by Aberth's iteration from the double ones."""
    roots = [
        mp.mpc(complex(x)) * (1 + mp.mpc(0, 1e-9) * k)
        for k, x in enumerate(np.roots([float(c) for c in row]))
    ]
    for _ in range(100):
        moved = mp.mpf(0)
        for k, p in enumerate(roots):
            newton = _horner(row, p) / _horner(slope, p)
            others = mp.fsum(1 / (p - q) for j, q in enumerate(roots) if j != k)
            step = newton / (1 - newton * others)
            roots[k] = p - step
            moved = max(moved, abs(step / p))
        if moved < mp.mpf(10) ** -50:
            return roots
    raise ValueError("no convergence")


@pytest.fixture(name="unity_loop")
def _unity_loop():
    return unity_loop


@pytest.fixture(name="random_loops")
def _random_loops():
    return random_loops


@pytest.fixture(name="exact")
def _exact():
    return Exact
