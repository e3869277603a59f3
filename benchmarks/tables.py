"""What every benchmark returns, and how time is taken."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass, field


@dataclass
class Table:
    """One question and its figures: columns with units in the heading, rows of numbers and words."""

    title: str
    columns: list[str]
    rows: list[list[object]] = field(default_factory=list)
    note: str = ""

    def text(self) -> str:
        cells = [self.columns, *[[_shown(v) for v in row] for row in self.rows]]
        widths = [max(len(row[i]) for row in cells) for i in range(len(self.columns))]
        lines = []
        for row in cells:
            padded = [
                c.ljust(w) if i == 0 else c.rjust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))
            ]
            lines.append("  ".join(padded).rstrip())
        lines.insert(1, "-" * max(map(len, lines)))
        return "\n".join([self.title, *lines, *([self.note] if self.note else [])])


def _shown(value: object) -> str:
    return f"{value:.3g}" if isinstance(value, float) else str(value)


def seconds(work: Callable[[], object], *, wall: bool = False) -> float:
    """Processor time of one call, which other jobs on the machine disturb least; or wall time."""
    clock = time.perf_counter if wall else time.process_time
    start = clock()
    work()
    return clock() - start


def interleaved(
    works: dict[str, Callable[[], object]], repeats: int, *, wall: bool = False
) -> dict[str, float]:
    """Median seconds of each, taken in turns, so that a change of the machine's pace hits all alike.

    One call of each beforehand is not counted. wall : wall time instead of processor time.
    """
    for work in works.values():
        work()
    taken: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(repeats):
        for name, work in works.items():
            taken[name].append(seconds(work, wall=wall))
    return {name: statistics.median(values) for name, values in taken.items()}
