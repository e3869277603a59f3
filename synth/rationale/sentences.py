"""Sentences from facts: one template a kind of fact, every number in them from the fact."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

from synth.rationale import facts
from synth.rationale.facts import Fact
from synth.rationale.practice import reach_words
from synth.rationale.scene import Scene
from synth.wording.figures import count, figure, percent, quantity
from synth.wording.names import limit_words, name_of, parameter_name

MOVED = "10 %"  # by which each tuned value is moved in the fragility fact
_STARTS = {  # the search's own starts, in words that need no look into the program
    "design coordinates": "a guess of crossover and phase lead",
    "crossover with free corners": "a guess of crossover and corner frequencies",
    "wide log-uniform": "a wide random guess of all its values",
}


def rationale(scene: Scene) -> list[tuple[str, Fact]]:
    """Every sentence there is to say on a candidate, each with the fact behind it, in reading order."""
    found = (make(scene) for make in _ORDER)
    return [(_TEMPLATES[fact.kind](fact, scene), fact) for fact in found if fact is not None]


def _rank(fact: Fact, scene: Scene) -> str:
    d = fact.data
    words, _, further = str(d["ranked"]).rstrip(".").partition("; ")
    prefer = scene.spec.prefer
    if not scene.candidate.meets_all:
        words = f"by how near it comes, a worst slack of {percent(d['worst_slack'])}"
    elif words.startswith("worst slack"):
        words = (
            f"a worst slack of {percent(d['worst_slack'])}, less {percent(d['handicap']).lstrip('+')} for "
            f"{count(d['parameters'], 'tuned value')}: {percent(d['score'])}"
        )
    elif prefer is not None:
        unit = scene.unit(prefer.quantity.quantity)
        words = f"by {name_of(prefer.quantity)}, {quantity(d['value'], unit)}{scene.on(d['case'])}"
        words += f", with {percent(d['reserve']).lstrip('+')} of slack kept" if d["reserve"] else ""
    return f"Its place in the list: {words}{'; ' if further else ''}{further}."


def _phase(fact: Fact, scene: Scene) -> str:
    d = fact.data
    alone, there, added = d["gain_alone_margin"], d["margin_there"], d["compensator_phase"]
    where = f"At the crossover, {figure(d['crossover'], 3)} rad/s,"
    end = f"which leaves {figure(there, 3)}° of phase margin there."
    if abs(added) < 0.5:
        return f"{where} gain alone has {figure(alone, 3)}° of phase margin; C changes that by under 0.5°."
    if added > 0.0:
        lack = f"would have {figure(alone, 3)}°" if alone > 0.0 else f"is {figure(-alone, 3)}° short"
        return f"{where} gain alone {lack}; C adds {figure(added, 3)}° of lead, {end}"
    return f"{where} gain alone would have {figure(alone, 3)}°; C costs {figure(-added, 3)}° of it, {end}"


def _statics(fact: Fact, scene: Scene) -> str:
    d = fact.data
    own, plant = d["integrators_of_compensator"], d["integrators_of_plant"]
    left = f"{figure(d['disturbance_residue'], 3)} {scene.unit('disturbance_residue')}"
    if own and d["static_error"] == 0.0:
        return (
            "C integrates: a steady reference is reached without error and a steady disturbance leaves none."
        )
    if plant and d["static_error"] == 0.0:
        return (
            "The plant integrates, so a steady reference is reached without error; C does not, so a steady "
            f"disturbance at the plant's input leaves {left}."
        )
    return (
        f"Nothing in the loop integrates: {figure(d['static_error'], 3)} % of the reference is not "
        f"reached, and a steady disturbance leaves {left}."
    )


def _start(fact: Fact, scene: Scene) -> str:
    source = f" ({fact.data['source']})" if fact.data["source"] else ""
    start = _STARTS.get(fact.data["start"], fact.data["start"])
    return f"The search came to it from {start}{source}."


def said_binding(scene: Scene) -> str:
    """The sentence on what holds a candidate back; empty where nothing does."""
    fact = facts.binding(scene)
    return _binding(fact, scene) if fact is not None else ""


def _binding(fact: Fact, scene: Scene) -> str:
    d = fact.data
    _, bound = scene.bound(d["requirement"])
    unit = scene.unit(bound.measure.quantity)
    if d["slack"] >= 1.0:
        return "Nothing in the sheet holds it back: every slack is at its most, +100 %."
    verb = "Held back by" if d["slack"] >= 0.0 else "Falls short in"
    text = (
        f"{verb} {name_of(bound.measure)}{scene.on(d['case'])}: {quantity(d['value'], unit)} where "
        f"{limit_words(bound.side, bound.limit, unit)} is asked, a slack of {percent(d['slack'])}"
    )
    if "next" in d:
        _, following = scene.bound(d["next"])
        text += f"; next is {name_of(following.measure)} with {percent(d['next_slack'])}"
    return text + "."


def _fragility(fact: Fact, scene: Scene) -> str:
    sides = [
        (name, sign, slack)
        for name, pair in fact.data.items()
        for sign, slack in zip("-+", pair, strict=True)
    ]
    name, sign, least = min(sides, key=lambda side: side[2])
    move = f"{parameter_name(name)} moves by {sign.replace('-', '−')}{MOVED}"
    if math.isinf(least):
        return f"Fragile: when {move}, the loop is unstable or a required quantity is absent."
    if least >= 0.0:
        return (
            f"Any one tuned value may move by {MOVED} either way and everything is still met; the least "
            f"slack, {percent(least)}, is left when {move}."
        )
    short = [side for side in sides if side[2] < 0.0]
    others = "" if len(short) == 1 else f" ({count(len(short), 'such move')} of {len(sides)} fall short)"
    return f"Fragile: when {move}, the slack is {percent(least)}{others}."


def _simpler(fact: Fact, scene: Scene) -> str:
    d = fact.data
    how = {"exact": "its whole gain line", "dense": "a dense scan", "search": "a search"}[d["scan"]]
    who = f"A {d['structure']}, which is simpler,"
    if d["slack"] >= 0.0:
        return f"{who} meets everything too, with a slack of {percent(d['slack'])}{_but(d)}."
    if not d["stabilises"]:
        return f"{who} was not found to stabilise every case ({how})."
    if "requirement" not in d:
        return f"{who} comes no nearer than a slack of {percent(d['slack'])} ({how})."
    _, bound = scene.bound(d["requirement"])
    unit = scene.unit(bound.measure.quantity)
    if math.isinf(d["slack"]):
        return f"{who} does not do: {name_of(bound.measure)} is not to be had ({how})."
    return (
        f"{who} comes no nearer than {name_of(bound.measure)} "
        f"{quantity(d['value'], unit)} of {limit_words(bound.side, bound.limit, unit)} "
        f"(slack {percent(d['slack'])}; {how})."
    )


def _but(data: dict[str, Any]) -> str:
    """A slack that is won by hardly following the reference."""
    if "final_value" not in data:
        return ""
    final = data["final_value"]
    return ", but drives backwards" if final < 0.0 else f", but {reach_words(final)}"


def _richer(fact: Fact, scene: Scene) -> str:
    d = fact.data
    more = d["parameters"] - d["own_parameters"]
    extra = count(more, "more tuned value")
    if not d["gain"] > 1e-3:
        far = "" if d["settled"] else ", as far as it was searched"
        return (
            f"More buys nothing: with {extra} a {d['structure']} has a slack of {percent(d['slack'])}{far}"
            f"{_but(d)}."
        )
    if math.isinf(d["gain"]):
        return f"With {extra} a {d['structure']} has a slack of {percent(d['slack'])}."
    return (
        f"With {extra} a {d['structure']} would have a slack of {percent(d['slack'])}, "
        f"{percent(d['gain'])} on top{_but(d)}."
    )


def _inside(fact: Fact, scene: Scene) -> str:
    d = fact.data
    every = d["met"] == d["points"]
    who = f"all {d['points']}" if every else f"{d['met']} of {d['points']}"
    return (
        f"Inside the tolerances it was tried on further points: everything is met on {who}. This is no proof."
    )


_ORDER: tuple[Callable[[Scene], Fact | None], ...] = (
    facts.rank,
    facts.phase,
    facts.statics,
    facts.binding,
    facts.fragility,
    facts.inside,
    facts.simpler,
    facts.richer,
    facts.start,
)
_TEMPLATES: dict[str, Callable[[Fact, Scene], str]] = {
    "rank": _rank,
    "phase": _phase,
    "statics": _statics,
    "start": _start,
    "binding": _binding,
    "fragility": _fragility,
    "simpler": _simpler,
    "richer": _richer,
    "inside": _inside,
}
