"""Starting points: legal, spread, where they are meant to be."""

import numpy as np
import pytest
from sheets import servo

from synth.loop.closed_loop import Rational
from synth.search.gain_line import covering, refined, stable_gains
from synth.search.objective import Objective
from synth.search.scales import response, scales_of
from synth.search.starts import asked_band, halton, line, plant_band, sample
from synth.structures import REGISTRY


def test_halton_fills_the_cube_evenly():
    points = halton(256, 4, 7)
    assert points.shape == (256, 4)
    assert ((points > 0.0) & (points < 1.0)).all()
    for d in range(4):
        counts = np.histogram(points[:, d], bins=8, range=(0.0, 1.0))[0]
        assert counts.min() >= 26
    np.testing.assert_array_equal(points, halton(256, 4, 7))
    assert np.abs(points - halton(256, 4, 8)).max() > 0.1


@pytest.mark.parametrize("name", [n for n in REGISTRY if n != "P"])
def test_starts_are_legal_of_both_signs_and_from_three_sources(name):
    objective = Objective(servo((name,)))
    rows = sample(objective, 0, 60, 1)
    assert set(rows.sign) == {1.0, -1.0}
    assert {0, 1, 2} >= set(rows.origin)
    assert {1, 2} <= set(rows.origin)
    assert len(rows) >= 60
    for theta in objective.theta(rows):
        assert objective.structures[0].legal(theta[None, :])[0]


def test_design_and_crossover_starts_cross_over_in_their_band():
    objective = Objective(servo(("PI",)))
    rows = sample(objective, 0, 60, 1)
    crossing = np.flatnonzero((rows.origin < 2) & (rows.sign > 0))
    band, asked = plant_band(objective), asked_band(objective.task.bounds)
    low, high = min(band.low, asked.low), max(band.high, asked.high)
    w = np.exp(np.linspace(low - 0.1, high + 0.1, 4000))
    made = objective.realise(rows.take(crossing))
    size = np.abs(response(made, w) * response(objective.task.plants, w))
    crosses = np.any((size[:, :-1] - 1.0) * (size[:, 1:] - 1.0) <= 0.0, axis=1)
    assert crosses.mean() > 0.95


def test_scales_are_those_of_the_plant():
    scales = scales_of(Rational.of([3.0], [1.0, 10.0, 0.0], 0.1))
    assert scales.time == pytest.approx(1.0 / 10.0)
    np.testing.assert_allclose(scales.marks, [10.0, 10.0])
    assert scales.gain == pytest.approx(abs(3.0 / (10j * (10j + 10.0))))


@pytest.mark.parametrize(
    ("numerator", "denominator", "expected"),
    [
        ([1.0], [1.0, 3.0, 2.0, 0.0], [(0.0, 6.0)]),
        ([1000.0], [1e-6, 1.0, -1.0], [(1e-3, np.inf)]),
        ([[1.0], [2.0]], [[1.0, 3.0, 2.0, 0.0], [1.0, 3.0, 2.0, 0.0]], [(0.0, 3.0)]),
        ([1.0], [1.0, 0.0, -1.0], []),
    ],
)
def test_stable_gains_are_exact_and_common_to_all_plants(numerator, denominator, expected):
    found = stable_gains(Rational.of(numerator, denominator))
    assert len(found) == len(expected)
    for have, want in zip(found, expected, strict=True):
        assert have == pytest.approx(want, rel=1e-9)


def test_the_line_covers_every_interval_and_both_ends():
    gains = covering(((-3.0, -1.0), (0.5, 6.0)), 1, 1.0, 40)
    assert 0.5 < gains.min() < 0.5 * 1.00001
    assert 6.0 * 0.99999 < gains.max() < 6.0
    negative = covering(((-3.0, -1.0), (0.5, 6.0)), -1, 1.0, 40)
    assert 1.0 < negative.min() < negative.max() < 3.0
    assert covering(((0.5, 6.0),), -1, 1.0, 40).size == 0


def test_the_refined_line_finds_the_optimum_of_a_bare_gain():
    objective = Objective(servo(("P",)))
    rows = line(objective, 0, stable_gains(objective.task.plants), (1, -1), 60)
    guide = objective.score(rows).guide()
    best = refined(objective, rows, guide)[1].max()
    dense = objective.rows_of(0, np.exp(np.linspace(-3.0, 6.0, 20001))[:, None])
    assert best >= objective.score(dense).guide().max() - 2e-4
    assert best >= guide.max()
