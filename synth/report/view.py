"""A record as the report looks at it: requirements by id, numbers as floats, units filled in.

No new facts.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from synth.record import (
    Candidate,
    Judged,
    Record,
    Requirement,
    number,
    plant_unit,
    quantity_unit,
    requirement_name,
)
from synth.wording.figures import Unit, unit_for

SIGN = {"min": "≥", "max": "≤"}


@dataclass(frozen=True, slots=True)
class View:
    """One record, ready to be set in columns."""

    record: Record

    @property
    def requirements(self) -> dict[str, Requirement]:
        """By id, in the sheet's order."""
        return {r["id"]: r for r in self.record["requirements"]}

    def unit(self, requirement: Requirement) -> str:
        """Unit of a requirement, the plant's own ones filled in."""
        return plant_unit(requirement["unit"], self.record["spec"])

    def scale(self, requirement: Requirement, candidates: Sequence[Candidate] = ()) -> Unit:
        """The unit in which a limit and the values beside it read best."""
        limit = requirement["limit"]
        values = [limit] if limit else [self.judged(c, requirement)[0] for c in candidates]
        return unit_for(self.unit(requirement), values)

    def name(self, requirement_id: str) -> str:
        """A requirement in words; where a quantity is bounded on both sides, the side too."""
        requirement = self.requirements.get(requirement_id)
        if requirement is None:
            return requirement_id
        return requirement_name(requirement)

    def limit(self, requirement: Requirement) -> str:
        """ "≤ 10 %"."""
        return f"{SIGN[requirement['bound']]} {self.scale(requirement).full(requirement['limit'])}"

    def judged(self, candidate: Candidate, requirement: Requirement) -> tuple[float, str | None, float]:
        """Value and case where the slack is least, and that slack."""
        entry: Judged | None = candidate.get("judged", {}).get(requirement["id"])
        if entry is not None:
            return number(entry["value"]), entry["case"], number(entry["slack"])
        worst = candidate["quantities"].get("worst", {}).get(requirement["quantity"])
        value = number(worst["value"]) if isinstance(worst, dict) and "value" in worst else math.nan
        case = worst.get("case") if isinstance(worst, dict) else None
        return value, case, number(candidate["slack"].get(requirement["id"]))

    def worst(self, candidate: Candidate, quantity: str) -> float:
        """Worst value of a quantity over the cases, NaN where absent."""
        worst = candidate["quantities"].get("worst", {}).get(quantity)
        return number(worst.get("value")) if isinstance(worst, dict) else math.nan

    def nominal(self, candidate: Candidate, quantity: str) -> float:
        """Nominal value of a quantity, NaN where absent."""
        return number(candidate["quantities"].get("nominal", {}).get(quantity))

    def quantity_unit(self, quantity: str) -> str:
        """Unit of a quantity, the plant's own ones filled in."""
        return quantity_unit(quantity, self.record["spec"])

    @property
    def output_unit(self) -> str:
        """Unit of y and r; "" where the sheet names none."""
        output = self.record["spec"].get("output")
        return output["unit"] if output else ""

    @property
    def several_cases(self) -> bool:
        """Whether more than the nominal case was examined."""
        return len(self.record["plant"]["cases"]) > 1

    def candidate(self, rank: int) -> Candidate | None:
        """The candidate of that rank."""
        return next((c for c in self.record["candidates"] if c["rank"] == rank), None)


def order(candidate: Candidate) -> int:
    """Order of the compensator: the degree of its denominator."""
    return candidate.get("order", len(candidate["compensator"]["denominator"]) - 1)
