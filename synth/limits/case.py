"""One plant case as the limits see it: its facts, the requirements judged on it, and how far T(0) is
forced."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from synth.loop.quantities import Side
from synth.model import Character, Plant, PlantCase, character_of
from synth.requirements import Bound, slack_of

# A requirement is called violated only when it is missed by more than this in slack: roots of the plant are
# known # to about 1e-8 where they are double, and what is said here must be true.
MARGIN = 1e-6

# Imaginary part, relative, below which a root is taken as real. A blurred double root fails it, and gives
# no bound.
REAL = 1e-9


@dataclass(frozen=True, slots=True)
class Finding:
    """What one limit says about one case.

    name, source  of the limit
    statement     the sentence, with its numbers
    facts         the numbers
    bound         the requirement it speaks against; None where the sheet asks for nothing of the kind
    best          the best value that requirement's quantity can have, in the table's unit; NaN where it is
    absent
    hopeless      True where no limit of that requirement would do
    """

    name: str
    source: str
    statement: str
    facts: dict[str, float | str]
    bound: Bound | None = None
    best: float = np.nan
    hopeless: bool = False

    @property
    def slack(self) -> float:
        """Slack of the requirement at its best; +inf without one."""
        if self.bound is None:
            return np.inf
        if self.hopeless:
            return -np.inf
        return float(slack_of(self.bound, np.array([self.best]))[0])

    @property
    def violated(self) -> bool:
        """Whether no compensator can meet the requirement."""
        return self.slack < -MARGIN


@dataclass(frozen=True, slots=True)
class FinalValue:
    """What every loop that meets the sheet must have at s = 0: low <= T(0) <= high, and because of what."""

    low: float
    high: float
    because: str


@dataclass(frozen=True)
class CaseView:
    """A plant case, its character, and the bounds judged on it."""

    case: PlantCase
    bounds: tuple[Bound, ...]
    reference_step: float
    facts: Character = field(init=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "facts", character_of(self.case.plant))

    @property
    def plant(self) -> Plant:
        """The plant of the case."""
        return self.case.plant

    def asked(self, quantity: str, side: Side) -> Iterator[Bound]:
        """The bounds on one side of a quantity."""
        return (b for b in self.bounds if b.measure.quantity == quantity and b.side == side)

    @property
    def real_zeros(self) -> list[float]:
        """Real zeros with Re > 0."""
        return [z.real for z in self.facts.right_zeros if abs(z.imag) <= REAL * abs(z)]

    @property
    def real_poles(self) -> list[float]:
        """Real poles with Re > 0."""
        return [p.real for p in self.facts.right_poles if abs(p.imag) <= REAL * abs(p)]

    @cached_property
    def final_value(self) -> FinalValue:
        """How far the plant and the sheet force T(0).

        An integrator of the plant makes it 1 in every stable loop; so does a sheet whose requirements are
        met only by a loop without static error. Otherwise abs(1 - T(0)) = abs(S(0)) is bounded by
        static_error, by sensitivity_peak, and by disturbance_residue over abs(P(0)); T(0) by final_value
        and complementary_peak.
        """
        dc = abs(self.facts.dc_gain)
        if self.facts.integrators:
            return FinalValue(1.0, 1.0, "an integrator of the plant makes the static error 0")
        for quantity in ("velocity_error", "tracking_area"):
            for bound in self.asked(quantity, "max"):
                if np.isfinite(bound.limit):
                    return FinalValue(1.0, 1.0, f"{bound.id} is met only without static error")
        if 0.0 < dc < np.inf:
            for quantity in ("disturbance_area", "disturbance_integral"):
                for bound in self.asked(quantity, "max"):
                    if np.isfinite(bound.limit):
                        return FinalValue(1.0, 1.0, f"{bound.id} is met only without static error")
        low, high, because = -np.inf, np.inf, "nothing on the sheet forces it"
        windows: list[tuple[float, float, str]] = []
        for bound in self.bounds:
            quantity, limit = bound.measure.quantity, bound.limit
            if bound.side == "max" and quantity == "static_error":
                windows.append((1.0 - limit / 100.0, 1.0 + limit / 100.0, bound.id))
            elif bound.side == "max" and quantity == "sensitivity_peak":
                windows.append((1.0 - limit, 1.0 + limit, bound.id))
            elif bound.side == "max" and quantity == "disturbance_residue" and 0.0 < dc < np.inf:
                windows.append((1.0 - limit / dc, 1.0 + limit / dc, bound.id))
            elif bound.side == "max" and quantity == "complementary_peak":
                windows.append((-limit, limit, bound.id))
            elif quantity == "final_value":
                windows.append(
                    (limit, np.inf, bound.id) if bound.side == "min" else (-np.inf, limit, bound.id)
                )
        for least, most, name in windows:
            if least > low or most < high:
                because = name if because.startswith("nothing") else f"{because}, {name}"
            low, high = max(low, least), min(high, most)
        return FinalValue(low, high, because)
