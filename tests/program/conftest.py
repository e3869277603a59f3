"""A sheet that a PI meets in a moment, and the command as a user types it, in this process."""

import json

import pytest

from synth.cli import main

SHEET = """\
title = "Heated block"
revision = "A"
[plant]
transfer = "K / ((T*s + 1)*(0.1*s + 1))"
input = { name = "heater", unit = "W" }
output = { name = "block", unit = "K" }
[parameters]
K = 2
T = 1.0
[[cases]]
name = "cold"
T = 1.1
[requirements]
overshoot = { max = "10 %" }
settling_time = { max = "2 s" }
static_error = { max = "0 %" }
sensitivity_peak = { max = 1.7 }
[search]
structures = ["P", "PI"]
budget = "quick"
"""


class Typed:
    """What one command gave: exit code, standard output, standard error."""

    def __init__(self, code, out, err):
        self.code, self.out, self.err = code, out, err

    @property
    def json(self):
        return json.loads(self.out)


@pytest.fixture
def sheet(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("COLUMNS", raising=False)
    path = tmp_path / "block.toml"
    path.write_text(SHEET)
    return path


@pytest.fixture
def synth(capsys):
    def run(*words):
        code = main([str(w) for w in words])
        out, err = capsys.readouterr()
        return Typed(code, out, err)

    return run
