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
        lines.extend(hanging(Text(f"  {name:<9}", style="dim"), text, width) for name, text in rows if text)
    if len(found) > MOST:
        lines.append(Text(f"... and {len(found) - MOST} more"))
    end = f"{count(len(found), 'fault')} found; nothing was run."
    lines.append(Text(f"{end} {next_step}".rstrip()))
    return lines
