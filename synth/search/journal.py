"""The journal of the outer exploration on a local file, made to survive kill -9, a full disk and a power cut.

Optuna's own lock is a file that a killed process leaves behind: the next run waits half a minute for it, and
for ever where the journal was named by a relative path in another folder. Here the kernel holds the lock, on
the journal itself, and lets go of it with the process. Optuna appends behind whatever the last write left: a
line that was cut short is taken off first, or it would spoil the one after it.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import Any

LOCKS = sys.platform != "win32"  # else Optuna's own lock has to do
BEGINS = b'{"op_code":'  # how every journal of Optuna begins


class Lock:
    """Exclusive use of the journal, given up at the latest when the process ends. For Optuna's backend."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._handle: int | None = None

    def acquire(self) -> bool:
        """Wait for the lock."""
        if sys.platform != "win32":
            import fcntl

            self._handle = os.open(self._path, os.O_RDWR | os.O_CREAT, 0o666)
            fcntl.flock(self._handle, fcntl.LOCK_EX)
        return True

    def release(self) -> None:
        """Closing the file gives the lock up."""
        if self._handle is not None:
            os.close(self._handle)
            self._handle = None


def mend(path: Path) -> None:
    """Cut a journal after its last whole line; a file that is none is left as it is, as is one not there."""
    if not path.is_file():
        return
    lock = Lock(path)
    lock.acquire()
    try:
        with path.open("r+b") as file:
            if not file.read(len(BEGINS)).startswith(BEGINS):
                return
            end = _after_last_line(file)
            if end != file.seek(0, os.SEEK_END):
                file.truncate(end)
    finally:
        lock.release()


def _after_last_line(file: Any) -> int:
    """Place after the last line break, looked for from the end."""
    at: int = file.seek(0, os.SEEK_END)
    while at > 0:
        start = max(at - 65536, 0)
        file.seek(start)
        found = file.read(at - start).rfind(b"\n")
        if found >= 0:
            return start + int(found) + 1
        at = start
    return 0
