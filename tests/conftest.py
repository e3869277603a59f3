"""What the tests of several folders share: a sheet as a file, and the command as a user types it."""

from __future__ import annotations

import contextlib
import io
import json
from typing import NamedTuple

import pytest

from synth.cli import main


class Typed(NamedTuple):
    """What one command gave: exit code, standard output, standard error."""

    code: int
    out: str
    err: str

    @property
    def json(self):
        return json.loads(self.out)


@pytest.fixture(scope="session")
def synth():
    """One command line in this process."""

    def run(*words):
        out, err = io.StringIO(), io.StringIO()
        with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            code = main([str(w) for w in words])
        return Typed(code, out.getvalue(), err.getvalue())

    return run


@pytest.fixture
def written(tmp_path):
    """A text as a file of that name in a folder of its own."""

    def write(name, text):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return path

    return write
