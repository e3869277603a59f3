"""What `synth check` says of a plant."""

import pytest

from synth.jobs.check import check
from synth.report import plant


@pytest.mark.parametrize(
    ("transfer", "line"),
    [
        ("6/((s + 2)*(s + 1))", "gain at zero frequency  3"),
        ("6/(s*(s + 2))", "at low frequency  3/s"),
        ("-6/(s^2*(s + 2))", "at low frequency  −3/s²"),
        ("6*s/((s + 2)*(s + 1))", "at low frequency  3 s"),
        ("6*s/(s*(s + 2))", "gain at zero frequency  3"),
    ],
)
def test_the_plant_at_low_frequency(written, drawn, transfer, line):
    text = f'[plant]\ntransfer = "{transfer}"\n[requirements]\nphase_margin = {{ min = "30 deg" }}\n'
    assert f"  {line}\n" in drawn(plant(check(written("sheet.toml", text)), 80))


def test_a_limit_that_rules_out_several_requirements_is_said_once(written, drawn):
    sheet = written(
        "sheet.toml",
        '[plant]\ntransfer = "(s - 1)/((s - 1)*(s + 2))"\n[requirements]\n'
        'overshoot = { max = "10 %" }\nsettling_time = { max = "3 s" }\n',
    )
    text = " ".join(drawn(plant(check(sheet), 80)).split())
    assert text.count("share a root at s = 1 rad/s") == 1
    assert "Violated by overshoot, settling time." in text
