"""Dead time: nothing happens before it is over. It bounds no rise time, which leaves it out."""

from __future__ import annotations

from collections.abc import Iterator

from synth.limits.case import CaseView, Finding
from synth.wording.figures import quantity

SOURCE = "causality: the output cannot answer a step of the reference before the dead time is over"


def findings(view: CaseView) -> Iterator[Finding]:
    """What the dead time of a case rules out."""
    delay = view.facts.dead_time
    if delay <= 0.0:
        return
    name = "dead time against settling and peak"
    statement = (
        f"The output stands still for the dead time of {quantity(delay, 's')}: it neither settles nor peaks "
        "before that, and the tracking area is no smaller."
    )
    facts: dict[str, float | str] = {"dead_time": delay}
    found = False
    for key in ("settling_time", "peak_time", "tracking_area"):
        for bound in view.asked(key, "max"):
            if key == "settling_time" and bound.measure.band >= 1.0:
                continue  # a band that holds 0: settled from the start
            found = True
            yield Finding(name, SOURCE, statement, facts, bound, delay)
    if not found:
        yield Finding(name, SOURCE, statement, facts)
