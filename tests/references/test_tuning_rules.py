"""Published settings and figures of tuning rules: to half a unit of the last printed digit."""

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure
from synth.model import Plant
from synth.rules import internal_model, reaction_curve, sensitivity, ultimate
from synth.rules.process_model import ProcessModel, half_rule

DATA = tomllib.loads((Path(__file__).parent / "tuning_rules.toml").read_text(encoding="utf-8"))


def entries(kind):
    return [pytest.param(e, id=e["id"]) for e in DATA[kind]]


def half_unit(text):
    return 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)


def close_to_print(value, text):
    # roots of multiple poles are known to about 1e-5, hence the second term
    np.testing.assert_allclose(value, float(text), rtol=1e-5, atol=half_unit(text) * (1 + 1e-9))


@pytest.mark.parametrize("entry", entries("simc_pi"))
def test_simc_pi_settings(entry):
    model = half_rule(Plant.from_formula(entry["plant"]), 1)
    if "disputed" in entry:  # only the model differs from the source's
        assert abs(model.dead_time - entry["dead_time"]) > 0.1
        model = ProcessModel(model.slope, model.lag, 0.0, entry["dead_time"])
    gain, integral = internal_model.simc(model, closed_loop=model.dead_time)
    close_to_print(gain, entry["gain"])
    close_to_print(integral, entry["integral_time"])


@pytest.mark.parametrize("entry", entries("simc_pid"))
def test_simc_pid_gains(entry):
    model = half_rule(Plant.from_formula(entry["plant"]), 2)
    close_to_print(internal_model.simc(model, closed_loop=model.dead_time)[0], entry["gain"])


@pytest.mark.parametrize("entry", entries("half_rule"))
def test_half_rule(entry):
    model = half_rule(Plant.from_formula(entry["plant"]), entry["order"])
    close_to_print(getattr(model, entry["key"]), entry["printed"])


@pytest.mark.parametrize("entry", entries("ultimate"))
def test_ultimate_points(entry):
    plant = Plant.from_coefficients(entry["plant_numerator"], entry["plant_denominator"], entry["dead_time"])
    point = ultimate.ultimate(plant)
    close_to_print(point.gain, entry["gain"])
    if entry["period"] == "15.2":  # printed from a rounded frequency; 15.239 exactly
        np.testing.assert_allclose(point.period, 15.2, atol=0.05)
    else:
        close_to_print(point.period, entry["period"])


def setting(entry):
    given, structure = entry["given"], entry["structure"]
    if entry["rule"] == "ziegler_nichols_step":
        return reaction_curve.ziegler_nichols(given["slope"], given["dead_time"], structure)
    if entry["rule"] in ("ziegler_nichols_ultimate", "tyreus_luyben"):
        point = ultimate.Ultimate(given["gain"], given["period"])
        rule = ultimate.tyreus_luyben if entry["rule"] == "tyreus_luyben" else ultimate.ziegler_nichols
        return rule(point, structure)
    model = ProcessModel(given["gain"] / given["lag"], given["lag"], 0.0, given["dead_time"])
    if entry["rule"] == "cohen_coon":
        return reaction_curve.cohen_coon(model, structure)
    assert entry["rule"] == "amigo"
    return sensitivity.amigo_pi(model) if structure == "PI" else sensitivity.amigo_pid(model)


@pytest.mark.parametrize("entry", entries("setting"))
def test_settings(entry):
    value = setting(entry)[entry["index"]]
    if "disputed" in entry:
        assert abs(value - float(entry["printed"])) > half_unit(entry["printed"])
        np.testing.assert_allclose(value, entry["expected"], rtol=1e-8)
    else:
        close_to_print(value, entry["printed"])


@pytest.mark.parametrize("entry", entries("loop"))
def test_figures_of_the_loops(entry):
    plant = Rational.of(entry["plant_numerator"], entry["plant_denominator"], entry["dead_time"])
    if "integral_gain" in entry:
        compensator = Rational.of([entry["integral_gain"]], [1.0, 0.0])
    else:
        gain, time = entry["gain"], entry["integral_time"]
        compensator = Rational.of([gain * time, gain], [time, 0.0])
    measure = Measure(
        entry["quantity"], band=entry.get("band", 0.02), span=tuple(entry.get("span", (0.1, 0.9)))
    )
    value = float(evaluate(plant, compensator, measures=(measure,)).values[0, 0, 0])
    if entry.get("factor"):
        value = 10.0 ** (value / 20.0)
    if "disputed" in entry:
        np.testing.assert_allclose(value, entry["expected"], rtol=1e-6)
    else:
        close_to_print(value, entry["printed"])
