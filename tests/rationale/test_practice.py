"""What the sheet lets pass and nobody would build is said in one line."""

import pytest

from synth.jobs.options import Options
from synth.jobs.score import score
from synth.rationale.sentences import _but

SHEET = """\
[plant]
transfer = "{plant}"
[requirements]
phase_margin = {{ min = "30 deg" }}
{more}
"""


@pytest.fixture
def scored(written):
    def run(plant, compensator, more=""):
        path = written("sheet.toml", SHEET.format(plant=plant, more=more))
        return score(path, compensator, Options(keep=False)).record

    return run


def test_an_integral_time_far_below_the_loop_is_called_idle(scored):
    record = scored("1/(s+1)", "3*(1e9*s + 1)/(1e9*s)")
    (remark,) = record["candidates"][0]["remarks"]
    assert remark.startswith("integral time 1e9 s is 2.8e9 times slower than the loop")
    assert any(c[1:].startswith(remark[1:]) for c in record["cautions"])


def test_a_usual_loop_has_no_remarks(scored):
    record = scored("1/(s+1)", "3*(s + 1)/s")
    assert record["candidates"][0]["remarks"] == []


@pytest.mark.parametrize(
    ("more", "said"),
    [("", True), ("control_peak = { max = 2e6 }", False), ("noise_gain = { max = 2e6 }", False)],
)
def test_a_gain_of_a_million_is_called_out_where_no_effort_is_bounded(scored, more, said):
    record = scored("1/(s+1)", "1e6*(s + 1)/s", more)
    remarks = record["candidates"][0]["remarks"]
    assert any("because no effort is bounded" in r for r in remarks) is said


def test_a_loop_that_settles_above_the_reference_is_not_said_to_reach_only_208_per_cent(scored):
    record = scored("1/(s-1)", "1.9")  # T(0) = 1.9/0.9
    assert record["candidates"][0]["remarks"] == ["settles at 211 % of the reference"]
    assert "It settles at 211 % of the reference." in record["statement"]["text"]
    assert any(c.startswith("The loop settles at 211 %") for c in record["cautions"])


def test_a_loop_that_drives_backwards(scored):
    record = scored("(1 - s)/(s + 1)", "-0.5")  # T(0) = -0.5/0.5
    assert record["candidates"][0]["remarks"] == ["drives backwards: y ends at −1 of the reference"]


def test_a_slack_won_by_hardly_following_is_not_praised():
    assert _but({"final_value": 0.384}) == ", but reaches only 38.4 % of the reference"
    assert _but({"final_value": -1e-6}) == ", but drives backwards"
    assert _but({"slack": 0.3}) == ""
