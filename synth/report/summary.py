"""The first screens: verdict and cautions, the ranked list, the values beside their limits."""

from __future__ import annotations

import math
from itertools import pairwise

from rich.cells import cell_len
from rich.text import Text

from synth.record import Candidate, Record, Requirement, number, quantity_name
from synth.report.settings import tuned
from synth.report.theme import NARROW, Columns, hanging, heading, items
from synth.report.view import SIGN, View, order
from synth.wording.figures import Unit, count, figure, percent, unit_for

INDENT, GAP = 2, 2
ASIDE = ("control_peak", "sensitivity_peak", "settling_time")  # shown unasked, below what the sheet asks for


def title(record: Record, width: int) -> Text:
    """What the sheet is called, its revision, its file."""
    spec = record["spec"]
    left = Text(spec["title"] or spec["file"], style="title")
    right = f"revision {spec['revision']} · {spec['file']}" if spec["revision"] else spec["file"]
    if left.cell_len + cell_len(right) + 2 <= width:
        return Text.assemble(left, " " * (width - left.cell_len - cell_len(right)), (right, "dim"))
    return Text.assemble(hanging("", left, width), "\n", hanging("", right, width, style="dim"))


def verdict(record: Record, width: int) -> list[Text]:
    """The verdict in a sentence, then the cautions this plant calls for."""
    words = {"met": ("MET", "good"), "not met": ("NOT MET", "bad"), "impossible": ("IMPOSSIBLE", "bad")}
    word, style = words[record["verdict"]]
    statement = record.get("statement")
    text = statement["text"] if statement else ""
    lines = [Text("\n").append_text(hanging(Text.assemble((word, style), "  "), text, width))]
    if record["search"]["interrupted"]:
        lines.append(Text("Interrupted: the best found so far, not the end of the search.", style="warn"))
    if record["cautions"]:
        lines.append(heading("Cautions", "with candidate 1" if len(record["candidates"]) > 1 else "", width))
        lines.extend(hanging("  - ", caution, width) for caution in record["cautions"])
    return lines


def ranked(record: Record, width: int) -> list[Text]:
    """The candidates in order: structure, slack, what holds it back, tuned values."""
    view = View(record)
    candidates = record["candidates"]
    if not candidates:
        return []
    several = view.several_cases
    words = "Candidates" if candidates[0]["meets_all"] else "Nearest found, none meets the sheet"
    lines = [heading(words, _examined(record), width)]
    prefer = record["spec"].get("prefer")
    by_slack = "by slack less a charge for each tuned value; what hardly follows the reference comes last"
    if prefer and candidates[0].get("ranked", "").startswith("worst slack"):
        words = f"no candidate has a finite {quantity_name(prefer['quantity'])}: {by_slack}"
        lines.append(hanging("  ", words, width, style="dim"))
    elif prefer:
        least = "smallest" if prefer["sense"] == "min" else "largest"
        reserve = f", with {100.0 * prefer['reserve']:g} % of slack kept" if prefer["reserve"] else ""
        words = f"those that meet everything by {quantity_name(prefer['quantity'])}, {least} first{reserve}"
        lines.append(hanging("  ", words, width, style="dim"))
    elif candidates[0]["meets_all"] and not _falling(candidates):
        lines.append(hanging("  ", by_slack, width, style="dim"))
    beside = width >= NARROW  # else what holds a candidate back stands below it
    table = Columns((">", "<", ">", ">", "<") if beside else (">", "<", ">", ">"), indent=1)
    table.add("", "structure", "order", "slack", *(("held back by",) if beside else ()), style="dim")
    for c in candidates:
        held = _held_by(view, c, several)
        slack = Text(percent(number(c["worst_slack"])))
        slack.stylize("short" if not c["meets_all"] else "")
        name = Text(c["structure"], style="name")
        table.add(str(c["rank"]), name, str(order(c)), slack, *((held,) if beside else ()))
    rows = table.lines(width - 1)
    lines.append(rows[0])
    for line, c in zip(rows[1:], candidates, strict=True):
        lines.append(line)
        if not beside:
            lines.append(hanging("      held back by ", _held_by(view, c, several), width))
        lines.append(items("      ", tuned(c), width))
        if c.get("also"):
            lines.append(Text(f"      the same function is a {' and a '.join(c['also'])}", style="dim"))
        lines.extend(hanging("      ", remark, width, style="warn") for remark in c.get("remarks", []))
        verified = c["verified"]
        if verified is not None and not verified["agrees"]:
            lines.append(
                Text("      second opinion disagrees: do not use before it is understood", style="bad")
            )
    return lines


def _falling(candidates: list[Candidate]) -> bool:
    """Whether the slacks of those that meet everything fall down the list, as a reader expects."""
    slacks = [number(c["worst_slack"]) for c in candidates if c["meets_all"]]
    return all(first >= second for first, second in pairwise(slacks))


def _examined(record: Record) -> str:
    search, plant = record["search"], record["plant"]
    parts = [count(len(plant["cases"]), "plant case")]
    inside = plant.get("interior_examined", 0)
    if inside:
        parts.append(f"{count(inside, 'point')} inside the tolerances")
    parts.append(f"{search['evaluations']:,} loops scored in {figure(search['seconds'], 2)} s")
    return " · ".join(parts)


def _held_by(view: View, candidate: Candidate, several: bool) -> str:
    binding = candidate["binding"]
    if binding is None or number(candidate["worst_slack"]) >= 1.0:
        return "nothing: every slack is 100 %"
    where = f", {binding['case']}" if several else ""
    return f"{view.name(binding['requirement'])}{where}"


def values(record: Record, width: int) -> list[Text]:
    """What the sheet asks for, under its own words: limit, and each candidate's value on its worst case."""
    view = View(record)
    candidates = record["candidates"]
    if not candidates:
        return []
    rows: list[tuple[str, str, list[Text]]] = []
    for requirement in record["requirements"]:
        scale = view.scale(requirement, candidates)
        limit = f"{SIGN[requirement['bound']]} {scale.number(requirement['limit'])}"
        label = _label(view.name(requirement["id"]), scale)
        rows.append((label, limit, [_value(view, c, requirement, scale) for c in candidates]))
    rows.extend(
        (label, "", [Text(t, style="dim") for t in cells]) for label, cells in _asides(view, candidates)
    )
    cell = max(max(t.cell_len for t in cells) for _, _, cells in rows) + GAP
    taken = INDENT + max(len(r[0]) for r in rows) + GAP + max(len(r[1]) for r in rows)
    room = (width - taken) // cell
    if room < min(2, len(candidates)):  # then the labels stand on lines of their own
        room = (width - taken + max(len(r[0]) for r in rows)) // cell
    shown = candidates[: max(1, room)]
    table = Columns(("<", ">", *(">" for _ in shown)), indent=INDENT, gap=GAP)
    table.add("", "limit", *(f"{c['rank']} " for c in shown), style="dim")
    for label, limit, cells in rows:
        table.add(label, limit, *cells[: len(shown)])
    where = "worst plant case" if view.several_cases else ""
    lines = [heading("Beside the limits", where, width), *table.lines(width)]
    lines.append(Text("  * holds the candidate back   ! falls short", style="dim"))
    rest = len(candidates) - len(shown)
    if rest:
        lines.append(
            Text(f"  and {count(rest, 'more candidate')}: a wider window, or --json, has them", style="dim")
        )
    return lines


def _label(name: str, scale: Unit) -> str:
    return f"{name}, {scale.word}" if scale.word else name


def _value(view: View, candidate: Candidate, requirement: Requirement, scale: Unit) -> Text:
    value, _, slack = view.judged(candidate, requirement)
    binding = candidate["binding"]
    binds = binding is not None and binding["requirement"] == requirement["id"]
    short = not slack >= 0.0
    mark = "!" if short else "*" if binds else " "
    unstable = math.isinf(slack) and math.isfinite(value)  # it has poles, and nothing else
    text = Text(("unstable" if unstable else scale.number(value, 3)) + mark)
    text.stylize("short" if short else "binds" if binds else "")
    return text


def _asides(view: View, shown: list[Candidate]) -> list[tuple[str, list[str]]]:
    asked = {r["quantity"] for r in view.record["requirements"]}
    prefer = view.record["spec"].get("prefer")
    wanted = [prefer["quantity"]] if prefer else []
    out = []
    for key in dict.fromkeys((*wanted, *ASIDE)):
        found = [view.worst(c, key) for c in shown]
        if key in asked or not any(math.isfinite(v) for v in found):
            continue
        scale = unit_for(view.quantity_unit(key), found)
        out.append((_label(quantity_name(key), scale), [scale.number(v, 3) + " " for v in found]))
    return out
