"""Published figures of first and second order systems: to half a unit of the last printed digit."""

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure

DATA = tomllib.loads((Path(__file__).parent / "second_order.toml").read_text(encoding="utf-8"))
FIGURES = [pytest.param(f, id=f["id"]) for f in DATA["figure"]]


def half_unit(text):
    return 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)


def value_of(figure):
    if "system" in figure:  # T = N/D is the unity loop round L = N/(D - N)
        num = np.array(figure["system"]["numerator"])
        den = np.array(figure["system"]["denominator"])
        den = np.polysub(den, num)
    else:
        num, den = figure["loop"]["numerator"], figure["loop"]["denominator"]
    options = {}
    if "band" in figure:
        options["band"] = figure["band"]
    if "span" in figure:
        options["span"] = tuple(figure["span"])
    measure = Measure(figure["quantity"], **options)
    found = evaluate(Rational.of(num, den), Rational.of([1.0], [1.0]), measures=(measure,))
    return found.values[0, 0, 0]


@pytest.mark.parametrize("figure", FIGURES)
def test_printed_figure(figure):
    value = value_of(figure)
    off = abs(value - float(figure["printed"]))
    tolerance = figure.get("tolerance", half_unit(figure["printed"])) * (1 + 1e-9)
    if "disputed" in figure:
        assert off > tolerance  # else the note is out of date
        np.testing.assert_allclose(value, figure["exact"], rtol=1e-8)
    else:
        assert off <= tolerance
