"""Printed root-locus facts, and the second-order plant under proportional gain, through the core."""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.poles.gain_line import axis_crossings
from synth.loop.poles.locus import asymptotes, break_points, departure_angles, gains_at_damping
from synth.loop.poles.roots import closed_roots
from synth.loop.quantities import Measure

CHECKS = tomllib.loads((Path(__file__).parent / "root_locus.toml").read_text(encoding="utf-8"))["check"]


def positive_breaks(num, den):
    return [b for b in break_points(num, den) if b.gain > 0.0 and b.point.imag == 0.0]


def positive_crossings(num, den):
    return [c for c in axis_crossings(num, den) if c.gain > 0.0 and 0.0 < c.frequency < np.inf]


def single(check, measure):
    result = evaluate(
        Rational.of([check["plant"]["num"]], [check["plant"]["den"]]),
        Rational.of([[check["gain"]]], [[1.0]]),
        measures=(measure,),
    )
    return float(result.values[0, 0, 0])


def ours(check):
    num, den = np.array(check["plant"]["num"]), np.array(check["plant"]["den"])
    args = check.get("args", {})
    index = args.get("index", 0)
    match check["method"]:
        case "rl_break":
            return positive_breaks(num, den)[index].point.real
        case "rl_break_gain":
            return positive_breaks(num, den)[index].gain
        case "rl_jw_w":
            return positive_crossings(num, den)[index].frequency
        case "rl_jw_K":
            return positive_crossings(num, den)[index].gain
        case "rl_centroid":
            return asymptotes(num, den).centroid
        case "rl_departure":
            return departure_angles(num, den, complex(*args["at"]))[0]
        case "rl_zeta_K" | "rl_zeta_re" | "rl_zeta_im":
            ((pole, gain),) = [pair for pair in gains_at_damping(num, den, args["zeta"]) if pair[1] > 0.0]
            return {"K": gain, "re": pole.real, "im": pole.imag}[check["method"].rsplit("_")[-1]]
        case "cl_real":
            closed = np.polyadd(den, check["gain"] * num)
            return closed_roots(closed[None, :])[0].real.min()
        case "gain":
            return positive_breaks(num, den)[0].gain
        case "cl_zeta":
            return single(check, Measure("damping_ratio"))
        case "cl_wn":
            return single(check, Measure("natural_frequency"))
        case "decay":
            return single(check, Measure("decay_rate"))
        case "overshoot" | "peak_time" as name:
            return single(check, Measure(name))
        case "settle":
            return single(check, Measure("settling_time", band=args["band"]))
        case "rise":
            return single(check, Measure("rise_time", span=(args["lo"], args["hi"])))
        case "final":
            return single(check, Measure("final_value"))
    raise AssertionError(check["method"])


@pytest.mark.parametrize("check", CHECKS, ids=lambda c: c["id"])
def test_printed_fact(check):
    found = ours(check)
    assert found == pytest.approx(check["computed"], rel=5e-8, abs=1e-9)  # a double root is known to 1e-8
    if "published" in check:
        distance = abs(found - float(check["published"]))
        if check["disputed"]:
            assert distance > check["tolerance"], "the reason given for the difference is out of date"
        else:
            assert distance <= check["tolerance"] * (1.0 + 1e-9)
