"""A rerun: the advice and its evidence, what changed, what the earlier candidates do untouched."""

from __future__ import annotations

from typing import Any

from rich.text import Text

from synth.record import Earlier, Record, number, parameter_name, quantity_name
from synth.report.theme import Columns, hanging, heading
from synth.report.view import SIGN, View
from synth.wording.figures import ABSENT, change, figure, percent, quantity

LONG = 24  # two values that need more room than this stand on a line of their own
_ADVICE = {
    "keep": ("KEEP", "good", "meets everything on the revised plant, untouched."),
    "retune": ("RETUNE", "warn", "needs other values."),
    "restructure": (
        "RESTRUCTURE",
        "warn",
        "does not meet the sheet, and no other values for it were found that do; another structure does.",
    ),
    "relax": ("RELAX", "bad", "does not meet the sheet, and nothing else that was searched does."),
}
_NOTHING_EARLIER = "The earlier record has no candidate to judge: the verdict below is that of a new search."


def revision(record: Record, width: int) -> list[Text]:
    """Advice, changes, earlier candidates."""
    part = record["revision"]
    if part is None:
        return []
    word, style, words = _ADVICE[part["advice"]]
    about = part.get("about")
    text = f"{about[:1].upper()}{about[1:]} {words}" if about else _NOTHING_EARLIER
    lines = [heading("Advice", "", width)]
    lines.append(hanging(Text.assemble("  ", (word, style), "  "), text, width))
    lines.extend(hanging("  - ", sentence["text"], width) for sentence in part.get("evidence", []))
    lines.extend(_moved(part["moved"], record, width))
    lines.extend(_changes(record, width))
    lines.extend(_earlier(record, width))
    return lines


def _moved(moved: dict[str, list[float]] | None, record: Record, width: int) -> list[Text]:
    if not moved:
        return []
    part = record["revision"]
    successor = part.get("successor") if part is not None else None
    units: dict[str, str] = next(
        (c.get("units", {}) for c in record["candidates"] if c["rank"] == successor), {}
    )
    table = Columns(("<", ">", "<", ">", ">"), indent=4)
    for key, (old, new) in moved.items():
        unit = units.get(key, "")
        table.add(parameter_name(key), quantity(old, unit), "→", quantity(new, unit), change(old, new))
    return table.lines(width)


def _changes(record: Record, width: int) -> list[Text]:
    part = record["revision"]
    if part is None:
        return []
    lines = [heading("What changed", "from the predecessor's sheet to this one", width)]
    if not part["changes"]:
        return [*lines, Text("  nothing in plant or requirements")]
    table = Columns(("<", ">", "<", ">", "<"))
    long = []
    view = View(record)
    for one in part["changes"]:
        where = f"{one['what']}, {one['case']}" if one["case"] else one["what"]
        old, new = _value(one["old"]), _value(one["new"])
        key, _, side = one["what"].partition(".")
        sign = SIGN.get(side.partition(".")[0])
        if sign is not None:  # a limit that moved reads as everywhere else, not by its key
            asked = one["what"] in view.requirements  # one that was dropped is not
            where = f"{view.name(one['what']) if asked else quantity_name(key)} {sign}"
            old, new = (quantity(number(one[at]), view.quantity_unit(key)) for at in ("old", "new"))
        if len(old) + len(new) > LONG:
            long.append(hanging(f"  {where}: ", f"{old} → {new}", width))
            continue
        table.add(where, old, "→", new, _relative(one["old"], one["new"]))
    return [*lines, *table.lines(width), *long]


def _value(value: Any) -> str:
    if value is None:
        return ABSENT
    if isinstance(value, bool):
        return str(value)
    if isinstance(value, int | float):
        return figure(float(value))
    if isinstance(value, dict):
        return ", ".join(f"{k} {_value(v)}" for k, v in value.items())
    if isinstance(value, list):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    return str(value)


def _relative(old: Any, new: Any) -> str:
    plain = all(isinstance(v, int | float) and not isinstance(v, bool) for v in (old, new))
    if not plain or not old:
        return ""
    return f"({change(old, new)})"


def _earlier(record: Record, width: int) -> list[Text]:
    part = record["revision"]
    if part is None or not part["earlier"]:
        return []
    view = View(record)
    lines = [heading("Earlier candidates", "as they are, on the revised plant", width)]
    table = Columns((">", "<", ">", "<", ">", "<"), indent=1, spare=((2, 3), (5,)))
    table.add("", "structure", "slack was", "", "is", "held back by", style="dim")
    adopted = part["adopted"]
    if adopted is not None and adopted not in part["earlier"]:  # it comes from an older record than these
        table.add(*_row(view, adopted, f"{adopted['structure']} (adopted, rank {adopted['rank']})", ""))
    for earlier in part["earlier"]:
        mark = " (adopted)" if earlier == adopted else ""
        table.add(*_row(view, earlier, f"{earlier['structure']}{mark}", str(earlier["rank"] or "")))
    return [*lines, *table.lines(width)]


def _row(view: View, earlier: Earlier, name: str, rank: str) -> list[str | Text]:
    binding = earlier["binding"]
    held = ""
    if binding is not None:
        case = f", {binding['case']}" if view.several_cases else ""
        held = f"{view.name(binding['requirement'])}{case}"
    slack = Text(percent(number(earlier["worst_slack"])))
    slack.stylize("" if earlier["meets_all"] else "short")
    return [rank, name, percent(number(earlier.get("was"))), "→", slack, held]
