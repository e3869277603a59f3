"""Small sheets for the jobs, as files."""

import pytest

SHEET = """\
title = "Turntable"
revision = "A"
[plant]
transfer = "K / (s*(T*s + 1))"
input = { name = "current", unit = "A" }
output = { name = "angle", unit = "rad" }
[parameters]
K = 2
T = 0.5
[[cases]]
name = "loaded"
T = 0.7
[requirements]
overshoot = { max = "25 %" }
phase_margin = { min = "45 deg" }
settling_time = [{ max = "2 s" }, { max = "1.5 s", band = "5 %" }]
control_peak = { max = 30 }
[search]
structures = ["P", "PD"]
budget = "quick"
"""


@pytest.fixture
def sheet(written):
    return written("turntable.toml", SHEET)
