"""The plant was revised: what to do about the compensator in service, and the evidence for it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from synth.rationale.facts import reached
from synth.rationale.scene import Scene
from synth.rationale.sentences import said_binding
from synth.search.outcome import Candidate, Outcome
from synth.spec import Spec
from synth.wording.figures import change, count, percent, quantity
from synth.wording.names import name_of, parameter_name

Advice = Literal["keep", "retune", "restructure", "relax"]
GIVEN = "given"  # the structure of a compensator that a user brought and that is none of the known ones


@dataclass(frozen=True, slots=True)
class Decision:
    """The advice, the number of the candidate that would take over (None: none), how far its values move,
    and why.

    evidence : sentences, each with its facts.
    """

    advice: Advice
    successor: int | None
    moved: dict[str, list[float]] | None
    evidence: list[tuple[str, dict[str, Any]]]


def decide(
    spec: Spec,
    outcome: Outcome,
    untouched: Candidate,
    *,
    slack_before: float,
    parameters: Mapping[str, float],
) -> Decision:
    """Advice for one compensator; the evidence calls it "it", the record says beside it whom that means.

    untouched     it, as it is, scored on the new plant
    slack_before  its worst slack on the old plant, NaN where unknown
    parameters    its tuned values
    """
    evidence = [_before_and_after(spec, outcome, untouched, slack_before)]
    if untouched.meets_all:
        return Decision("keep", None, None, [*evidence, *_could_be_better(outcome, untouched)])
    met = [i for i, c in enumerate(outcome.candidates) if c.meets_all]
    same = [i for i in met if outcome.candidates[i].structure == untouched.structure]
    if same:
        new = outcome.candidates[same[0]]
        moved = {k: [float(parameters[k]), float(v)] for k, v in new.parameters.items() if k in parameters}
        return Decision("retune", same[0], moved, [*evidence, _moves(new, moved, same[0])])
    evidence.append(_own_structure(spec, outcome, untouched))
    if met:
        new = outcome.candidates[met[0]]
        text = (
            f"A {new.structure} meets everything: candidate {met[0] + 1}, slack {percent(new.worst_slack)}, "
            f"{count(len(new.parameters), 'tuned value')}."
        )
        facts = {"rank": met[0] + 1, "worst_slack": new.worst_slack}
        return Decision("restructure", met[0], None, [*evidence, (text, facts)])
    return Decision(
        "relax", 0 if outcome.candidates else None, None, [*evidence, _nothing_does(spec, outcome)]
    )


def _before_and_after(
    spec: Spec, outcome: Outcome, untouched: Candidate, before: float
) -> tuple[str, dict[str, Any]]:
    known = not math.isnan(before)
    was = f" (its slack on the old plant was {percent(before)})" if known else ""
    facts: dict[str, Any] = {"before": before, "after": untouched.worst_slack}
    scene = Scene(spec, outcome, untouched)
    if not untouched.stable.all():
        return f"Untouched, it is unstable{scene.on_unstable()}{was}.", facts
    if untouched.meets_all:
        how = "still meets" if before >= 0.0 else "meets"
    else:
        how = "no longer meets" if before >= 0.0 else "still does not meet" if known else "does not meet"
    return f"Untouched, it {how} everything{was}. {said_binding(scene)}", facts


def _could_be_better(outcome: Outcome, untouched: Candidate) -> list[tuple[str, dict[str, Any]]]:
    if not outcome.candidates or not outcome.candidates[0].meets_all:
        return []
    first = outcome.candidates[0]
    gain = first.worst_slack - untouched.worst_slack
    if gain <= 0.0:
        return []
    slack = percent(first.worst_slack)
    text = f"A new search would reach {slack} with a {first.structure}: {percent(gain)} on top."
    return [(text, {"worst_slack": first.worst_slack, "gain": gain})]


def _moves(new: Candidate, moved: dict[str, list[float]], index: int) -> tuple[str, dict[str, Any]]:
    slack = percent(new.worst_slack)
    text = f"A {new.structure} with other values does it: candidate {index + 1}, slack {slack}"
    ratios = {key: now / old for key, (old, now) in moved.items() if old and now / old > 0.0}
    if ratios:
        key = max(ratios, key=lambda k: abs(math.log(ratios[k])))
        text += f". {parameter_name(key).capitalize()} moves most: {change(*moved[key])}"
    facts = {"rank": index + 1, "worst_slack": new.worst_slack, "moved": moved}
    return f"{text}.", facts


def _own_structure(spec: Spec, outcome: Outcome, untouched: Candidate) -> tuple[str, dict[str, Any]]:
    scan = next((s for s in outcome.scans if s.structure == untouched.structure), None)
    if scan is None:
        own = "Its form" if untouched.structure == GIVEN else f"A {untouched.structure}"
        return f"{own} is not among the structures searched, so other values for it were not tried.", {}
    best = reached(Scene(spec, outcome, untouched), scan)
    sure = "" if scan.settled else ", as far as it was searched"
    text = (
        f"Retuned, a {untouched.structure} comes no nearer than a slack of {percent(best)}{sure}."
        if math.isfinite(best)
        else f"Retuned, a {untouched.structure} was not found to stabilise every case{sure}."
    )
    return text, {"best_slack": best}


def _nothing_does(spec: Spec, outcome: Outcome) -> tuple[str, dict[str, Any]]:
    if not outcome.candidates:
        return "Nothing that was searched meets the sheet on the revised plant.", {}
    first = outcome.candidates[0]
    facts: dict[str, Any] = {"worst_slack": first.worst_slack}
    text = (
        f"Nothing that was searched meets the sheet on the revised plant; the nearest is a "
        f"{first.structure} with a slack of {percent(first.worst_slack)}."
    )
    if outcome.prices:
        price, scene = outcome.prices[0], Scene(spec, outcome, first)
        bound = scene.bound(price.requirement)[1]
        unit = scene.unit(bound.measure.quantity)
        text += (
            f" The cheapest single step: {name_of(bound.measure)} {quantity(price.limit, unit)} → "
            f"{quantity(price.needed, unit)}, and a {price.structure} does it."
        )
        facts |= {"requirement": price.requirement, "limit": price.limit, "needed": price.needed}
    return text, facts
