"""The nearest name: slips that a hand makes, and names that are none."""

import pytest

from synth.errors import Fault, InputError, nearest
from synth.structures import REGISTRY


@pytest.mark.parametrize(
    ("typed", "meant"),
    [
        ("PDI", "PID"),
        ("pdi", "PID"),
        ("IP", "PI"),
        ("DP", "PD"),
        ("lag-lead", "lead-lag"),
        ("leda", "lead"),
        ("PIlead", "PI-lead"),
        ("duble-lead", "double-lead"),
        ("PIDD", "PID"),
        ("state feedback", None),
        ("", None),
    ],
)
def test_a_slip_of_the_hand_finds_the_structure(typed, meant):
    assert nearest(typed, REGISTRY) == meant


def test_of_two_anagrams_the_one_that_moved_least_is_nearest():
    assert nearest("lag-laed", ["lead-lag", "lag-lead"]) == "lag-lead"


def test_what_a_script_sees_of_an_error_says_where_it_is():
    faults = [Fault("unknown structure", file="mast.toml", line=31, key="search.structures[1]"), Fault("no")]
    assert str(InputError(faults)) == "unknown structure (mast.toml, line 31, search.structures[1]); no"
