"""`synth check`: the plant as it was read, its cases, and what no compensator can do on it."""

from __future__ import annotations

import math
from typing import cast

from rich.text import Text

from synth.record import Check, Record, quantity_name
from synth.report import reach, summary
from synth.report.theme import Columns, hanging, heading
from synth.report.view import View
from synth.wording.figures import count, figure, pole, quantity

MOST_CASES = 12  # listed; the rest is counted


def plant(check: Check, width: int) -> list[Text]:
    """The whole view of one sheet."""
    record = cast(Record, check)  # the parts both have read alike
    lines = [summary.title(record, width)]
    violated = [limit for limit in check["limits"] if limit["violates"]]
    if violated:
        rules = count(len(violated), "limit of the plant rules", "limits of the plant rule")
        words = f"{rules} the sheet out; see below."
        lines.append(
            Text("\n").append_text(hanging(Text.assemble(("IMPOSSIBLE", "bad"), "  "), words, width))
        )
    else:
        words = "The sheet reads well, and no limit that was checked rules it out. Nothing was searched."
        lines.append(Text("\n").append_text(hanging(Text.assemble(("READ", "good"), "  "), words, width)))
    lines.extend(_plant(check, width))
    lines.extend(_cases(check, width))
    lines.extend(_requirements(record, width))
    lines.extend(reach.limits(record, width))
    lines.append(heading("Cautions", "", width))
    lines.extend(hanging("  - ", caution, width) for caution in check["cautions"])
    return lines


def _plant(check: Check, width: int) -> list[Text]:
    part, spec = check["plant"], check["spec"]
    lines = [heading("Plant", "nominal", width)]
    if part.get("form"):
        lines.append(hanging("  P(s)   ", part["form"], width))
    for word, key in (("poles", "poles"), ("zeros", "zeros")):
        roots = part.get(key, [])
        listed = [_root(re, im) for re, im in cast("list[list[float]]", roots) if im >= 0.0]
        if listed:
            lines.append(hanging(f"  {word}  ", "; ".join(listed), width))
    nominal = part["cases"][0]
    if nominal["dead_time"]:
        lines.append(Text(f"  dead time  {quantity(nominal['dead_time'], 's')}"))
    lines.append(Text(_low_frequency(nominal["numerator"], nominal["denominator"])))
    valid = spec.get("valid_to")
    if valid is not None:
        lines.append(Text(f"  valid to  {figure(valid)} rad/s ({figure(valid / (2.0 * math.pi))} Hz)"))
    lines.extend(_parameters(check, width))
    return lines


def _root(re: float, im: float) -> str:
    if im == 0.0:
        return f"{pole(re, im)} rad/s"
    size = math.hypot(re, im)
    return f"{pole(re, im)} ({figure(size)} rad/s, damping ratio {figure(-re / size, 3)})"


def _low_frequency(numerator: list[float], denominator: list[float]) -> str:
    """The gain at zero frequency, or what is left of P(s) there where it integrates or differentiates."""
    top, zeros = _last(numerator)
    bottom, poles = _last(denominator)
    gain, power = figure(top / bottom), poles - zeros
    if power == 0:
        return f"  gain at zero frequency  {gain}"
    s = "s" if abs(power) == 1 else "s²" if abs(power) == 2 else f"s^{abs(power)}"
    return f"  at low frequency  {gain}/{s}" if power > 0 else f"  at low frequency  {gain} {s}"


def _last(polynomial: list[float]) -> tuple[float, int]:
    """The last coefficient that is not 0, and how many zeros follow it."""
    at = max(i for i, value in enumerate(polynomial) if value != 0.0)
    return polynomial[at], len(polynomial) - 1 - at


def _parameters(check: Check, width: int) -> list[Text]:
    ranges = check["plant"].get("ranges", [])
    if not ranges:
        return []
    table = Columns(("<", ">", ">", "<", ">"), indent=2)
    spread = any(r["low"] != r["high"] for r in ranges)
    table.add("parameter (SI)", "nominal", *(("from", "", "to") if spread else ()), style="dim")
    for r in ranges:
        if r["low"] != r["high"]:
            table.add(r["name"], figure(r["nominal"]), figure(r["low"]), "…", figure(r["high"]))
        else:
            table.add(r["name"], figure(r["nominal"]))
    return [Text(), *table.lines(width)]


def _cases(check: Check, width: int) -> list[Text]:
    cases = check["plant"]["cases"]
    if len(cases) < 2:
        return []
    lines = [heading("Cases", count(len(cases), "plant case"), width)]
    names = [c["name"] for c in cases[:MOST_CASES]]
    more = f" and {len(cases) - MOST_CASES} more" if len(cases) > MOST_CASES else ""
    lines.append(hanging("  ", "; ".join(names) + more, width))
    return lines


def _requirements(record: Record, width: int) -> list[Text]:
    view = View(record)
    table = Columns(("<", "<", "<"))
    for r in record["requirements"]:
        table.add(view.name(r["id"]), view.limit(r), f"on {', '.join(r['cases'])}" if r["cases"] else "")
    lines = [heading("Requirements", "", width), *table.lines(width)]
    prefer = record["spec"].get("prefer")
    if prefer:
        word = "minimise" if prefer["sense"] == "min" else "maximise"
        reserve = f", keeping {100.0 * prefer['reserve']:g} % of slack" if prefer["reserve"] else ""
        lines.append(hanging("  ", f"then {word} {quantity_name(prefer['quantity'])}{reserve}", width))
    return lines
