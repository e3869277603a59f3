"""A sheet that a PI meets in a moment, in the folder where the commands are typed."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

import synth.search as search
from synth.search.explore import fingerprint

SHEET = Path(__file__).with_name("block.toml").read_text(encoding="utf-8")


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
