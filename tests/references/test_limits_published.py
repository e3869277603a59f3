"""Published bounds come out of the limits to half a unit of the last printed digit."""

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq

from synth.limits import assess
from synth.limits.interpolation import best_gain_margin, least_peak
from synth.limits.zeros import least_settling, least_undershoot
from synth.loop.quantities import Measure
from synth.model import Plant, PlantCases
from synth.requirements import Bound

DATA = tomllib.loads((Path(__file__).parent / "limits.toml").read_text(encoding="utf-8"))


def entries(kind):
    return [pytest.param(e, id=e["id"]) for e in DATA[kind]]


def close_to_print(value, text):
    half = 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)
    np.testing.assert_allclose(value, float(text), rtol=1e-6, atol=half)


@pytest.mark.parametrize("entry", entries("peak"))
def test_least_peaks(entry):
    close_to_print(least_peak(entry["poles"], entry["zeros"], entry["dead_time"]), entry["printed"])


@pytest.mark.parametrize("entry", entries("peak"))
def test_least_peaks_reach_the_sheet(entry):
    """The same number, through a plant and a sheet: asked for a little less, it is what to relax to."""
    plant = Plant.from_roots(1.0, entry["zeros"], [*entry["poles"], -50.0], entry["dead_time"])
    peak = float(entry["printed"])
    for quantity in ("sensitivity_peak", "complementary_peak"):
        bound = Bound(f"{quantity}.max", Measure(quantity), "max", 0.99 * peak)
        (limit,) = [x for x in assess(PlantCases.of_plant(plant), (bound,)) if x.violates]
        assert limit.violates == bound.id
        close_to_print(limit.facts["peak"], entry["printed"])
        # the advice is rounded outward to four digits
        assert limit.facts["peak"] <= limit.relax["to"] * (1.0 + 1e-6)
        np.testing.assert_allclose(limit.relax["to"], limit.facts["peak"], rtol=1e-3)


@pytest.mark.parametrize("entry", entries("peak_inverse"))
def test_what_a_peak_allows(entry):
    peak = entry["peak"]
    if entry["key"] == "zero":  # z/p
        value = brentq(lambda z: least_peak([1.0], [z], 0.0) - peak, 1.01, 100.0)
    else:  # p times dead time
        value = brentq(lambda t: least_peak([1.0], [], t) - peak, 1e-6, 10.0)
    close_to_print(value, entry["printed"])


@pytest.mark.parametrize("entry", entries("gain_margin"))
def test_gain_margin_ratio(entry):
    one_way = best_gain_margin(least_peak([entry["pole"]], [entry["zero"]], 0.0))
    close_to_print(10.0 ** (2.0 * one_way / 20.0), entry["printed"])


@pytest.mark.parametrize("entry", entries("delay_margin"))
def test_delay_margin(entry):
    plant = Plant.from_roots(1.0, [], [entry["pole"], -3.0])
    bound = Bound("delay_margin.min", Measure("delay_margin"), "min", 1.01 * float(entry["printed"]))
    (limit,) = [x for x in assess(PlantCases.of_plant(plant), (bound,)) if x.violates]
    np.testing.assert_allclose(limit.relax["to"], float(entry["printed"]))


@pytest.mark.parametrize("entry", entries("undershoot"))
def test_undershoot(entry):
    x, band = entry["zero_times_settling"], entry["band"]
    least = least_undershoot(2.0, x / 2.0, band)
    close_to_print(least, entry["printed"])
    np.testing.assert_allclose(least_settling(2.0, least, band), x / 2.0, rtol=1e-12)
