"""One candidate in full: C(s), the forms it is typed in, each requirement, poles, pictures, and why."""

from __future__ import annotations

import math

from rich.text import Text

from synth.record import Candidate, Near, Record, Requirement, number, quantity_name
from synth.report import pictures
from synth.report.settings import forms, fraction, poles_table, tuned
from synth.report.theme import NARROW, Columns, hanging, heading, items
from synth.report.view import View, order
from synth.wording.figures import figure, percent, quantity


def account(record: Record, candidate: Candidate, width: int) -> list[Text]:
    """Everything the record holds on one candidate, in the order one checks it."""
    view = View(record)
    lines = _compensator(view, candidate, width)
    lines.extend(_requirements(view, candidate, width))
    lines.extend(_poles(view, candidate, width))
    others = [c for c in record["candidates"] if c["rank"] != candidate["rank"]]
    lines.extend(pictures.step(view, [candidate, *others], width))
    lines.extend(pictures.effort(view, candidate, width))
    lines.extend(pictures.locus(view, candidate, width))
    lines.extend(pictures.loop_gain(candidate, width))
    lines.extend(_rationale(candidate, width))
    return lines


def _compensator(view: View, candidate: Candidate, width: int) -> list[Text]:
    given = view.record.get("job") == "score"
    name = "The compensator given" if given else f"Candidate {candidate['rank']} in full"
    aside = f"order {order(candidate)}" if given else f"{candidate['structure']}, order {order(candidate)}"
    lines = [heading(name, aside, width)]
    if candidate["parameters"]:
        lines.append(items("  ", tuned(candidate), width))
    lines.extend(hanging("  ", remark, width, style="warn") for remark in candidate.get("remarks", []))
    lines.append(Text())
    lines.extend(fraction(candidate["compensator"], width))
    lines.append(Text())
    lines.extend(forms(candidate, view.record["spec"], width))
    return lines


def _requirements(view: View, candidate: Candidate, width: int) -> list[Text]:
    """Value, limit and slack of each requirement where it is nearest its limit; below it, further cases that
    come near."""
    several = view.several_cases and width >= NARROW
    table = Columns(("<", ">", "<", ">", "<") if several else ("<", ">", "<", ">"), spare=((2,),))
    table.add("", "value", "limit", "slack", *(("case",) if several else ()), style="dim")
    for requirement in view.record["requirements"]:
        scale = view.scale(requirement, [candidate])
        value, case, slack = view.judged(candidate, requirement)
        binding = candidate["binding"]
        binds = binding is not None and binding["requirement"] == requirement["id"]
        style = "short" if not slack >= 0.0 else "binds" if binds else ""
        cells = [
            view.name(requirement["id"]),
            scale.full(value),
            view.limit(requirement),
            percent(slack) + (" *" if binds else "  "),
        ]
        table.add(*cells, *((case or "",) if several else ()), style=style)
        for near in _near(candidate, requirement) if several else ():
            near_value, near_slack = number(near["value"]), number(near["slack"])
            table.add("", scale.full(near_value), "", percent(near_slack) + "  ", near["case"], style="dim")
    lines = table.lines(width)
    lines.extend(_also(view, candidate, width))
    out = [
        heading("Requirements", "where each is nearest its limit; * holds the candidate back", width),
        *lines,
    ]
    out.extend(_footnotes(view, candidate, width))
    return out


def _also(view: View, candidate: Candidate, width: int) -> list[Text]:
    """The quantities nobody asked for, in one paragraph: what a review wants to know all the same."""
    asked = {r["quantity"] for r in view.record["requirements"]}
    if "gain_margin" in asked:  # its two sides have a line of their own below
        asked |= {"gain_margin_up", "gain_margin_down"}
    parts = []
    for key, worst in candidate["quantities"].get("worst", {}).items():
        value = number(worst.get("value"))
        if key not in asked and not math.isnan(value):
            parts.append(f"{quantity_name(key)} {quantity(value, view.quantity_unit(key))}")
    if not parts:
        return []
    label = "  not asked for, on the worst case:" if view.several_cases else "  not asked for:"
    line = items("    ", parts, width)
    line.stylize("dim")
    return [Text(label, style="dim"), line]


def _near(candidate: Candidate, requirement: Requirement) -> list[Near]:
    """Further cases near the limit; where a quantity is absent, one line says it."""
    entry = candidate.get("judged", {}).get(requirement["id"])
    return [near for near in entry["near"] if math.isfinite(number(near["slack"]))] if entry else []


def _footnotes(view: View, candidate: Candidate, width: int) -> list[Text]:
    out = []
    asked = {r["quantity"] for r in view.record["requirements"]}
    up, down = view.worst(candidate, "gain_margin_up"), view.worst(candidate, "gain_margin_down")
    if "gain_margin" in asked and (math.isfinite(up) or math.isfinite(down)):
        peak = view.worst(candidate, "sensitivity_peak")
        text = f"Gain margin upward {quantity(up, 'dB')}, downward {quantity(down, 'dB')}; Ms {figure(peak)}."
        out.append(hanging("  ", text, width, style="dim"))
    elif "gain_margin" in asked and math.isinf(view.worst(candidate, "gain_margin")):
        peak = view.worst(candidate, "sensitivity_peak")
        out.append(hanging("  ", f"No gain reaches the boundary; Ms is {figure(peak)}.", width, style="dim"))
    if candidate.get("approximate"):
        names = ", ".join(candidate["approximate"])
        out.append(hanging("  ", f"The error bound was not reached for {names}.", width, style="warn"))
    verified = candidate["verified"]
    if verified is not None:
        difference = figure(number(verified["largest_relative_difference"]), 2)
        if verified["agrees"]:
            text = f"A second opinion by other algorithms agrees within {difference}, relative."
            text += _not_recomputed(verified.get("details", []))
            out.append(hanging("  ", text, width, style="dim"))
        else:
            text = f"A second opinion by other algorithms DISAGREES by {difference}, relative."
            details = "; ".join(verified.get("details", []))
            out.append(hanging("  ", f"{text} {details}".rstrip(), width, style="bad"))
    return out


def _not_recomputed(details: list[str]) -> str:
    """What the second opinion could not judge, by reason, each quantity once."""
    reasons: dict[str, list[str]] = {}
    for detail in details:
        what, found, reason = detail.partition(" was not recomputed: ")
        if found:
            name = quantity_name(what.split(" on ")[0])
            reasons.setdefault(reason, [])
            if name not in reasons[reason]:
                reasons[reason].append(name)
    return "".join(f" Not recomputed: {', '.join(names)} ({reason})." for reason, names in reasons.items())


def _poles(view: View, candidate: Candidate, width: int) -> list[Text]:
    if not candidate.get("modes"):
        return []
    lines = [heading("Closed-loop poles", "nominal plant", width), *poles_table(candidate, width)]
    if any(not mode["counted"] for mode in candidate["modes"]):
        below = [r.get("below") for r in view.record["requirements"] if r["quantity"] == "damping_ratio"]
        given = [size for size in below if size is not None]
        if given and len(given) == len(below):
            rule = f"above {figure(max(given))} rad/s, as the sheet says"
        else:
            rule = (
                "above 5 times the frequency where abs(T) has fallen, and under 2 % of the step"
                if not any(case["dead_time"] for case in view.record["plant"]["cases"])
                else "above 5 times the frequency where abs(T) has fallen"
            )
        lines.append(hanging("  ", f"Not counted in the damping ratio: {rule}.", width, style="dim"))
    return lines


def _rationale(candidate: Candidate, width: int) -> list[Text]:
    if not candidate["rationale"]:
        return []
    lines = [heading("Why", "", width)]
    lines.extend(hanging("  - ", sentence["text"], width) for sentence in candidate["rationale"])
    return lines
