"""One bound on one quantity: what a sheet asks for, in the units of the table of quantities."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from synth.loop.quantities import Measure, Side


@dataclass(frozen=True, slots=True)
class Bound:
    """A requirement.

    id       "overshoot.max"; a second bound on the same side of a quantity is "settling_time.max.2"
    measure  the quantity with the options the sheet gave it
    side     "min" or "max"
    limit    in the unit of the table (s, rad/s, deg, dB, %)
    cases    names of the plant cases it is judged on; None for all
    """

    id: str
    measure: Measure
    side: Side
    limit: float
    cases: tuple[str, ...] | None = None

    @property
    def unit(self) -> float:
        """What slack is counted in: abs(limit), or the quantity's own scale where the limit is 0.

        Raises ValueError for a limit of 0 on a quantity without a scale of its own.
        """
        if self.limit != 0.0:
            return abs(self.limit)
        scale = self.measure.row.scale
        if scale is None:
            raise ValueError(
                f"{self.id}: a limit of 0 cannot be meant, {self.measure.quantity} has no own scale"
            )
        return scale

    def judged_on(self, case: str) -> bool:
        """Whether this plant case counts."""
        return self.cases is None or case in self.cases


def numbered(parts: Iterable[tuple[Measure, Side, float, tuple[str, ...] | None]]) -> tuple[Bound, ...]:
    """Bounds with their ids, in the order given."""
    seen: dict[tuple[str, Side], int] = {}
    bounds = []
    for measure, side, limit, cases in parts:
        count = seen[measure.quantity, side] = seen.get((measure.quantity, side), 0) + 1
        name = f"{measure.quantity}.{side}" + (f".{count}" if count > 1 else "")
        bounds.append(Bound(name, measure, side, limit, cases))
    return tuple(bounds)
