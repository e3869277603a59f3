"""Candidates side by side."""

import copy

from synth.report import comparison


def test_a_settling_time_is_shown_in_the_band_that_each_sheet_asks_for(record, drawn):
    other = copy.deepcopy(record)
    (asked,) = (r for r in record["requirements"] if r["quantity"] == "settling_time")
    assert asked["band"] == 0.05
    for requirement in other["requirements"]:
        requirement.pop("band", None)
    for candidate in other["candidates"]:
        candidate["quantities"]["worst"]["settling_time"] = {"value": 7.77, "case": "nominal"}
    text = drawn(comparison([("a.json", record), ("b.json", other)], 200))
    rows = [line.split() for line in text.splitlines() if line.startswith("  settling")]
    five, two = sorted(rows, key=lambda row: "(5" not in row)
    assert five[:5] == ["settling", "time", "(5", "%),", "s"]
    first = record["candidates"][0]["judged"][asked["id"]]["value"]
    assert float(five[5].rstrip("!*")) == first  # as its sheet judges it
    assert five[-1] == "—"  # the other sheet did not ask for that band
    assert two[-1].rstrip("!*") == "7.77"
