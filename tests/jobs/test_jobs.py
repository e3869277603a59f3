"""The jobs as a notebook calls them: a record comes back, nothing is printed, nothing is written unasked."""

import os
from dataclasses import replace

import numpy as np
import pytest

from synth.errors import InputError
from synth.jobs import finish
from synth.jobs.adopt import adopt
from synth.jobs.options import Options
from synth.jobs.propose import propose
from synth.jobs.rerun import in_service, rerun
from synth.jobs.score import coefficients, score
from synth.jobs.scoring import outcome_of, scored
from synth.record import read_record
from synth.spec import read_spec
from synth.verify import Verified


def test_a_notebook_gets_a_record_and_silence(sheet, capsys):
    done = propose(sheet, Options(keep=False))
    assert done.path is None
    assert os.listdir(sheet.parent) == [sheet.name]
    assert capsys.readouterr() == ("", "")
    assert done.record["candidates"][0]["rank"] == 1
    kept = propose(str(sheet), Options(record=sheet.parent / "r.json", seed=3))
    assert read_record(kept.path).record == kept.record
    assert kept.record["search"]["seed"] == 3


def test_progress_is_told_and_stop_is_asked(sheet):
    seen = []
    done = propose(sheet, Options(keep=False, progress=seen.append))
    assert seen
    assert seen[-1].evaluations <= done.record["search"]["evaluations"]
    stopped = propose(sheet, Options(keep=False, stop=lambda: True))
    assert stopped.record["search"]["interrupted"] is True


@pytest.mark.parametrize(
    ("text", "numerator", "denominator"),
    [
        ("3", [3.0], [1.0]),
        ("2*(s + 1)/s", [2.0, 2.0], [1.0, 0.0]),
        ("-(s^2 + s + 1)/(s*(0.1*s + 1))", [-1.0, -1.0, -1.0], [0.1, 1.0, 0.0]),
    ],
)
def test_a_compensator_is_read_from_a_formula(text, numerator, denominator):
    found = coefficients(text)
    scale = found[1][0] / denominator[0]
    np.testing.assert_allclose(found[0], scale * np.array(numerator))
    np.testing.assert_allclose(found[1], scale * np.array(denominator))


def test_an_unstable_loop_is_scored_and_called_so(sheet):
    record = score(sheet, "-1", Options(keep=False)).record
    first = record["candidates"][0]
    assert first["meets_all"] is False
    assert first["worst_slack"] == "-inf"
    assert "does not stabilise the plant on nominal; loaded" in record["statement"]["text"]
    assert first["quantities"]["nominal"]["overshoot"] is None
    assert first["curves"] == {"step": {}, "root_locus": {}}


def test_a_structure_is_known_by_its_function(sheet):
    record = score(sheet, "5*(0.4*s + 1)/(0.04*s + 1)", Options(keep=False)).record
    first = record["candidates"][0]
    assert first["structure"] == "PD"
    assert first["also"] == ["lead"]
    assert first["parameters"]["gain"] == pytest.approx(5.0)
    odd = score(sheet, "5*(s + 1)^3/((s + 2)*(s + 3)*(s + 4))", Options(keep=False)).record
    assert odd["candidates"][0]["structure"] == "given"
    assert odd["candidates"][0]["parameters"] == {}


def test_who_disagrees_goes_last_and_is_marked(sheet, monkeypatch):
    spec = read_spec(sheet)
    found = [scored(spec, [k], [1.0], structure="P", parameters={"gain": k}) for k in (1.0, 1.2)]
    outcome = outcome_of(spec, found, 0.0)

    def doubtful(spec, outcome):
        return [Verified(i > 0, 0.5 if i == 0 else 1e-9, ("peak 1 against 2",), {}) for i in range(2)]

    monkeypatch.setattr(finish, "opinions", doubtful)
    record = finish.finish("score", spec, outcome, limits=(), place=None).record
    assert [c["parameters"]["gain"] for c in record["candidates"]] == [1.2, 1.0]
    assert [c["verified"]["agrees"] for c in record["candidates"]] == [True, False]
    assert record["candidates"][1]["verified"]["details"] == ["peak 1 against 2"]


def test_a_doubted_or_interrupted_candidate_needs_a_note(sheet):
    import json

    place = sheet.parent / "r.json"
    score(sheet, "2.9*(0.4*s + 1)/(0.04*s + 1)", Options(record=place))
    for change in (
        lambda r: r["search"].update(interrupted=True),
        lambda r: r["candidates"][0].update(
            verified={"agrees": False, "largest_relative_difference": 0.1, "details": []}
        ),
    ):
        record = json.loads(place.read_text())
        assert record["candidates"][0]["meets_all"] is True
        change(record)
        other = sheet.parent / "doubted.json"
        other.write_text(json.dumps(record))
        with pytest.raises(InputError, match="not without a reason"):
            adopt(other, 1)
        with pytest.raises(InputError, match="not without a reason"):
            adopt(other, 1, "  ")
        adoption, path = adopt(other, 1, "tried on the rig")
        assert adoption["note"] == "tried on the rig"
        path.unlink()
    assert adopt(place, 1)[0]["note"] is None


def test_rerun_finds_the_adoption_through_the_chain(sheet):
    first = propose(sheet)
    adopt(first.path, 1, "for the trial")
    second = rerun(sheet)
    assert second.record["predecessor"]["file"] == "turntable-001.json"
    third = rerun(sheet)
    assert third.record["predecessor"]["file"] == "turntable-002.json"
    assert third.record["revision"]["adopted"]["rank"] == 1
    assert in_service(read_record(third.path)).adoption.path.name == "turntable-001.adopted-001.json"
    assert third.record["revision"]["changes"] == []


def test_a_rerun_can_be_against_a_record_elsewhere(sheet, tmp_path):
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    first = propose(sheet, Options(record=elsewhere / "old.json"))
    done = rerun(sheet, first.path)
    assert done.record["predecessor"]["file"] == "../elsewhere/old.json"
    with pytest.raises(InputError, match="no earlier record"):
        rerun(sheet.with_name("nothing.toml")) if sheet.rename(sheet.with_name("nothing.toml")) else None


def test_a_record_without_candidates_can_be_rerun(sheet):
    import json

    done = propose(sheet)
    empty = json.loads(done.path.read_text()) | {"candidates": []}
    (sheet.parent / "empty.json").write_text(json.dumps(empty))
    again = rerun(sheet, sheet.parent / "empty.json", Options(keep=False))
    assert again.record["revision"]["adopted"] is None
    assert again.record["revision"]["earlier"] == []


def test_a_point_inside_the_tolerances_that_fails_becomes_a_case(sheet):
    sheet.write_text(
        '[plant]\ntransfer = "1 / (s^2 + 2*d*s + 1 + 4*(a - 0.5)^2)"\n[parameters]\nd = 0.2\n'
        'a = { value = 0.4, range = [0.0, 1.0] }\n[requirements]\nstatic_error = { max = "10.5 %" }\n'
    )
    # 1/(1 + L(0)) is worst inside: L(0) = 9/(1 + 4 (a - 0.5)²) is largest at a = 0.5, smallest at the ends
    record = score(sheet, "9", Options(keep=False)).record
    roles = {c["name"]: c["role"] for c in record["plant"]["cases"]}
    assert record["candidates"][0]["meets_all"] is False
    assert "interior" not in roles.values()  # the corners are worst here, no point inside adds anything
    assert record["plant"]["interior_examined"] == 256
    sheet.write_text(sheet.read_text().replace('max = "10.5 %"', 'min = "10.5 %"'))
    record = score(sheet, "9", Options(keep=False)).record
    assert "interior" in {c["role"] for c in record["plant"]["cases"]}
    assert record["candidates"][0]["binding"]["case"].startswith("inside")


def test_an_operating_spec_keeps_its_bounds_on_the_cases_they_name(sheet):
    spec = read_spec(sheet)
    bound = replace(spec.bounds[0], cases=("loaded",))
    spec = replace(spec, bounds=(bound, *spec.bounds[1:]))
    found = scored(spec, [3.0], [1.0], structure="P", parameters={"gain": 3.0})
    assert np.isinf(found.slack[0, 0])
    assert np.isfinite(found.slack[1, 0])
