"""A sheet that a PI meets in a moment, in the folder where the commands are typed."""

import os
import subprocess
import sys

import pytest

import synth.search as search
from synth.search.explore import fingerprint

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


@pytest.fixture(scope="module")
def searched_once():
    """What a search finds is worked out once a sheet and budget; a patch to change the folder with, too."""
    patch = pytest.MonkeyPatch()
    whole, known = search.propose, {}

    def once(task, settings, progress, stop, seeds=()):
        key = (fingerprint(task), settings.budget)
        if key not in known:
            known[key] = whole(task, settings, progress, stop, seeds=seeds)
        return known[key]

    patch.setattr(search, "propose", once)
    yield patch
    patch.undo()


@pytest.fixture(scope="session")
def begun():
    """One command line in a process of its own, begun in that folder and not waited for."""

    def begin(folder, *words, world=(), **more):
        return subprocess.Popen(
            [sys.executable, "-m", "synth.cli", *map(str, words)],
            cwd=folder,
            env=os.environ | {"OPENBLAS_NUM_THREADS": "1"} | dict(world),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            **more,
        )

    return begin


@pytest.fixture(scope="session")
def files_in():
    """The files below a folder and what is in them."""

    def found(folder):
        inside = sorted(path for path in folder.rglob("*") if path.is_file())
        return {str(path.relative_to(folder)): path.read_bytes() for path in inside}

    return found
