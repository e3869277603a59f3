"""No page is wider than its terminal, whatever the command, the sheet and the colour."""

import re

import pytest
from rich.cells import cell_len

SERVO = """\
title = "Azimuth drive of a survey mast with an unusually long name on its sheet"
revision = "B"
[plant]
transfer = "Kd * (s^2/900 + 0.02*s + 1) / (s * (I*s + f) * (Te*s + 1))"
input = { name = "torque command", unit = "V" }
output = { name = "mast angle", unit = "rad" }
[parameters]
Kd = 3.2
f = 0.6
Te = "15 ms"
I = { value = 0.85, tolerance = "20 %" }
[[cases]]
name = "ice on the mast and a second payload"
I = 1.4
[requirements]
damping_ratio = { min = 0.5 }
overshoot = { max = "20 %" }
settling_time = [{ max = "2.5 s" }, { max = "2 s", band = "5 %" }]
bandwidth = { min = "0.3 Hz", max = "40 rad/s" }
gain_margin = { min = "6 dB", cases = ["nominal"] }
disturbance_residue = { max = 1.2 }
[prefer]
minimise = "disturbance_peak"
reserve = "1 %"
[search]
structures = ["P", "PD"]
budget = "quick"
"""
OVEN = """\
[plant]
transfer = "2*exp(-30*s)/((200*s+1)*(40*s+1))"
[requirements]
settling_time = { max = "400 s" }
overshoot = { max = "20 %" }
static_error = { max = "0 %" }
[search]
structures = ["P", "PI"]
budget = "quick"
"""
RULED_OUT = """\
title = "Boiler level"
[plant]
transfer = "(1 - 8*s)/(s*(3*s + 1))"
[requirements]
undershoot = { max = "5 %" }
settling_time = { max = "12 s" }
[search]
budget = "quick"
structures = ["P", "PD"]
"""
BROKEN = '[plant]\ntransfer = "K / (s*(T*s + 1))"\n[requirements]\novershot = { max = 3 }\n'
PAGES = [
    ["show", "servo.json"],
    ["show", "servo.json", "--rank", "2"],
    ["show", "again.json"],
    ["show", "oven.json"],
    ["show", "ruled.json"],
    ["show", "given.json"],
    ["compare", "servo.json"],
    ["compare", "servo.json", "oven.json", "again.json"],
    ["adopt", "given.json", "1", "--note", "a trial on the bench, with the brake on and a hand on the stop"],
    ["check", "servo.toml"],
    ["check", "ruled.toml"],
    ["check", "broken.toml"],
    ["show", "nowhere.json"],
    ["frobnicate"],
    ["structures"],
    ["--help"],
]
WHOLE = ("record: ", "adoption: ")  # a path is one word, to be copied whole


@pytest.fixture(scope="module")
def folder(tmp_path_factory, synth):
    """Records of every kind."""
    patch = pytest.MonkeyPatch()
    place = tmp_path_factory.mktemp("widths")
    patch.chdir(place)
    for name, text in (("servo", SERVO), ("oven", OVEN), ("ruled", RULED_OUT), ("broken", BROKEN)):
        (place / f"{name}.toml").write_text(text)
    trade = ["--trade", "overshoot,settling_time"]
    for name, code, more in (("servo", 0, []), ("oven", 0, trade), ("ruled", 1, [])):
        assert synth("propose", f"{name}.toml", "--record", f"{name}.json", *more).code == code
    assert synth("adopt", "servo.json", "1", "--note", "for the trial").code == 0
    (place / "servo.toml").write_text(SERVO.replace("f = 0.6", "f = 6").replace('"2.5 s"', '"2.25 s"'))
    assert synth("rerun", "servo.toml", "--against", "servo.json", "--record", "again.json").code in (0, 1)
    given = "2.5*(s/3 + 1)*(s^2 + 3*s + 9)/((0.04*s + 1)*(s^2 + 6*s + 9))"
    assert synth("score", "servo.toml", "--compensator", given, "--record", "given.json").code == 1
    yield place
    patch.undo()


@pytest.mark.parametrize("colour", [False, True], ids=["piped", "coloured"])
@pytest.mark.parametrize("width", [40, 50, 60, 80, 120])
def test_no_line_is_wider_than_the_page(folder, synth, monkeypatch, width, colour):
    monkeypatch.setenv("COLUMNS", str(width))
    if colour:
        monkeypatch.setenv("FORCE_COLOR", "1")
        monkeypatch.setenv("TERM", "xterm-256color")
    for words in PAGES:
        done = synth(*words)
        assert done.code in (0, 1, 2)
        text = done.out + done.err
        assert text.count("\n") < 450  # nor is it folded to threads
        assert ("\x1b[" in text) == (colour and words != ["--help"])
        lines = re.sub(r"\x1b\[[0-9;]*m", "", text).splitlines()
        wide = [line for line in lines if cell_len(line) > width and not line.startswith(WHOLE)]
        assert wide == [], words
