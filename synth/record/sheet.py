"""What a record holds of the sheet itself: its words, its plant, what it asks for, and the plant's limits.

Apart from what a search found, so that a command that searches nothing loads no search.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from synth.loop.closed_loop import Rational
from synth.record.clean import clean
from synth.record.format import Case, LimitPart, Plant, Requirement, SpecPart
from synth.record.plant_words import form_words
from synth.requirements import Bound
from synth.spec import Spec
from synth.wording.names import options_of

if TYPE_CHECKING:
    from synth.limits import Limit
    from synth.search.outcome import Outcome


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
