"""A sheet read whole: every plant form, parameters, cases, bounds with their options; files that are none."""

import hashlib
import math
import os
import sys

import numpy as np
import pytest

from synth.errors import InputError
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.spec import Preference, SearchSettings, Signal, parse_spec, read_spec

WHOLE = """
title    = "Azimuth drive of a survey mast"
revision = "B"
[plant]
transfer = "Kd * exp(-theta*s) / (s * (I*s + f) * (Te*s + 1))"
valid_to = "30 Hz"
input  = { name = "torque command", unit = "V" }
output = { unit = "rad" }
[parameters]
Kd    = 3.2
f     = 0.4
Te    = "12 ms"
I     = { value = 0.85, tolerance = "20 %" }
theta = { value = "2 ms", range = ["1 ms", "4 ms"] }
[[cases]]
name = "ice on the mast"
I = 1.4
[reference]
step = 0.5
[requirements]
damping_ratio    = { min = 0.6, below = "5 Hz" }
overshoot        = { max = "10 %" }
settling_time    = [{ max = "1.2 s", band = "2 %" }, { max = "0.8 s", band = "5 %" }]
rise_time        = { max = "0.3 s", span = "0-100 %" }
bandwidth        = { min = "1 Hz", max = "40 rad/s" }
gain_margin      = { min = "6 dB", cases = ["nominal", "ice on the mast"] }
static_error     = { max = "0 %" }
[prefer]
minimise = "disturbance_area"
reserve  = "5 %"
[search]
structures = ["pi", "PID", "Lead-Lag", "PID"]
budget = "quick"
seed   = 7
"""


def test_a_sheet_whole():
    spec = parse_spec(WHOLE, "mast.toml")
    assert (spec.file, spec.title, spec.revision) == ("mast.toml", "Azimuth drive of a survey mast", "B")
    assert spec.text == WHOLE
    assert spec.sha256 == hashlib.sha256(WHOLE.encode()).hexdigest()
    assert spec.cases.names == (
        "nominal", "I low, theta low", "I low, theta high", "I high, theta low", "I high, theta high",
        "ice on the mast",
    )  # fmt: skip
    values = [(c.parameters["I"], c.parameters["theta"], c.parameters["Te"]) for c in spec.cases.cases]
    inertia_and_delay = [(0.85, 2e-3), (0.68, 1e-3), (0.68, 4e-3), (1.02, 1e-3), (1.02, 4e-3), (1.4, 2e-3)]
    np.testing.assert_allclose(values, [(*pair, 12e-3) for pair in inertia_and_delay], rtol=1e-14)
    np.testing.assert_allclose(spec.cases.rational.dead_time, [v[1] for v in values])
    assert spec.valid_to == pytest.approx(60 * math.pi)
    assert (spec.input, spec.output) == (Signal("torque command", "V"), Signal("", "rad"))
    assert spec.reference_step == 0.5
    assert spec.bounds == (
        Bound("damping_ratio.min", Measure("damping_ratio", below=10 * math.pi), "min", 0.6),
        Bound("overshoot.max", Measure("overshoot"), "max", 10.0),
        Bound("settling_time.max", Measure("settling_time"), "max", 1.2),
        Bound("settling_time.max.2", Measure("settling_time", band=0.05), "max", 0.8),
        Bound("rise_time.max", Measure("rise_time", span=(0.0, 1.0)), "max", 0.3),
        Bound("bandwidth.min", Measure("bandwidth"), "min", 2 * math.pi),
        Bound("bandwidth.max", Measure("bandwidth"), "max", 40.0),
        Bound("gain_margin.min", Measure("gain_margin"), "min", 6.0, ("nominal", "ice on the mast")),
        Bound("static_error.max", Measure("static_error"), "max", 0.0),
    )
    assert spec.prefer == Preference(Measure("disturbance_area"), "min", 0.05)
    assert spec.search == SearchSettings(("PI", "PID", "lead-lag"), "quick", 7)


def test_what_is_not_said():
    text = "plant = { numerator = [1], denominator = [1, 1] }\nrequirements = { final_value = { min = 0 } }"
    spec = parse_spec(text, "tests/tank level.toml")
    assert (spec.title, spec.revision, spec.valid_to, spec.reference_step) == ("tank level", "", None, 1.0)
    assert (spec.input, spec.prefer, spec.search) == (Signal(), None, SearchSettings(None, "normal", 0))
    assert spec.ranges == ()
    assert spec.cases.names == ("nominal",)


ROWS = 'A = [["-1/T", 1, 0], [0, 0, 1], [0, -29, -4]]'
SAME = [
    'transfer = "K*(s + 3)*exp(-0.002*s)/((s + 1/T)*(s^2 + 4*s + 29))"',
    'numerator = ["K", "3*K"]\ndenominator = ["T", "4*T + 1", "29*T + 4", 29]\ndead_time = "2 ms"',
    'gain = "K"\nzeros = [-3]\npoles = ["-2+5j", "-1/T", "-2-5j"]\ndead_time = "2 ms"',
    'gain = "K"\nzeros = [-3.0]\npoles = [" -2 - 5i", " -2 + 5i", "-1/T"]\ndead_time = "1/500"',
    f'{ROWS}\nB = [[0], [0], ["K"]]\nC = [["3 - 1/T", 1, 0]]\nD = [[0]]\ndead_time = "2 ms"',
    f'{ROWS}\nB = [0, 0, "K"]\nC = ["3 - 1/T", 1, 0]\ndead_time = "2e-3 s"',
]


@pytest.mark.parametrize("text", SAME)
def test_every_form_of_one_plant(text):
    bound = 'requirements = { overshoot = { max = "1 %" } }\n'
    spec = parse_spec(
        f'{bound}[parameters]\nK = 2\nT = {{ value = "250 ms", tolerance = "50 %" }}\n[plant]\n{text}'
    )
    assert spec.cases.names == ("nominal", "T low", "T high")
    s = np.array([0.3 + 2j, 11j])
    for case, time in zip(spec.cases.cases, (0.25, 0.125, 0.375), strict=True):
        expected = 2 * (s + 3) / (s**2 + 4 * s + 29) / (s + 1 / time) * np.exp(-0.002 * s)
        if text.startswith("numerator"):
            expected = expected / time  # the list is written with T s + 1 for s + 1/T
        np.testing.assert_allclose(case.plant.response(s), expected, rtol=1e-12)
        np.testing.assert_allclose(spec.form.at(s, case.parameters), expected, rtol=1e-12)


def test_what_the_sheet_wrote_stays_in_the_plant():
    bound = 'requirements = { overshoot = { max = "1 %" } }\n'
    kept = parse_spec(bound + '[plant]\ntransfer = "(s - 1)/((s - 1)*(s + 2))"').cases.rational
    np.testing.assert_allclose(kept.denominator, [[1, 1, -2]])
    struck = parse_spec(bound + '[plant]\ntransfer = "1/s + 1/s"').cases.rational
    np.testing.assert_allclose(struck.denominator, [[1, 0]])


def test_a_byte_order_mark_and_windows_lines_are_read(tmp_path):
    path = tmp_path / "mast.toml"
    path.write_bytes(b"\xef\xbb\xbf" + WHOLE.replace("\n", "\r\n").encode())
    spec = read_spec(path)
    assert spec.bounds == parse_spec(WHOLE).bounds
    assert spec.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert spec.text.encode() == path.read_bytes()
    path.write_bytes(WHOLE.replace("0.6, below", "0.6, belo").replace("\n", "\r\n").encode())
    with pytest.raises(InputError) as caught:
        read_spec(path)
    (fault,) = caught.value.faults
    assert (fault.line, fault.key, fault.nearest) == (21, "requirements.damping_ratio.belo", "below")


def fault_of(path):
    with pytest.raises(InputError) as caught:
        read_spec(path)
    (fault,) = caught.value.faults
    assert fault.file == str(path)
    return (fault.what, fault.line, fault.given, fault.allowed, fault.nearest)


def test_files_that_are_no_sheet(tmp_path):
    assert fault_of(tmp_path) == ("this is a directory, not a spec file", None, None, None, None)
    (tmp_path / "mast.toml").write_text(WHOLE)
    near = str(tmp_path / "mast.toml")
    assert fault_of(tmp_path / "mats.toml") == ("there is no such file", None, None, None, near)
    assert fault_of(tmp_path / "no" / "where.toml") == ("there is no such file", None, None, None, None)
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b"title = 1\n\xff\xfe")
    words = ("the file is not UTF-8 text", 2, "byte 0xff", "save it as UTF-8", None)
    assert fault_of(binary) == words
    large = tmp_path / "large.toml"
    large.write_bytes(b"#" * 10_000_000)
    assert fault_of(large) == ("the file is too large for a spec", None, None, "at most 256 kB", None)
    assert fault_of("a\0b.toml")[0].startswith("the file cannot be read: ")


@pytest.mark.skipif(sys.platform == "win32" or os.geteuid() == 0, reason="needs a file that may not be read")
def test_a_file_that_may_not_be_read(tmp_path):
    path = tmp_path / "closed.toml"
    path.write_text(WHOLE)
    path.chmod(0)
    assert fault_of(path)[0] == "the file cannot be read: Permission denied"


def test_a_text_that_is_not_unicode():
    with pytest.raises(InputError) as caught:
        parse_spec('title = "\ud800"', "f.toml")
    assert [f.what for f in caught.value.faults] == ["the text is not valid Unicode"]
