"""What goes wrong by the user's hand: facts for the report to draw, never a traceback."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing wrong in what the user gave, and what to do about it.

    what     one sentence, no full stop ("unknown structure")
    file     the file as the user named it, None for a command line
    line     1-based line in that file
    key      key path in the file, such as "search.structures[1]"
    given    what was written, as the user wrote it
    allowed  what may stand there, with units
    nearest  the nearest valid name, where a name was expected
    """

    what: str
    file: str | None = None
    line: int | None = None
    key: str | None = None
    given: str | None = None
    allowed: str | None = None
    nearest: str | None = None

    def __str__(self) -> str:
        line = None if self.line is None else f"line {self.line}"
        place = ", ".join(part for part in (self.file, line, self.key) if part)
        return f"{self.what} ({place})" if place else self.what


class SynthError(Exception):
    """Base of every error the user is meant to read."""


class InputError(SynthError):
    """Bad input: all the faults found, none of it acted on; the program ends with exit code 2."""

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults: tuple[Fault, ...] = tuple(faults)
        super().__init__("; ".join(map(str, self.faults)))


def nearest(name: str, allowed: Iterable[str]) -> str | None:
    """The allowed name that looks most like `name`, or None when none is close.

    A name of the very same letters comes first: letters that changed places are the commonest slip, and
    "PDI" shares as long a run with PI as with PID.
    """
    typed = name.casefold()
    by_fold = {a.casefold(): a for a in allowed}
    shuffled = [fold for fold in by_fold if sorted(fold) == sorted(typed)]
    close = difflib.get_close_matches(typed, shuffled or by_fold, n=1, cutoff=0.0 if shuffled else 0.5)
    return by_fold[close[0]] if close else None
