"""Rough handling: Ctrl-C, two runs at once, a full disk, a fault of the program, a closed pipe."""

import json
import os
import re
import signal
import subprocess
import sys
import time

import pytest

from synth import cli
from synth.record import read_record
from synth.search.outcome import Outcome


def test_interrupted_keeps_the_best_and_says_so(sheet, synth, monkeypatch):
    import synth.search as search

    whole = search.propose

    def stopped_soon(task, settings, progress, stop, seeds=()):
        os.kill(os.getpid(), signal.SIGINT)  # as Ctrl-C does, once the search runs
        assert stop() is True
        found: Outcome = whole(task, settings, progress, stop, seeds=seeds)
        return found

    monkeypatch.setattr(search, "propose", stopped_soon)
    done = synth("propose", sheet)
    assert done.code == 130
    assert "Interrupted: the best found so far" in done.out
    stored = read_record(sheet.parent / "records" / "block-001.json")
    assert stored.record["search"]["interrupted"] is True
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_a_second_ctrl_c_ends_at_once(sheet, synth, monkeypatch):
    import synth.search as search

    def deaf(*_, **__):
        os.kill(os.getpid(), signal.SIGINT)
        os.kill(os.getpid(), signal.SIGINT)
        time.sleep(5)
        pytest.fail("still running")

    monkeypatch.setattr(search, "propose", deaf)
    done = synth("propose", sheet)
    assert done.code == 130
    assert done.out == ""
    assert not (sheet.parent / "records").exists()


def test_two_runs_at_once_on_one_sheet(sheet, begun):
    runs = [begun(sheet.parent, "propose", "block.toml") for _ in range(2)]
    said = [run.communicate()[0] for run in runs]
    assert [run.returncode for run in runs] == [0, 0]
    names = {re.search(r"record: (\S+)", text).group(1) for text in said}
    assert names == {"records/block-001.json", "records/block-002.json"}
    one, two = (json.loads((sheet.parent / name).read_text()) for name in sorted(names))
    for record in (one, two):
        record["created"] = record["search"]["seconds"] = None
    assert one == two  # two processes, one result


def test_a_disk_that_is_full_at_the_end(sheet, synth, monkeypatch):
    def full(_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    done = synth("score", sheet, "--compensator", "(s + 1)/s")
    assert done.code == 2
    assert "No space left on device" in done.err
    assert os.listdir(sheet.parent / "records") == []


def test_a_folder_that_cannot_be_written_is_told_before_the_search(sheet, synth, monkeypatch):
    import synth.search as search

    def refuse(*_, **__):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("tempfile.TemporaryFile", refuse)
    monkeypatch.setattr(search, "propose", lambda *_, **__: pytest.fail("searched all the same"))
    done = synth("propose", sheet)
    assert done.code == 2
    assert "cannot be written to" in done.err
    assert os.listdir(sheet.parent) == ["block.toml"]


def test_a_fault_of_the_program_is_one_line_and_a_file(sheet, synth, monkeypatch):
    import synth.search as search

    def broken(*_, **__):
        raise RuntimeError("lost at sqlite:///me:secret@host.db, password secret")

    monkeypatch.setattr(search, "propose", broken)
    monkeypatch.setattr("synth.search.explore.storage_of", lambda _: None)
    done = synth("propose", sheet, "--study", "sqlite:///me:secret@host.db")
    assert done.code == 3
    assert done.out == ""
    assert len(done.err.splitlines()) == 1
    assert "Traceback" not in done.err
    where = re.search(r"details: (\S+)", done.err).group(1)
    with open(where) as file:
        details = file.read()
    os.unlink(where)
    assert "Traceback" in details
    assert "secret" not in details + done.err


def test_a_reader_that_stops_reading_is_no_fault(sheet):
    run = subprocess.run(
        f"{sys.executable} -m synth.cli structures | head -1",
        shell=True,
        cwd=sheet.parent,
        capture_output=True,
        text=True,
    )
    assert run.stderr == ""
    assert run.stdout.startswith("P ")


def test_a_terminal_without_the_signs_gets_question_marks(sheet, begun):
    plain = {"PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}
    run = begun(sheet.parent, "check", "block.toml", world=plain)
    out, err = run.communicate()
    assert run.returncode == 0
    assert err == ""
    assert "?" in out


def test_colour_on_a_terminal_alone_and_never_with_no_color(sheet):
    import pty

    def on_a_terminal(**extra):
        master, slave = pty.openpty()
        env = {k: v for k, v in os.environ.items() if k not in ("NO_COLOR", "COLUMNS")}
        env |= {"TERM": "xterm-256color", **extra}
        run = subprocess.Popen(
            [sys.executable, "-m", "synth.cli", "structures"], cwd=sheet.parent, stdout=slave, env=env
        )
        os.close(slave)
        text = b""
        while True:
            try:
                piece = os.read(master, 65536)
            except OSError:
                break
            if not piece:
                break
            text += piece
        run.wait()
        os.close(master)
        return text

    assert b"\x1b[36m" in on_a_terminal()
    assert b"\x1b[36m" not in on_a_terminal(NO_COLOR="1")


def test_help_is_quick_because_nothing_heavy_is_imported():
    code = "import sys; from synth import cli; cli.main(['--help']); " + (
        "print([m for m in ('numpy', 'scipy', 'optuna', 'rich') if m in sys.modules])"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.splitlines()[-1] == "[]"
    assert cli.MET == 0


@pytest.mark.parametrize("words", ["'check', 'block.toml'", "'adopt', 'nowhere.json', '1'"])
def test_what_searches_nothing_loads_no_search(sheet, words):
    code = f"import sys; from synth import cli; cli.main([{words}]); " + (
        "print([m for m in ('synth.search', 'synth.verify', 'synth.loop.evaluate') if m in sys.modules])"
    )
    run = subprocess.run(
        [sys.executable, "-c", code], cwd=sheet.parent, capture_output=True, text=True, check=True
    )
    assert run.stdout.splitlines()[-1] == "[]"
