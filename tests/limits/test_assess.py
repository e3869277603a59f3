"""What is said against a sheet: the right requirement, the right case, a value that would do, no more."""

import numpy as np
import pytest

from synth.limits import assess
from synth.limits.unstable_poles import least_overshoot, longest_rise
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure
from synth.model import ParameterRange, Plant, PlantCases
from synth.model.forms import from_formula
from synth.requirements import Bound

INVERSE = Plant.from_formula("(2 - s)/(s + 1)^2")


def bound(quantity, side, limit, cases=None, **options):
    return Bound(f"{quantity}.{side}", Measure(quantity, **options), side, limit, cases)


def violated(plant, *bounds, step=1.0):
    cases = plant if isinstance(plant, PlantCases) else PlantCases.of_plant(plant)
    return {x.violates: x for x in assess(cases, bounds, step) if x.violates}


F = Plant.from_formula


@pytest.mark.parametrize(
    ("plant", "bounds", "requirement", "to"),
    [
        # 0.98/(e^2 - 1) = 15.34 % of undershoot at z ts = 2; 5 % are had from z ts = ln(1 + 0.98/0.05) on
        (
            F("(2 - s)/(s + 1)^2"),
            [("settling_time", "max", 1.0), ("undershoot", "max", 5.0)],
            "settling_time.max",
            1.513,
        ),
        (
            F("(2 - s)/(s + 1)^2"),
            [("settling_time", "max", 1.0), ("undershoot", "max", 0.0)],
            "undershoot.max",
            15.34,
        ),
        (F("(2 - s)/(s + 1)^2"), [("tracking_area", "max", 0.4)], "tracking_area.max", 0.5),
        (F("exp(-0.3*s)/(s + 1)"), [("settling_time", "max", 0.2)], "settling_time.max", 0.3),
        (F("exp(-0.3*s)/(s + 1)"), [("peak_time", "max", 0.2)], "peak_time.max", 0.3),
        (F("exp(-0.3*s)/(s + 1)"), [("tracking_area", "max", 0.2)], "tracking_area.max", 0.3),
        (F("s/(s + 1)^2"), [("static_error", "max", 5.0)], "static_error.max", 100.0),
        (
            F("2/(s + 1)"),
            [("control_peak", "max", 0.3), ("static_error", "max", 0.0)],
            "control_peak.max",
            0.5,
        ),
        (
            F("2/(s + 1)"),
            [("control_peak", "max", 0.3), ("static_error", "max", 20.0)],
            "control_peak.max",
            0.4,
        ),
        (
            F("2/(s + 1)"),
            [("control_peak", "max", 0.3), ("velocity_error", "max", 9.0)],
            "control_peak.max",
            0.5,
        ),
        (F("1/(s*(s + 1))"), [("final_value", "min", 1.2)], "final_value.min", 1.0),
        (F("1/(s*(s + 1))"), [("complementary_peak", "max", 0.9)], "complementary_peak.max", 1.0),
        (F("1/(s + 1)"), [("sensitivity_peak", "max", 0.9)], "sensitivity_peak.max", 1.0),
        # e^(p θ) = e^0.5 over a final value of exactly 1
        (
            F("exp(-0.5*s)/(s - 1)"),
            [("overshoot", "max", 20.0), ("static_error", "max", 0.0)],
            "overshoot.max",
            64.88,
        ),
        # T(0) <= 1.1: e^0.5/1.1 - 1
        (
            F("exp(-0.5*s)/(s - 1)"),
            [("overshoot", "max", 20.0), ("static_error", "max", 10.0)],
            "overshoot.max",
            49.89,
        ),
        # (p t_r - level part): 0.1 (e^1 - 1) at y∞ = 1
        (
            F("1/(s*(s - 1))"),
            [("overshoot", "max", 10.0), ("rise_time", "min", 1.0)],
            "overshoot.max",
            17.19,
        ),
        # 1/abs(P b) at s = 2 is (4 · 3)/3
        (F("3/((s - 2)*(s + 1))"), [("noise_gain", "max", 3.0)], "noise_gain.max", 4.0),
        (F("(3 - s)/((s - 1)*(s + 5))"), [("phase_margin", "min", 70.0)], "phase_margin.min", 60.0),
        (F("(3 - s)/((s - 1)*(s + 5))"), [("gain_margin", "min", 12.0)], "gain_margin.min", 9.542),
    ],
    ids=lambda v: v if isinstance(v, str) else "",
)
def test_violated_and_what_to_relax_it_to(plant, bounds, requirement, to):
    found = violated(plant, *(bound(*b) for b in bounds))
    assert list(found) == [requirement]
    limit = found[requirement]
    assert limit.relax["requirement"] == requirement
    np.testing.assert_allclose(limit.relax["to"], to, rtol=4e-4)
    assert limit.source
    assert limit.statement.endswith(".")
    relaxed = [
        bound(b[0], b[1], limit.relax["to"]) if f"{b[0]}.{b[1]}" == requirement else bound(*b) for b in bounds
    ]
    assert not violated(plant, *relaxed)


@pytest.mark.parametrize(
    ("plant", "bounds"),
    [
        # without anything that forces T(0), a slow loop with y∞ > 1 has no overshoot
        (F("exp(-0.5*s)/(s - 1)"), [("overshoot", "max", 0.0)]),
        (F("exp(-0.5*s)/(s - 1)"), [("overshoot", "max", 0.0), ("static_error", "max", 100.0)]),
        (F("exp(-0.5*s)/(s - 1)"), [("overshoot", "max", 0.0), ("final_value", "min", 0.5)]),
        # the rise time leaves the dead time out
        (F("exp(-3*s)/(s + 1)"), [("rise_time", "max", 0.01)]),
        # only part of the reference may be asked for
        (F("2/(s + 1)"), [("control_peak", "max", 0.01)]),
        (F("2/(s + 1)"), [("control_peak", "max", 0.01), ("static_error", "max", 100.0)]),
        (F("2/(s*(s + 1))"), [("control_peak", "max", 0.01), ("static_error", "max", 0.0)]),
        (F("(2 - s)/(s + 1)^2"), [("settling_time", "max", 0.01)]),
        (F("(2 - s)/(s + 1)^2"), [("undershoot", "max", 0.0)]),
        # a biproper loop of high gain has Ms below 1
        (F("(s + 2)/(s + 1)"), [("sensitivity_peak", "max", 0.5)]),
        (F("s/(s + 1)^2"), [("static_error", "max", 100.0), ("disturbance_peak", "max", 0.1)]),
    ],
)
def test_what_is_possible_is_not_called_impossible(plant, bounds):
    assert not violated(plant, *(bound(*b) for b in bounds))


def test_a_zero_at_the_origin_leaves_nothing_to_settle():
    plant = F("s/(s + 1)^2")
    for quantity, limit in (
        ("settling_time", 1.0),
        ("overshoot", 10.0),
        ("velocity_error", 5.0),
        ("rise_time", 1.0),
    ):
        found = violated(plant, bound(quantity, "max", limit))
        assert list(found) == [f"{quantity}.max"]
        assert found[f"{quantity}.max"].relax is None


def test_a_hidden_unstable_mode_ends_it():
    plant = Plant.from_roots(1.0, [2.0], [2.0, -1.0, -3.0])
    found = violated(plant, bound("gain_margin", "min", 1.0), bound("decay_rate", "min", 0.0))
    assert set(found) == {"gain_margin.min", "decay_rate.min"}
    assert found["gain_margin.min"].relax is None
    assert "2 rad/s" in found["gain_margin.min"].statement
    assert not violated(Plant.from_roots(1.0, [-2.0], [-2.0, -1.0]), bound("gain_margin", "min", 1.0))


def test_limits_inform_without_a_sheet():
    names = {x.name: x for x in assess(PlantCases.of_plant(F("(2 - s)*exp(-0.1*s)/((s - 1)*(s + 3))")), ())}
    assert set(names) == {
        "right-half-plane zero against settling and undershoot",
        "right-half-plane pole against overshoot and rise",
        "right-half-plane pole against noise gain",
        "right-half-plane poles with zeros or dead time against the peaks",
        "dead time against settling and peak",
    }
    assert all(x.violates is None and x.relax is None for x in names.values())
    assert assess(PlantCases.of_plant(F("1/(s*(s + 1))")), ()) == ()


CASES = PlantCases.build(
    from_formula("K*exp(-theta*s)/(s + 1)"),
    (ParameterRange("K", 2.0, 1.0, 4.0), ParameterRange("theta", 0.2, 0.1, 0.4)),
    (("cold", {"theta": 1.0}),),
)


def test_the_worst_case_speaks():
    limit = violated(CASES, bound("settling_time", "max", 0.3))["settling_time.max"]
    assert limit.facts["case"] == "cold"
    assert limit.relax["to"] == 1.0


def test_a_requirement_speaks_for_its_own_cases_only():
    assert not violated(CASES, bound("settling_time", "max", 0.3, cases=("nominal",)))
    limit = violated(CASES, bound("settling_time", "max", 0.3, cases=("nominal", "K low, theta high")))
    assert limit["settling_time.max"].facts["case"] == "K low, theta high"


def test_forcing_counts_on_the_same_case_only():
    """The static error is bounded on the nominal case, the input on another: together they force nothing."""
    static, peak = (
        bound("static_error", "max", 0.0, ("nominal",)),
        bound("control_peak", "max", 0.3, ("cold",)),
    )
    assert not violated(CASES, static, peak)
    assert (
        violated(CASES, static, bound("control_peak", "max", 0.3))["control_peak.max"].facts["case"]
        == "nominal"
    )


def test_the_reference_step_counts():
    asked = (bound("static_error", "max", 0.0), bound("control_peak", "max", 2.0))
    assert not violated(F("1/(s + 1)"), *asked, step=-1.9)
    np.testing.assert_allclose(
        violated(F("1/(s + 1)"), *asked, step=-2.5)["control_peak.max"].relax["to"], 2.5
    )


def test_the_overshoot_bound_and_its_inverse():
    for pole, delay, final, level in ((1.0, 0.0, 1.0, 0.9), (3.0, 0.2, 1.1, 0.5), (0.2, 2.0, 0.9, 1.0)):
        rise = 0.7
        least = least_overshoot(pole, delay, final, rise, level)
        np.testing.assert_allclose(longest_rise(pole, delay, final, least, level), rise, rtol=1e-9)
    assert longest_rise(1.0, 0.0, 2.0, 0.1) == np.inf


def test_the_zero_at_p_over_the_noise_gain_is_met_with_equality_by_the_best_p():
    """1/(s - 1) under C = K: C S = K (s - 1)/(s - 1 + K), at K = 2 an all-pass of gain 2 = 1/abs(P b)."""
    plant = F("1/(s - 1)")
    value = evaluate(
        plant.rational(), Rational.of([[2.0]], [[1.0]]), measures=(Measure("noise_gain"),)
    ).values[0, 0, 0]
    np.testing.assert_allclose(value, 2.0)
    assert not violated(plant, bound("noise_gain", "max", 2.0))
    assert violated(plant, bound("noise_gain", "max", 1.99))["noise_gain.max"].relax["to"] == 2.0


def test_units_do_not_matter():
    """The same plant in milliseconds: times shrink by 1000, verdicts stay."""
    slow = violated(
        F("(2 - s)/(s + 1)^2"), bound("settling_time", "max", 1.0), bound("undershoot", "max", 5.0)
    )
    fast = violated(
        F("(2000 - s)/(s + 1000)^2"), bound("settling_time", "max", 0.001), bound("undershoot", "max", 5.0)
    )
    np.testing.assert_allclose(
        fast["settling_time.max"].relax["to"], 1e-3 * slow["settling_time.max"].relax["to"], rtol=1e-9
    )
