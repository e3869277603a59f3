"""The verdict in a sentence: met on how many cases, missed by what, or ruled out by which limit."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from synth.rationale.practice import backwards, poor_reach, reach_words
from synth.rationale.scene import Scene
from synth.search.outcome import Outcome
from synth.spec import Spec
from synth.wording.figures import count, percent, quantity
from synth.wording.names import limit_words, name_of

if TYPE_CHECKING:
    from synth.limits import Limit

Said = tuple[str, dict[str, Any]]


def verdict(spec: Spec, outcome: Outcome, violated: Sequence[Limit], *, subject: str | None = None) -> Said:
    """Text and facts of the verdict sentence.

    subject : who is judged, where it is not the first candidate of a search ("the compensator given").
    """
    if violated:
        return _impossible(spec, violated)
    first = outcome.candidates[0] if outcome.candidates else None
    if first is None:
        return _nothing(outcome)
    scene = Scene(spec, outcome, first)
    who = subject or f"the first candidate, {_article(first.structure)}"
    if first.meets_all:
        return _met(scene, who, subject is None)
    return _missed(scene, who if subject else f"the nearest, {_article(first.structure)},", subject is None)


def _article(structure: str) -> str:
    return f"a {structure}"


def _met(scene: Scene, who: str, searched: bool) -> Said:
    outcome, candidate = scene.outcome, scene.candidate
    where = "on the nominal plant"
    if len(outcome.case_names) > 1:
        where = f"on all {len(outcome.case_names)} cases examined"
    facts: dict[str, Any] = {"cases": len(outcome.case_names), "worst_slack": candidate.worst_slack}
    text = f"by {who}, {where}; {_least(scene)}."
    if outcome.interior_examined and candidate.interior_total:
        facts |= {"interior_met": candidate.interior_met, "interior_total": candidate.interior_total}
        text += f" Tried on {candidate.interior_total} points inside the tolerances as well."
    return text + _word_on_reach(scene), facts


def _least(scene: Scene) -> str:
    candidate = scene.candidate
    if candidate.binding is None or candidate.worst_slack >= 1.0:
        return "nothing holds it back: every slack is at its most, +100 %"
    requirement, case = candidate.binding
    _, bound = scene.bound(requirement)
    unit = scene.unit(bound.measure.quantity)
    value = float(scene.column(bound.measure)[scene.outcome.case_names.index(case)])
    return (
        f"the least slack, {percent(candidate.worst_slack)}, is in {name_of(bound.measure)}, "
        f"{quantity(value, unit)} of {limit_words(bound.side, bound.limit, unit)}{scene.on(case)}"
    )


def _missed(scene: Scene, who: str, searched: bool) -> Said:
    candidate = scene.candidate
    worst = candidate.worst_by_requirement()
    short = [int(i) for i in np.argsort(worst, kind="stable") if worst[i] < 0.0]
    facts = {
        "worst_slack": candidate.worst_slack,
        "short": {scene.spec.bounds[i].id: float(worst[i]) for i in short},
    }
    if not candidate.stable.all():
        return f"{who} does not stabilise the plant{scene.on_unstable()}.", facts
    parts = []
    for i in short[:3]:
        bound = scene.spec.bounds[i]
        k = int(candidate.slack[:, i].argmin())
        unit = scene.unit(bound.measure.quantity)
        value = float(scene.column(bound.measure)[k])
        has = "absent" if math.isnan(value) else quantity(value, unit)
        parts.append(
            f"{name_of(bound.measure)} is {has} where {limit_words(bound.side, bound.limit, unit)} is "
            f"asked{scene.on(scene.case(k))} ({percent(float(worst[i]))})"
        )
    more = f"; and {count(len(short) - 3, 'more requirement')}" if len(short) > 3 else ""
    text = f"{who} falls short: {'; '.join(parts)}{more}."
    if searched:
        text += _how_far_searched(scene.outcome)
    return text + _word_on_reach(scene), facts


def _how_far_searched(outcome: Outcome) -> str:
    open_ones = [s.structure for s in outcome.scans if not s.settled]
    if not open_ones:
        return (
            f" All {len(outcome.scans)} structures were searched until several starts agreed on one optimum."
        )
    return f" Not searched to the end: {', '.join(open_ones)}; a larger --budget may find more."


def _word_on_reach(scene: Scene) -> str:
    """Where the sheet bounds no static error: a loop that hardly follows has to be called so."""
    if words := backwards(scene):
        return f" The loop {words}."
    case = poor_reach(scene)
    if case is None:
        return ""
    return f" It {reach_words(float(scene.column('final_value')[case]))}{scene.on(scene.case(case))}."


def _nothing(outcome: Outcome) -> Said:
    text = "no compensator of the structures searched was found that stabilises every case."
    return text + _how_far_searched(outcome), {"structures": [s.structure for s in outcome.scans]}


def _impossible(spec: Spec, violated: Sequence[Limit]) -> Said:
    limit = violated[0]
    bound = next((b for b in spec.bounds if b.id == limit.violates), None)
    text = limit.statement.rstrip(".") + "."
    if bound is not None:
        unit = bound.measure.row.unit
        text += f" The sheet asks for {name_of(bound.measure)} {limit_words(bound.side, bound.limit, unit)}."
        if limit.relax:
            text += f" No compensator can; relax it to {quantity(float(limit.relax['to']), unit)} first."
    if len(violated) > 1:
        text += f" {count(len(violated) - 1, 'more limit is', 'more limits are')} violated, see below."
    return text, {"limit": limit.name, "violates": limit.violates, **limit.facts}
