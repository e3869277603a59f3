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

NARROWEST = 32
NARROW = 60  # below this a plant case has no room beside its numbers
LEAST_CELL = 12  # columns under which a cut cell says nothing
LEAST_BODY = 20  # columns under which a paragraph goes below its label, not beside it
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


def heading(words: str, aside: str, width: int) -> Text:
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
    """A paragraph whose later lines start under its first word: `first` is the mark or label in front.

    Under a label that leaves no room the paragraph starts on the next line.
    """
    label = first if isinstance(first, Text) else Text(first)
    text = body.copy() if isinstance(body, Text) else Text(body, style=style)
    indent = label.cell_len
    below = width - indent < LEAST_BODY and label.plain.strip() != "" and indent + text.cell_len > width
    if below:
        indent = len(label.plain) - len(label.plain.lstrip()) + 2
    lines = text.divide(_breaks(text.plain, max(1, width - indent)))
    out = label.copy()
    if below:
        out.rstrip()
    for i, line in enumerate(lines):
        if i or below:
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
        after = before is not None and (before.group()[-1].isdigit() or before.group() in _UNITS)
        if after and word.group().rstrip(".,;:)") in _UNITS:
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
    indent, room = label.cell_len, width - label.cell_len
    if room < LEAST_BODY and label.plain.strip():
        return hanging(label, between.join(parts), width)
    lines: list[str] = []
    for i, part in enumerate(parts):
        piece = part if i == len(parts) - 1 else part + between.rstrip()
        if lines and cell_len(lines[-1]) + 1 + cell_len(piece) <= room:
            lines[-1] += " " + piece
        else:
            lines.append(piece)
    out = Text()
    for i, line in enumerate(lines or [""]):
        out.append_text(hanging(" " * indent if i else label, line, width))
        if i < len(lines) - 1:
            out.append("\n")
    return out


def fitted(line: Text, width: int) -> Text:
    """The same, with what is still wider than the page folded under its own indent."""
    rows = line.split("\n", allow_blank=True)
    if all(row.cell_len <= width for row in rows):
        return line
    out = []
    for row in rows:
        indent = len(row.plain) - len(row.plain.lstrip())
        out.append(hanging(" " * indent, row[indent:], width) if row.cell_len > width else row)
    return Text("\n").join(out)


class Columns:
    """A table of text: cells padded to their column, two spaces between, no lines drawn.

    sides : one "<" or ">" a column. spare : columns a narrow page does
    without, those together that make sense together only, the least important first.
    """

    def __init__(
        self, sides: Sequence[str], indent: int = 2, gap: int = 2, spare: Sequence[tuple[int, ...]] = ()
    ) -> None:
        self.sides = sides
        self.indent = indent
        self.gap = gap
        self.spare = spare
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

    def total(self) -> int:
        """Of the whole table."""
        return self.indent + sum(self.widths()) + self.gap * (len(self.sides) - 1)

    def lines(self, width: int) -> list[Text]:
        """The rows, padded. On a page too narrow for them the last column is cut; then the first, where it
        is text, stands on lines of its own; then spare columns go."""
        table = self
        for k in range(len(self.spare) + 1):
            table = self._without({i for group in self.spare[:k] for i in group})
            if table._room(width) is not None:
                return table._padded(width)
            if self.sides[0] == "<" and table._below()._room(width) is not None:
                break
        out: list[Text] = []
        below = table._below() if self.sides[0] == "<" else table
        for row, line in zip(table.rows, below._padded(width), strict=True):
            if below is not table and row[0].plain.strip():
                out.append(hanging(" " * self.indent, row[0], width))
            if line.plain.strip():
                out.append(line)
        return out

    def _room(self, width: int) -> int | None:
        """Columns for the last cell on a page so wide; None where that is too few to say anything."""
        widths = self.widths()
        over = max(0, self.total() - width)
        fits = over == 0 or (self.sides[-1] == "<" and widths[-1] - over >= LEAST_CELL)
        return widths[-1] - over if fits else None

    def _below(self) -> Columns:
        """All but the first column, further in."""
        table = Columns(self.sides[1:], indent=self.indent + 2, gap=self.gap)
        table.rows = [row[1:] for row in self.rows]
        return table

    def _without(self, left_out: set[int]) -> Columns:
        kept = [i for i in range(len(self.sides)) if i not in left_out]
        table = Columns([self.sides[i] for i in kept], indent=self.indent, gap=self.gap)
        table.rows = [[row[i] for i in kept if i < len(row)] for row in self.rows]
        return table

    def _padded(self, width: int) -> list[Text]:
        """The rows with their last cells, and at worst the rows themselves, cut to the page."""
        widths = self.widths()
        room = self._room(width)
        widths[-1] = widths[-1] if room is None else room
        out = []
        for row in self.rows:
            line = Text(" " * self.indent)
            for i, whole in enumerate(row):
                cell = whole.copy()
                cell.truncate(widths[i], overflow="ellipsis")
                pad = " " * (widths[i] - cell.cell_len)
                line.append_text(
                    Text.assemble(pad, cell) if self.sides[i] == ">" else Text.assemble(cell, pad)
                )
                if i < len(row) - 1:
                    line.append(" " * self.gap)
            line.rstrip()
            line.truncate(width, overflow="ellipsis")
            out.append(line)
        return out
