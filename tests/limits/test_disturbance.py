"""What a disturbance does before anybody can answer it: closed forms, and a loop that does nothing."""

import numpy as np
import pytest

from synth.limits import assess
from synth.limits.disturbance import open_response
from synth.loop.quantities import Measure
from synth.model import Plant, PlantCases
from synth.requirements import Bound


@pytest.mark.parametrize(
    ("formula", "until", "peak", "area"),
    [
        ("3/(2*s + 1)", 1.0, 3 * (1 - np.exp(-0.5)), 3 * (1 - 2 * (1 - np.exp(-0.5)))),
        ("2/s", 0.7, 1.4, 0.49),
        ("1/s^2", 2.0, 2.0, 4.0 / 3.0),
        ("1/(s - 1)", 3.0, np.exp(3) - 1, np.exp(3) - 4),
        ("(s + 3)/(s + 1)", 2.0, 3 - 2 * np.exp(-2), 6 - 2 * (1 - np.exp(-2))),
        ("5/1", 2.0, 5.0, 10.0),
        ("100/(s^2 + 100)", np.pi / 10, 2.0, np.pi / 10),
        ("1/(1e-6*s + 1)", 1.0, 1.0, 1.0 - 1e-6),
    ],
)
def test_open_response(formula, until, peak, area):
    found = open_response(Plant.from_formula(formula), until)
    np.testing.assert_allclose(found, (peak, area), rtol=1e-9)


def test_the_area_counts_both_sides_and_the_peak_errs_low():
    """(1 - 2 s)/(s + 1)^2 starts the wrong way: h = 1 - (1 + 3 t) e^-t, least at t = 2/3."""
    peak, area = open_response(Plant.from_formula("(1 - 2*s)/(s + 1)^2"), 3.0)
    t = np.linspace(0.0, 3.0, 300001)
    h = 1 - (1 + 3 * t) * np.exp(-t)
    assert 0.0 <= np.abs(h).max() - peak < 1e-4
    assert 0.0 <= np.abs(h).mean() * 3.0 - area < 1e-3


def test_time_units_do_not_matter():
    slow = open_response(Plant.from_formula("2/((3*s + 1)*(s + 1))"), 1.5)
    fast = open_response(Plant.from_formula("2/((3e-9*s + 1)*(1e-9*s + 1))"), 1.5e-9)
    np.testing.assert_allclose(fast, (slow[0], slow[1] * 1e-9), rtol=1e-9)


def test_a_sheet_that_asks_for_more_is_told_so():
    plant = Plant.from_formula("3*exp(-s)/(2*s + 1)")
    bounds = (
        Bound("disturbance_peak.max", Measure("disturbance_peak"), "max", 1.0),
        Bound("disturbance_area.max", Measure("disturbance_area"), "max", 0.5),
    )
    found = {x.violates: x for x in assess(PlantCases.of_plant(plant), bounds) if x.violates}
    np.testing.assert_allclose(found["disturbance_peak.max"].relax["to"], 3 * (1 - np.exp(-0.5)), rtol=1e-3)
    np.testing.assert_allclose(found["disturbance_area.max"].relax["to"], 6 * np.exp(-0.5) - 3, rtol=1e-3)
