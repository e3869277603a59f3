"""Published and computed optima: under the same bound the program reaches the same value, or a better one
where its set of compensators is wider. Sources in optima.toml."""

import tomllib
from decimal import Decimal
from pathlib import Path

import pytest

from synth.jobs.options import Options
from synth.jobs.propose import propose
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import Measure
from synth.spec import parse_spec

DATA = tomllib.loads((Path(__file__).parent / "optima.toml").read_text(encoding="utf-8"))["optimum"]
# Settings are rounded for print, at the price of less than 0.001 of slack.
ROUNDING = 5e-4


def half_unit(text):
    return 0.5 * 10.0 ** int(Decimal(text).as_tuple().exponent)


def sheet_of(entry):
    plant = entry["plant"]
    sense = "minimise" if "minimise" in entry else "maximise"
    lines = [
        f'title = "{entry["id"]}"',
        "[plant]",
        f"numerator = {plant['numerator']}",
        f"denominator = {plant['denominator']}",
        *([f'dead_time = "{plant["dead_time"]}"'] if "dead_time" in plant else []),
        "[requirements]",
        entry["requirements"],
        "[prefer]",
        f'{sense} = "{entry[sense]}"',
        "[search]",
        f'structures = ["{entry["structure"]}"]',
    ]
    return "\n".join(lines)


@pytest.mark.parametrize("entry", [pytest.param(e, id=e["id"]) for e in DATA])
def test_the_optimum_is_reached(entry, tmp_path):
    path = tmp_path / "sheet.toml"
    path.write_text(sheet_of(entry), encoding="utf-8")
    record = propose(path, Options(keep=False, budget="quick")).record
    first = record["candidates"][0]
    assert record["verdict"] == "met"
    assert first["verified"]["agrees"]
    minimise = "minimise" in entry
    found = first["quantities"]["nominal"][entry["minimise" if minimise else "maximise"]]
    excess = found / entry["best"] - 1.0 if minimise else 1.0 - found / entry["best"]
    assert excess <= ROUNDING
    if entry["exact"]:  # better than the best there is would be a fault of the core
        assert excess >= -1e-6
    if "printed" in entry:
        allowed = half_unit(entry["printed"]) + ROUNDING * found
        assert found == pytest.approx(float(entry["printed"]), abs=allowed)


@pytest.mark.parametrize("entry", [pytest.param(e, id=e["id"]) for e in DATA if "printed_settings" in e])
def test_printed_settings_sit_on_their_bound(entry):
    """The settings as printed, with all their digits' freedom, hold the published peak."""
    printed = entry["printed_settings"]
    gain = float(printed["gain"])
    integral = float(printed["integral_time"]) if "integral_time" in printed else entry["best"] * gain
    (bound,) = parse_spec(sheet_of(entry)).bounds
    plant = Rational.of(entry["plant"]["numerator"], entry["plant"]["denominator"])
    around = half_unit(printed["gain"]), half_unit(printed.get("integral_time", "0.01"))
    corners = [
        (gain + a * around[0], integral + b * around[1]) for a in (-1.0, 0.0, 1.0) for b in (-1.0, 0.0, 1.0)
    ]
    numerators = [[k * t, k] for k, t in corners]
    denominators = [[t, 0.0] for _, t in corners]
    found = evaluate(plant, Rational.of(numerators, denominators), measures=(Measure("sensitivity_peak"),))
    peaks = found.values[:, 0, 0]
    assert peaks.min() <= bound.limit <= peaks.max()
