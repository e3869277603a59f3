"""Facts about a candidate: numbers that the record's own compensator and plants give again. No words here.

Each function takes a scene and gives one fact, or None where there is nothing to say.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from synth.rationale.practice import poor_reach
from synth.rationale.scene import Scene
from synth.search.outcome import Candidate, Scan
from synth.search.ranking import COMPLEXITY
from synth.structures import REGISTRY


@dataclass(frozen=True, slots=True)
class Fact:
    """A kind, which has a sentence of its own, and the numbers it rests on."""

    kind: str
    data: dict[str, Any]


def phase(scene: Scene) -> Fact | None:
    """What the plant lacks at the crossover, and what C adds there; nominal case."""
    w = scene.nominal("crossover")
    if not math.isfinite(w):
        return None
    s = 1j * w
    plants = scene.outcome.plants
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        plant = complex(np.polyval(plants.numerator[0], s) / np.polyval(plants.denominator[0], s))
        plant *= complex(np.exp(-s * float(plants.dead_time[0])))
        c = complex(np.polyval(scene.candidate.numerator, s) / np.polyval(scene.candidate.denominator, s))
    if not all(v != 0.0 and cmath.isfinite(v) for v in (plant, c)):  # beyond the number range: no phase
        return None
    sign = low_frequency_sign(scene.candidate.numerator, scene.candidate.denominator)
    return Fact(
        "phase",
        {
            "crossover": w,
            "plant_phase": _degrees(plant * sign),
            "compensator_phase": _degrees(c * sign),
            "gain_alone_margin": _margin(plant * sign),
            "margin_there": _margin(plant * c),
        },
    )


def low_frequency_sign(numerator: Sequence[float], denominator: Sequence[float]) -> float:
    """Sign of C's gain at low frequency: -1 for a reverse-acting loop."""
    top = next((v for v in reversed(numerator) if v != 0.0), 1.0)
    bottom = next((v for v in reversed(denominator) if v != 0.0), 1.0)
    return math.copysign(1.0, top) * math.copysign(1.0, bottom)


def _degrees(value: complex) -> float:
    return math.degrees(math.atan2(value.imag, value.real))


def _margin(value: complex) -> float:
    """180° + phase, wrapped to (-180°, 180°]."""
    return _degrees(-value)


def statics(scene: Scene) -> Fact:
    """Who integrates, and what a step of the reference and of the disturbance leave."""
    den = np.asarray(scene.candidate.denominator)
    plant_den = scene.outcome.plants.denominator[0]
    static, _ = scene.worst("static_error")
    residue, _ = scene.worst("disturbance_residue")
    return Fact(
        "statics",
        {
            "integrators_of_compensator": _zeros_at_origin(den),
            "integrators_of_plant": _zeros_at_origin(plant_den),
            "static_error": static,
            "disturbance_residue": residue,
        },
    )


def _zeros_at_origin(polynomial: Any) -> int:
    nonzero = np.flatnonzero(np.asarray(polynomial))
    return 0 if nonzero.size == 0 else len(polynomial) - 1 - int(nonzero[-1])


def start(scene: Scene) -> Fact | None:
    """Where the search set out from."""
    found = scene.candidate
    return Fact("start", {"start": found.start, "source": found.source}) if found.start else None


def binding(scene: Scene) -> Fact | None:
    """The requirement with the least slack, and the next."""
    candidate = scene.candidate
    if candidate.binding is None:
        return None
    requirement, case = candidate.binding
    number, bound = scene.bound(requirement)
    k = scene.outcome.case_names.index(case)
    data: dict[str, Any] = {
        "requirement": requirement,
        "case": case,
        "value": float(scene.column(bound.measure)[k]),
        "limit": bound.limit,
        "slack": candidate.worst_slack,
    }
    worst = candidate.worst_by_requirement()
    others = [i for i in range(len(worst)) if i != number and math.isfinite(worst[i])]
    if others:
        following = min(others, key=lambda i: (float(worst[i]), i))
        data |= {"next": scene.spec.bounds[following].id, "next_slack": float(worst[following])}
    return Fact("binding", data)


def fragility(scene: Scene) -> Fact | None:
    """Worst slack when each tuned value alone moves by -10 % and +10 %."""
    moved = scene.candidate.fragility
    if not moved or not scene.candidate.meets_all:  # what falls short already is not made of glass
        return None
    return Fact("fragility", {f.parameter: [f.down, f.up] for f in moved})


def simpler(scene: Scene) -> Fact | None:
    """How near the structures inside this one come: the nearest of them."""
    own = REGISTRY.get(scene.candidate.structure)
    if own is None:  # a compensator of no structure that is known here
        return None
    scans = {s.structure: s for s in scene.outcome.scans}
    inside = [scans[name] for name in own.simpler if name in scans]
    if not inside:
        return None
    # the one that comes nearest; of equally near ones the richest
    best = max(inside, key=lambda s: (reached(scene, s), len(REGISTRY[s.structure].parameters)))
    closest = closest_of(scene, best)
    listed = any(c.structure == best.structure for c in scene.outcome.candidates)
    data: dict[str, Any] = {
        "structure": best.structure,
        "slack": reached(scene, best),
        "scan": best.exhaustive,
        "stabilises": best.best_slack >= 0.0 or listed or closest is not None,
    }
    data |= _little(scene, best, data["slack"])
    if closest is not None and closest.binding is not None:
        number, bound = scene.bound(closest.binding[0])
        k = scene.outcome.case_names.index(closest.binding[1])
        column = closest.measures.index(bound.measure)
        data |= {
            "requirement": bound.id,
            "value": float(closest.values[k, column]),
            "limit": bound.limit,
            "slack": float(closest.slack[k, number]),
        }
    return Fact("simpler", data)


def closest_of(scene: Scene, scan: Scan) -> Candidate | None:
    """The closest approach of a rejected structure."""
    for r in scene.outcome.rejections:
        if r.structure == scan.structure:
            return r.closest
    return None


def reached(scene: Scene, scan: Scan) -> float:
    """Largest worst slack that a structure is known to reach; -inf where it is not known to stabilise.

    The search steers by stand-ins (how far a response is from its band at the limit, say), so what it calls
    the slack of a point that falls short is none of the sheet's: there the scored candidates speak alone.
    """
    listed = [c.worst_slack for c in _of(scene.outcome.candidates, scan)]
    if listed and scene.spec.prefer is None:  # the list has its best, on every case there is by now
        return max(listed)
    found = [c.worst_slack for c in _scored(scene, scan)]
    return max([*found, scan.best_slack] if scan.best_slack >= 0.0 else found, default=-math.inf)


def _of(found: Iterable[Candidate], scan: Scan) -> list[Candidate]:
    """Those that the structure of the scan can be."""
    return [c for c in found if scan.structure in (c.structure, *c.also)]


def _scored(scene: Scene, scan: Scan) -> list[Candidate]:
    closest = [r.closest for r in scene.outcome.rejections if r.closest is not None]
    return _of([*scene.outcome.candidates, *closest], scan)


def _little(scene: Scene, scan: Scan, slack: float) -> dict[str, Any]:
    """The final value behind a structure's slack, where it is won by a loop that hardly follows."""
    for c in _scored(scene, scan):
        if abs(c.worst_slack - slack) < 0.01:
            other = Scene(scene.spec, scene.outcome, c)
            case = poor_reach(other)
            return {} if case is None else {"final_value": float(other.column("final_value")[case])}
    return {}


def richer(scene: Scene) -> Fact | None:
    """What the best structure with more tuned values would buy."""
    own = REGISTRY.get(scene.candidate.structure)
    if own is None:
        return None
    more = [s for s in scene.outcome.scans if len(REGISTRY[s.structure].parameters) > len(own.parameters)]
    if not more:
        return None
    best = max(more, key=lambda s: reached(scene, s))
    slack = reached(scene, best)
    if math.isinf(slack):
        return None
    return Fact(
        "richer",
        {
            "structure": best.structure,
            "slack": slack,
            "gain": slack - scene.candidate.worst_slack,
            "parameters": len(REGISTRY[best.structure].parameters),
            "own_parameters": len(own.parameters),
            "settled": best.settled,
            **_little(scene, best, slack),
        },
    )


def inside(scene: Scene) -> Fact | None:
    """How it does on the points inside the tolerance box."""
    if scene.candidate.interior_met is None or not scene.candidate.interior_total:
        return None
    return Fact("inside", {"met": scene.candidate.interior_met, "points": scene.candidate.interior_total})


def rank(scene: Scene) -> Fact | None:
    """Why it stands where it stands."""
    if not scene.candidate.ranked:
        return None
    candidate, prefer = scene.candidate, scene.spec.prefer
    handicap = COMPLEXITY * len(candidate.parameters)
    data: dict[str, Any] = {
        "ranked": candidate.ranked,
        "worst_slack": candidate.worst_slack,
        "parameters": len(candidate.parameters),
        "handicap": handicap,
        "score": candidate.worst_slack - handicap,
    }
    if prefer is not None:
        value, case = scene.worst(prefer.quantity)
        data |= {"value": value, "case": scene.case(case), "reserve": prefer.reserve}
    return Fact("rank", data)
