"""From a search's results to a record: everything a reader may ask for later."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import synth
from synth.rationale import Said, Scene, cautions, uncounted
from synth.rationale.closest import reason
from synth.record.candidate import binding_part, candidate_part
from synth.record.clean import clean
from synth.record.format import (
    RECORD_FORMAT,
    Link,
    Record,
    Rejected,
    Revision,
    Trade,
)
from synth.record.numbers import plain
from synth.record.poles import every_pole, rows_of
from synth.record.sheet import limit_part, plant_part, requirement_part, spec_part
from synth.requirements import Bound
from synth.search.outcome import Outcome
from synth.spec import Spec
from synth.structures import REGISTRY
from synth.wording.caveats import HARDWARE

if TYPE_CHECKING:
    from synth.limits import Limit
    from synth.verify import Verified


@dataclass(frozen=True, slots=True)
class Given:
    """All that goes into a record of one run.

    verified   one a candidate, None where there was no second opinion
    statement  the verdict in a sentence, with its facts
    """

    job: str
    created: str
    spec: Spec
    outcome: Outcome
    limits: Sequence[Limit]
    verified: Sequence[Verified | None]
    statement: Said
    predecessor: Link | None = None
    revision: Revision | None = None
    trade: Trade | None = None


def build(given: Given) -> Record:
    """The record of one run."""
    spec, outcome = given.spec, given.outcome
    violated = any(limit.violates for limit in given.limits)
    met = bool(outcome.candidates) and outcome.candidates[0].meets_all
    record: Record = {
        "format": RECORD_FORMAT,
        "tool": {"version": synth.__version__},
        "created": given.created,
        "job": given.job,  # type: ignore[typeddict-item]
        "spec": spec_part(spec),
        "predecessor": given.predecessor,
        "plant": plant_part(spec, outcome),
        "requirements": [requirement_part(b) for b in spec.bounds],
        "verdict": "met" if met else "impossible" if violated else "not met",
        "statement": {"text": given.statement[0], "facts": clean(given.statement[1])},
        "candidates": [],
        "rejected": [rejected_part(given, i) for i in range(len(outcome.rejections))],
        "limits": [limit_part(limit) for limit in given.limits],
        "cautions": [],
        "prices": [
            {
                "requirement": p.requirement,
                "structure": p.structure,
                "limit": p.limit,
                "needed": plain(p.needed),
                "cost": plain(p.cost),
                "parameters": dict(p.parameters),
            }
            for p in outcome.prices
        ],
        "trade": given.trade,
        "revision": given.revision,
        "search": {
            "seed": outcome.seed,
            "budget": outcome.budget,
            "evaluations": outcome.evaluations,
            "explored": outcome.explored,
            "seconds": round(outcome.seconds, 3),
            "interrupted": outcome.interrupted,
            "limited": outcome.limited,
        },
    }
    if outcome.candidates:
        rows = rows_of([(c.numerator, c.denominator) for c in outcome.candidates])
        every = every_pole(outcome.plants, rows, _counted_below(spec.bounds))
        record["candidates"] = [
            candidate_part(spec, outcome, i, _opinion(given, i), every[i])
            for i in range(len(outcome.candidates))
        ]
    record["cautions"] = _cautions(given, record)
    return cast(Record, clean(record))  # a number that numpy made is a number here


def _counted_below(bounds: Sequence[Bound]) -> float | None:
    """Up to which size poles count [rad/s] where every damping requirement says one; None: the usual rule."""
    sizes = [b.measure.below for b in bounds if b.measure.quantity == "damping_ratio"]
    given = [size for size in sizes if size is not None]
    return max(given) if given and len(given) == len(sizes) else None


def rejected_part(given: Given, index: int) -> Rejected:
    """A structure without a place in the list, and its closest approach."""
    spec, r = given.spec, given.outcome.rejections[index]
    part: Rejected = {
        "structure": r.structure,
        "reason": reason(spec, given.outcome, r),
        "closest": None,
        "scan": {
            "exhaustive": r.scan.exhaustive,
            "restarts": r.scan.restarts,
            "agreeing": r.scan.agreeing,
            "settled": r.scan.settled,
            "resolution": r.scan.resolution,
            "ceiling": r.scan.ceiling,
            "best_slack": plain(r.scan.best_slack),
        },
    }
    if r.closest is not None:
        slack = r.closest.worst_by_requirement()
        part["closest"] = {
            "structure": r.closest.structure,
            "parameters": dict(r.closest.parameters),
            "units": {p.key: p.unit for p in REGISTRY[r.closest.structure].parameters},
            "worst_slack": plain(r.closest.worst_slack),
            "binding": binding_part(r.closest.binding),
            "slack": {b.id: plain(s) for b, s in zip(spec.bounds, slack, strict=True)},
        }
    return part


def _cautions(given: Given, record: Record) -> list[str]:
    """Those of the first candidate; without one, the line on hardware."""
    if not given.outcome.candidates:
        return [HARDWARE]
    found = cautions.cautions(Scene(given.spec, given.outcome, given.outcome.candidates[0]))
    limits = [b.limit for b in given.spec.bounds if b.measure.quantity == "damping_ratio" and b.side == "min"]
    if limits:
        poles = [complex(*p) for ps in record["candidates"][0]["uncounted_poles"].values() for p in ps]
        found[-1:-1] = uncounted(poles, max(limits))
    return found


def _opinion(given: Given, index: int) -> Verified | None:
    return given.verified[index] if index < len(given.verified) else None
