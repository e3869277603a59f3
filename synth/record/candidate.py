"""One candidate as a record holds it: settings, every quantity, what binds, poles, curves, rationale."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from synth.loop.closed_loop import Rational
from synth.loop.quantities import EVERY_QUANTITY
from synth.rationale import Scene, rationale, remarks, worst_of
from synth.record import curves
from synth.record.clean import clean
from synth.record.format import Candidate, Compensator, Mode
from synth.record.format import Verified as VerifiedPart
from synth.record.numbers import plain
from synth.record.poles import LoopPoles
from synth.requirements import Bound
from synth.search.outcome import Candidate as Found
from synth.search.outcome import Outcome
from synth.spec import Spec
from synth.structures import REGISTRY, SETTING_UNITS

if TYPE_CHECKING:
    from synth.verify import Verified

NEAR_CASES = 2  # further cases listed under a requirement
NEAR_SLACK = 0.1  # a slack below this comes near the limit


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


def candidate_part(
    spec: Spec, outcome: Outcome, index: int, opinion: Verified | None, poles: Sequence[LoopPoles]
) -> Candidate:
    """One candidate, in full. opinion : the second one; poles : of its loop on every case."""
    found = outcome.candidates[index]
    scene = Scene(spec, outcome, found)
    compensator = compensator_part(found.numerator, found.denominator)
    loops = Rational.of(list(found.numerator), list(found.denominator))
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
        "binding": binding_part(found.binding),
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
        "remarks": remarks(scene) if found.stable.all() else [],
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


def binding_part(binding: tuple[str, str] | None) -> Any:
    return None if binding is None else {"requirement": binding[0], "case": binding[1]}


def _verified(opinion: Verified | None) -> VerifiedPart | None:
    if opinion is None:
        return None
    return {
        "agrees": bool(opinion.agrees),
        "largest_relative_difference": plain(opinion.largest_relative_difference),
        "details": [str(d) for d in opinion.details],
    }
