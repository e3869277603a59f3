"""The look: names for styles, and the few shapes everything is set in.

Plain and quiet; sense never rests on colour.
"""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Sequence
from typing import IO

from rich.cells import cell_len
from rich.console import Console
from rich.text import Text
from rich.theme import Theme

THEME = Theme(
    {
        "title": "bold",
        "head": "bold",
        "good": "bold green",
        "bad": "bold red",
        "short": "red",
        "binds": "bold",
        "dim": "dim",
        "name": "cyan",
        "warn": "yellow",
        "axis": "dim",
        "first": "bold",
        "second": "cyan",
        "third": "dim",
    },
    inherit=False,
)

NARROWEST = 64
WIDEST = 132  # lines longer than this are hard to follow, however wide the window


def console(file: IO[str] | None = None, width: int | None = None) -> Console:
    """A console in this look.

    Plain text without escapes where the output is no terminal or NO_COLOR is set.
    """
    out = Console(
        file=file or sys.stdout, theme=THEME, highlight=False, emoji=False, markup=False, width=width
    )
    if width is None:
        room = out.width if out.is_terminal or "COLUMNS" in os.environ else 80
        out.width = max(NARROWEST, min(room, WIDEST))
    return out


def heading(words: str, aside: str = "", width: int = WIDEST) -> Text:
    """A section's first line; beside it, or below where there is no room, what holds for all of it."""
    text = Text("\n")
    text.append(words, style="head")
    if aside and len(words) + 2 + len(aside) <= width:
        text.append(f"  {aside}", style="dim")
    elif aside:
        text.append("\n")
        text.append_text(hanging("  ", aside, width, style="dim"))
    return text


def hanging(first: str | Text, body: str | Text, width: int, *, style: str = "") -> Text:
    """A paragraph whose later lines start under its first word: `first` is the mark or label in front."""
    label = first if isinstance(first, Text) else Text(first)
    text = body.copy() if isinstance(body, Text) else Text(body, style=style)
    indent = label.cell_len
    lines = text.divide(_breaks(text.plain, max(20, width - indent)))
    out = Text()
    out.append_text(label)
    for i, line in enumerate(lines):
        if i:
            out.append("\n" + " " * indent)
        line.rstrip()
        out.append_text(line)
    return out


def _breaks(text: str, room: int) -> list[int]:
    """Where lines of at most `room` columns begin: at words, and never between a number and its unit."""
    starts: list[int] = []
    line = 0
    words = list(re.finditer(r"[^ ]+", text))
    groups: list[tuple[int, int]] = []  # what must stay together
    for before, word in zip([None, *words], words, strict=False):
        if before is not None and word.group().rstrip(".,;:)") in _UNITS and before.group()[-1].isdigit():
            groups[-1] = (groups[-1][0], word.end())
        else:
            groups.append((word.start(), word.end()))
    for start, end in groups:
        if cell_len(text[line:end]) > room and start > line:
            starts.append(start)
            line = start
        while cell_len(text[line:end]) > room:  # one word wider than a line
            line += room
            starts.append(line)
    return starts


_UNITS = frozenset("% s ms µs ns h d deg dB rad/s 1/s Hz V W K A N m mm bar l/min rad → ≤ ≥".split())


def items(first: str | Text, parts: Sequence[str], width: int, *, between: str = " · ") -> Text:
    """Like `hanging`, but broken between the parts alone, unless one part is wider than a line."""
    label = first if isinstance(first, Text) else Text(first)
    indent, room = label.cell_len, max(20, width - label.cell_len)
    lines: list[str] = []
    for i, part in enumerate(parts):
        piece = part if i == len(parts) - 1 else part + between.rstrip()
        if lines and len(lines[-1]) + 1 + len(piece) <= room:
            lines[-1] += " " + piece
        else:
            lines.append(piece)
    out = Text()
    for i, line in enumerate(lines or [""]):
        out.append_text(hanging(" " * indent if i else label, line, width))
        if i < len(lines) - 1:
            out.append("\n")
    return out


class Columns:
    """A table of text: cells padded to their column, two spaces between, no lines drawn.

    sides : one "<" or ">" a column. Rows are Text or str; a row that is too wide is cut by nobody: the caller
    sees to it that the columns fit.
    """

    def __init__(self, sides: Sequence[str], indent: int = 2, gap: int = 2) -> None:
        self.sides = sides
        self.indent = indent
        self.gap = gap
        self.rows: list[list[Text]] = []

    def add(self, *cells: str | Text, style: str = "") -> None:
        """One row."""
        row = [c.copy() if isinstance(c, Text) else Text(c) for c in cells]
        if style:
            for cell in row:
                cell.stylize(style)
        self.rows.append(row)

    def widths(self) -> list[int]:
        """Of each column."""
        return [
            max((row[i].cell_len for row in self.rows if i < len(row)), default=0)
            for i in range(len(self.sides))
        ]

    def lines(self) -> list[Text]:
        """The rows, padded."""
        widths = self.widths()
        out = []
        for row in self.rows:
            line = Text(" " * self.indent)
            for i, cell in enumerate(row):
                pad = " " * (widths[i] - cell.cell_len)
                line.append_text(
                    Text.assemble(pad, cell) if self.sides[i] == ">" else Text.assemble(cell, pad)
                )
                if i < len(row) - 1:
                    line.append(" " * self.gap)
            line.rstrip()
            out.append(line)
        return out

    def text(self) -> Text:
        """The whole table."""
        return Text("\n").join(self.lines())
