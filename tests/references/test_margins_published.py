"""Margins that textbooks and tuning rules print, through the core: to half a unit of the last digit."""

from __future__ import annotations

import tomllib
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure

DATA = tomllib.loads((Path(__file__).parent / "margins.toml").read_text(encoding="utf-8"))["margin"]


def half_unit(text):
    return 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)


def polynomials(c):
    """Numerator and denominator of a controller; improper ones (no filter) will join the plant."""
    k, ti, td = c.get("K", 1.0), c.get("Ti"), c.get("Td", 0.0)
    match c["form"]:
        case "P":
            return [k], [1.0]
        case "I":
            return [c["ki"]], [1.0, 0.0]
        case "PI":
            return [k * ti, k], [ti, 0.0]
        case "PD":
            return [k * td, k], [1.0]
        case "PID":
            return [k * ti * td, k * ti, k], [ti, 0.0]
        case "PID series":
            return np.polymul([k * ti, k], [td, 1.0]), [ti, 0.0]
        case "factored":
            return k * np.poly(c["z"]), np.poly(c["p"])
        case "polynomial":
            return c["num"], c["den"]
    raise AssertionError(c["form"])


def found(entry):
    num, den = polynomials(entry["controller"])
    plant = entry["plant"]
    loop = Rational.of([np.polymul(plant["num"], num)], [np.polymul(plant["den"], den)], plant["delay"])
    result = evaluate(loop, Rational.of([[1.0]], [[1.0]]), measures=(Measure(entry["quantity"]),))
    assert result.stable.all()
    value = float(result.values[0, 0, 0])
    if entry["quantity"] == "gain_margin" and entry["unit"] == "1":
        return 10.0 ** (value / 20.0)
    return value


@pytest.mark.parametrize("entry", [e for e in DATA if "disputed" not in e], ids=lambda e: e["id"])
def test_printed_margin_comes_out(entry):
    tolerance = half_unit(entry["printed"]) * (1 + 1e-9)
    assert found(entry) == pytest.approx(float(entry["printed"]), abs=tolerance)


@pytest.mark.parametrize("entry", [e for e in DATA if "disputed" in e], ids=lambda e: e["id"])
def test_disputed_margin_differs_from_its_print_as_stated(entry):
    value = found(entry)
    assert value == pytest.approx(entry["found"], rel=1e-7)
    assert abs(value - float(entry["printed"])) > half_unit(entry["printed"])
    assert len(entry["disputed"]) > 20
