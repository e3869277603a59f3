"""Whole or not at all, never over another; the newest is found whatever the clock says;

Bad files are told apart.
"""

import json
import os
import subprocess
import sys
import threading
from pathlib import Path

import pytest

from synth.errors import InputError
from synth.record import (
    newest_adoption,
    newest_record,
    place_for,
    predecessor_of,
    read_record,
    text_of,
    write_adoption,
    write_record,
)


def _spec(folder):
    path = folder / "mast.toml"
    path.write_text("# a sheet\n")
    return path


def _written(record, spec, created=None):
    record = dict(record) | ({"created": created} if created else {})
    return write_record(record, place_for(spec, None))


def test_runs_are_numbered_and_read_back_as_they_were(record, tmp_path):
    spec = _spec(tmp_path)
    paths = [_written(record, spec) for _ in range(3)]
    assert [p.name for p in paths] == ["mast-001.json", "mast-002.json", "mast-003.json"]
    assert read_record(paths[0]).record == record
    assert sorted(os.listdir(tmp_path / "records")) == [p.name for p in paths]  # no hidden rest


def test_a_path_that_exists_is_never_overwritten(record, tmp_path):
    spec = _spec(tmp_path)
    wanted = tmp_path / "mine.json"
    assert write_record(record, place_for(spec, wanted)) == wanted
    before = wanted.read_bytes()
    with pytest.raises(InputError, match="never overwritten"):
        place_for(spec, wanted)
    # someone else takes the name while the search runs
    place = place_for(spec, tmp_path / "late.json")
    (tmp_path / "late.json").write_text("theirs")
    with pytest.raises(InputError, match="never overwritten"):
        write_record(record, place)
    assert wanted.read_bytes() == before
    assert (tmp_path / "late.json").read_text() == "theirs"


def test_two_writers_at_once_get_names_of_their_own(record, tmp_path):
    spec = _spec(tmp_path)
    paths = []

    def write():
        paths.append(_written(record, spec))

    threads = [threading.Thread(target=write) for _ in range(12)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    assert len(set(paths)) == 12
    assert all(read_record(p).record == record for p in paths)


def test_kill_9_while_writing_leaves_whole_records_or_none(record, tmp_path):
    spec = _spec(tmp_path)
    big = dict(record)
    big["spec"] = dict(record["spec"]) | {"text": "x" * 3_000_000}
    (tmp_path / "big.json").write_text(json.dumps(big))
    program = (
        "import json, sys\nfrom pathlib import Path\nfrom synth.record import place_for, write_record\n"
        "record = json.loads(Path(sys.argv[1]).read_text())\n"
        "while True:\n    write_record(record, place_for(Path(sys.argv[2]), None))\n"
        "    print('one', flush=True)\n"
    )
    for wait in (0.02, 0.05, 0.11):
        child = subprocess.Popen(
            [sys.executable, "-c", program, str(tmp_path / "big.json"), str(spec)], stdout=subprocess.PIPE
        )
        child.stdout.readline()
        threading.Event().wait(wait)
        child.kill()
        child.wait()
        child.stdout.close()
    found = sorted((tmp_path / "records").glob("*.json"))
    assert found
    assert all(read_record(p).record == big for p in found)


def test_a_full_disk_leaves_nothing(record, tmp_path, monkeypatch):
    spec = _spec(tmp_path)
    place = place_for(spec, None)

    def full(_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(InputError, match="No space left"):
        write_record(record, place)
    assert os.listdir(tmp_path / "records") == []


def test_without_hard_links_nothing_is_overwritten_either(record, tmp_path, monkeypatch):
    def no_links(*_):
        raise PermissionError(1, "Operation not permitted")

    monkeypatch.setattr(os, "link", no_links)
    spec = _spec(tmp_path)
    assert [_written(record, spec).name for _ in range(2)] == ["mast-001.json", "mast-002.json"]
    assert read_record(tmp_path / "records" / "mast-001.json").record == record


def test_a_folder_that_is_a_file_or_missing_is_told_before_any_work(record, tmp_path):
    spec = _spec(tmp_path)
    (tmp_path / "records").write_text("not a folder")
    with pytest.raises(InputError, match="not a folder"):
        place_for(spec, None)
    with pytest.raises(InputError, match="does not exist"):
        place_for(spec, tmp_path / "nowhere" / "r.json")
    with pytest.raises(InputError, match="names a folder"):
        place_for(spec, tmp_path)


def test_an_unwritable_folder_is_told_before_any_work(tmp_path, monkeypatch):
    spec = _spec(tmp_path)

    def refuse(*_, **__):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("tempfile.TemporaryFile", refuse)
    with pytest.raises(InputError, match="cannot be written to"):
        place_for(spec, None)
    assert os.listdir(tmp_path) == ["mast.toml"]


def test_the_number_decides_what_is_newest_when_the_clock_jumps_back(record, tmp_path):
    spec = _spec(tmp_path)
    _written(record, spec, "2030-01-01T00:00:00Z")
    later = _written(record, spec, "2026-01-01T00:00:00Z")
    assert newest_record(spec).path == later


def test_other_sheets_and_other_files_do_not_count(record, tmp_path):
    spec = _spec(tmp_path)
    own = _written(record, spec)
    other = dict(record) | {"spec": dict(record["spec"]) | {"file": "else.toml"}}
    write_record(other, place_for(spec, tmp_path / "records" / "named.json"))
    (tmp_path / "records" / "notes.json").write_text("{}")
    assert newest_record(spec).path == own
    named = dict(record) | {"created": "2027-01-01T00:00:00Z"}
    mine = write_record(named, place_for(spec, tmp_path / "records" / "mine.json"))
    assert newest_record(spec).path == mine
    assert newest_record(tmp_path / "else.toml").path.name == "named.json"
    assert newest_record(tmp_path / "nobody.toml") is None


def test_a_damaged_newest_record_is_said_and_not_passed_over(record, tmp_path):
    spec = _spec(tmp_path)
    _written(record, spec)
    (tmp_path / "records" / "mast-002.json").write_text('{"format": "synth-rec')
    with pytest.raises(InputError, match="not a whole record"):
        newest_record(spec)


def _adoption(stored):
    candidate = stored.record["candidates"][0]
    return {
        "format": "synth-adoption/1",
        "created": "2026-12-01T12:00:00Z",
        "record": {"file": stored.path.name, "sha256": stored.sha256},
        "rank": 1,
        "structure": "PI",
        "parameters": candidate["parameters"],
        "compensator": candidate["compensator"],
        "verdict": "met",
        "note": None,
    }


def test_the_newest_adoption_of_that_very_record(record, tmp_path):
    spec = _spec(tmp_path)
    stored = read_record(_written(record, spec))
    assert newest_adoption(stored) is None
    write_adoption(_adoption(stored), stored.path)
    second = write_adoption(_adoption(stored) | {"note": "second thoughts"}, stored.path)
    assert second.name == "mast-001.adopted-002.json"
    write_adoption(_adoption(stored) | {"record": {"file": "x", "sha256": "another"}}, stored.path)
    assert newest_adoption(stored).adoption["note"] == "second thoughts"
    assert newest_record(spec).path == stored.path  # adoptions are no records


def test_the_chain_goes_back_while_the_files_are_unchanged(record, tmp_path):
    spec = _spec(tmp_path)
    first = read_record(_written(record, spec))
    link = {"file": first.path.name, "sha256": first.sha256}
    second = read_record(_written(dict(record) | {"predecessor": link}, spec))
    assert predecessor_of(second).path == first.path
    assert predecessor_of(first) is None
    first.path.write_text(text_of(dict(record) | {"created": "2001-01-01T00:00:00Z"}))
    assert predecessor_of(second) is None


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "not a whole record: the file is empty"),
        ("[1, 2", "not a whole record: it ends in the middle"),
        ("{,}", "not a whole record: "),
        ("[]", "not a record of this program"),
        ('{"format": "other/1"}', "not a record of this program"),
        ('{"format": "synth-record/2"}', "this record was written by a newer version"),
        ('{"format": "synth-record/0"}', "unknown version of a record"),
        ('{"format": "synth-adoption/1"}', "a record was expected, this file says adoption"),
        ('{"format": "synth-record/1", "x": NaN}', "not a record: "),
        ('{"format": "synth-record/1"}', "damaged record: this is missing"),
        ("[" * 100_000, "not a"),
    ],
)
def test_files_that_are_no_records_are_told_apart(tmp_path, text, complaint):
    path = tmp_path / "r.json"
    path.write_text(text)
    with pytest.raises(InputError) as trouble:
        read_record(path)
    assert trouble.value.faults[0].what.startswith(complaint)
    assert trouble.value.faults[0].file == str(path)


def test_no_file_a_folder_and_no_text(tmp_path):
    (tmp_path / "bytes.json").write_bytes(b"\xff\xfe\x00")
    for path, complaint in (
        (tmp_path / "none.json", "there is no such record"),
        (tmp_path, "this is a folder"),
        (tmp_path / "bytes.json", "not UTF-8"),
        (Path("a\0b"), "there is no such record"),
    ):
        with pytest.raises(InputError, match=complaint):
            read_record(path)
