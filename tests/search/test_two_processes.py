"""A batch in halves: the same figures, whoever scores the second."""

from __future__ import annotations

import os
import threading
from collections.abc import Iterator

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import Evaluation
from synth.loop.quantities import Measure
from synth.search import two_processes
from synth.search.two_processes import LEAST, Batch, Core, alone

MEASURES = tuple(Measure(q) for q in ("overshoot", "settling_time", "sensitivity_peak", "damping_ratio"))


def batch(count: int = 60) -> Batch:
    """PI, PID-like and constant compensators on a lag and on a plant with dead time, shuffled."""
    rng = np.random.default_rng(3)
    numerator, denominator = np.zeros((count, 3)), np.zeros((count, 3))
    gain, corner = np.exp(rng.normal(0.0, 1.0, (2, count)))
    kind = rng.integers(0, 3, count)
    for i in range(count):
        numerator[i] = [(0.0, 0.0, gain[i]), (0.0, gain[i], corner[i]), (0.1 * gain[i], gain[i], corner[i])][
            kind[i]
        ]
        denominator[i] = [(0.0, 0.0, 1.0), (0.0, 1.0, 0.0), (0.01, 1.0, 0.0)][kind[i]]
    plants = Rational(
        np.array([[0.0, 0.0, 1.0], [0.0, 0.0, 0.5]]),
        np.array([[1.0, 3.0, 1.0], [0.0, 2.0, 1.0]]),
        np.array([0.0, 0.3]),
    )
    pairs = (np.arange(count), rng.integers(0, 2, count))
    return Batch(plants, Rational(numerator, denominator, np.zeros(count)), pairs, MEASURES)


def in_full(found: Evaluation) -> list[np.ndarray]:
    return [found.values, found.approximate, found.stable, found.abscissa, found.reached]


@pytest.fixture
def halves() -> Iterator[tuple[Core, Core]]:
    """A core with a second process, and one that scores both halves itself."""
    process, line = two_processes._second_process()
    yield two_processes._InHalves(line), two_processes._InHalves(None)
    line.close()
    process.join(10.0)
    assert process.exitcode == 0  # it ends by itself when the line is closed


def test_every_loop_is_in_one_half_and_kinds_stay_together() -> None:
    whole = batch()
    one, other = whole.halves()
    assert sorted([*one, *other]) == list(range(60))

    def kinds(part: np.ndarray) -> set[tuple[int, int]]:
        row, case = whole.pairs[0][part], whole.pairs[1][part]
        degree = 2 - (whole.compensators.denominator[row] != 0.0).argmax(axis=1)
        return set(zip(degree.tolist(), case.tolist(), strict=True))

    assert len(kinds(one) & kinds(other)) <= 1
    assert 0.3 < len(one) / 60 < 0.7


def test_halves_agree_with_the_whole() -> None:
    whole = batch()
    for found, plain in zip(
        in_full(two_processes._InHalves(None)(whole)), in_full(alone(whole)), strict=True
    ):
        np.testing.assert_allclose(found, plain, rtol=1e-9)


def test_a_second_process_changes_no_digit(halves: tuple[Core, Core]) -> None:
    with_second, without = halves
    for count in (60, LEAST, LEAST - 1, 60):
        for a, b in zip(in_full(with_second(batch(count))), in_full(without(batch(count))), strict=True):
            np.testing.assert_array_equal(a, b)


def test_a_second_process_that_dies_is_done_without() -> None:
    process, line = two_processes._second_process()
    core = two_processes._InHalves(line)
    process.kill()
    process.join()
    for _ in range(2):
        for a, b in zip(in_full(core(batch())), in_full(two_processes._InHalves(None)(batch())), strict=True):
            np.testing.assert_array_equal(a, b)


def test_none_is_started_beside_other_threads(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "cpu_count", lambda: 2)
    release = threading.Event()
    other = threading.Thread(target=release.wait)
    other.start()
    try:
        assert not two_processes._may_fork()
    finally:
        release.set()
        other.join()


def test_one_core_scores_in_one_go(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "cpu_count", lambda: 1)
    with two_processes.two_processes() as core:
        assert core is alone


def test_the_process_ends_with_the_search(monkeypatch: pytest.MonkeyPatch) -> None:
    from multiprocessing import active_children

    monkeypatch.setattr(os, "cpu_count", lambda: 2)
    monkeypatch.setattr(two_processes, "_may_fork", lambda: True)
    with two_processes.two_processes() as core:
        assert len(active_children()) == 1
        core(batch())
    assert not active_children()
