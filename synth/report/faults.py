"""Faults as the user reads them: what is wrong, where, what was written, what may stand there."""

from __future__ import annotations

from collections.abc import Sequence

from rich.text import Text

from synth.errors import Fault
from synth.report.theme import hanging
from synth.wording.figures import count

MOST = 40  # faults drawn; a file with more is another kind of file


def faults(found: Sequence[Fault], width: int, *, next_step: str = "") -> list[Text]:
    """Each fault in a block of its own, then how many there were and what to do."""
    lines = []
    for fault in found[:MOST]:
        lines.append(hanging(Text.assemble(("error", "bad"), ": "), fault.what, width))
        where = fault.file or ""
        if fault.line is not None:
            where = f"{where}, line {fault.line}" if where else f"line {fault.line}"
        rows = (
            ("file", where),
            ("key", fault.key),
            ("given", fault.given),
            ("allowed", fault.allowed),
            ("nearest", fault.nearest),
        )
        for name, text in rows:
            lines.extend(_row(name, text, width) if text else ())
    if len(found) > MOST:
        lines.append(Text(f"... and {len(found) - MOST} more"))
    end = f"{count(len(found), 'fault')} found; nothing was run."
    lines.append(Text(f"{end} {next_step}".rstrip()))
    return lines


def _row(name: str, text: str, width: int) -> list[Text]:
    """One fact of a fault. A caret on a line of its own keeps its place under the text."""
    label = Text(f"  {name:<9}", style="dim")
    body, newline, caret = text.partition("\n")
    if newline and caret.strip() == "^" and label.cell_len + len(body) <= width:
        return [Text.assemble(label, body), Text(" " * label.cell_len + caret)]
    return [hanging(label, text, width)]
