"""Candidates of one or more records side by side; nothing is computed."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from synth.errors import Fault, InputError
from synth.record import Stored, read_record


def compare(paths: Sequence[str | Path]) -> list[Stored]:
    """The records, read and checked; the faults of all of them at once."""
    found: list[Stored] = []
    faults: list[Fault] = []
    for path in paths:
        try:
            found.append(read_record(Path(path)))
        except InputError as trouble:
            faults.extend(trouble.faults)
    if faults:
        raise InputError(faults)
    return found
