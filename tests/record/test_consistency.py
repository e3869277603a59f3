"""A damaged record is told as damaged, whatever was damaged in it, and never breaks what draws it."""

import json
import random

import pytest

from synth.errors import InputError
from synth.record import read_record
from synth.record.consistency import contradictions


def test_a_whole_record_keeps_its_promises(record):
    assert contradictions(record) == []


@pytest.mark.parametrize(
    ("path", "value", "complaint"),
    [
        (("plant", "cases"), [], "plant.cases is empty"),
        (("plant", "cases", 0, "denominator"), [0.0], "plant.cases[0] has no plant"),
        (
            ("candidates", 0, "compensator", "denominator"),
            [0.0, 1.0],
            "candidates[0].compensator has no proper denominator",
        ),
        (
            ("candidates", 0, "curves", "step"),
            {"t": [0.0, 1.0], "y": [0.0]},
            "candidates[0].curves.step has columns of different lengths",
        ),
        (
            ("candidates", 0, "curves", "step"),
            {"t": [0.0, None], "y": [0.0, 1.0]},
            "candidates[0].curves.step.t has holes",
        ),
        (
            ("candidates", 0, "curves", "root_locus"),
            {"closed": [[1.0]]},
            "candidates[0].curves.root_locus.closed must be pairs of real and imaginary part",
        ),
        (
            ("candidates", 0, "quantities", "nominal"),
            {"overshoot": "lots"},
            "candidates[0].quantities.nominal.overshoot is no number",
        ),
    ],
)
def test_a_broken_promise_is_named(record, tmp_path, path, value, complaint):
    inner = record
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    assert [str(departure) for departure in contradictions(record)] == [complaint]
    file = tmp_path / "r.json"
    file.write_text(json.dumps(record))
    with pytest.raises(InputError, match="damaged record: this") as caught:
        read_record(file)
    assert [fault.key for fault in caught.value.faults] == [complaint.split(" ")[0]]


def _damaged(text, chance):
    raw = bytearray(text.encode())
    kind = chance.choice(("cut", "flip", "hole", "value"))
    if kind == "cut":
        return bytes(raw[: chance.randrange(len(raw))])
    if kind == "flip":
        for _ in range(chance.randrange(1, 6)):
            raw[chance.randrange(len(raw))] = chance.randrange(256)
        return bytes(raw)
    if kind == "hole":
        at = chance.randrange(len(raw))
        return bytes(raw[:at] + raw[at + chance.randrange(1, 60) :])
    record = json.loads(text)
    inner = record
    while isinstance(inner, dict | list) and inner:
        key = chance.choice(list(inner)) if isinstance(inner, dict) else chance.randrange(len(inner))
        if not isinstance(inner[key], dict | list) or chance.random() < 0.2:
            inner[key] = chance.choice((None, "inf", -1, 0, 1e300, "x", [], {}, True))
            break
        inner = inner[key]
    return json.dumps(record).encode()


def test_random_damage_is_read_or_told_and_never_a_fault_of_the_program(record, synth, tmp_path):
    chance = random.Random(7)
    text = json.dumps(record)
    file = tmp_path / "r.json"
    codes = set()
    for _ in range(150):
        file.write_bytes(_damaged(text, chance))
        done = synth("show", file)
        assert done.code in (0, 2), done.err
        codes.add(done.code)
    assert codes == {0, 2}
