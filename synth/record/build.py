"""From a search's results to a record: everything a reader may ask for later."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import numpy as np

import synth
from synth.loop.closed_loop import Rational
from synth.loop.quantities import EVERY_QUANTITY
from synth.rationale import Said, Scene, cautions, rationale, uncounted, worst_of
from synth.rationale.closest import reason
from synth.record import curves
from synth.record.format import (
    RECORD_FORMAT,
    Candidate,
    Case,
    Compensator,
    LimitPart,
    Link,
    Mode,
    Plant,
    Record,
    Rejected,
    Requirement,
    Revision,
    SpecPart,
    Trade,
)
from synth.record.format import (
    Verified as VerifiedPart,
)
from synth.record.numbers import plain
from synth.record.plant_words import form_words
from synth.record.poles import LoopPoles, every_pole, rows_of
from synth.requirements import Bound
from synth.search.outcome import Candidate as Found
from synth.search.outcome import Outcome
from synth.spec import Spec
from synth.structures import REGISTRY, SETTING_UNITS
from synth.wording.names import options_of

if TYPE_CHECKING:
    from synth.limits import Limit
    from synth.verify import Verified

NEAR_CASES = 2  # further cases listed under a requirement
NEAR_SLACK = 0.1  # a slack below this comes near the limit


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
        record["candidates"] = [candidate_part(given, i, every[i]) for i in range(len(outcome.candidates))]
    record["cautions"] = _cautions(given, record)
    return cast(Record, clean(record))  # a number that numpy made is a number here


def _counted_below(bounds: Sequence[Bound]) -> float | None:
    """Up to which size poles count [rad/s] where every damping requirement says one; None: the usual rule."""
    sizes = [b.measure.below for b in bounds if b.measure.quantity == "damping_ratio"]
    given = [size for size in sizes if size is not None]
    return max(given) if given and len(given) == len(sizes) else None


def spec_part(spec: Spec) -> SpecPart:
    """The sheet, verbatim and in the words a report needs."""
    prefer = spec.prefer
    return {
        "file": Path(spec.file).name,
        "title": spec.title,
        "revision": spec.revision,
        "sha256": spec.sha256 or hashlib.sha256(spec.text.encode()).hexdigest(),
        "text": spec.text,
        "reference_step": spec.reference_step,
        "valid_to": spec.valid_to,
        "input": {"name": spec.input.name, "unit": spec.input.unit},
        "output": {"name": spec.output.name, "unit": spec.output.unit},
        "prefer": None
        if prefer is None
        else {"quantity": prefer.quantity.quantity, "sense": prefer.sense, "reserve": prefer.reserve},
    }


def plant_part(spec: Spec, outcome: Outcome | None) -> Plant:
    """Every case that was examined, those found inside the tolerances included."""
    cases = outcome.cases if outcome is not None and outcome.cases else spec.cases.cases
    nominal = spec.cases.cases[0].plant
    part: Plant = {
        "cases": [case_part(c.name, c.kind, c.parameters, c.plant.rational()) for c in cases],
        "form": form_words(spec.form),
        "ranges": [{"name": r.name, "nominal": r.nominal, "low": r.low, "high": r.high} for r in spec.ranges],
        "poles": [[float(p.real), float(p.imag)] for p in nominal.poles()],
        "zeros": [[float(z.real), float(z.imag)] for z in nominal.zeros()],
        "interior_examined": outcome.interior_examined if outcome is not None else 0,
    }
    return part


def case_part(name: str, role: str, parameters: dict[str, float], plant: Rational) -> Case:
    """One plant case."""
    return {
        "name": name,
        "kind": "rational",
        "role": role,
        "parameters": dict(parameters),
        "numerator": [float(v) for v in np.trim_zeros(plant.numerator[0], "f")],
        "denominator": [float(v) for v in np.trim_zeros(plant.denominator[0], "f")],
        "dead_time": float(plant.dead_time[0]),
    }


def requirement_part(bound: Bound) -> Requirement:
    """One requirement, with the options that stand in the sheet."""
    part: Requirement = {
        "id": bound.id,
        "quantity": bound.measure.quantity,
        "bound": bound.side,
        "limit": bound.limit,
        "unit": bound.measure.row.unit,
        "cases": None if bound.cases is None else list(bound.cases),
    }
    options = options_of(bound.measure)
    if "band" in options:
        part["band"] = bound.measure.band
    if "below" in options:
        part["below"] = float(bound.measure.below or 0.0)
    if "span" in options:
        part["span"] = list(bound.measure.span)
    return part


def compensator_part(numerator: Sequence[float], denominator: Sequence[float]) -> Compensator:
    """The block that acts on e, with its factors."""
    top, bottom = np.trim_zeros(np.array(numerator), "f"), np.trim_zeros(np.array(denominator), "f")
    return {
        "domain": "s",
        "numerator": [float(v) for v in top],
        "denominator": [float(v) for v in bottom],
        "factors": {
            "gain": float(top[0] / bottom[0]),
            "zeros": _roots(top),
            "poles": _roots(bottom),
        },
    }


def _roots(polynomial: Any) -> list[list[float]]:
    found = [[float(r.real), float(r.imag)] for r in np.roots(polynomial).astype(complex)]
    return sorted(found, key=lambda r: (math.hypot(*r), r[0], -r[1]))


def candidate_part(given: Given, index: int, poles: Sequence[LoopPoles]) -> Candidate:
    """One candidate, in full. poles : of its loop on every case."""
    spec, outcome = given.spec, given.outcome
    found = outcome.candidates[index]
    scene = Scene(spec, outcome, found)
    compensator = compensator_part(found.numerator, found.denominator)
    loops = Rational.of(list(found.numerator), list(found.denominator))
    opinion = given.verified[index] if index < len(given.verified) else None
    part: Candidate = {
        "rank": index + 1,
        "structure": found.structure,
        "also": list(found.also),
        "parameters": dict(found.parameters),
        "settings": {},
        "units": {},
        "compensator": compensator,
        "order": len(compensator["denominator"]) - 1,
        "meets_all": found.meets_all,
        "worst_slack": plain(found.worst_slack),
        "binding": _binding(found.binding),
        "quantities": quantities(found, outcome, spec.bounds),
        "slack": {b.id: plain(s) for b, s in zip(spec.bounds, found.worst_by_requirement(), strict=True)},
        "judged": judged(scene),
        "closed_loop_poles": {},
        "uncounted_poles": {},
        "modes": [],
        "verified": _verified(opinion),
        "curves": {"step": {}, "root_locus": {}},
        "fragility": [
            {"parameter": f.parameter, "down": plain(f.down), "up": plain(f.up)} for f in found.fragility
        ],
        "start": found.start,
        "source": found.source,
        "goal": found.goal,
        "ranked": found.ranked,
        "approximate": sorted(
            {m.quantity for q, m in enumerate(found.measures) if found.approximate[:, q].any()}
        ),
        "interior": {"met": found.interior_met, "points": found.interior_total},
        "rationale": [{"text": text, "facts": clean(fact.data)} for text, fact in rationale(scene)],
    }
    _settings(part, found)
    _poles_and_curves(part, scene, loops, poles)
    return part


def _settings(part: Candidate, found: Found) -> None:
    structure = REGISTRY.get(found.structure)
    if structure is None or not found.parameters:
        return
    theta = np.array([found.parameters[p.key] for p in structure.parameters])
    part["settings"] = structure.settings(theta)
    units = {p.key: p.unit for p in structure.parameters}
    for form in part["settings"].values():
        units |= {name: SETTING_UNITS.get(name, "") for name in form}
    part["units"] = units


def _poles_and_curves(
    part: Candidate, scene: Scene, compensator: Rational, poles: Sequence[LoopPoles]
) -> None:
    """Poles on every case; the modes and the curves of the nominal one, where it is stable."""
    plants = scene.outcome.plants
    for name, found, stable in zip(scene.outcome.case_names, poles, scene.candidate.stable, strict=True):
        part["closed_loop_poles"][name] = found.poles
        if stable:
            part["uncounted_poles"][name] = _with_conjugates([m for m in found.modes if not m["counted"]])
    if not scene.candidate.stable[0]:
        return
    part["modes"] = poles[0].modes
    loop = curves.one_loop(plants, compensator)
    slowest = scene.nominal("decay_rate")
    part["curves"] = {
        "step": curves.step(loop, scene.nominal("settling_time"), slowest),
        "loop": curves.loop_gain(loop, scene.nominal("crossover")),
        "root_locus": curves.locus(loop, poles[0].poles),
    }


def _with_conjugates(modes: list[Mode]) -> list[list[float]]:
    out = []
    for mode in modes:
        re, im = mode["pole"]
        out.extend([[re, im], [re, -im]] if im else [[re, im]])
    return out


def quantities(found: Found, outcome: Outcome, bounds: tuple[Bound, ...]) -> dict[str, dict[str, Any]]:
    """Every quantity of the table: on the nominal case, and its worst with the case that gives it."""
    nominal: dict[str, Any] = {}
    worst: dict[str, Any] = {}
    for measure in EVERY_QUANTITY:
        column = found.values[:, found.measures.index(measure)]
        value, case = worst_of(measure, column, bounds)
        nominal[measure.quantity] = plain(column[0])
        name = None if math.isnan(value) else outcome.case_names[case]
        worst[measure.quantity] = {"value": plain(value), "case": name}
    return {"nominal": nominal, "worst": worst}


def judged(scene: Scene) -> dict[str, Any]:
    """Each requirement where its slack is least, and the cases that come near."""
    candidate = scene.candidate
    out: dict[str, Any] = {}
    for r, bound in enumerate(scene.spec.bounds):
        slack, values = candidate.slack[:, r], scene.column(bound.measure)
        order = [int(k) for k in np.argsort(slack, kind="stable") if slack[k] < np.inf]
        if not order:
            out[bound.id] = {"value": None, "case": None, "slack": None, "near": []}
            continue
        least = slack[order[0]]
        near = [k for k in order[1 : NEAR_CASES + 1] if slack[k] <= min(least, 0.0) + NEAR_SLACK]
        out[bound.id] = {
            "value": plain(values[order[0]]),
            "case": scene.case(order[0]),
            "slack": plain(least),
            "near": [
                {"case": scene.case(k), "value": plain(values[k]), "slack": plain(slack[k])} for k in near
            ],
        }
    return out


def _binding(binding: tuple[str, str] | None) -> Any:
    return None if binding is None else {"requirement": binding[0], "case": binding[1]}


def _verified(opinion: Verified | None) -> VerifiedPart | None:
    if opinion is None:
        return None
    return {
        "agrees": bool(opinion.agrees),
        "largest_relative_difference": plain(opinion.largest_relative_difference),
        "details": [str(d) for d in opinion.details],
    }


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
            "binding": _binding(r.closest.binding),
            "slack": {b.id: plain(s) for b, s in zip(spec.bounds, slack, strict=True)},
        }
    return part


def limit_part(limit: Limit) -> LimitPart:
    """A limit of the plant."""
    return {
        "name": limit.name,
        "statement": limit.statement,
        "source": limit.source,
        "violates": limit.violates,
        "relax": clean(dict(limit.relax)) if limit.relax else None,
        "facts": clean(dict(limit.facts)),
    }


def _cautions(given: Given, record: Record) -> list[str]:
    """Those of the first candidate; without one, the line on hardware."""
    if not given.outcome.candidates:
        return [cautions.HARDWARE]
    found = cautions.cautions(Scene(given.spec, given.outcome, given.outcome.candidates[0]))
    limits = [b.limit for b in given.spec.bounds if b.measure.quantity == "damping_ratio" and b.side == "min"]
    if limits:
        poles = [complex(*p) for ps in record["candidates"][0]["uncounted_poles"].values() for p in ps]
        found[-1:-1] = uncounted(poles, max(limits))
    return found


def clean(value: Any) -> Any:
    """Facts as JSON: arrays to lists, NaN to null, infinities to words."""
    if isinstance(value, dict):
        return {str(k): clean(v) for k, v in value.items()}
    if isinstance(value, list | tuple | np.ndarray):
        return [clean(v) for v in value]
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return plain(float(value))
    return value if value is None or isinstance(value, str) else str(value)
