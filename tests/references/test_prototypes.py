"""Printed figures of Butterworth, Bessel, deadbeat and other prototype polynomials, through the core.

The closed loop T = D(0)/D(s) is the unity loop round D(0)/(D(s) - D(0)).
"""

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure

DATA = tomllib.loads((Path(__file__).parent / "prototypes.toml").read_text(encoding="utf-8"))["figure"]


def half_unit(text):
    return 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)


def values_of(denominator, measures):
    den = np.array(denominator)
    num = den[-1:]
    found = evaluate(Rational.of(num, np.polysub(den, num)), Rational.of([1.0], [1.0]), measures=measures)
    assert found.stable.all()
    return found.values[0, 0]


@pytest.mark.parametrize("figure", [pytest.param(f, id=f["id"]) for f in DATA])
def test_printed_figure_of_a_prototype(figure):
    options = {"band": figure["band"]} if "band" in figure else {}
    if "span" in figure:
        options["span"] = tuple(figure["span"])
    (value,) = values_of(figure["denominator"], (Measure(figure["quantity"], **options),))
    allowed = max(half_unit(figure["printed"]), figure.get("tolerance", 0.0)) * (1.0 + 1e-9)
    if "disputed" in figure:
        assert value == pytest.approx(figure["found"], rel=1e-8)
        assert abs(value - float(figure["printed"])) > allowed
    else:
        assert value == pytest.approx(float(figure["printed"]), abs=allowed)


@pytest.mark.parametrize("order", range(2, 9))
def test_butterworth_is_flat_and_three_decibels_down_at_one(order):
    """S. Butterworth, On the theory of filter amplifiers, Wireless Engineer 7 (1930): |T|² = 1/(1 + ω^2n)."""
    angles = np.pi * (2.0 * np.arange(1, order + 1) + order - 1.0) / (2.0 * order)
    den = np.real(np.poly(np.exp(1j * angles)))
    peak, bandwidth = values_of(den, (Measure("complementary_peak"), Measure("bandwidth")))
    assert bandwidth == pytest.approx(1.0, rel=1e-9)
    assert peak == pytest.approx(1.0, rel=1e-9)
