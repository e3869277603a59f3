"""Compensators as they are, scored on a sheet: the one a user brings, and those of an earlier record."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from synth.loop.arrays import FloatArray
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.model import PlantCases
from synth.requirements import slacks
from synth.search.objective import stacked
from synth.search.outcome import Candidate, Fragility, Outcome
from synth.spec import Spec
from synth.structures import REGISTRY

MOVE = 0.1  # by which each tuned value is moved to see how fragile a candidate is


def measures_of(spec: Spec) -> tuple[Measure, ...]:
    """Every quantity of the table and every requirement's own measure."""
    return tuple(dict.fromkeys((*EVERY_QUANTITY, *(b.measure for b in spec.bounds))))


def scored(
    spec: Spec,
    numerator: Sequence[float],
    denominator: Sequence[float],
    *,
    structure: str,
    parameters: Mapping[str, float] | None = None,
    also: tuple[str, ...] = (),
    start: str = "",
    fragile: bool = False,
) -> Candidate:
    """One compensator on every case of the sheet, untouched.

    fragile : also move each tuned value by 10 % either way (needs `parameters` of a known structure).
    """
    measures = measures_of(spec)
    compensator = Rational.of([float(v) for v in numerator], [float(v) for v in denominator])
    found = evaluate(spec.cases.rational, compensator, measures=measures, reference_step=spec.reference_step)
    card = slacks(spec.bounds, found.values, measures, spec.cases.names)
    worst = float(card.worst[0])
    binding = (spec.bounds[int(card.requirement[0])].id, spec.cases.names[int(card.case[0])])
    parameters = dict(parameters or {})
    return Candidate(
        structure=structure,
        also=also,
        parameters=parameters,
        numerator=tuple(float(v) for v in numerator),
        denominator=tuple(float(v) for v in denominator),
        meets_all=bool(card.meets_all[0]) and bool(found.stable[0].all()),
        measures=measures,
        values=found.values[0],
        approximate=found.approximate[0],
        stable=found.stable[0],
        slack=card.slack[0],
        worst_slack=worst,
        binding=binding if worst < 1.0 else None,
        start=start,
        source="",
        goal="",
        fragility=_fragility(spec, structure, parameters) if fragile else (),
    )


def _fragility(spec: Spec, name: str, parameters: Mapping[str, float]) -> tuple[Fragility, ...]:
    structure = REGISTRY.get(name)
    if structure is None or not parameters:
        return ()
    theta = np.array([parameters[p.key] for p in structure.parameters])
    moved: FloatArray = np.repeat(theta[None, :], 2 * len(theta), axis=0)
    for i in range(len(theta)):
        moved[2 * i, i] *= 1.0 - MOVE
        moved[2 * i + 1, i] *= 1.0 + MOVE
    needed = tuple(dict.fromkeys(b.measure for b in spec.bounds))
    found = evaluate(
        spec.cases.rational, structure.realise(moved), measures=needed, reference_step=spec.reference_step
    )
    worst = slacks(spec.bounds, found.values, needed, spec.cases.names).worst
    worst = np.where(found.stable.all(axis=1), worst, -np.inf)
    return tuple(
        Fragility(p.key, float(worst[2 * i]), float(worst[2 * i + 1]))
        for i, p in enumerate(structure.parameters)
    )


def with_worst_inside(spec: Spec, numerator: Sequence[float], denominator: Sequence[float]) -> Spec:
    """The sheet with one more case where this compensator fails inside the tolerance box, and worse than on
    the cases there are: its worst point."""
    inside = spec.cases.interior()
    if not len(inside):
        return spec
    needed = tuple(dict.fromkeys(b.measure for b in spec.bounds))
    compensator = Rational.of([float(v) for v in numerator], [float(v) for v in denominator])

    def least(cases: PlantCases) -> FloatArray:
        found = evaluate(cases.rational, compensator, measures=needed, reference_step=spec.reference_step)
        slack = slacks(spec.bounds, found.values, needed, cases.names).slack[0].min(axis=1)
        out: FloatArray = np.where(found.stable[0], slack, -np.inf)
        return out

    slack = least(inside)
    worst = int(slack.argmin())
    if slack[worst] >= min(0.0, float(least(spec.cases).min())):
        return spec
    plants = stacked(spec.cases.rational, inside.rational.rows(np.array([worst])))
    return replace(
        spec, cases=replace(spec.cases, cases=(*spec.cases.cases, inside.cases[worst]), rational=plants)
    )


def on_cases_of(spec: Spec, outcome: Outcome) -> Spec:
    """The sheet with every case the search examined."""
    return replace(spec, cases=replace(spec.cases, cases=outcome.cases, rational=outcome.plants))


def outcome_of(
    spec: Spec, candidates: Sequence[Candidate], seconds: float, interior_examined: int = 0
) -> Outcome:
    """The outcome of a run that searched nothing: these candidates, on the cases of the sheet."""
    met = bool(candidates) and candidates[0].meets_all
    return Outcome(
        candidates=tuple(candidates),
        rejections=(),
        scans=(),
        prices=(),
        verdict="met" if met else "not met",
        case_names=spec.cases.names,
        plants=spec.cases.rational,
        cases=spec.cases.cases,
        interior_examined=interior_examined,
        seed=spec.search.seed,
        budget=spec.search.budget,
        evaluations=len(candidates) * (len(spec.cases) + interior_examined),
        seconds=seconds,
        interrupted=False,
        limited=False,
    )
