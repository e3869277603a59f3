"""A record again, as it stands; nothing is computed."""

from __future__ import annotations

from pathlib import Path

from synth.errors import Fault, InputError
from synth.record import Candidate, Record, Stored, read_record


def show(path: str | Path) -> Stored:
    """Read and check a record."""
    return read_record(Path(path))


def candidate_of(record: Record, rank: int, file: str, option: str) -> Candidate:
    """The candidate of that rank; InputError, with what there is, where there is none."""
    for candidate in record["candidates"]:
        if candidate["rank"] == rank:
            return candidate
    count = len(record["candidates"])
    there = f"1 to {count}" if count else "none: the record has no candidates"
    raise InputError(
        [Fault("there is no candidate of that rank", file=file, key=option, given=str(rank), allowed=there)]
    )
