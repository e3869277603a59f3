"""JSON files written whole or not at all, and never over another.

They are read with one clear word when they are not right.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import json
import os
import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from synth.errors import Fault, InputError
from synth.record.shape import Departure, departures

LARGEST_FILE = 200_000_000  # bytes; a record is a few hundred kilobytes


def text_of(document: Mapping[str, Any]) -> str:
    """The JSON text of a document: what is written, and what `--json` prints."""
    return json.dumps(document, ensure_ascii=False, allow_nan=False, indent=1) + "\n"


def write_new(path: Path, text: str) -> None:
    """Write `text` to a path that must not exist yet: either the whole file stands there afterwards, or
    nothing.

    The text goes to a hidden file beside it, is flushed to the disk, and is then linked to its name in one
    step that fails where the name is taken. FileExistsError then; any other OSError as it comes.
    """
    handle, hidden = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as out:
            out.write(text)
            out.flush()
            os.fsync(out.fileno())
        os.chmod(hidden, 0o666 & ~_umask())
        _name(Path(hidden), path)
    finally:
        with contextlib.suppress(FileNotFoundError):
            os.unlink(hidden)
    with contextlib.suppress(OSError):  # some file systems cannot flush a folder
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)


def _name(hidden: Path, path: Path) -> None:
    try:
        os.link(hidden, path)
    except FileExistsError:
        raise
    except OSError as fault:
        if fault.errno not in (errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK):
            raise
        # No links on this file system: take the name first (fails where it is taken), then move the whole
        # over it.
        os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o666))
        os.replace(hidden, path)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def read_document(path: Path, expected: str, kind: Any, noun: str) -> tuple[dict[str, Any], str]:
    """Read and check one document; with it the SHA-256 of the bytes that were read.

    expected : its format, such as "synth-record/1"; kind : its fields (a TypedDict); noun : what the user
    calls it. Raises InputError, one line a fault, for whatever is not a whole document of a format this
    program knows.
    """
    try:
        if path.is_dir():
            raise _fault(f"a {noun} file was expected and this is a folder", path)
        if path.stat().st_size > LARGEST_FILE:
            raise _fault(
                f"too large to be a {noun} of this program ({path.stat().st_size / 1e6:.0f} MB)", path
            )
        content = path.read_bytes()
        text = content.decode("utf-8")
    except FileNotFoundError:
        raise _fault(f"there is no such {noun}", path) from None
    except UnicodeDecodeError:
        raise _fault(f"not a {noun}: the file is not UTF-8 text", path) from None
    except OSError as trouble:
        raise _fault(f"the {noun} cannot be read: {trouble.strerror or trouble}", path) from None
    except ValueError:  # a null byte in the name
        raise _fault(f"there is no such {noun}", path) from None
    try:
        data = json.loads(text, parse_constant=_no_constant)
    except json.JSONDecodeError as trouble:
        cut = trouble.pos >= len(text.rstrip())
        why = (
            "the file is empty"
            if not text.strip()
            else "it ends in the middle"
            if cut
            else f"it is no JSON from column {trouble.colno} on"
        )
        raise _fault(f"not a whole {noun}: {why}", path, line=trouble.lineno) from None
    except (ValueError, RecursionError):
        raise _fault(f"not a {noun}: its text is no JSON that this program writes", path) from None
    _check_format(data, expected, path, noun)
    found = departures(data, kind)
    if found:
        raise damaged(noun, path, found)
    checked: dict[str, Any] = data
    return checked, hashlib.sha256(content).hexdigest()


def damaged(noun: str, path: Path, found: Sequence[Departure]) -> InputError:
    """A fault for each place where a document is not what it should be."""
    return InputError(
        Fault(f"damaged {noun}: {'this' if place else 'the file'} {what}", file=str(path), key=place or None)
        for place, what in found
    )


def _check_format(data: Any, expected: str, path: Path, noun: str) -> None:
    """The family and the version come first: a file of another kind is not a damaged one."""
    written = data.get("format") if isinstance(data, dict) else None
    family, _, version = expected.partition("/")
    if written == expected:
        return
    if not isinstance(written, str) or not written.startswith("synth-"):
        raise _fault(f"not a {noun} of this program (no format {expected!r} in it)", path)
    found_family, _, found_version = written.partition("/")
    if found_family != family:
        other = found_family.removeprefix("synth-")
        raise _fault(f"a {noun} was expected, this file says {other}", path, given=written)
    if found_version.isdecimal() and int(found_version) > int(version):
        raise InputError(
            [
                Fault(
                    f"this {noun} was written by a newer version of the program",
                    file=str(path),
                    given=written,
                    allowed=f"up to {expected}; install the newer version to read it",
                )
            ]
        )
    raise _fault(f"unknown version of a {noun}", path, given=written, allowed=expected)


def _no_constant(name: str) -> None:
    raise ValueError(f"{name} is no JSON")


def _fault(
    what: str, path: Path, *, line: int | None = None, given: str | None = None, allowed: str | None = None
) -> InputError:
    return InputError([Fault(what, file=str(path), line=line, given=given, allowed=allowed)])
