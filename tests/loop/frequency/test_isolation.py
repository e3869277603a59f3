"""Root brackets: complete, disjoint, each with one root."""

from __future__ import annotations

import numpy as np
import pytest

from synth.loop.frequency.isolation import isolate, split


@pytest.mark.parametrize("degree", [1, 2, 3, 5, 8, 12])
def test_every_positive_root_gets_a_bracket_of_its_own(degree):
    rng = np.random.default_rng(degree)
    columns, expected = [], []
    for _ in range(150):
        pairs = int(rng.integers(0, degree // 2 + 1))
        # complex pairs close to the positive axis are what a count by signs finds hard
        pair = np.exp(rng.normal(0, 3, pairs) + 1j * np.pi * rng.uniform(0.05, 1, pairs) ** 3)
        real = np.exp(rng.normal(0, 8, degree - 2 * pairs)) * rng.choice([-1, 1], degree - 2 * pairs)
        columns.append(np.real(np.poly(np.concatenate([pair, pair.conj(), real])))[::-1])
        expected.append(np.sort(real[real > 0]))
    found = isolate(np.array(columns).T)
    for row, roots in enumerate(expected):
        here = np.flatnonzero(found.row == row)
        here = here[np.argsort(found.low[here])]
        assert len(here) == len(roots)
        assert np.all(found.low[here] <= roots * (1 + 1e-6))
        assert np.all(roots <= found.high[here] * (1 + 1e-6))


def test_roots_twenty_decades_apart_are_all_found():
    roots = np.array([1e-24, 3e-13, 1.0, 2e9, 1e25])
    found = isolate(np.poly(roots)[::-1, None])
    assert np.all(np.sort(found.low) <= roots * (1 + 1e-9))
    assert np.all(roots * (1 - 1e-9) <= np.sort(found.high))


def test_a_root_on_an_octave_counts_once_and_zero_and_infinity_not_at_all():
    polynomials = np.array(
        [[-4.0, 1.0, 0.0], [0.0, -4.0, 1.0], [0.0, 0.0, 1.0], [0.0, 0.0, 0.0], [0.0, -1.0, 0.0]]
    )
    found = isolate(polynomials.T)
    assert sorted(found.row.tolist()) == [0, 1]
    assert np.all((found.low <= 4.0) & (4.0 <= found.high))


def test_roots_a_millionth_apart_are_separated_and_a_near_miss_is_none():
    apart = np.poly([1.5, 1.5 * (1 + 1e-6), -2.0])[::-1]
    miss = np.real(np.poly([1.5 + 1.5e-6j, 1.5 - 1.5e-6j, -2.0]))[::-1]
    found = isolate(np.array([apart, miss]).T)
    assert found.row.tolist() == [0, 0]


def test_a_hint_changes_nothing_but_the_work():
    rng = np.random.default_rng(3)
    polynomials = rng.normal(size=(7, 50))
    plain, hinted = isolate(polynomials), isolate(polynomials, hint=np.full(50, 1.3))
    assert np.array_equal(np.bincount(plain.row, minlength=50), np.bincount(hinted.row, minlength=50))


def test_splitting_a_bernstein_form_keeps_its_values():
    rng = np.random.default_rng(4)
    form = rng.normal(size=(6, 3))
    t = np.array([0.2, 0.5, 0.9])
    left, right = split(form, t)
    np.testing.assert_allclose(left[-1], right[0])
    middle, _ = split(left, np.full(3, 0.5))
    direct, _ = split(form, t / 2)
    np.testing.assert_allclose(middle[-1], direct[-1], rtol=1e-13)
