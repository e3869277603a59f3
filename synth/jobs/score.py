"""Score a compensator the user brings against a sheet; nothing is searched."""

from __future__ import annotations

import time
from pathlib import Path

import numpy as np

from synth.errors import Fault, InputError
from synth.jobs.finish import finish
from synth.jobs.options import Done, Options
from synth.jobs.scoring import outcome_of, scored, with_worst_inside
from synth.limits import assess
from synth.model import FormulaError, parse
from synth.rationale import GIVEN, verdict
from synth.record import place_for
from synth.spec import read_spec
from synth.structures import same_function


def score(spec_path: str | Path, compensator: str, options: Options | None = None) -> Done:
    """The record of one given compensator on every plant case of the sheet.

    compensator : a formula in s, such as "3.1*(0.8*s + 1)/(0.8*s)". InputError where it is none, has a dead
    time or is not proper.
    """
    options = options or Options()
    begun = time.monotonic()
    spec = read_spec(spec_path)
    numerator, denominator = coefficients(compensator)
    place = place_for(Path(spec_path), options.record) if options.keep else None
    names = same_function(np.array(numerator), np.array(denominator))
    structure, theta = names[0] if names else (None, None)
    parameters = (
        {p.key: float(v) for p, v in zip(structure.parameters, theta, strict=True)}
        if structure is not None and theta is not None
        else {}
    )
    inside = len(spec.cases.interior())
    spec = with_worst_inside(spec, numerator, denominator)
    candidate = scored(
        spec,
        numerator,
        denominator,
        structure=structure.name if structure is not None else GIVEN,
        parameters=parameters,
        also=tuple(s.name for s, _ in names[1:]),
        fragile=bool(parameters),
    )
    outcome = outcome_of(spec, [candidate], time.monotonic() - begun, inside)
    said = verdict(spec, outcome, (), subject="the compensator given")
    limits = assess(spec.cases, spec.bounds, spec.reference_step)
    return finish("score", spec, outcome, limits=limits, said=said, place=place)


def coefficients(text: str) -> tuple[list[float], list[float]]:
    """Numerator and denominator of a compensator written as a formula in s; every fault named."""
    try:
        formula = parse(text)
        top, bottom, delay = formula.rational({n: np.ones(1) for n in formula.names}, 1)
    except FormulaError as trouble:
        raise InputError([_fault(str(trouble), text)]) from None
    if formula.names:
        raise InputError([_fault(f"numbers are needed here, not names ({', '.join(formula.names)})", text)])
    if delay[0] != 0.0:
        raise InputError([_fault("a dead time belongs to the plant, not to the compensator", text)])
    numerator = [float(v) for v in np.trim_zeros(top[0], "f")]
    denominator = [float(v) for v in np.trim_zeros(bottom[0], "f")]
    if not numerator:
        raise InputError([_fault("the compensator is zero", text)])
    if len(numerator) > len(denominator):
        raise InputError([_fault("the compensator is not proper: a derivative needs its filter", text)])
    return numerator, denominator


def _fault(what: str, text: str) -> Fault:
    return Fault(what, key="--compensator", given=text, allowed='a proper ratio, such as "3.1*(s + 2)/s"')
