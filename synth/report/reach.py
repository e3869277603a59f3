"""What is not on offer and why: structures not used, what it would take, what no compensator can do."""

from __future__ import annotations

import math

from rich.text import Text

from synth.record import LimitPart, Record, number
from synth.report.settings import tuned
from synth.report.theme import Columns, hanging, heading
from synth.report.view import SIGN, View
from synth.wording.figures import quantity


def rejected(record: Record, width: int) -> list[Text]:
    """Structures without a place in the list, each with its closest approach."""
    if not record["rejected"]:
        return []
    met = record["verdict"] == "met"
    words, aside = ("Structures not used", "and how near each came") if met else ("How near each came", "")
    lines = [heading(words, aside, width)]
    room = max(len(r["structure"]) for r in record["rejected"]) + 4
    told: list[dict[str, float]] = []
    for r in record["rejected"]:
        text = Text(r["reason"])
        closest = r["closest"]
        if closest is not None and closest["parameters"] in told:
            closest = None  # the same setting, under its other name
        elif closest is not None:
            told.append(closest["parameters"])
        if closest is not None and any(number(s) < 0.0 for s in closest["slack"].values()):
            text.append(f" [{' · '.join(tuned(closest))}]", style="dim")
        label = Text.assemble("  ", (r["structure"].ljust(room - 2), "name"))
        lines.append(hanging(label, text, width))
    return lines


def prices(record: Record, width: int) -> list[Text]:
    """When the sheet is not met: what each requirement would have to be for the rest to be met."""
    found = record.get("prices", [])
    view = View(record)
    if not found:
        return _no_price(record, width)
    lines = [heading("What it would take", "one limit moved, all the others met; cheapest first", width)]
    table = Columns(("<", ">", "<", "<", "<"))
    for p in found:
        requirement = view.requirements.get(p["requirement"])
        if requirement is None:
            continue
        unit = view.unit(requirement)
        needed = float(p["needed"]) if p["needed"] is not None else math.nan
        table.add(
            view.name(p["requirement"]),
            f"{SIGN[requirement['bound']]} {quantity(p['limit'], unit)}",
            "→",
            quantity(needed, unit),
            f"with a {p['structure']}",
        )
    lines.extend(table.lines(width))
    return lines


def _no_price(record: Record, width: int) -> list[Text]:
    """Silence would read as if nothing had been tried."""
    search = record["search"]
    searched = record.get("job") != "score" and not search["interrupted"] and not search.get("limited")
    if record["verdict"] != "not met" or len(record["requirements"]) < 2 or not searched:
        return []
    words = (
        "No single limit was found that, moved alone, lets the others be met: the sheet is short in several."
    )
    return [heading("What it would take", "", width), hanging("  ", words, width)]


def limits(record: Record, width: int) -> list[Text]:
    """What no compensator can do on this plant, violated ones first."""
    found = sorted(record["limits"], key=lambda limit: limit["violates"] is None)
    if not found:
        return []
    view = View(record)
    lines = [heading("Limits of the plant", "hold for any compensator in this loop", width)]
    together: dict[tuple[str, str], list[LimitPart]] = {}  # one statement may rule out several requirements
    for limit in found:
        together.setdefault((limit["statement"], limit["source"]), []).append(limit)
    for (statement, source), same in together.items():
        text = Text(statement)
        violated = [view.name(limit["violates"]) for limit in same if limit["violates"]]
        if violated:
            text.append(f" Violated by {', '.join(violated)}.", style="bad")
        for limit in same:
            text.append(_relaxed(view, limit))
        text.append(f" [{source}]", style="dim")
        lines.append(hanging("  - ", text, width))
    return lines


def _relaxed(view: View, limit: LimitPart) -> str:
    """To what a violated requirement would have to move, where that is known."""
    relax = limit.get("relax")
    requirement = view.requirements.get(limit["violates"] or "")
    if not relax or requirement is None or not isinstance(relax.get("to"), int | float):
        return ""
    return f" Relax it to {quantity(float(relax['to']), view.unit(requirement))}."
