"""Records and adoptions with anything wrong in them, through every command that reads one.

Either they are read, or refused with the file and the key path: never a traceback, and no file is changed.
"""

import copy
import json
import os

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

SHEET = """\
title = "Heated block"
[plant]
transfer = "K / ((T*s + 1)*(0.1*s + 1))"
input = { name = "heater", unit = "W" }
[parameters]
K = 2
T = { value = 1.0, tolerance = "10 %" }
[requirements]
overshoot = { max = "10 %" }
settling_time = [{ max = "2 s" }, { max = "1.9 s", band = "5 %" }]
static_error = { max = "0 %" }
[search]
structures = ["P", "PI"]
budget = "quick"
"""
DEEP, LISTS = '"//deep"', "[" * 600 + "]" * 600
TWICE = "//twice"


@pytest.fixture(scope="module")
def folder(tmp_path_factory, searched_once, synth):
    """Two real records, the second a rerun's, and an adoption."""
    place = tmp_path_factory.mktemp("damaged")
    searched_once.chdir(place)
    sheet = place / "block.toml"
    sheet.write_text(SHEET)
    assert synth("propose", sheet, "--record", "first.json", "--trade", "overshoot,rise_time").code == 0
    assert synth("adopt", "first.json", "1", "--note", "for the trial").code == 0
    sheet.write_text(SHEET.replace("K = 2", "K = 3").replace('"1.9 s"', '"1.8 s"'))
    assert synth("rerun", sheet, "--against", "first.json", "--record", "second.json").code in (0, 1)
    return place


VALUES = st.one_of(
    st.sampled_from(
        [None, True, False, 0, -1, 2.5, 1e308, -1e308, 5e-324, 10**40, 10**400, float("nan"), float("inf")]
    ),
    st.sampled_from(
        ["inf", "-inf", "NaN", "", "x", "\x1b[31m", "[bold]", "\ud800", "a" * 3000, "PID", "met"]
    ),
    st.sampled_from([[], {}, [[]], {"": None}, [0.0, 0.0], [None], ["inf"], [1, 2, 3], {"value": "inf"}]),
    st.just(DEEP.strip('"')),
    st.integers(),
    st.floats(),
    st.text(max_size=8),
)
STEPS = st.lists(st.integers(0, 60), min_size=1, max_size=8)
CHANGE = st.tuples(STEPS, st.sampled_from(["drop", "put", "twice", "swap"]), VALUES)
CUT = st.floats(0.0, 1.0, exclude_max=True)


def change(document, steps, kind, value):
    """One change at the place to which the steps lead: each is the number of a child, counted round."""
    inner = document
    while True:
        keys = list(inner) if isinstance(inner, dict) else range(len(inner))
        key = keys[steps[0] % len(keys)]
        steps = steps[1:]
        if not steps or not isinstance(inner[key], dict | list) or not inner[key]:
            break
        inner = inner[key]
    if kind == "drop":
        del inner[key]
    elif kind == "put":
        inner[key] = copy.deepcopy(value)  # a later change may go inside
    elif kind == "swap":
        other = keys[0]
        inner[key], inner[other] = inner[other], inner[key]
    elif isinstance(inner, list):
        inner.insert(key, inner[key])
    else:
        inner[f"{key}{TWICE}"] = copy.deepcopy(value)


def damaged(text, changes, cut):
    document = json.loads(text)
    for one in changes:
        if document:
            change(document, *one)
    raw = (
        json.dumps(document).replace(f'{TWICE}":', '":').replace(DEEP, LISTS).encode("utf-8", "surrogatepass")
    )
    return raw if cut is None else raw[: int(cut * len(raw))]


READERS = [
    ["show", "odd.json"],
    ["show", "odd.json", "--rank", "1"],
    ["show", "odd.json", "--json"],
    ["compare", "first.json", "odd.json"],
    ["adopt", "odd.json", "1", "--note", "x"],
    ["rerun", "block.toml", "--against", "odd.json"],
    ["rerun", "block.toml", "--against", "first.json"],  # with a damaged adoption
]


@given(
    st.sampled_from(["first.json", "second.json"]),
    st.sampled_from(READERS),
    st.lists(CHANGE, min_size=1, max_size=3),
    st.none() | st.none() | CUT,
)
@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
def test_any_damage_is_read_or_refused_with_its_place(folder, files_in, synth, whole, line, changes, cut):
    if "odd.json" in line:
        odd, text = folder / "odd.json", (folder / whole).read_text()
    else:
        odd, text = folder / "first.adopted-002.json", (folder / "first.adopted-001.json").read_text()
    odd.write_bytes(damaged(text, changes, cut))
    before = files_in(folder)
    try:
        done = synth(*line)
        assert done.code in (0, 1, 2), (line, done.err)
        assert "Traceback" not in done.out + done.err
        after = files_in(folder)
        assert {name: after.get(name) for name in before} == before
        fresh = set(after) - set(before)
        if done.code == 2:
            assert not fresh
            assert done.out == ""
            assert odd.name in done.err or "no candidate of that rank" in done.err
            places = [done.err.count(f"damaged {noun}: this") for noun in ("record", "adoption")]
            assert done.err.count("\n  key ") >= sum(places)
        assert all(name.startswith(("odd.adopted-", "records/")) for name in fresh)
    finally:
        for name in set(files_in(folder)) - {
            "block.toml",
            "first.json",
            "second.json",
            "first.adopted-001.json",
        }:
            os.unlink(folder / name)
