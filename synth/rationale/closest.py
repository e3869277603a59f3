"""Why a structure is not on offer: what its closest approach falls short in, and how surely."""

from __future__ import annotations

import math

from synth.rationale.scene import Scene
from synth.search.outcome import Outcome, Rejection, Scan
from synth.spec import Spec
from synth.wording.figures import count, figure, percent, quantity
from synth.wording.names import limit_words, name_of

LISTED = 2  # requirements named; the rest is counted


def reason(spec: Spec, outcome: Outcome, rejection: Rejection) -> str:
    """One sentence on a rejected structure."""
    closest = rejection.closest
    if closest is None or not rejection.short:
        text = rejection.reason
        return text[:1].upper() + text[1:].rstrip(".") + "."
    scene = Scene(spec, outcome, closest)
    worst = sorted(rejection.short, key=lambda name: rejection.short[name])
    parts = []
    for name in worst[:LISTED]:
        number, bound = scene.bound(name)
        k = int(closest.slack[:, number].argmin())
        unit = scene.unit(bound.measure.quantity)
        value = float(scene.column(bound.measure)[k])
        shown = "absent" if math.isnan(value) else quantity(value, unit)
        parts.append(f"{name_of(bound.measure)} {shown} of {limit_words(bound.side, bound.limit, unit)}")
    more = f", {count(len(worst) - LISTED, 'more requirement')} short" if len(worst) > LISTED else ""
    slack = percent(closest.worst_slack)
    alias = f"As a {closest.structure}: slack" if closest.structure != rejection.structure else "Slack"
    return f"{alias} {slack} at best: {'; '.join(parts)}{more} ({surely(rejection.scan)})."


def surely(scan: Scan) -> str:
    """How a structure was searched, in a few words."""
    if scan.exhaustive == "exact":
        return "the whole gain line, both signs"
    if scan.exhaustive == "dense":
        fine = f", neighbours {figure(scan.resolution, 3)} apart" if scan.resolution else ""
        return f"a dense scan{fine}{_between(scan.ceiling)}"
    agreed = f"{scan.agreeing} of {count(scan.restarts, 'start')} agree"
    return agreed if scan.settled else f"{agreed}; not searched to the end"


def _between(ceiling: float | None) -> str:
    """What the scan says of the settings that it did not look at, where it says anything."""
    if ceiling is None or ceiling >= 0.0:
        return ""
    return "; judged by the slopes seen there, none in between meets the sheet"
