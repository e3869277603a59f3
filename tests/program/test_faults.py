"""Faults around a run: kill -9 at any moment, no room, no folder, a clock that jumps, a torn journal."""

import json
import os
import random
import resource
import signal
import time

import pytest

from synth.record import read_record

# nothing meets this sheet and no limit proves it; on a thorough budget the outer exploration takes its turn
HARD = """\
title = "A lag chain asked too much"
[plant]
transfer = "1 / (s + 1)^4"
[requirements]
overshoot = { max = "2 %" }
settling_time = { max = "1.5 s" }
sensitivity_peak = { max = 1.4 }
static_error = { max = "0 %" }
[search]
structures = ["PI"]
budget = "thorough"
"""


def files_up_to(size):
    """A limit on the size of files stands for a full disk: the write itself fails, part way."""

    def limit():
        resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))
        signal.signal(signal.SIGXFSZ, signal.SIG_IGN)

    return limit


def records(folder):
    """What stands in records/ under a record's name: every one must read whole."""
    found = sorted((folder / "records").glob("[!.]*")) if (folder / "records").exists() else []
    return {path.name: (read_record(path).sha256, path.read_bytes()) for path in found}


def test_kill_9_at_random_moments_of_a_run(sheet, begun):
    at = time.monotonic()
    whole = begun(sheet.parent, "propose", sheet.name)
    whole.communicate()
    assert whole.returncode == 0
    length = time.monotonic() - at
    before, chance = records(sheet.parent), random.Random(3)
    assert list(before) == ["block-001.json"]
    for share in (0.5, *(chance.uniform(0.75, 1.05) for _ in range(3))):
        one = begun(sheet.parent, "propose", sheet.name)
        time.sleep(share * length)
        one.kill()
        one.communicate()
        after = records(sheet.parent)
        assert {name: after[name] for name in before} == before  # nothing there is touched
        before = after
    last = begun(sheet.parent, "propose", sheet.name)
    last.communicate()
    assert last.returncode == 0
    assert len(records(sheet.parent)) == len(before) + 1


@pytest.mark.parametrize("words", ["propose block.toml", "score block.toml --compensator 1/s"])
def test_no_room_for_the_record(sheet, begun, words):
    one = begun(sheet.parent, *words.split(), preexec_fn=files_up_to(20_000))
    _, err = one.communicate()
    assert one.returncode == 2
    assert "cannot be written" in err
    assert "Traceback" not in err
    assert os.listdir(sheet.parent / "records") == []


def test_a_folder_that_nobody_can_write_to(sheet, synth):
    """/proc is such a folder, whoever asks; a file in the folder's place is another."""
    done = synth("propose", sheet, "--record", "/proc/record.json")
    assert done.code == 2
    assert "cannot be written to" in done.err
    (sheet.parent / "records").write_text("mine")
    done = synth("propose", sheet)
    assert done.code == 2
    assert "not a folder" in done.err
    assert (sheet.parent / "records").read_text() == "mine"
    assert sorted(os.listdir(sheet.parent)) == ["block.toml", "records"]


def test_a_clock_that_jumps_back(sheet, synth, monkeypatch):
    """The newest record is the one with the highest number, whatever the clock said when it was written."""
    hours = iter(["2031-01-01T00:00:00Z", "1999-01-01T00:00:00Z", "1980-01-01T00:00:00Z"])
    monkeypatch.setattr("synth.jobs.finish.now", lambda: next(hours))
    assert synth("propose", sheet).code == 0
    assert synth("propose", sheet, "--seed", 1).code == 0
    assert synth("rerun", sheet).code == 0
    last = json.loads((sheet.parent / "records" / "block-003.json").read_text())
    assert last["created"] == "1980-01-01T00:00:00Z"
    assert last["predecessor"]["file"].endswith("block-002.json")


def told(journal):
    """Trials that the journal holds as finished."""
    import optuna

    storage = optuna.storages.JournalStorage(optuna.storages.journal.JournalFileBackend(str(journal)))
    studies = optuna.get_all_study_summaries(storage)
    return sum(
        trial.state.is_finished()
        for s in studies
        for trial in optuna.load_study(study_name=s.study_name, storage=storage).trials
    )


def test_a_run_goes_on_from_its_journal_after_kill_9(tmp_path, begun):
    (tmp_path / "chain.toml").write_text(HARD)
    journal = tmp_path / "chain.journal"
    words = ("propose", "chain.toml", "--study", "chain.journal")
    first = begun(tmp_path, *words)
    wait_for(journal, 60_000, first)
    first.kill()
    first.communicate()
    assert not records(tmp_path)
    kept = told(journal)
    assert kept > 0
    torn = journal.read_bytes()
    torn += torn[: torn.index(b"\n") // 2]  # as a write that kill -9 cut short
    journal.write_bytes(torn)
    again = begun(tmp_path, *words)
    wait_for(journal, len(torn) + 5_000, again)
    again.send_signal(signal.SIGINT)
    out, err = again.communicate(timeout=60)
    assert again.returncode == 130, out + err
    assert told(journal) > kept
    assert journal.read_bytes().startswith(torn[: torn.rindex(b"\n") + 1])
    assert list(records(tmp_path)) == ["chain-001.json"]


def wait_for(journal, size, one):
    """Until the journal has grown to that size."""
    deadline = time.monotonic() + 60.0
    while not (journal.exists() and journal.stat().st_size > size):
        assert one.poll() is None, one.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.02)


def test_a_file_that_is_no_journal_is_left_alone(sheet, synth):
    sheet.write_text(sheet.read_text() + "# no line break at the end")
    before = sheet.read_bytes()
    done = synth("propose", sheet, "--study", sheet)
    assert done.code == 2
    assert "the storage of the study cannot be used" in done.err
    assert sheet.read_bytes() == before
    assert os.listdir(sheet.parent) == ["block.toml"]


def test_a_full_disk_under_the_journal(tmp_path, begun):
    (tmp_path / "chain.toml").write_text(HARD)
    one = begun(tmp_path, "propose", "chain.toml", "--study", "chain.journal", preexec_fn=files_up_to(30_000))
    _, err = one.communicate()
    assert one.returncode == 2
    assert "the storage of the study cannot be used" in err
    assert "Traceback" not in err
    assert not records(tmp_path)
