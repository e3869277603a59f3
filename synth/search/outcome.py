"""What a search is given and what it hands back: plain values, no behaviour beyond reading them.

K plant cases, R requirements, Q measures, P tuned parameters.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

from synth.loop.arrays import BoolArray, FloatArray
from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure

if TYPE_CHECKING:
    from synth.model.cases import PlantCase
    from synth.requirements import Bound
    from synth.spec import Spec
    from synth.structures import Structure

Budget = Literal["quick", "normal", "thorough"]
Verdict = Literal["met", "not met"]  # "impossible" is said by synth.limits, which proves it


@dataclass(frozen=True, slots=True)
class Aim:
    """What is improved, and what must be left while it is.

    measure  the quantity to improve; None aims at the worst slack itself
    sense    "min" or "max"
    reserve  worst slack that must be left
    without  requirement that is left out of the worst slack, by number (the price list frees one at a time)
    other    a second quantity held at a level of its own (the trade-off walks along that level)
    other_sense  "min": the second quantity is to stay at or below its level; "max": at or above it
    """

    measure: Measure | None = None
    sense: Literal["min", "max"] = "min"
    reserve: float = 0.0
    without: int | None = None
    other: Measure | None = None
    other_sense: Literal["min", "max"] = "min"


@dataclass(frozen=True, slots=True)
class Task:
    """What the search needs to know of a sheet.

    plants          K rows: the nominal first, then corners and operating cases
    cases           K of them, with names and parameters; () for plants that came without
    case_names      K names
    bounds          R requirements
    interior        points inside the tolerance box (rows), None where there is no box
    interior_cases  the same with names and parameters
    """

    plants: Rational
    case_names: tuple[str, ...]
    bounds: tuple[Bound, ...]
    structures: tuple[Structure, ...]
    reference_step: float = 1.0
    prefer: Aim | None = None
    cases: tuple[PlantCase, ...] = ()
    interior: Rational | None = None
    interior_cases: tuple[PlantCase, ...] = ()

    @classmethod
    def of(cls, spec: Spec, structures: tuple[str, ...] | None = None) -> Task:
        """The search's view of a sheet; `structures` overrides the sheet's own choice."""
        from synth.structures import REGISTRY, by_name

        names = structures or spec.search.structures
        box = any(r.low != r.high for r in spec.ranges)
        inside = spec.cases.interior() if box else None
        wish = spec.prefer
        return cls(
            plants=spec.cases.rational,
            case_names=tuple(c.name for c in spec.cases.cases),
            bounds=tuple(spec.bounds),
            structures=tuple(by_name(n) for n in names) if names else tuple(REGISTRY.values()),
            reference_step=spec.reference_step,
            prefer=Aim(wish.quantity, wish.sense, wish.reserve) if wish is not None else None,
            cases=tuple(spec.cases.cases),
            interior=inside.rational if inside is not None else None,
            interior_cases=tuple(inside.cases) if inside is not None else (),
        )


@dataclass(frozen=True, slots=True)
class Settings:
    """How hard to look. Budgets count evaluations (one compensator on one plant), so a seed fixes the result.

    time_limit  seconds; the one thing that makes a run depend on the machine, and the outcome says so
    study       storage of the outer exploration (any URL Optuna takes); never logged, it may hold a password
    """

    budget: Budget = "normal"
    seed: int = 0
    time_limit: float | None = None
    study: str | None = None


@dataclass(frozen=True, slots=True)
class Progress:
    """A look at a running search.

    stage        what it is doing, in a few words
    evaluations  loops scored so far; `expected` what the budget allows
    best         (structure, worst slack) of the best candidate so far on the cases it was judged on
    structures   best worst slack of each structure so far
    """

    stage: str
    evaluations: int
    expected: int
    seconds: float
    best: tuple[str, float] | None
    structures: dict[str, float]


@dataclass(frozen=True, slots=True)
class Fragility:
    """Worst slack when one tuned parameter alone moves by -10 % and +10 % (-inf: unstable)."""

    parameter: str
    down: float
    up: float


@dataclass(frozen=True, slots=True)
class Candidate:
    """One compensator as proposed: rounded values, scored on every case.

    structure, also  its name, and other structures that realise the same function
    parameters       key -> tuned value, SI, in the structure's order; rounded (what is printed is what was
                     scored)
    numerator, denominator  C(s), descending powers
    meets_all        every requirement, on every case (points inside the tolerance box that became cases
                     included)
    measures         Q: what `values` holds, every quantity of the table and every requirement's own measure
    values           (K, Q), NaN is absent; `approximate` same shape
    stable           (K,)
    slack            (K, R), +inf where a requirement is not judged on that case
    worst_slack      least of it; `binding` = (requirement id, case name)
    start, source    where the search set out from ("SIMC, closed-loop time 0.2 s"), and who published that
                     rule
    goal             what it is the best at ("worst slack", "least control_peak", "disturbance_integral")
    ranked           why it stands where it stands
    """

    structure: str
    also: tuple[str, ...]
    parameters: dict[str, float]
    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    meets_all: bool
    measures: tuple[Measure, ...]
    values: FloatArray
    approximate: BoolArray
    stable: BoolArray
    slack: FloatArray
    worst_slack: float
    binding: tuple[str, str] | None
    start: str
    source: str
    goal: str
    ranked: str = ""
    interior_met: int | None = None  # points inside the tolerance box on which it meets everything
    interior_total: int = 0
    fragility: tuple[Fragility, ...] = ()

    def worst_by_requirement(self) -> FloatArray:
        """(R,) least slack of each requirement over the cases."""
        out: FloatArray = self.slack.min(axis=0)
        return out


@dataclass(frozen=True, slots=True)
class Scan:
    """How a structure was searched.

    exhaustive   "exact" (the whole gain line), "dense" (a grid that covers the box, with its resolution) or
                 "search"
    restarts     polished starts; `agreeing` of them ended within 0.002 of the best
    resolution   of a dense scan, largest ratio between neighbouring values of a parameter
    ceiling      of a dense scan: the worst slack stays at or below it anywhere, by the slopes measured
                 between neighbours, doubled: an estimate, no proof; None where there is none. It is the
                 slack that the search steers by: of the same sign as the exact one
    settled      the optimum is taken as found
    best_slack   largest worst slack of what was scored as a candidate, exact and on all the cases; -inf where
                 nothing stabilised them all
    gain_intervals  of a one-parameter structure: the intervals of its gain that stabilise every case
    """

    structure: str
    exhaustive: Literal["exact", "dense", "search"]
    restarts: int
    agreeing: int
    settled: bool
    best_slack: float
    evaluations: int
    resolution: float | None = None
    gain_intervals: tuple[tuple[float, float], ...] = ()
    signs: tuple[int, ...] = (1, -1)
    ceiling: float | None = None


@dataclass(frozen=True, slots=True)
class Rejection:
    """A structure that is not among the candidates, and how near it came.

    short  requirement id -> slack, for those below zero at the closest approach
    """

    structure: str
    reason: str
    closest: Candidate | None
    short: dict[str, float]
    scan: Scan


@dataclass(frozen=True, slots=True)
class Price:
    """What one requirement would have to be for a structure to meet all the rest.

    cost  how far the limit moves, in units of itself (or of the quantity's own scale where the limit is 0)
    start, source  where the search for it set out from, as for a candidate
    """

    requirement: str
    structure: str
    limit: float
    needed: float
    cost: float
    parameters: dict[str, float]
    start: str
    source: str


@dataclass(frozen=True, slots=True)
class FrontPoint:
    """One point of a trade-off: both quantities on their worst case, and who attains them."""

    structure: str
    parameters: dict[str, float]
    first: float
    second: float
    worst_slack: float


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a search found. Nothing here is recomputed further up.

    cases, plants   every case examined: those of the task, then the points inside the box that became cases
    rejections      structures without a place in the list, nearest first
    scans           one a structure
    seconds         wall time; `stages` splits it
    """

    candidates: tuple[Candidate, ...]
    rejections: tuple[Rejection, ...]
    scans: tuple[Scan, ...]
    prices: tuple[Price, ...]
    verdict: Verdict
    case_names: tuple[str, ...]
    plants: Rational
    cases: tuple[PlantCase, ...]
    interior_examined: int
    seed: int
    budget: Budget
    evaluations: int
    seconds: float
    interrupted: bool
    limited: bool
    stages: dict[str, float] = field(default_factory=dict)
    explored: int = 0  # trials of the outer exploration


ProgressCall = Callable[[Progress], None]
StopCall = Callable[[], bool]
