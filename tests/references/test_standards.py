"""Margin limits of standards, recalled and not read in them, as sheets that the program meets."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from synth.jobs.options import Options
from synth.jobs.propose import propose
from synth.spec import parse_spec

DATA = tomllib.loads((Path(__file__).parent / "standards.toml").read_text(encoding="utf-8"))["limit"]


def sheet_of(limit):
    """A lightly damped drive, asked for some speed beside the margins."""
    plant = "1 / (s*(0.2*s + 1)*(s^2/900 + 0.02*s + 1))"
    return (
        f'title = "{limit["id"]}"\n[plant]\ntransfer = "{plant}"\n'
        f'[requirements]\nbandwidth = {{ min = "3 rad/s" }}\n{limit["requirements"]}'
    )


@pytest.mark.parametrize("limit", [pytest.param(e, id=e["id"]) for e in DATA])
def test_a_sheet_with_the_limits_is_met(limit, tmp_path):
    assert limit["check"]
    path = tmp_path / "sheet.toml"
    path.write_text(sheet_of(limit), encoding="utf-8")
    record = propose(path, Options(keep=False, budget="quick")).record
    first = record["candidates"][0]
    assert record["verdict"] == "met"
    assert first["verified"]["agrees"]
    for requirement in record["requirements"]:
        worst = first["quantities"]["worst"][requirement["quantity"]]["value"]
        value = np.inf if worst == "inf" else worst
        assert (value - requirement["limit"]) * (1.0 if requirement["bound"] == "min" else -1.0) >= 0.0


@pytest.mark.parametrize("limit", [e for e in DATA if "sensitivity_peak" in e["requirements"]])
def test_a_bound_on_the_sensitivity_peak_implies_most_of_the_margins(limit):
    """Ms implies a gain margin of Ms/(Ms - 1) and a phase margin of 2 asin(1/(2 Ms)): for Ms about 2, 6 dB
    and 29 deg, which is why the three stand together."""
    bounds = {b.measure.quantity: b.limit for b in parse_spec(sheet_of(limit)).bounds}
    peak = bounds["sensitivity_peak"]
    assert 20.0 * np.log10(peak / (peak - 1.0)) == pytest.approx(bounds["gain_margin"], abs=0.05)
    assert np.degrees(2.0 * np.arcsin(0.5 / peak)) == pytest.approx(bounds["phase_margin"], abs=1.1)
