"""Faults as they are read, whole."""

from synth.errors import Fault
from synth.report import faults


def test_a_fault_has_all_it_takes_to_act_on_it(drawn):
    fault = Fault(
        "unknown structure",
        file="specs/tank_level.toml",
        line=31,
        key="search.structures[1]",
        given='"PDI"',
        allowed="P, PI, PD, PID, lag, lead, lead-lag, PI-lead, double-lead",
        nearest="PID",
    )
    assert drawn(faults([fault], 60, next_step="`synth structures` describes each one."), 60) == (
        "error: unknown structure\n"
        "  file     specs/tank_level.toml, line 31\n"
        "  key      search.structures[1]\n"
        '  given    "PDI"\n'
        "  allowed  P, PI, PD, PID, lag, lead, lead-lag, PI-lead,\n"
        "           double-lead\n"
        "  nearest  PID\n"
        "1 fault found; nothing was run. `synth structures` describes each one.\n"
    )


def test_several_faults_and_what_is_not_known_is_left_out(drawn):
    text = drawn(faults([Fault("a"), Fault("b", line=2)], 80))
    assert text == "error: a\nerror: b\n  file     line 2\n2 faults found; nothing was run.\n"


def test_a_key_in_brackets_is_no_markup(drawn):
    assert "  key      [controller].[red]\n" in drawn(faults([Fault("x", key="[controller].[red]")], 80))


def test_a_caret_keeps_its_place_under_the_text(drawn):
    fault = Fault("`*` is missing between `2` and `s`", file="a.toml", line=2, given="2s/(s+1)\n ^")
    assert "  given    2s/(s+1)\n            ^\n" in drawn(faults([fault], 80))
