"""Every departure from the fields is found, with its path; what is not required may be missing."""

import pytest

from synth.record import RECORD_FORMAT
from synth.record.format import Adoption, Record
from synth.record.shape import MOST, departures


def test_a_whole_record_has_no_departures(record):
    assert record["format"] == RECORD_FORMAT
    assert departures(record, Record) == []


def told(found):
    return [str(departure) for departure in found]


def _without(record, *path):
    inner = record
    for key in path[:-1]:
        inner = inner[key]
    del inner[path[-1]]
    return record


@pytest.mark.parametrize(
    ("path", "complaint"),
    [
        (("verdict",), "verdict is missing"),
        (("spec", "sha256"), "spec.sha256 is missing"),
        (("candidates", 0, "compensator"), "candidates[0].compensator is missing"),
        (("plant", "cases", 0, "dead_time"), "plant.cases[0].dead_time is missing"),
    ],
)
def test_a_missing_field_is_named_by_its_path(record, path, complaint):
    assert told(departures(_without(record, *path), Record)) == [complaint]


@pytest.mark.parametrize(
    ("path", "value", "complaint"),
    [
        (("verdict",), "perhaps", "verdict must be one of 'met', 'not met', 'impossible', is 'perhaps'"),
        (("candidates",), {}, "candidates must be a list, is a table"),
        (("candidates", 0, "rank"), 1.5, "candidates[0].rank must be a whole number, is 1.5"),
        (("candidates", 0, "rank"), True, "candidates[0].rank must be a whole number, is True"),
        (("candidates", 0, "meets_all"), 1, "candidates[0].meets_all must be true or false, is 1"),
        (
            ("candidates", 0, "worst_slack"),
            "lots",
            "candidates[0].worst_slack must be a number or null or 'inf' or '-inf', is 'lots'",
        ),
        (
            ("candidates", 0, "binding"),
            {"requirement": "overshoot.max"},
            "candidates[0].binding.case is missing",
        ),
        (
            ("plant", "cases", 0, "numerator"),
            [2, None],
            "plant.cases[0].numerator[1] must be a number, is null",
        ),
        (("search", "seconds"), 1e999, "search.seconds must be a number, is inf"),
    ],
)
def test_a_wrong_value_is_named_by_its_path(record, path, value, complaint):
    inner = record
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    assert told(departures(record, Record)) == [complaint]


@pytest.mark.parametrize("value", ["inf", "-inf", None, -3, 0.25])
def test_a_slack_may_be_infinite_or_absent(record, value):
    record["candidates"][0]["worst_slack"] = value
    assert departures(record, Record) == []


def test_unknown_fields_are_let_pass_and_complaints_end(record):
    record["invented_later"] = {"anything": 1}
    assert departures(record, Record) == []
    assert len(departures({}, Record)) == MOST
    assert told(departures([], Adoption)) == ["the file must be a table, is a list"]
