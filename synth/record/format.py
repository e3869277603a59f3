"""The fields of a record, written down once: the types below are what is written and what reading checks.

A record is plain JSON. Numbers that JSON cannot write stand as "inf" and "-inf"; what is absent is null.
Fields that are not required here came later or depend on the run; a reader must do without them. Fields
nobody knows are kept and ignored, so that an older program can read what a newer one of the same format
wrote.
"""

from __future__ import annotations

from typing import Any, Literal, NotRequired, TypedDict

RECORD_FORMAT = "synth-record/1"
ADOPTION_FORMAT = "synth-adoption/1"
CHECK_FORMAT = "synth-check/1"

Number = float | None | Literal["inf", "-inf"]
Pole = list[float]  # [re, im]


class Tool(TypedDict):
    version: str


class Signal(TypedDict):
    name: str
    unit: str


class Preference(TypedDict):
    quantity: str
    sense: Literal["min", "max"]
    reserve: float


class SpecPart(TypedDict):
    file: str
    title: str
    revision: str
    sha256: str
    text: str
    reference_step: NotRequired[float]
    valid_to: NotRequired[float | None]
    input: NotRequired[Signal]
    output: NotRequired[Signal]
    prefer: NotRequired[Preference | None]


class Link(TypedDict):
    """Another file, known by its content."""

    file: str
    sha256: str


class Case(TypedDict):
    name: str
    kind: str
    parameters: dict[str, float]
    numerator: list[float]
    denominator: list[float]
    dead_time: float
    role: NotRequired[str]  # nominal, corner, operating, interior


class Range(TypedDict):
    """A parameter in SI; low = high = nominal where it has no tolerance."""

    name: str
    nominal: float
    low: float
    high: float


class Plant(TypedDict):
    cases: list[Case]
    form: NotRequired[str]
    ranges: NotRequired[list[Range]]
    poles: NotRequired[list[Pole]]  # of the nominal case
    zeros: NotRequired[list[Pole]]
    interior_examined: NotRequired[int]


class Requirement(TypedDict):
    id: str
    quantity: str
    bound: Literal["min", "max"]
    limit: float
    unit: str
    cases: list[str] | None
    band: NotRequired[float]
    below: NotRequired[float]
    span: NotRequired[list[float]]


class Binding(TypedDict):
    requirement: str
    case: str


class Near(TypedDict):
    case: str
    value: Number
    slack: Number


class Judged(TypedDict):
    """One requirement on the case where it has the least slack, and the cases that come near it."""

    value: Number
    case: str | None
    slack: Number
    near: list[Near]


class Mode(TypedDict):
    """A closed-loop pole (a pair once, upper half), its share of the step, whether it is counted."""

    pole: Pole
    share: Number
    counted: bool


class Factors(TypedDict):
    """C(s) = gain · Π(s - z) / Π(s - p)."""

    gain: float
    zeros: list[Pole]
    poles: list[Pole]


class Compensator(TypedDict):
    domain: Literal["s"]
    numerator: list[float]
    denominator: list[float]
    factors: NotRequired[Factors]
    dead_time: NotRequired[float]


class Verified(TypedDict):
    agrees: bool
    largest_relative_difference: Number
    details: NotRequired[list[str]]


class Moved(TypedDict):
    """Worst slack when this tuned value alone moves by -10 % and by +10 %."""

    parameter: str
    down: Number
    up: Number


class Sentence(TypedDict):
    text: str
    facts: dict[str, Any]


class StepCurve(TypedDict, total=False):
    """y and u of a unit reference step over t [s], as long as one another; empty for a loop that is not
    stable."""

    case: str
    t: list[Number]
    y: list[Number]
    u: list[Number]


class LoopCurve(TypedDict, total=False):
    w: list[Number]
    gain_db: list[Number]
    phase_deg: list[Number]


class Branch(TypedDict):
    re: list[Number]
    im: list[Number]


class LocusCurve(TypedDict, total=False):
    """Closed-loop poles as a parameter goes from 0 up: branches, or with dead time points."""

    parameter: str
    closed: list[Pole]
    poles: list[Pole]
    zeros: list[Pole]
    branches: list[Branch]
    points: list[Pole]
    gain: list[Number]


class Curves(TypedDict):
    step: StepCurve
    root_locus: LocusCurve
    loop: NotRequired[LoopCurve]


class Candidate(TypedDict):
    rank: int
    structure: str
    parameters: dict[str, float]
    settings: dict[str, dict[str, float]]
    compensator: Compensator
    meets_all: bool
    worst_slack: Number
    binding: Binding | None
    quantities: dict[str, dict[str, Any]]
    slack: dict[str, Number]
    closed_loop_poles: dict[str, list[Pole]]
    uncounted_poles: dict[str, list[Pole]]
    verified: Verified | None
    curves: Curves
    rationale: list[Sentence]
    also: NotRequired[list[str]]
    units: NotRequired[dict[str, str]]
    order: NotRequired[int]
    judged: NotRequired[dict[str, Judged]]
    modes: NotRequired[list[Mode]]
    fragility: NotRequired[list[Moved]]
    start: NotRequired[str]
    source: NotRequired[str]
    goal: NotRequired[str]
    ranked: NotRequired[str]
    remarks: NotRequired[list[str]]  # what an engineer would not build it for
    approximate: NotRequired[list[str]]
    interior: NotRequired[dict[str, int | None]]


class Closest(TypedDict):
    structure: NotRequired[str]
    parameters: dict[str, float]
    worst_slack: Number
    binding: Binding | None
    slack: dict[str, Number]
    units: NotRequired[dict[str, str]]


class Rejected(TypedDict):
    structure: str
    reason: str
    closest: Closest | None
    scan: NotRequired[dict[str, Any]]


class LimitPart(TypedDict):
    name: str
    statement: str
    source: str
    violates: str | None
    relax: NotRequired[dict[str, Any] | None]
    facts: NotRequired[dict[str, Any]]


class Change(TypedDict):
    """What differs from the predecessor: a parameter (of one operating case, maybe), the formula, a limit."""

    what: str
    case: str | None
    old: Any
    new: Any


class Earlier(TypedDict):
    rank: int | None
    structure: str
    meets_all: bool
    worst_slack: Number
    binding: Binding | None
    slack: NotRequired[dict[str, Number]]
    was: NotRequired[Number]


class Revision(TypedDict):
    advice: Literal["keep", "retune", "restructure", "relax"]
    changes: list[Change]
    adopted: Earlier | None
    earlier: list[Earlier]
    moved: dict[str, list[float]] | None
    about: NotRequired[str]  # whom the advice speaks of: the adopted one, or the earlier first candidate
    evidence: NotRequired[list[Sentence]]
    successor: NotRequired[int | None]  # rank of the candidate that takes its place
    adoption: NotRequired[Link | None]


class PricePart(TypedDict):
    requirement: str
    structure: str
    limit: float
    needed: Number
    cost: Number
    parameters: dict[str, float]


class FrontPart(TypedDict):
    structure: str
    parameters: dict[str, float]
    first: Number
    second: Number
    worst_slack: Number


class Trade(TypedDict):
    quantities: list[str]
    points: list[FrontPart]


class SearchPart(TypedDict):
    seed: int
    evaluations: int
    seconds: float
    interrupted: bool
    budget: NotRequired[str]
    limited: NotRequired[bool]
    explored: NotRequired[int]


class Record(TypedDict):
    format: str
    tool: Tool
    created: str
    spec: SpecPart
    predecessor: Link | None
    plant: Plant
    requirements: list[Requirement]
    verdict: Literal["met", "not met", "impossible"]
    candidates: list[Candidate]
    rejected: list[Rejected]
    limits: list[LimitPart]
    cautions: list[str]
    revision: Revision | None
    search: SearchPart
    job: NotRequired[Literal["propose", "rerun", "score"]]
    statement: NotRequired[Sentence]  # the verdict in a sentence
    prices: NotRequired[list[PricePart]]
    trade: NotRequired[Trade | None]


class Adoption(TypedDict):
    format: str
    created: str
    record: Link
    rank: int
    structure: str
    parameters: dict[str, float]
    units: NotRequired[dict[str, str]]
    compensator: Compensator
    verdict: str
    note: str | None


class Check(TypedDict):
    """What `check` hands out: a plant, its cases and its limits. Never stored."""

    format: str
    tool: Tool
    created: str
    spec: SpecPart
    plant: Plant
    requirements: list[Requirement]
    limits: list[LimitPart]
    cautions: list[str]
