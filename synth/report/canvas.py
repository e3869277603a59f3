"""Drawing in a terminal: eight dots a character cell, a frame with plain numbers, letters laid over the dots.

Curves are told apart by their line (solid, dashed, dotted), so a print in black shows the same as a screen.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Literal

from rich.text import Text

from synth.wording.figures import figure

Line = Literal["solid", "long", "dashed", "dotted", "sparse"]
_ON_OFF: dict[Line, tuple[int, int]] = {
    "solid": (1, 0),
    "long": (14, 3),
    "dashed": (7, 4),
    "dotted": (1, 3),
    "sparse": (1, 5),
}
_DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))  # by row and column within the cell
MOST_DOTS = 20_000  # of one segment; a wild number must not draw for ever


@dataclass
class Canvas:
    """Columns × rows of character cells; dots are counted from the top left, 2 a column and 4 a row."""

    columns: int
    rows: int
    _bits: dict[tuple[int, int], int] = field(default_factory=dict)
    _styles: dict[tuple[int, int], str] = field(default_factory=dict)
    _letters: dict[tuple[int, int], tuple[str, str]] = field(default_factory=dict)

    def dot(self, x: int, y: int, style: str) -> None:
        """One dot; outside the canvas nothing happens."""
        if 0 <= x < 2 * self.columns and 0 <= y < 4 * self.rows:
            cell = (x // 2, y // 4)
            self._bits[cell] = self._bits.get(cell, 0) | _DOTS[y % 4][x % 2]
            self._styles[cell] = style

    def letter(self, column: int, row: int, letter: str, style: str) -> None:
        """A character over the dots of one cell; the last one laid there shows."""
        if 0 <= column < self.columns and 0 <= row < self.rows:
            self._letters[column, row] = (letter, style)

    def word(self, column: int, row: int, word: str, style: str) -> None:
        """A word, moved to the left where it would run out of the canvas; not drawn over letters."""
        column = max(0, min(column, self.columns - len(word)))
        places = [(column + i, row) for i in range(len(word))]
        if not any(place in self._letters for place in places):
            for (c, r), letter in zip(places, word, strict=True):
                self.letter(c, r, letter, style)

    def line(self, points: Sequence[tuple[float, float]], style: str, kind: Line = "solid") -> None:
        """A polyline through points in dots; a point that is not finite breaks it."""
        on, off = _ON_OFF[kind]
        run = 0
        for (x0, y0), (x1, y1) in pairwise(points):
            clipped = _clip(x0, y0, x1, y1, 2.0 * self.columns, 4.0 * self.rows)
            if clipped is None:
                continue
            x0, y0, x1, y1 = clipped
            steps = min(MOST_DOTS, max(1, math.ceil(max(abs(x1 - x0), abs(y1 - y0)))))
            for i in range(steps):
                if not off or run % (on + off) < on:
                    self.dot(
                        math.floor(x0 + (x1 - x0) * i / steps), math.floor(y0 + (y1 - y0) * i / steps), style
                    )
                run += 1
            self.dot(math.floor(x1), math.floor(y1), style) if not off else None

    def lines(self) -> list[Text]:
        """The rows from the top."""
        out = []
        for r in range(self.rows):
            line = Text()
            for c in range(self.columns):
                if (c, r) in self._letters:
                    letter, style = self._letters[c, r]
                    line.append(letter, style=style)
                elif (c, r) in self._bits:
                    line.append(chr(0x2800 + self._bits[c, r]), style=self._styles[c, r])
                else:
                    line.append(" ")
            out.append(line)
        return out


def _clip(
    x0: float, y0: float, x1: float, y1: float, width: float, height: float
) -> tuple[float, float, float, float] | None:
    """The part of a segment inside the canvas (Liang and Barsky 1984), None where there is none."""
    if not all(map(math.isfinite, (x0, y0, x1, y1))):
        return None
    dx, dy = x1 - x0, y1 - y0
    start, end = 0.0, 1.0
    for move, room in ((-dx, x0), (dx, width - 1e-9 - x0), (-dy, y0), (dy, height - 1e-9 - y0)):
        if move == 0.0:
            if room < 0.0:
                return None
        elif move < 0.0:
            start = max(start, room / move)
        else:
            end = min(end, room / move)
    if start > end:
        return None
    return x0 + start * dx, y0 + start * dy, x0 + end * dx, y0 + end * dy


def ticks(low: float, high: float, most: int) -> list[float]:
    """At most so many round numbers within low .. high."""
    span = high - low
    if not (span > 0.0 and math.isfinite(span)):
        return []
    for scale in range(math.floor(math.log10(span)) - 2, math.floor(math.log10(span)) + 2):
        for step in (1.0, 2.0, 5.0):
            size = step * 10.0**scale
            first, last = math.ceil(low / size - 1e-9), math.floor(high / size + 1e-9)
            if last - first + 1 <= most:
                return [k * size for k in range(first, last + 1)]
    return []


class Chart:
    """A frame round a canvas: x to the right, y up, numbers at the left and below.

    columns, rows : of the drawing alone; the frame adds `margin` columns and two rows.
    """

    def __init__(
        self, x: tuple[float, float], y: tuple[float, float], columns: int, rows: int, *, log_x: bool = False
    ) -> None:
        self.x, self.y, self.log_x = x, y, log_x
        self.canvas = Canvas(columns, rows)

    def place(self, x: float, y: float) -> tuple[float, float]:
        """Data to dots."""
        (x0, x1), (y0, y1) = self.x, self.y
        if self.log_x:
            x, x0, x1 = (math.log10(v) if v > 0.0 else math.nan for v in (x, x0, x1))
        return (x - x0) / (x1 - x0) * (2 * self.canvas.columns - 1), (y1 - y) / (y1 - y0) * (
            4 * self.canvas.rows - 1
        )

    def curve(self, xs: Sequence[float], ys: Sequence[float], style: str, kind: Line = "solid") -> None:
        """A curve through data points."""
        self.canvas.line([self.place(a, b) for a, b in zip(xs, ys, strict=True)], style, kind)

    def level(self, y: float, word: str, style: str = "axis") -> None:
        """A thin horizontal line, labelled at its right end."""
        if self.y[0] <= y <= self.y[1]:
            self.curve(self.x, (y, y), style, "sparse")
            self._word_at(self.x[1], y, word, style)

    def upright(self, x: float, word: str) -> None:
        """A thin vertical line, labelled at its upper end."""
        if self.x[0] <= x <= self.x[1]:
            self.curve((x, x), self.y, "axis", "sparse")
            column, _ = self.place(x, self.y[1])
            self.canvas.word(int(column // 2) + 1, 0, word, "axis")

    def mark(self, x: float, y: float, letter: str, style: str) -> None:
        """A letter at a data point."""
        column, row = self.place(x, y)
        if math.isfinite(column) and math.isfinite(row):
            self.canvas.letter(math.floor(column / 2), math.floor(row / 4), letter, style)

    def _word_at(self, x: float, y: float, word: str, style: str) -> None:
        column, row = self.place(x, y)
        line = math.floor(row / 4)
        self.canvas.word(int(column // 2), line - 1 if line > 0 else line + 1, word, style)

    def lines(self, x_word: str, y_word: str, *, indent: int = 2, least_margin: int = 0) -> list[Text]:
        """The drawing in its frame, the words of the axes on the first and the last line.

        least_margin : columns kept for the numbers at the left, so that two charts stand under one another.
        """
        labels = {}
        for tick in ticks(*self.y, max(2, self.canvas.rows // 2)):
            labels[math.floor(self.place(self.x[0], tick)[1] / 4)] = figure(tick)
        margin = max([len(t) for t in labels.values()] + [least_margin])
        out = [Text(" " * indent + y_word, style="axis")] if y_word else []
        for r, drawn in enumerate(self.canvas.lines()):
            edge = "┤" if r in labels else "│"
            line = Text(" " * indent + labels.get(r, "").rjust(margin) + edge, style="axis")
            line.append_text(drawn)
            line.rstrip()
            out.append(line)
        out.extend(Text(" " * (indent + margin)).append_text(t) for t in self._floor(x_word))
        for line in out:
            line.rstrip()
        return out

    def _floor(self, x_word: str) -> list[Text]:
        """The x axis and its numbers."""
        if self.log_x:
            first, last = math.ceil(math.log10(self.x[0]) - 1e-9), math.floor(math.log10(self.x[1]) + 1e-9)
            marks = [10.0**k for k in range(first, last + 1)]
        else:
            marks = ticks(*self.x, max(2, self.canvas.columns // 10))
        rule = ["─"] * self.canvas.columns
        words = [" "] * (self.canvas.columns + 8)
        room = self.canvas.columns - len(x_word) - 1
        for tick in marks:
            column = min(self.canvas.columns - 1, int(self.place(tick, self.y[0])[0] // 2))
            rule[column] = "┴"
            text = figure(tick)
            start = max(0, column - len(text) // 2)
            if start + len(text) <= room and all(
                w == " " for w in words[max(0, start - 1) : start + len(text) + 1]
            ):
                words[start : start + len(text)] = text
        words[room + 1 : room + 1 + len(x_word)] = x_word
        return [Text("└" + "".join(rule), style="axis"), Text(" " + "".join(words), style="axis")]
