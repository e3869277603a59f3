"""Candidates of one or more records side by side: the same rows for all, whatever each sheet asked for."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from rich.text import Text

from synth.record import Candidate, Record, number, quantity_name, quantity_unit, requirement_name
from synth.report.settings import tuned
from synth.report.theme import Columns, hanging, heading, items
from synth.report.view import SIGN, View, order
from synth.wording.figures import figure, percent, unit_for

INDENT, GAP = 2, 2
ALWAYS = (
    "damping_ratio",
    "overshoot",
    "settling_time",
    "bandwidth",
    "phase_margin",
    "gain_margin",
    "sensitivity_peak",
    "control_peak",
    "disturbance_area",
)


@dataclass(frozen=True, slots=True)
class Column:
    """One candidate of one record, under a short name: "A1"."""

    label: str
    record: Record
    candidate: Candidate


def comparison(named: Sequence[tuple[str, Record]], width: int) -> list[Text]:
    """The records named, then their candidates in columns: as many as fit, the rest in further blocks."""
    several = len(named) > 1
    lines: list[Text] = []
    columns: list[Column] = []
    for i, (file, record) in enumerate(named):
        letter = chr(ord("A") + i % 26) if several else ""
        lines.append(_record_line(letter, file, record, width))
        columns.extend(Column(f"{letter}{c['rank']}", record, c) for c in record["candidates"])
    if not columns:
        return [*lines, Text("\nno candidates in them")]
    rows = _rows(columns)
    left = INDENT + max(len(label) for label, _ in rows)
    cell = GAP + max(t.cell_len for _, cells in rows for t in cells)
    room = (width - left) // cell
    if room < min(2, len(columns)):  # then the labels stand on lines of their own
        room = max(1, (width - INDENT) // cell)
    for start in range(0, len(columns), room):
        aside = ("worst plant case of each" if any_cases(named) else "") if start == 0 else "continued"
        lines.append(heading("Side by side", aside, width))
        table = Columns(("<", *(">" for _ in columns[start : start + room])), indent=INDENT, gap=GAP)
        for label, cells in rows:
            table.add(label, *cells[start : start + room])
        lines.extend(table.lines(width))
    lines.append(Text("  * holds it back   ! falls short of its own sheet", style="dim"))
    lines.append(heading("Tuned values", "", width))
    indent = max(len(c.label) for c in columns) + 4
    for c in columns:
        first = Text.assemble(f"  {c.label}".ljust(indent), (c.candidate["structure"].ljust(13), "name"))
        lines.append(items(first, tuned(c.candidate), width))
    if several:
        lines.extend(_limits(named, width))
    return lines


def _record_line(letter: str, file: str, record: Record, width: int) -> Text:
    spec = record["spec"]
    revision = f", revision {spec['revision']}" if spec["revision"] else ""
    text = f"{spec['title'] or spec['file']}{revision}: {record['verdict']} ({file}, {record['created']})"
    return hanging(f"{letter}  " if letter else "", text, width)


def any_cases(named: Sequence[tuple[str, Record]]) -> bool:
    """Whether any of the records has more than the nominal case."""
    return any(View(record).several_cases for _, record in named)


def _rows(columns: Sequence[Column]) -> list[tuple[str, list[Text]]]:
    """Label and cells; a space stands where others have a mark."""

    def plain(label: str, texts: Iterable[str], style: str = "") -> tuple[str, list[Text]]:
        return label, [Text(f"{t} ", style=style) for t in texts]

    rows = [
        plain("", (c.label for c in columns), "dim"),
        plain("structure", (c.candidate["structure"] for c in columns), "name"),
        plain("order", (str(order(c.candidate)) for c in columns)),
        plain("meets its sheet", ("yes" if c.candidate["meets_all"] else "no" for c in columns)),
        plain("worst slack", (percent(number(c.candidate["worst_slack"])) for c in columns)),
    ]
    for name, key in _quantities(columns).items():
        values = [_value(c, name, key) for c in columns]
        if all(math.isnan(v) for v in values):
            continue
        unit = unit_for(_unit(key, columns), values)
        label = f"{name}, {unit.word}" if unit.word else name
        cells = [_cell(c, name, unit.number(v, 3)) for c, v in zip(columns, values, strict=True)]
        rows.append((label, cells))
    return rows


def _unit(key: str, columns: Sequence[Column]) -> str:
    """The unit with the plant's own words where all the records agree on them."""
    units = {quantity_unit(key, c.record["spec"]) for c in columns}
    return units.pop() if len(units) == 1 else quantity_unit(key)


def _quantities(columns: Sequence[Column]) -> dict[str, str]:
    """Name and key of what any of the sheets asks for, in their order and with their bands, then of a fixed
    few."""
    asked = {requirement_name(r): r["quantity"] for c in columns for r in c.record["requirements"]}
    return asked | {quantity_name(key): key for key in ALWAYS}


def _value(column: Column, name: str, key: str) -> float:
    """Worst value under that name; NaN where a sheet did not ask for this band, span or range of poles."""
    view = View(column.record)
    if name == quantity_name(key):
        return view.worst(column.candidate, key)
    asked = [r for r in column.record["requirements"] if requirement_name(r) == name]
    return view.judged(column.candidate, asked[0])[0] if asked else math.nan


def _cell(column: Column, name: str, text: str) -> Text:
    ids = [r["id"] for r in column.record["requirements"] if requirement_name(r) == name]
    short = any(not number(column.candidate["slack"].get(i)) >= 0.0 for i in ids)
    binding = column.candidate["binding"]
    binds = binding is not None and binding["requirement"] in ids
    cell = Text(text + ("!" if short else "*" if binds else " "))
    cell.stylize("short" if short else "binds" if binds else "")
    return cell


def _limits(named: Sequence[tuple[str, Record]], width: int) -> list[Text]:
    """What each sheet asks for, where they differ."""
    sheets = [
        {
            r["id"]: f"{requirement_name(r)} {SIGN[r['bound']]} {figure(r['limit'])} {r['unit']}".rstrip()
            for r in rec["requirements"]
        }
        for _, rec in named
    ]
    if all(sheet == sheets[0] for sheet in sheets):
        return []
    lines = [heading("The sheets differ", "", width)]
    for i, sheet in enumerate(sheets):
        own = [text for key, text in sheet.items() if any(other.get(key) != text for other in sheets)]
        lines.append(hanging(f"  {chr(ord('A') + i % 26)}  ", "; ".join(own) or "nothing of its own", width))
    return lines
