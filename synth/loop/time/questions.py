"""What can be asked of the signals of a batch, and the answers.

M loops. Signals are counted from their values at infinity. Only what is asked for is computed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from synth.loop.arrays import BoolArray, FloatArray


@dataclass(frozen=True, slots=True)
class Supremum:
    """sup of sign · (x + offset) over the signs given, and never below floor. offset, floor (M,).

    since : (M,) from that time on alone; None: over all times.
    """

    signal: int
    signs: tuple[float, ...]
    offset: FloatArray
    floor: FloatArray
    since: FloatArray | None = None


@dataclass(frozen=True, slots=True)
class Passage:
    """First time outside low <= x <= high, or (last) the last time outside it."""

    signal: int
    low: float
    high: float
    last: bool


@dataclass(frozen=True, slots=True)
class Area:
    """Integral of abs(x)."""

    signal: int


@dataclass(frozen=True, slots=True)
class Questions:
    """All that is asked of one batch."""

    suprema: Sequence[Supremum] = ()
    passages: Sequence[Passage] = ()
    areas: Sequence[Area] = ()


@dataclass(slots=True)
class Answers:
    """Arrays (M,) in the order of the questions.

    suprema, times   value, and where it is taken (NaN: only as a limit)
    passages         time; 0 where the signal is outside from the start (first) or never (last); inf: first,
                     never
    areas, doubts    value, and bound of its relative error
    seen             time up to which the blocks of the plan reached
    supremum_ends, passage_ends   times after which nothing can change the answer
    open_suprema, open_passages   True where the search was given up before that time
    """

    suprema: list[FloatArray]
    times: list[FloatArray]
    passages: list[FloatArray]
    areas: list[FloatArray]
    doubts: list[FloatArray]
    seen: FloatArray
    supremum_ends: list[FloatArray]
    passage_ends: list[FloatArray]
    open_suprema: list[BoolArray]
    open_passages: list[BoolArray]
