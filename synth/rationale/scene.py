"""One candidate among all: what every fact is drawn from."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.search.outcome import Candidate, Outcome
from synth.spec import Spec
from synth.wording.names import plant_unit, quantity_unit


@dataclass(frozen=True, slots=True)
class Scene:
    """A candidate, the outcome it belongs to, and the sheet."""

    spec: Spec
    outcome: Outcome
    candidate: Candidate

    def column(self, measure: Measure | str) -> FloatArray:
        """Values of one measure over the cases, (K,); NaN throughout where it was not computed."""
        wanted = Measure(measure) if isinstance(measure, str) else measure
        for i, m in enumerate(self.candidate.measures):
            if m == wanted:
                out: FloatArray = self.candidate.values[:, i]
                return out
        return np.full(len(self.candidate.values), np.nan)

    def nominal(self, measure: Measure | str) -> float:
        """Value on the first case."""
        return float(self.column(measure)[0])

    def worst(self, measure: Measure | str) -> tuple[float, int]:
        """Worst value over the cases and its case number."""
        wanted = Measure(measure) if isinstance(measure, str) else measure
        return worst_of(wanted, self.column(wanted), self.spec.bounds)

    def bound(self, requirement: str) -> tuple[int, Bound]:
        """A requirement by its id, with its number."""
        for i, bound in enumerate(self.spec.bounds):
            if bound.id == requirement:
                return i, bound
        raise KeyError(requirement)

    def unit(self, key: str) -> str:
        """Unit of a quantity in the plant's own units."""
        return quantity_unit(key, self.spec.input.unit, self.spec.output.unit)

    def plant_unit(self, unit: str) -> str:
        """A unit of the table in the plant's own units."""
        return plant_unit(unit, self.spec.input.unit, self.spec.output.unit)

    def case(self, number: int) -> str:
        """Name of a case."""
        return self.outcome.case_names[number]

    def on(self, case: str) -> str:
        """ " on I high" where there is more than one case; nothing otherwise."""
        return f" on {case}" if len(self.outcome.case_names) > 1 else ""

    def on_unstable(self) -> str:
        """ " on I high; I low", the first three cases that are not stable; nothing where there is but one."""
        bad = [self.case(int(k)) for k in np.flatnonzero(~self.candidate.stable)]
        more = f" and {len(bad) - 3} more" if len(bad) > 3 else ""
        return self.on("; ".join(bad[:3]) + more)


def worst_of(measure: Measure, values: FloatArray, bounds: tuple[Bound, ...]) -> tuple[float, int]:
    """The worst of a quantity over the cases (K,): value and case number.

    A case on which the quantity is absent because the loop is unstable is the worst there is only for its
    slack; here the worst present value is given. A quantity that is neither good nor bad by itself is worst
    on the side where the sheet bounds it, else where it is farthest from the nominal.
    """
    present = np.flatnonzero(~np.isnan(values))
    if present.size == 0:
        return math.nan, 0
    better = measure.row.better
    sides = {b.side for b in bounds if b.measure == measure}
    if better is None and len(sides) == 1:  # a floor is worst at the least value
        better = "max" if "min" in sides else "min"
    chosen = values[present]
    if better is None:
        base = values[0] if not math.isnan(values[0]) else chosen[0]
        with np.errstate(invalid="ignore"):
            at = int(np.nan_to_num(np.abs(chosen - base)).argmax())
    else:
        at = int(chosen.argmin() if better == "max" else chosen.argmax())
    return float(chosen[at]), int(present[at])
