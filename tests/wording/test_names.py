"""Names and units in the plant's own words."""

import pytest

from synth.loop.quantities import Measure
from synth.wording.names import limit_words, name_of, plant_unit, quantity_name, quantity_unit


@pytest.mark.parametrize(
    ("unit", "u", "y", "words"),
    [
        ("u", "V", "rad", "V"),
        ("u per y", "V", "rad", "V per rad"),
        ("y s per d", "V", "rad", "rad s per V"),
        ("u per y", "", "", "u per y"),
        ("u", "-", "V", ""),
        ("u per y", "-", "V", "per V"),
        ("y per d", "-", "V", "V"),
        ("y s per d", "-", "-", "s"),
        ("deg", "V", "rad", "deg"),
    ],
)
def test_the_plants_own_units(unit, u, y, words):
    assert plant_unit(unit, u, y) == words


def test_options_are_said_where_they_are_not_the_usual():
    assert name_of(Measure("settling_time")) == "settling time"
    assert name_of(Measure("settling_time", band=0.05)) == "settling time (5 %)"
    assert name_of(Measure("damping_ratio", below=30.0)) == "damping ratio below 30 rad/s"
    assert name_of(Measure("rise_time", span=(0.0, 1.0))) == "rise time (0-100 %)"


def test_a_quantity_of_a_later_version_reads_as_its_key():
    assert quantity_name("jitter_power") == "jitter power"
    assert quantity_unit("jitter_power") == ""
    assert limit_words("max", 0.01, "s") == "at most 10 ms"
