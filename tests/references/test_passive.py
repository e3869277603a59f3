"""Passive design: printed and closed-form amplifications as peaks of a loop, corners of a lead or a lag."""

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure
from synth.structures import by_name

DATA = tomllib.loads((Path(__file__).parent / "passive.toml").read_text(encoding="utf-8"))["peak"]


def absorbed(mu, f, zeta):
    """Main mass with a damped absorber under a force, by its static deflection (Den Hartog, ch. 3)."""
    tuned = np.array([1.0, 2.0 * zeta, f * f])
    coupling = mu * np.array([2.0 * zeta, f * f, 0.0, 0.0])
    whole = np.polyadd(np.polymul([1.0, 0.0, 1.0], tuned), coupling)
    return (tuned, whole) if f else (tuned[:-1], whole[:-1])  # untuned: free to drift, s in both


def of_closed_loop(numerator, denominator, quantity):
    loop = Rational.of(numerator, np.polysub(denominator, numerator))
    return evaluate(loop, Rational.of([1.0], [1.0]), measures=(Measure(quantity),)).values[0, 0, 0]


@pytest.mark.parametrize("entry", [pytest.param(e, id=e["id"]) for e in DATA])
def test_largest_amplification(entry):
    absorber = entry.get("absorber")
    pair = absorbed(**absorber) if absorber else (entry["numerator"], entry["denominator"])
    peak = of_closed_loop(*pair, "complementary_peak")
    if "printed" in entry:
        half = 0.5 * 10.0 ** int(Decimal(entry["printed"]).as_tuple().exponent)
        assert peak == pytest.approx(float(entry["printed"]), abs=half)
    else:
        assert peak == pytest.approx(entry["computed"], rel=1e-8)


@pytest.mark.parametrize("mu", [0.05, 0.1, 0.25])
def test_fixed_points_lie_at_one_height(mu):
    """With f = 1/(1 + mu) both fixed points are √(1 + 2/mu) high, and no damping gets below them."""
    height = np.sqrt(1.0 + 2.0 / mu)
    f = 1.0 / (1.0 + mu)
    zetas = np.sqrt(3.0 * mu / (8.0 * (1.0 + mu) ** 3)) * np.array([0.5, 0.9, 1.0, 1.1, 2.0])
    peaks = [of_closed_loop(*absorbed(mu, f, z), "complementary_peak") for z in zetas]
    assert min(peaks) >= height * (1.0 - 1e-9)
    assert peaks[2] == pytest.approx(height, rel=5e-3)  # Brock's damping: within half a per cent of it


def test_damping_of_the_quadratic_optimum_of_a_double_integrator():
    """D. Karnopp and A. K. Trikha (1969): the optimum damping is 1/√2."""
    loop = Rational.of([np.sqrt(2.0), 1.0], [1.0, 0.0, 0.0])
    found = evaluate(loop, Rational.of([1.0], [1.0]), measures=(Measure("damping_ratio"),))
    assert found.values[0, 0, 0] == pytest.approx(np.sqrt(0.5), rel=1e-9)


corners = st.floats(1e-3, 1e3)


@settings(max_examples=50, deadline=None, derandomize=True)
@given(st.floats(0.1, 10.0), corners, st.floats(1.05, 29.0), st.sampled_from(["lead", "lag"]))
def test_one_line_of_a_lead_or_a_lag_is_its_frequency_response(gain, corner, ratio, name):
    """H. W. Bode (1945): the largest phase is asin((a - 1)/(a + 1)), midway between corners a apart, where
    the magnitude is the geometric mean of its two ends."""
    zero, pole = (corner, corner * ratio) if name == "lead" else (corner * ratio, corner)
    structure = by_name(name)
    line = structure.settings(np.array([gain, zero, pole]))["one line"]
    rational = structure.realise(np.array([[gain, zero, pole]]))
    w = line["at"] * np.geomspace(0.25, 4.0, 401)
    c = np.polyval(rational.numerator[0], 1j * w) / np.polyval(rational.denominator[0], 1j * w)
    phase = np.degrees(np.angle(c))
    sign = 1.0 if name == "lead" else -1.0
    assert phase[200] == pytest.approx(line["max phase"], rel=1e-9)
    assert (sign * phase).max() == pytest.approx(sign * phase[200], rel=1e-12)
    assert abs(c[200]) == pytest.approx(gain * ratio ** (0.5 * sign), rel=1e-9)
    assert line["corner ratio"] == pytest.approx(ratio, rel=1e-12)
