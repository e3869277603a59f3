"""The main job from end to end: propose, show, compare, adopt, a revised plant, rerun."""

import json
import os

from synth.record.files import read_document
from synth.record.format import Adoption, Record
from synth.record.shape import departures


def test_propose_prints_a_report_and_keeps_a_record(sheet, synth):
    done = synth("propose", sheet)
    assert done.code == 0
    assert done.err == ""
    assert "\x1b" not in done.out
    assert all(len(line) <= 80 for line in done.out.splitlines() if "record:" not in line)
    assert done.out.splitlines()[2].startswith("MET  by the first candidate, a PI,")
    for part in (
        "Cautions",
        "Candidates",
        "Beside the limits",
        "C(s) =",
        "Requirements",
        "Closed-loop poles",
        "Reference step",
        "Root locus",
        "Loop gain",
        "Why",
        "Structures not used",
        "A model is not the machine",
    ):
        assert part in done.out, part
    record, _ = read_document(sheet.parent / "records" / "block-001.json", "synth-record/1", Record, "record")
    assert record["spec"]["file"] == "block.toml"
    assert record["spec"]["text"] == sheet.read_text()
    assert record["predecessor"] is None
    assert record["revision"] is None
    assert record["verdict"] == "met"


def test_show_gives_the_same_report_again_and_computes_nothing(sheet, synth):
    told = synth("propose", sheet)
    shown = synth("show", "records/block-001.json")
    assert shown.code == 0
    assert told.out.startswith(shown.out.rstrip("\n"))
    one = synth("show", "records/block-001.json", "--rank", "1")
    assert "Candidate 1 in full" in one.out
    assert "Beside the limits" not in one.out
    assert synth("show", "records/block-001.json", "--json").out == (
        sheet.parent / "records" / "block-001.json"
    ).read_text(encoding="utf-8")


def test_json_puts_the_record_on_standard_output_and_nothing_else(sheet, synth):
    done = synth("propose", sheet, "--json", "--record", "mine.json")
    assert departures(done.json, Record) == []
    assert done.out == (sheet.parent / "mine.json").read_text(encoding="utf-8")
    assert not (sheet.parent / "records").exists()


def test_the_same_sheet_seed_and_version_give_the_same_record(sheet, synth):
    one, two = (synth("propose", sheet, "--json").json for _ in range(2))
    for record in (one, two):
        record["created"] = record["search"]["seconds"] = None
    assert one == two
    assert sorted(os.listdir(sheet.parent / "records")) == ["block-001.json", "block-002.json"]


def test_the_story_of_a_revision(sheet, synth):
    first = synth("propose", sheet, "--json").json
    adopted = synth("adopt", "records/block-001.json", "1", "--note", "on the bench today")
    assert adopted.code == 0
    assert "no release to service" in adopted.out
    path = sheet.parent / "records" / "block-001.adopted-001.json"
    adoption, _ = read_document(path, "synth-adoption/1", Adoption, "adoption")
    assert adoption["rank"] == 1
    assert adoption["compensator"] == first["candidates"][0]["compensator"]
    before = (sheet.parent / "records" / "block-001.json").read_bytes()

    # a small change: kept
    sheet.write_text(
        sheet.read_text().replace('revision = "A"', 'revision = "B"').replace("K = 2\n", "K = 1.98\n")
    )
    kept = synth("rerun", sheet)
    assert kept.code == 0
    assert kept.out.splitlines()[3].startswith("  KEEP  The adopted PI")
    assert "K  2  →  1.98  (−1.0 %)" in kept.out
    record = json.loads((sheet.parent / "records" / "block-002.json").read_text())
    assert record["predecessor"]["file"] == "block-001.json"
    assert record["revision"]["advice"] == "keep"
    assert record["revision"]["changes"] == [{"what": "K", "case": None, "old": 2.0, "new": 1.98}]
    assert record["revision"]["adopted"]["meets_all"] is True

    # a large one: the gain has to move; the adoption of the first record is found through the chain
    sheet.write_text(sheet.read_text().replace("K = 1.98", "K = 20"))
    moved = synth("rerun", sheet)
    assert moved.code == 1
    record = json.loads((sheet.parent / "records" / "block-003.json").read_text())
    assert record["predecessor"]["file"] == "block-002.json"
    assert record["revision"]["advice"] == "retune"
    assert record["revision"]["adopted"]["meets_all"] is False
    old, new = record["revision"]["moved"]["gain"]
    assert old == first["candidates"][0]["parameters"]["gain"]
    assert new < old
    assert (sheet.parent / "records" / "block-001.json").read_bytes() == before

    # nothing of the kind can be met: relax
    sheet.write_text(sheet.read_text().replace('max = "2 s"', 'max = "2 ms"'))
    relaxed = synth("rerun", sheet, "--against", "records/block-001.json")
    assert relaxed.code == 1
    assert "RELAX" in relaxed.out

    compared = synth("compare", "records/block-001.json", "records/block-003.json")
    assert compared.code == 0
    assert "Side by side" in compared.out
    assert "A1" in compared.out
    assert "B1" in compared.out


def test_without_an_adoption_the_advice_is_about_the_first_candidate_and_says_so(sheet, synth):
    synth("propose", sheet)
    done = synth("rerun", sheet)
    assert done.code == 0
    assert "none was adopted" in done.out
    assert "nothing in plant or requirements" in done.out


def test_score_judges_what_the_user_brings(sheet, synth):
    good = synth("score", sheet, "--compensator", "(s + 1)/s")
    assert good.code == 0
    assert "MET  by the compensator given" in good.out
    bad = synth("score", sheet, "--compensator", "100*(s + 1)/s", "--json")
    assert bad.code == 1
    record = bad.json
    assert departures(record, Record) == []
    assert record["candidates"][0]["structure"] == "PI"
    assert record["verdict"] == "not met"


def test_what_is_not_met_is_not_adopted_without_a_note(sheet, synth):
    synth("score", sheet, "--compensator", "100*(s + 1)/s")
    refused = synth("adopt", "records/block-001.json", "1")
    assert refused.code == 2
    assert "does not meet everything" in refused.err
    assert os.listdir(sheet.parent / "records") == ["block-001.json"]
    assert synth("adopt", "records/block-001.json", "1", "--note", "a trial on the bench").code == 0


def test_check_searches_and_writes_nothing(sheet, synth):
    done = synth("check", sheet)
    assert done.code == 0
    assert "K / ((T*s + 1)*(0.1*s + 1))" in done.out
    assert "nominal; cold" in done.out
    assert os.listdir(sheet.parent) == ["block.toml"]
    assert synth("check", sheet, "--json").json["format"] == "synth-check/1"


def test_check_gives_1_where_a_limit_rules_the_sheet_out(sheet, synth):
    sheet.write_text(
        '[plant]\ntransfer = "(1 - 8*s)/(s*(3*s + 1))"\n[requirements]\nundershoot = { max = "5 %" }\n'
        'settling_time = { max = "12 s" }\n'
    )
    done = synth("check", sheet)
    assert done.code == 1
    assert "IMPOSSIBLE" in done.out


def test_new_structures_and_schema(sheet, synth):
    done = synth("new", "fresh.toml")
    assert done.code == 0
    assert synth("check", "fresh.toml").code in (0, 1)
    assert synth("new", "fresh.toml").code == 2
    told = synth("structures").out
    assert all(name in told for name in ("PI-lead", "double-lead", "lead-lag"))
    assert synth("schema").json["type"] == "object"
