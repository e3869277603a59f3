"""What is known of one structure while the search goes on."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from synth.loop.arrays import FloatArray
from synth.search.archive import Rows, distinct, joined

AGREE = 2e-3  # optima this near to the best count as the same
ENOUGH = 3  # agreeing optima that settle a structure ...
ENOUGH_WIDE = 5  # ... and one of four or more parameters, before it is said that it cannot
NARROW = 0.05  # of slack: a miss as small as this is doubted longer
FINE = 1e-4  # an active-case optimum that loses less than this on the other cases stands


@dataclass(slots=True)
class Standing:
    """One structure in the campaign.

    tops       its best distinct points, best first, and their guides (worst search slack on the active cases)
    optima     merits of the polishes that ran to their end since the active cases last changed
    restarts   polishes that ran to their end, ever
    signs      of the gain that some start stabilised
    resolution of the dense scan, where there was one: largest ratio between neighbouring values of a
    parameter; ceiling: what the slack may reach anywhere by what it saw, None where that is not known
    """

    number: int
    parameters: int
    tops: Rows | None = None
    guides: FloatArray = field(default_factory=lambda: np.zeros(0))
    optima: list[float] = field(default_factory=list)
    restarts: int = 0
    signs: tuple[int, ...] = (1, -1)
    rounds: int = 0
    settled: bool = False
    evaluations: int = 0
    resolution: float | None = None
    ceiling: float | None = None

    @property
    def best(self) -> float:
        """Worst search slack of the best point; -inf before there is one."""
        return float(self.guides[0]) if self.guides.size else -np.inf

    @property
    def narrowly(self) -> bool:
        """Whether it misses the sheet by so little that another basin may well meet it."""
        return self.parameters > 1 and -NARROW < self.best < 0.0

    @property
    def agreeing(self) -> int:
        """Optima within AGREE of the best."""
        return sum(o >= self.best - AGREE for o in self.optima)

    def first(self, count: int) -> Rows:
        """Its best `count` points; ValueError before there is one."""
        if self.tops is None:
            raise ValueError(f"structure {self.number} was not searched yet")
        return self.tops.first(count)

    def record(self, rows: Rows, guides: FloatArray, finished: int, keep: int = 6) -> None:
        """Take in polished points of this structure; the first `finished` of them ran to their end."""
        both = rows if self.tops is None else joined([self.tops, rows])
        values = np.concatenate([self.guides, guides])
        order = distinct(both, values, keep)
        self.tops, self.guides = both.take(order), values[order]
        self.optima += [float(g) for g in guides[:finished]]
        self.restarts += finished

    def restate(self, rows: Rows, guides: FloatArray) -> None:
        """The same points, moved a little and scored exactly; what is known of restarts stays."""
        order = distinct(rows, guides, len(rows), 0.0)
        shift = float(guides[order[0]]) - self.best
        self.tops, self.guides = rows.take(order), guides[order]
        self.optima = [o + shift for o in self.optima]

    def judge(self) -> None:
        """Settled when enough restarts agree on the best."""
        if self.parameters == 1:
            self.settled = True  # the whole line was walked
            return
        needed = ENOUGH_WIDE if self.parameters >= 4 and self.best < 0.0 else ENOUGH
        self.settled = self.agreeing >= needed
