"""The largest integral gain that a bound on Ms allows, by the whole search: one requirement and a preference.

A sample of the plants of optimum_pi.toml; the whole table is walked by benchmarks/bench_optimum.py.
"""

import tomllib
from pathlib import Path

import pytest

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.search import Aim, Task, propose
from synth.structures import by_name

TABLE = tomllib.loads((Path(__file__).parent / "optimum_pi.toml").read_text(encoding="utf-8"))["optimum"]
SAMPLE = (
    *("n8-Ms1.4", "a0.2-Ms1.4", "a0.2-Ms2.0", "z1-Ms1.6"),
    *("int2-Ms1.4", "osc1-Ms2.0", "fopdt1-Ms1.6", "unst-Ms1.6"),
)

# K. J. Astrom, H. Panagopoulos and T. Hagglund, "Design of PI controllers based on non-convex optimization",
# Automatica 34 (1998) 585-601, table of examples: gain and integral time as printed. Recalled, not looked up.
PRINTED = {
    "a0.2-Ms1.4": ("1.93", "0.745"),
    "a0.2-Ms2.0": ("4.13", "0.59"),
    "int2-Ms1.4": ("0.167", None),
}


def task(row, structure="PI"):
    return Task(
        plants=Rational.of(row["numerator"], row["denominator"], row["dead_time"]),
        case_names=("nominal",),
        bounds=(Bound("sensitivity_peak.max", Measure("sensitivity_peak"), "max", row["sensitivity_peak"]),),
        structures=(by_name(structure),),
        prefer=Aim(Measure("disturbance_integral"), "min"),
    )


def half_unit(text):
    """Half of the last printed digit."""
    return 0.5 * 10.0 ** -len(text.partition(".")[2])


@pytest.mark.parametrize("name", SAMPLE)
def test_largest_integral_gain_under_a_sensitivity_bound(name):
    row = next(r for r in TABLE if r["id"] == name)
    best = propose(task(row)).candidates[0]
    gain, time = best.parameters["gain"], best.parameters["integral_time"]
    assert best.meets_all
    assert best.worst_slack >= 0.0
    # never above the true optimum, and no more below it than the rounding of two tuned values takes
    optimum = float(row["integral_gain"])
    assert gain / time == pytest.approx(optimum, rel=2.5e-4)
    assert gain / time <= optimum * (1.0 + 2e-5)
    if name in PRINTED:
        for value, text in zip((gain, time), PRINTED[name], strict=True):
            if text is not None:
                # the optimum is flat: gain and time may trade against each other by a little
                assert value == pytest.approx(float(text), abs=half_unit(text) + 5e-3 * value)


def test_the_closed_form_of_the_double_lag_with_an_integrator():
    """1/(s (s + 1)²): K = (Ms - 1)/(Ms + 1) and Ti = 4 Ms/(Ms - 1), exact."""
    row = next(r for r in TABLE if r["id"] == "int2-Ms2.0")
    best = propose(task(row)).candidates[0]
    assert best.parameters["gain"] == pytest.approx(1.0 / 3.0, rel=2e-3)
    assert best.parameters["integral_time"] == pytest.approx(8.0, rel=2e-3)


@pytest.mark.parametrize("name", ["a0.2-Ms1.4", "z1-Ms1.6"])
def test_pid_does_no_worse_than_pi(name):
    row = next(r for r in TABLE if r["id"] == name)
    best = propose(task(row, "PID")).candidates[0]
    assert best.parameters["gain"] / best.parameters["integral_time"] >= float(row["integral_gain"])
