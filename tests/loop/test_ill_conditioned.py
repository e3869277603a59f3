"""Plants that rounding likes least: right to 1e-6 against 50-digit arithmetic, or marked as approximate."""

import sys
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate

FOLDER = Path(__file__).parents[2] / "benchmarks"
KINDS = {  # kind of benchmarks/ill_conditioned.py: how many loops of each gain
    "lags from 1e-9 s to 1e6 s": 2,
    "near cancellations, 1e-6": 3,
    "modes of damping 1e-4": 1,
    "20 equal lags": 2,
    "20 lags over two decades": 2,
    "10 modes with zeros between": 1,
}


@pytest.fixture(scope="module")
def bench():
    sys.path.insert(0, str(FOLDER))
    try:
        import bench_ill_conditioned

        yield bench_ill_conditioned
    finally:
        sys.path.remove(str(FOLDER))


@pytest.mark.parametrize("share", [(1e-9, 1e-3), (0.05, 0.5)], ids=["hardly any feedback", "usual gains"])
@pytest.mark.parametrize("kind", KINDS)
def test_right_or_marked(bench, kind, share):
    found, reference = bench.evaluated(kind, share, KINDS[kind])
    if share[0] > 0.01:
        assert found.approximate.mean() < 0.05  # marked is what has to be
    for i, true in enumerate(reference):
        assert bool(found.stable[i]) == (true["decay_rate"] > 0.0)
        for q, measure in enumerate(bench.MEASURES):
            name = measure.quantity
            if name in true and not found.approximate[i, q]:
                assert bench.error(float(found.values[i, q]), true[name], name) < 1e-6, (i, name)


def test_the_second_needle_of_a_loop_of_order_21(bench):
    """Two modes of damping 1e-4 in the sensitivity, one of 1.0083: |Δ|² shows neither of them."""
    population = bench.ill_conditioned.population("10 modes with zeros between", 6, share=(1e-6, 1e-2))
    row = np.array([5])
    found = evaluate(population.plants, population.compensators, pairs=(row, row))
    plant_num, plant_den = (p[5] for p in (population.plants.numerator, population.plants.denominator))
    comp_num, comp_den = (
        p[5] for p in (population.compensators.numerator, population.compensators.denominator)
    )
    den = np.polymul(plant_den, comp_den)
    closed = np.polyadd(den, np.polymul(plant_num, comp_num))
    p = np.roots(closed)
    w = np.concatenate([z.imag + np.linspace(-20.0, 20.0, 4001) * z.real for z in p[p.imag > 0.0]])
    w = w[w > 0.0]
    highest = np.abs(np.polyval(den, 1j * w) / np.polyval(closed, 1j * w)).max()
    assert highest > 1.005
    assert found["sensitivity_peak"][0] == pytest.approx(highest, rel=1e-5)


def test_digits_lost_in_the_numerator_are_said(bench):
    """Twenty lags under hardly any P: u is a small difference of large terms, and marked where it is off."""
    den = np.poly1d([1.0])
    for _ in range(20):
        den = den * np.poly1d([0.37, 1.0])
    gains = np.geomspace(1e-2, 1e-10, 60)
    found = evaluate(Rational.of([1.0], den.coeffs), Rational.of(gains[:, None], np.ones((60, 1))))
    peak, doubt = found["control_peak"][:, 0], found.approximate[:, 0, :]
    off = np.abs(peak / gains - 1.0)  # the largest u is the first one
    column = [m.quantity for m in found.measures].index("control_peak")
    assert off.max() > 1e-6
    assert doubt[off > 1e-6, column].all()
    assert not doubt[0].any()
