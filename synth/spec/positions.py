"""Where each key and value of a TOML text stands.

The standard library's parser gives the values; this scanner walks the same text for the places, and knows the
commonest slips well enough to say what to write instead. It need not be a full parser: a text that it accepts
and the standard library refuses is refused with the library's words.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

Path = tuple[str | int, ...]

# A sheet needs four; a level costs the standard parser recursion, and dotted keys cost it quadratic time.
MAX_NESTING = 20
MAX_KEY_PARTS = 10
MAX_DIGITS = 60

_BLANK = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_SPACE = re.compile(r"[ \t]*")
_LINE_END = re.compile(r"[ \t]*(?:#[^\n]*)?(?:\r?\n|\Z)")
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_LINE_STRING = re.compile(r'"(?:[^"\\\n]|\\.)*"|\'[^\'\n]*\'')
_LONG_STRING = re.compile(r'"""(?:[^\\]|\\.)*?"{3,5}|\'\'\'.*?\'{3,5}', re.DOTALL)
_PLAIN = re.compile(r"[^,\]}#\n]*")
_LITERAL = re.compile(
    r"true|false|[+-]?(?:inf|nan)|0[xob][0-9A-Fa-f_]+|[+-]?\d[\d_]*(?:\.\d[\d_]*)?(?:[eE][+-]?\d[\d_]*)?"
    r"|\d{4}-\d\d-\d\d(?:[Tt ]\d\d:\d\d:\d\d(?:\.\d+)?(?:[Zz]|[+-]\d\d:\d\d)?)?|\d\d:\d\d:\d\d(?:\.\d+)?"
)
_UNQUOTED = re.compile(r"[\w.+-]*[^\W\d][^=\"']*|[\d.+-]+ *%")  # what was most likely meant as a text
_ESCAPES = {"b": "\b", "t": "\t", "n": "\n", "f": "\f", "r": "\r", '"': '"', "\\": "\\"}


class Slip(Exception):
    """What the scanner can say about a text that is not TOML, and the character it is about."""

    def __init__(self, what: str, at: int, allowed: str | None = None) -> None:
        super().__init__(what)
        self.what = what
        self.at = at
        self.allowed = allowed


@dataclass(frozen=True, slots=True)
class Span:
    """Characters of the text: where the key (or array element) begins, and the value from start to stop."""

    key: int
    start: int
    stop: int


def scan(text: str) -> dict[Path, Span]:
    """Places of every table, key and array element. Raises Slip, for texts that are not TOML alone."""
    return _Scanner(text).document()


def line_and_column(text: str, at: int) -> tuple[int, int]:
    """1-based line and column of a character."""
    before = text[:at]
    return before.count("\n") + 1, at - (before.rfind("\n") + 1) + 1


class _Scanner:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.spans: dict[Path, Span] = {}
        self.tables: dict[Path, int] = {}  # arrays of tables: how many so far

    def document(self) -> dict[Path, Span]:
        base: Path = ()
        while True:
            self.pass_over(_BLANK)
            if self.at >= len(self.text):
                return self.spans
            if self.text[self.at] == "[":
                base = self.header()
            else:
                self.pair(base, 0)
            start = self.at
            if not self.pass_over(_LINE_END):
                raise Slip("nothing may follow here on the same line", start)

    def pass_over(self, pattern: re.Pattern[str]) -> bool:
        match = pattern.match(self.text, self.at)
        if match is None:
            return False
        self.at = match.end()
        return True

    def header(self) -> Path:
        start = self.at
        double = self.text.startswith("[[", start)
        self.at += 2 if double else 1
        path = self.resolved(self.key())
        self.pass_over(_SPACE)
        closing = "]]" if double else "]"
        if not self.text.startswith(closing, self.at):
            raise Slip(f"a table's name ends with `{closing}`", self.at)
        self.at += len(closing)
        if double:
            if path in self.spans and path not in self.tables:
                raise Slip(f"`{dotted(path)}` is written twice", start)
            self.spans.setdefault(path, Span(start, self.at, self.at))
            number = self.tables[path] = self.tables.get(path, -1) + 1
            path = (*path, number)
        self.claim(path, Span(start, self.at, self.at), table=True)
        return path

    def resolved(self, parts: list[str]) -> Path:
        """[cases.x] after [[cases]] stands in the last of them."""
        path: Path = ()
        for i, part in enumerate(parts):
            path = (*path, part)
            if i < len(parts) - 1 and path in self.tables:
                path = (*path, self.tables[path])
        return path

    def claim(self, path: Path, span: Span, *, table: bool = False) -> None:
        known = self.spans.get(path)
        # [a.b] before [a] is allowed: only a table that was opened by its own header is taken
        if known is not None and not (table and known.key == known.stop):
            line, _ = line_and_column(self.text, known.key)
            raise Slip(f"`{dotted(path)}` is written twice, first on line {line}", span.key)
        self.spans[path] = span
        for length in range(1, len(path)):
            self.spans.setdefault(path[:length], Span(span.key, span.key, span.key))

    def key(self) -> list[str]:
        parts = []
        while True:
            self.pass_over(_SPACE)
            start = self.at
            if self.pass_over(_BARE_KEY):
                parts.append(self.text[start : self.at])
            elif self.text[start : start + 1] in ('"', "'") and self.pass_over(_LINE_STRING):
                parts.append(unquoted(self.text[start : self.at]))
            else:
                first = self.text[start : start + 1]
                shown = first.isprintable() and not first.isspace()
                what = f"a key cannot begin with `{first}`" if first and shown else "a key must stand here"
                raise Slip(what, start, 'letters, digits, "_" and "-"; other keys in quotes')
            if len(parts) > MAX_KEY_PARTS:
                raise Slip(f"a key with more than {MAX_KEY_PARTS} parts", start)
            self.pass_over(_SPACE)
            if not self.text.startswith(".", self.at):
                return parts
            self.at += 1

    def pair(self, base: Path, depth: int) -> None:
        start = self.at
        path: Path = (*base, *self.key())
        if not self.text.startswith("=", self.at):
            raise Slip("`=` must follow the key", self.at)
        self.at += 1
        self.pass_over(_SPACE)
        self.value(path, start, depth)

    def value(self, path: Path, key: int, depth: int) -> None:
        if depth > MAX_NESTING:
            raise Slip(f"more than {MAX_NESTING} brackets inside one another", self.at)
        start = self.at
        self.claim(path, Span(key, start, start))
        first = self.text[start : start + 1]
        if first == "[":
            self.array(path, depth)
        elif first == "{":
            self.inline_table(path, depth)
        elif first in ('"', "'"):
            if not (self.pass_over(_LONG_STRING) or self.pass_over(_LINE_STRING)):
                raise Slip("this text has no closing quote", start)
        else:
            self.literal()
        self.spans[path] = Span(key, start, self.at)

    def literal(self) -> None:
        start = self.at
        self.pass_over(_PLAIN)
        word = self.text[start : self.at].rstrip()
        self.at = start + len(word)
        if not word:
            raise Slip("a value must stand here", start, "a number, a text in quotes, a list or { ... }")
        if len(word) > MAX_DIGITS:
            raise Slip("a number has too many digits", start)
        if not _LITERAL.fullmatch(word):
            plain = _UNQUOTED.fullmatch(word) is not None
            allowed = f'write "{word}"' if plain else "a number, a text in quotes, a list or { ... }"
            raise Slip(f"`{word}` is neither a number nor a text in quotes", start, allowed)

    def array(self, path: Path, depth: int) -> None:
        start = self.at
        self.at += 1
        index = 0
        while True:
            self.pass_over(_BLANK)
            if self.text.startswith("]", self.at):
                self.at += 1
                return
            if self.at >= len(self.text):
                raise Slip("this `[` is never closed", start)
            self.value((*path, index), self.at, depth + 1)
            index += 1
            self.pass_over(_BLANK)
            if self.text.startswith(",", self.at):
                self.at += 1
            elif not self.text.startswith("]", self.at):
                if self.at >= len(self.text):
                    raise Slip("this `[` is never closed", start)
                raise Slip("`,` or `]` must stand here", self.at)

    def inline_table(self, path: Path, depth: int) -> None:
        start = self.at
        self.at += 1
        self.pass_over(_SPACE)
        if self.text.startswith("}", self.at):
            self.at += 1
            return
        while True:
            self.pass_over(_SPACE)
            if self.text[self.at : self.at + 1] in ("\n", "\r", "", "#"):
                raise Slip(
                    "this `{` is not closed on its line", start, "{ key = value, key = value } on one line"
                )
            self.pair(path, depth + 1)
            self.pass_over(_SPACE)
            if self.text.startswith("}", self.at):
                self.at += 1
                return
            if not self.text.startswith(",", self.at):
                if self.text[self.at : self.at + 1] in ("\n", "\r", "", "#"):
                    raise Slip(
                        "this `{` is not closed on its line",
                        start,
                        "{ key = value, key = value } on one line",
                    )
                raise Slip("`,` or `}` must stand here", self.at)
            self.at += 1


def dotted(path: Path) -> str:
    """A key path as it is printed: requirements.settling_time[1].band."""
    out = ""
    for part in path:
        if isinstance(part, int):
            out += f"[{part}]"
        else:
            shown = part if re.fullmatch(r"[\w-]+", part) else f'"{part}"'
            out += f".{shown}" if out else shown
    return out


def unquoted(key: str) -> str:
    """A quoted key without its quotes and escapes."""
    if key[0] == "'":
        return key[1:-1]

    def put(match: re.Match[str]) -> str:
        code = match.group(1)
        if code[0] in "uU":
            point = int(code[1:], 16)
            return chr(point) if point <= 0x10FFFF else ""
        return _ESCAPES.get(code, code)

    return re.sub(r"\\(u[0-9A-Fa-f]{4}|U[0-9A-Fa-f]{8}|.)", put, key[1:-1])
