"""PID settings under a bound on Ms and a wish for integral gain: never worse than the published ones, than
the best PI, and hardly than the best there is; and a list that says so."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.search import Aim, Task, propose
from synth.structures import by_name

HERE = Path(__file__).parent
PI = {r["id"]: r for r in tomllib.loads((HERE / "optimum_pi.toml").read_text(encoding="utf-8"))["optimum"]}
PID = tomllib.loads((HERE / "optimum_pid.toml").read_text(encoding="utf-8"))


def found(row, peak, *structures):
    """What is listed, best first, and the integral gain of the best of each structure."""
    task = Task(
        plants=Rational.of(row["numerator"], row["denominator"], row["dead_time"]),
        case_names=("nominal",),
        bounds=(Bound("sensitivity_peak.max", Measure("sensitivity_peak"), "max", peak),),
        structures=tuple(by_name(name) for name in structures),
        prefer=Aim(Measure("disturbance_integral"), "min"),
    )
    listed = propose(task).candidates
    assert all(c.meets_all for c in listed)
    gains = {}
    for c in listed:
        gains.setdefault(c.structure, c.parameters["gain"] / c.parameters["integral_time"])
    return listed, gains


def peak_of(row):
    """Ms of a published setting, by a scan."""
    s = 1j * np.logspace(-4, 4, 200_001)
    plant = (
        np.polyval(row["numerator"], s) / np.polyval(row["denominator"], s) * np.exp(-s * row["dead_time"])
    )
    integral, derivative = 1.0 / (row["integral_time"] * s), row["derivative_time"] * s
    both = 1.0 + integral + derivative if row["form"] == "standard" else (1.0 + integral) * (1.0 + derivative)
    return float((1.0 / np.abs(1.0 + plant * row["gain"] * both / (row["filter_time"] * s + 1.0))).max())


@pytest.mark.parametrize("row", PID["published"], ids=lambda r: r["id"])
def test_no_worse_than_the_published_setting(row):
    """At the Ms that the setting has, without the filter that the printed ones leave out and this one has."""
    _, gains = found(row, peak_of(row), "PID")
    assert gains["PID"] >= row["gain"] / row["integral_time"]


# where the best of the slack leads to less integral gain than a PI has
@pytest.mark.parametrize("name", ["a0.1-Ms1.6", "fopdt0.1-Ms2.0", "ipdt-Ms1.4", "ipdt-Ms2.0", "unst-Ms2.0"])
def test_no_worse_than_the_best_pi_though_that_is_not_asked_for(name):
    row = PI[name]
    _, gains = found(row, row["sensitivity_peak"], "PID")
    assert gains["PID"] >= float(row["integral_gain"])


@pytest.mark.parametrize("row", PID["optimum"], ids=lambda r: r["id"])
def test_within_a_hundredth_of_the_largest_integral_gain(row):
    plant = PI[row["id"]]
    _, gains = found(plant, plant["sensitivity_peak"], "PID")
    assert gains["PID"] == pytest.approx(float(row["integral_gain"]), rel=1e-2)


@pytest.mark.parametrize("name", ["a0.1-Ms1.6", "ipdt-Ms1.4", "z2-Ms1.4"])
def test_what_contains_another_is_not_listed_behind_it(name):
    row = PI[name]
    listed, gains = found(row, row["sensitivity_peak"], "PI", "PID")
    assert gains["PI"] == pytest.approx(float(row["integral_gain"]), rel=2.5e-4)
    assert gains["PID"] >= gains["PI"]
    assert listed[0].structure == "PID"
    wish = [c.values[0, c.measures.index(Measure("disturbance_integral"))] for c in listed]
    assert wish == sorted(wish)
