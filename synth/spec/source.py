"""A spec file as text, values and places; and where faults are gathered."""

from __future__ import annotations

import bisect
import contextlib
import re
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path as FilePath

from synth.errors import Fault, InputError
from synth.spec.positions import Path, Slip, Span, dotted, line_and_column, scan

# A sheet is a page or two; past this, the file is something else.
MAX_BYTES = 256 * 1024
MOST_FAULTS = 200  # of one file; the rest are only counted
_QUOTED = r"'([^']*)'"


@dataclass(slots=True)
class Source:
    """One file: its text, the place of every key, and the faults found so far."""

    file: str
    text: str
    data: dict[str, object]
    spans: dict[Path, Span]
    faults: list[Fault] = field(default_factory=list)
    uncounted: int = 0  # faults past those that are kept
    lines: list[int] = field(default_factory=list)  # where each line begins

    @classmethod
    def of(cls, text: str, file: str) -> Source:
        """Read TOML. Raises InputError with one fault, with line and column, where the text is not TOML."""
        body = text.removeprefix("\ufeff")  # a byte order mark, as some editors write it
        try:
            spans = scan(body)
            data = tomllib.loads(body)
        except Slip as slip:
            raise InputError([_not_toml(file, body, slip.what, slip.at, slip.allowed)]) from None
        except tomllib.TOMLDecodeError as error:
            raise InputError([_library(file, body, str(error))]) from None
        except ValueError:  # the interpreter's bound on the digits of an integer
            raise InputError([Fault("a number has too many digits", file=file)]) from None
        except RecursionError:  # pragma: no cover - the scanner refuses such texts first
            raise InputError([Fault("too many brackets inside one another", file=file)]) from None
        lines = [0, *(match.end() for match in re.finditer("\n", body))]
        return cls(file, body, data, spans, lines=lines)

    @property
    def root(self) -> Node:
        """The whole file."""
        return Node(self, (), self.data)

    def line(self, path: Path) -> int:
        """Line of a key, or of the nearest table round it that has one."""
        for length in range(len(path), 0, -1):
            if path[:length] in self.spans:
                return bisect.bisect_right(self.lines, self.spans[path[:length]].key)
        return 1

    def written(self, path: Path) -> str | None:
        """The value as the file writes it, on one line and cut to a readable length."""
        span = self.spans.get(path)
        if span is None or span.start == span.stop:
            return None
        text = self.text[span.start : min(span.stop, span.start + 400)]
        return shortened(re.sub(r"\s+", " ", text))

    def stop(self) -> None:
        """Raise InputError with every fault so far, by line. Does nothing without one."""
        faults = sorted(dict.fromkeys(self.faults), key=lambda f: f.line or 0)
        if self.uncounted:
            faults.append(Fault(f"and {self.uncounted} more faults in this file", file=self.file))
        if faults:
            raise InputError(faults)


@dataclass(frozen=True, slots=True)
class Node:
    """A value of the file and where it stands."""

    source: Source
    path: Path
    value: object

    def child(self, key: str | int) -> Node:
        """A key of a table or an element of a list; its value is None where it is absent."""
        value = None
        if isinstance(self.value, dict):
            value = self.value.get(key)
        elif isinstance(self.value, list) and isinstance(key, int) and key < len(self.value):
            value = self.value[key]
        return Node(self.source, (*self.path, key), value)

    def has(self, key: str) -> bool:
        """Whether a table has this key."""
        return isinstance(self.value, dict) and key in self.value

    def elements(self) -> Iterator[Node]:
        """Elements of a list."""
        if isinstance(self.value, list):
            for i in range(len(self.value)):
                yield self.child(i)

    def fault(
        self, what: str, allowed: str | None = None, nearest: str | None = None, given: str | None = None
    ) -> None:
        """Note a fault at this place."""
        if len(self.source.faults) >= MOST_FAULTS:
            self.source.uncounted += 1
            return
        self.source.faults.append(
            Fault(
                what,
                file=self.source.file,
                line=self.source.line(self.path),
                key=dotted(self.path) or None,
                given=given if given is not None else self.source.written(self.path),
                allowed=allowed,
                nearest=nearest,
            )
        )

    def missing(self, key: str, allowed: str | None) -> None:
        """Note that a table lacks a key."""
        path = (*self.path, key)
        line = self.source.line(self.path)
        self.source.faults.append(
            Fault(f"`{key}` is missing", self.source.file, line, dotted(path), None, allowed)
        )


def load(path: str | FilePath) -> tuple[str, bytes]:
    """Text and bytes of a file. Raises InputError: missing, a directory, unreadable, too large, not UTF-8."""
    file = str(path)
    try:
        if FilePath(path).is_dir():
            raise InputError([Fault("this is a directory, not a spec file", file=file)])
        with open(path, "rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        near = _neighbour(FilePath(path))
        raise InputError([Fault("there is no such file", file=file, nearest=near)]) from None
    except (OSError, ValueError) as error:  # ValueError: a name no system takes, such as one with a NUL
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError([Fault(f"the file cannot be read: {reason}", file=file)]) from None
    check_size(len(data), file)
    try:
        return data.decode("utf-8"), data
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        given = f"byte 0x{data[error.start]:02x}"
        fault = Fault(
            "the file is not UTF-8 text", file=file, line=line, given=given, allowed="save it as UTF-8"
        )
        raise InputError([fault]) from None


def check_size(size: int, file: str) -> None:
    """Raise InputError for a text of so many bytes, or characters, that it is no sheet."""
    if size > MAX_BYTES:
        limit = f"at most {MAX_BYTES // 1024} kB"
        raise InputError([Fault("the file is too large for a spec", file=file, allowed=limit)])


def shortened(text: str, most: int = 60) -> str:
    """At most `most` characters, printable, on one line."""
    text = "".join(c if c.isprintable() else " " for c in text)
    return text if len(text) <= most else text[: most - 3] + "..."


def _neighbour(path: FilePath) -> str | None:
    """A file beside the missing one whose name looks like it."""
    from synth.errors import nearest

    with contextlib.suppress(OSError, ValueError):
        names = [entry.name for entry in path.parent.iterdir() if entry.suffix == ".toml"]
        near = nearest(path.name, names)
        return str(path.parent / near) if near else None
    return None


def _not_toml(file: str, text: str, what: str, at: int, allowed: str | None) -> Fault:
    line, column = line_and_column(text, at)
    row = text.split("\n")[line - 1].rstrip("\r")
    return Fault(
        f"not TOML: {what} (line {line}, column {column})",
        file=file,
        line=line,
        given=shortened(row.strip()) or None,
        allowed=allowed,
    )


def _library(file: str, text: str, message: str) -> Fault:
    """The standard library's complaint, with its place taken out of its words."""
    match = re.fullmatch(r"(.*) \(at line (\d+), column (\d+)\)", message, re.DOTALL)
    if match is None:
        what = re.sub(r" \(at end of document\)$", "", message)
        at = len(text.rstrip())
    else:
        what = match.group(1)

        at = (
            sum(len(row) + 1 for row in text.split("\n")[: int(match.group(2)) - 1]) + int(match.group(3)) - 1
        )
        at = min(at, len(text))
    what = re.sub(r"\(('[^()]*',?)\)", lambda m: f"`{'.'.join(re.findall(_QUOTED, m.group(1)))}`", what)
    return _not_toml(file, text, shortened(what[:1].lower() + what[1:], 100), at, None)
