"""Where records live, what they are called, and which one is the newest.

A run of `mast.toml` is kept as `records/mast-001.json` beside it, the next as `mast-002.json`; an adoption
of the first as `mast-001.adopted-001.json`. The number decides what is newest: a clock can jump back.
"""

from __future__ import annotations

import os
import re
import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import cast

from synth.errors import Fault, InputError
from synth.record.consistency import contradictions
from synth.record.files import damaged, read_document, text_of, write_new
from synth.record.format import ADOPTION_FORMAT, RECORD_FORMAT, Adoption, Record
from synth.record.shape import MOST

TRIES = 1000  # names tried one after another when others write at the same time


@dataclass(frozen=True, slots=True)
class Stored:
    """A record as it stands on the disk."""

    path: Path
    sha256: str
    record: Record


@dataclass(frozen=True, slots=True)
class StoredAdoption:
    """An adoption as it stands on the disk."""

    path: Path
    sha256: str
    adoption: Adoption


@dataclass(frozen=True, slots=True)
class Place:
    """Where a record is going to be written: a path the user named, or the next free number in a folder."""

    folder: Path
    stem: str
    exact: Path | None = None


def place_for(spec: Path, asked: Path | None) -> Place:
    """Check, before any work, that a record can be written; make the folder `records/` where it is missing.

    Raises InputError where the path exists already, is a folder, or cannot be written to. Writes nothing
    else.
    """
    if asked is not None:
        if asked.is_dir():
            raise InputError([Fault("--record names a folder, not a file", file=str(asked))])
        if os.path.lexists(asked):
            raise InputError(
                [Fault("this record exists already, and a record is never overwritten", file=str(asked))]
            )
        _must_be_writable(asked.parent, make=False)
        return Place(asked.parent, asked.stem, asked)
    folder = spec.parent / "records"
    _must_be_writable(folder, make=True)
    return Place(folder, spec.stem)


def _must_be_writable(folder: Path, *, make: bool) -> None:
    what = "the record's folder cannot be written to; name another with --record PATH"
    if folder.exists():
        if not folder.is_dir():
            raise InputError([Fault("the record's folder is not a folder", file=str(folder))])
    elif not make:
        raise InputError([Fault("the folder of the record does not exist", file=str(folder))])
    try:  # asking for permission proves little (quotas, read-only mounts); a nameless file leaves no trace
        with tempfile.TemporaryFile(dir=folder if folder.exists() else folder.parent):
            pass
    except OSError as trouble:
        raise InputError([Fault(f"{what} ({trouble.strerror or trouble})", file=str(folder))]) from None


def write_record(record: Record, place: Place) -> Path:
    """Write a record whole, under a name that nobody else has.

    Returns the path; InputError where it cannot be.
    """
    text = text_of(record)
    if place.exact is not None:
        _write(place.exact, text, "this record exists already, and a record is never overwritten")
        return place.exact
    try:
        place.folder.mkdir(exist_ok=True)
    except OSError as trouble:
        raise InputError(
            [Fault(f"the folder cannot be made: {trouble.strerror}", file=str(place.folder))]
        ) from None
    return _write_numbered(place.folder, f"{place.stem}-", ".json", text)


def write_adoption(adoption: Adoption, record_path: Path) -> Path:
    """Write an adoption beside its record. Returns the path; InputError where it cannot be written."""
    return _write_numbered(record_path.parent, f"{record_path.stem}.adopted-", ".json", text_of(adoption))


def _write_numbered(folder: Path, before: str, after: str, text: str) -> Path:
    """The next free number; two runs at once each get one of their own."""
    number = 1 + max(_numbers(folder, before, after), default=0)
    for _ in range(TRIES):
        path = folder / f"{before}{number:03d}{after}"
        try:
            write_new(path, text)
        except FileExistsError:
            number += 1
            continue
        except OSError as trouble:
            raise _unwritten(path, trouble) from None
        return path
    raise InputError([Fault("no free name for the record", file=str(folder))])


def _write(path: Path, text: str, taken: str) -> None:
    try:
        write_new(path, text)
    except FileExistsError:
        raise InputError([Fault(taken, file=str(path))]) from None
    except OSError as trouble:
        raise _unwritten(path, trouble) from None


def _unwritten(path: Path, trouble: OSError) -> InputError:
    return InputError(
        [Fault(f"cannot be written: {trouble.strerror or trouble}; nothing was left", file=str(path))]
    )


def _numbers(folder: Path, before: str, after: str) -> list[int]:
    pattern = re.compile(re.escape(before) + r"(\d{3,9})" + re.escape(after))
    found = (pattern.fullmatch(name) for name in os.listdir(folder))
    return [int(m.group(1)) for m in found if m]


def read_record(path: Path) -> Stored:
    """A record, checked. InputError with one line a fault where it is not one this program can read."""
    data, sha = read_document(path, RECORD_FORMAT, Record, "record")
    record = cast(Record, data)
    broken = contradictions(record)[:MOST]
    if broken:
        raise damaged("record", path, broken)
    return Stored(path, sha, record)


def read_adoption(path: Path) -> StoredAdoption:
    """An adoption, checked, like `read_record`."""
    data, sha = read_document(path, ADOPTION_FORMAT, Adoption, "adoption")
    return StoredAdoption(path, sha, cast(Adoption, data))


def newest_record(spec: Path) -> Stored | None:
    """The newest record of that spec file in `records/` beside it; None where there is none.

    The highest number wins, whatever the clock said. A record the user gave another name counts where it was
    created later than the one with the highest number. Files that are not readable records are passed over,
    unless one of them has the highest number: then that is said, since the chain would be broken silently.
    """
    folder = spec.parent / "records"
    if not folder.is_dir():
        return None
    numbered: list[tuple[int, Path]] = []
    others: list[Path] = []
    pattern = re.compile(re.escape(spec.stem) + r"-(\d{3,9})\.json")
    for name in sorted(os.listdir(folder)):
        match = pattern.fullmatch(name)
        if match:
            numbered.append((int(match.group(1)), folder / name))
        elif name.endswith(".json") and not name.startswith(".") and ".adopted-" not in name:
            others.append(folder / name)
    newest: Stored | None = None
    for _, path in sorted(numbered, reverse=True):
        stored = read_record(path)
        if stored.record["spec"]["file"] == spec.name:
            newest = stored
            break
    for path in others:
        try:
            stored = read_record(path)
        except InputError:
            continue
        ours = stored.record["spec"]["file"] == spec.name
        if ours and (newest is None or stored.record["created"] > newest.record["created"]):
            newest = stored
    return newest


def newest_adoption(stored: Stored) -> StoredAdoption | None:
    """The newest adoption of this very record (known by its content), beside it; None where there is none."""
    folder = stored.path.parent
    pattern = re.compile(re.escape(stored.path.stem) + r"\.adopted-(\d{3,9})\.json")
    found = ((pattern.fullmatch(name), name) for name in os.listdir(folder))
    for _, name in sorted(((int(m.group(1)), name) for m, name in found if m), reverse=True):
        adoption = read_adoption(folder / name)
        if adoption.adoption["record"]["sha256"] == stored.sha256:
            return adoption
    return None


def predecessor_of(stored: Stored) -> Stored | None:
    """The record this one names as its predecessor, where it still lies where it lay and is unchanged."""
    link = stored.record["predecessor"]
    if link is None:
        return None
    path = stored.path.parent / link["file"]
    try:
        before = read_record(path)
    except InputError:
        return None
    return before if before.sha256 == link["sha256"] else None
