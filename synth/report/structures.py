"""`synth structures`: every structure with its formula, what it is for, and what is tuned."""

from __future__ import annotations

from collections.abc import Sequence

from rich.text import Text

from synth.report.theme import hanging


def structures(found: Sequence[tuple[str, str, str, tuple[str, ...]]], width: int) -> list[Text]:
    """found : (name, formula, words, names of the tuned values), simplest first."""
    lines: list[Text] = []
    room = max(len(name) for name, *_ in found) + 2
    for name, formula, words, tuned in found:
        lines.append(hanging(Text(name.ljust(room), style="name"), f"C(s) = {formula}", width))
        lines.append(hanging(" " * room, words, width))
        lines.append(hanging(" " * room, f"tuned: {', '.join(tuned)}", width, style="dim"))
        lines.append(Text())
    lines.append(
        hanging("", "A gain may be negative. A sheet names those it wants under [search] structures.", width)
    )
    return lines
