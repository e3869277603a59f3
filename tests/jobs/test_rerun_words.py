"""What a rerun says of the one in service, in each state it may be in."""

import pytest

from synth.jobs.adopt import adopt
from synth.jobs.options import Options
from synth.jobs.rerun import rerun
from synth.jobs.score import score


def said(sheet, compensator, *, note=None, change=("", "")):
    """Who the advice is about, and the evidence, after a compensator was scored and the sheet changed."""
    stored = score(sheet, compensator)
    if note:
        adopt(stored.path, 1, note)
    sheet.write_text(sheet.read_text().replace(*change))
    part = rerun(sheet, options=Options(keep=False)).record["revision"]
    return part["about"], [sentence["text"] for sentence in part["evidence"]], part["advice"]


GOOD, WEAK = "2.9*(0.4*s + 1)/(0.04*s + 1)", "0.1"
SCORED, STILL_NOT = "the compensator scored before (none was adopted)", "still does not meet everything"


@pytest.mark.parametrize(
    ("compensator", "note", "change", "about", "state", "advice"),
    [
        (GOOD, "trial", ("T = 0.7", "T = 0.69"), "the adopted PD", "still meets everything", "keep"),
        (GOOD, "trial", ("K = 2", "K = 20"), "the adopted PD", "no longer meets everything", "retune"),
        (WEAK, "trial", ("K = 2", "K = 2.1"), "the adopted P", STILL_NOT, "restructure"),
        (GOOD, "trial", ("K = 2", "K = -2"), "the adopted PD", "is unstable on nominal; loaded", "retune"),
        (WEAK, None, ("K = 2", "K = 2.1"), SCORED, STILL_NOT, "restructure"),
    ],
)
def test_each_state_is_told_as_it_is(sheet, compensator, note, change, about, state, advice):
    who, evidence, given = said(sheet, compensator, note=note, change=change)
    assert who == about
    assert given == advice
    assert evidence[0].startswith(f"Untouched, it {state} (its slack on the old plant was ")


def test_a_form_of_the_users_own_is_called_no_structure(sheet):
    own = "2.9*(0.4*s + 1)*(s^2 + 3*s + 9)/((0.04*s + 1)*(s^2 + 6*s + 9))"
    who, evidence, advice = said(sheet, own, note="trial", change=("K = 2", "K = 40"))
    assert who == "the adopted compensator"
    assert advice == "restructure"
    assert evidence[1].startswith("Its form is not among the structures searched")
