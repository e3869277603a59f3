"""A sheet that a PI meets in a moment, in the folder where the commands are typed."""

import pytest

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


@pytest.fixture
def sheet(tmp_path, monkeypatch, written):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("COLUMNS", raising=False)
    return written("block.toml", SHEET)
