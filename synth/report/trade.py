"""The trade-off of two quantities among candidates that meet the rest: a table and a picture."""

from __future__ import annotations

import math

from rich.text import Text

from synth.record import Record, number, quantity_name, quantity_unit
from synth.report.canvas import Chart
from synth.report.theme import Columns, heading
from synth.wording.figures import unit_for

ROWS = 12
MOST = 12  # points in the table; the picture has all


def trade(record: Record, width: int) -> list[Text]:
    """Nothing where the run was not asked for a trade-off."""
    part = record.get("trade")
    if not part:
        return []
    first, second = part["quantities"]
    names = quantity_name(first), quantity_name(second)
    points = [(number(p["first"]), number(p["second"]), p["structure"]) for p in part["points"]]
    points = [p for p in points if math.isfinite(p[0]) and math.isfinite(p[1])]
    lines = [heading("Trade-off", f"{names[0]} against {names[1]}; everything else is met", width)]
    if not points:
        return [*lines, Text("  no point of it was found")]
    xs, ys = [p[0] for p in points], [p[1] for p in points]
    units = (
        unit_for(quantity_unit(first, record["spec"]), xs),
        unit_for(quantity_unit(second, record["spec"]), ys),
    )
    chosen = sorted({round(i * (len(points) - 1) / max(1, MOST - 1)) for i in range(min(MOST, len(points)))})
    table = Columns((">", ">", "<"))
    heads = [f"{n}, {u.word}" if u.word else n for n, u in zip(names, units, strict=True)]
    if sum(map(len, heads)) + 20 > width:  # the heading names them, in this order
        heads = [u.word for u in units]
    table.add(*heads, "structure", style="dim")
    for i in chosen:
        table.add(units[0].number(xs[i]), units[1].number(ys[i]), points[i][2])
    lines.extend(table.lines(width))
    if len(points) > 2:
        chart = Chart(_room(xs, units[0].factor), _room(ys, units[1].factor), min(width, 100) - 14, ROWS)
        for x, y, _ in points:
            chart.mark(x / units[0].factor, y / units[1].factor, "◆", "first")
        lines.extend(chart.lines(units[0].word or names[0], f"  {names[1]}, {units[1].word}".rstrip(", ")))
    return lines


def _room(values: list[float], factor: float) -> tuple[float, float]:
    low, high = min(values) / factor, max(values) / factor
    room = 0.08 * (high - low) or 0.1 * abs(high) or 1.0
    return low - room, high + room
