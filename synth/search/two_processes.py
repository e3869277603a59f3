"""A batch scored by two processes, where the machine has a core to spare.

The second process is a fork that lives as long as the search: a call costs it the sending of a few small
arrays. Where a batch is cut depends on the batch alone, so the figures do not depend, not even in their last
digit, on whether a second process was there to score the other half.
"""

from __future__ import annotations

import os
import signal
import threading
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from multiprocessing import get_all_start_methods, get_context
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess

import numpy as np

from synth.loop.arrays import IntArray
from synth.loop.closed_loop import Rational, exact_degree
from synth.loop.evaluate import Evaluation, Screen, evaluate
from synth.loop.quantities import Measure

LEAST = 16  # loops in a batch worth cutting
FIXED = 6  # what a loop costs beyond its order, in orders


@dataclass(frozen=True, slots=True)
class Batch:
    """What `evaluate` is asked, as `evaluate` says it; pairs (M,) and (M,)."""

    plants: Rational
    compensators: Rational
    pairs: tuple[IntArray, IntArray]
    measures: tuple[Measure, ...]
    reference_step: float = 1.0
    screen: Screen | None = None
    rational: bool = False

    def rows(self, index: IntArray) -> Batch:
        """The pairs named by `index`."""
        return replace(self, pairs=(self.pairs[0][index], self.pairs[1][index]))

    def halves(self) -> tuple[IntArray, IntArray]:
        """Two sets of row numbers of about equal cost. Loops of one kind of plant and compensator stay
        together, since the core closes them as one stack."""
        compensator = exact_degree(self.compensators.denominator)[self.pairs[0]]
        plant = exact_degree(self.plants.denominator)[self.pairs[1]]
        order = np.lexsort((compensator, plant, self.plants.dead_time[self.pairs[1]] > 0.0))
        cost = np.cumsum((FIXED + plant + compensator)[order])
        middle = int(np.searchsorted(cost, cost[-1] / 2.0))
        return np.sort(order[:middle]), np.sort(order[middle:])


Core = Callable[[Batch], Evaluation]


def alone(batch: Batch) -> Evaluation:
    """The whole batch in one go."""
    return evaluate(
        batch.plants,
        batch.compensators,
        measures=batch.measures,
        reference_step=batch.reference_step,
        screen=batch.screen,
        pairs=batch.pairs,
        rational=batch.rational,
    )


@contextmanager
def two_processes() -> Iterator[Core]:
    """A core that cuts its batches in two and has one half scored by a second process.

    A machine of one core has none. No process is started where that is not safe (other threads run, the
    system cannot fork) or of no use (this process is held to one core).
    """
    if (os.cpu_count() or 1) < 2:
        yield alone
        return
    if not _may_fork():
        yield _InHalves(None)
        return
    process, line = _second_process()
    try:
        yield _InHalves(line)
    finally:
        line.close()
        process.terminate()  # it may be in the middle of a batch that nobody waits for
        process.join()


def _may_fork() -> bool:
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return cores > 1 and threading.active_count() == 1 and "fork" in get_all_start_methods()


def _second_process() -> tuple[BaseProcess, Connection]:
    """A process that scores what it is sent until the line is closed, and our end of the line."""
    context = get_context("fork")
    here, there = context.Pipe()
    process = context.Process(target=_serve, args=(there, here), daemon=True)
    with warnings.catch_warnings():  # numerical libraries keep threads of their own, which survive a fork
        warnings.simplefilter("ignore", DeprecationWarning)
        process.start()
    there.close()
    return process, here


def _serve(line: Connection, other_end: Connection) -> None:
    """The second process: answer until the other end is closed. To stop is the first one's business."""
    other_end.close()
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    while True:
        try:
            batch: Batch = line.recv()
            try:
                found = alone(batch)
            except Exception:  # told by the first process, which comes upon it in turn
                found = None
            line.send(found)
        except (EOFError, OSError):
            return


class _InHalves:
    """A core that scores in halves; `line` leads to who scores the second, None to nobody."""

    def __init__(self, line: Connection | None) -> None:
        self._line = line

    def __call__(self, batch: Batch) -> Evaluation:
        if len(batch.pairs[0]) < LEAST:
            return alone(batch)
        one, other = batch.halves()
        self._hand_over(batch.rows(other))
        first = alone(batch.rows(one))
        return _merged(first, self._taken_back() or alone(batch.rows(other)), one, other)

    def _hand_over(self, batch: Batch) -> None:
        if self._line is not None:
            try:
                self._line.send(batch)
            except OSError:  # it is gone: alone from here on
                self._line = None

    def _taken_back(self) -> Evaluation | None:
        if self._line is not None:
            try:
                found: Evaluation | None = self._line.recv()
                return found
            except (EOFError, OSError):
                self._line = None
        return None


def _merged(first: Evaluation, second: Evaluation, one: IntArray, other: IntArray) -> Evaluation:
    """The halves in the order of the whole."""
    place = np.argsort(np.concatenate([one, other]), kind="stable")
    return Evaluation(
        first.measures,
        np.concatenate([first.values, second.values])[place],
        np.concatenate([first.approximate, second.approximate])[place],
        np.concatenate([first.stable, second.stable])[place],
        np.concatenate([first.abscissa, second.abscissa])[place],
        np.concatenate([first.reached, second.reached])[place],
    )
