"""The second opinion on a run's candidates: each on the nominal plant and on the case that holds it back."""

from __future__ import annotations

from collections.abc import Sequence

from synth.search.outcome import Candidate, Outcome
from synth.spec import Spec
from synth.verify import Verified, second_opinion, together

MOST = 5  # candidates that get one; the rest of a long list stands on the core alone


def opinions(spec: Spec, outcome: Outcome) -> Sequence[Verified | None]:
    """One a candidate; None beyond the first few and for a loop that is not stable."""
    return [
        _opinion(spec, outcome, candidate) if i < MOST else None
        for i, candidate in enumerate(outcome.candidates)
    ]


def _opinion(spec: Spec, outcome: Outcome, candidate: Candidate) -> Verified | None:
    cases = [0]
    if candidate.binding is not None:
        cases.append(outcome.case_names.index(candidate.binding[1]))
    found = []
    for k in dict.fromkeys(cases):
        if not candidate.stable[k]:
            continue
        case = outcome.cases[k]
        found.append(
            second_opinion(
                spec.form,
                case.parameters,
                case.plant,
                (candidate.numerator, candidate.denominator),
                candidate.measures,
                candidate.values[k],
                reference_step=spec.reference_step,
                case=case.name,
            )
        )
    return together(found) if found else None
