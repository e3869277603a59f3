"""The nearest name: slips that a hand makes, and names that are none."""

import pytest

from synth.errors import nearest
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
