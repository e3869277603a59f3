"""A record written by hand, with everything a report can show;

No number in it was computed by the program.
"""

import copy
import io
import math

import pytest

from synth.report.theme import console

POLES = [[-3.0, 4.0], [-3.0, -4.0], [-12.0, 0.0], [-400.0, 0.0]]
TIMES = [0.02 * i for i in range(101)]


def _candidate(rank, structure, parameters, units, slack, overshoot, settling, peak, binding):
    return {
        "rank": rank,
        "structure": structure,
        "also": [],
        "parameters": parameters,
        "settings": {"standard": {k.replace("_", " "): v for k, v in parameters.items()}},
        "units": units | {k.replace("_", " "): v for k, v in units.items()},
        "compensator": {
            "domain": "s",
            "numerator": [1.5, 6.0],
            "denominator": [1.0, 0.0],
            "factors": {"gain": 1.5, "zeros": [[-4.0, 0.0]], "poles": [[0.0, 0.0]]},
        },
        "order": 1,
        "meets_all": slack >= 0.0,
        "worst_slack": slack,
        "binding": {"requirement": binding, "case": "I high"},
        "quantities": {
            "nominal": {"final_value": 1.0},
            "worst": {
                "overshoot": {"value": overshoot, "case": "I high"},
                "settling_time": {"value": settling, "case": "I high"},
                "control_peak": {"value": peak, "case": "nominal"},
                "sensitivity_peak": {"value": 1.4, "case": "I low"},
                "gain_margin": {"value": "inf", "case": "nominal"},
                "peak_time": {"value": None, "case": None},
            },
        },
        "slack": {"overshoot.max": 1.0 - overshoot / 10.0, "settling_time.max": 1.0 - settling / 2.0},
        "judged": {
            "overshoot.max": {
                "value": overshoot,
                "case": "I high",
                "slack": 1.0 - overshoot / 10.0,
                "near": [{"case": "nominal", "value": 8.8, "slack": 0.12}],
            },
            "settling_time.max": {
                "value": settling,
                "case": "I low",
                "slack": 1.0 - settling / 2.0,
                "near": [],
            },
        },
        "closed_loop_poles": {"nominal": POLES},
        "uncounted_poles": {"nominal": [[-400.0, 0.0]]},
        "modes": [
            {"pole": [-3.0, 4.0], "share": 1.1, "counted": True},
            {"pole": [-12.0, 0.0], "share": 0.25, "counted": True},
            {"pole": [-400.0, 0.0], "share": 0.0004, "counted": False},
        ],
        "verified": {"agrees": True, "largest_relative_difference": 2e-9, "details": []},
        "curves": {
            "step": {
                "case": "nominal",
                "t": TIMES,
                "y": [1.0 - math.exp(-3.0 * t) * math.cos((3.0 + rank) * t) for t in TIMES],
                "u": [2.0 + 4.0 * math.exp(-3.0 * t) for t in TIMES],
            },
            "loop": {
                "w": [0.1, 1.0, 10.0, 100.0],
                "gain_db": [40.0, 10.0, -10.0, -50.0],
                "phase_deg": [-90.0, -100.0, -140.0, -170.0],
            },
            "root_locus": {
                "parameter": "gain",
                "closed": POLES,
                "poles": [[0.0, 0.0], [-6.0, 0.0]],
                "zeros": [[-20.0, 0.0]],
                "branches": [
                    {"re": [0.0, -3.0, -3.0, -3.0], "im": [0.0, 0.0, 4.0, 9.0]},
                    {"re": [-6.0, -3.0, -3.0, -3.0], "im": [0.0, 0.0, -4.0, -9.0]},
                ],
            },
        },
        "rationale": [{"text": "It is held back by overshoot.", "facts": {"overshoot.max": 0.08}}],
    }


def _case(name, role, inertia):
    return {
        "name": name,
        "kind": "rational",
        "role": role,
        "parameters": {"I": inertia},
        "numerator": [2.0],
        "denominator": [inertia, 6.0, 0.0],
        "dead_time": 0.0,
    }


def sample():
    first = _candidate(
        1,
        "PI",
        {"gain": 1.5, "integral_time": 0.25},
        {"gain": "", "integral_time": "s"},
        0.08,
        9.2,
        1.2,
        3.0,
        "overshoot.max",
    )
    second = _candidate(
        2,
        "lead",
        {"gain": 6.0, "zero": 4.0, "pole": 25.0},
        {"gain": "", "zero": "rad/s", "pole": "rad/s"},
        -0.05,
        7.0,
        2.1,
        24.0,
        "settling_time.max",
    )
    second["also"] = ["PD"]
    return {
        "format": "synth-record/1",
        "tool": {"version": "0.1.0"},
        "created": "2026-12-01T12:00:00Z",
        "job": "propose",
        "spec": {
            "file": "mast.toml",
            "title": "Mast drive",
            "revision": "B",
            "sha256": "0" * 64,
            "text": "",
            "reference_step": 0.5,
            "valid_to": 200.0,
            "input": {"name": "command", "unit": "V"},
            "output": {"name": "angle", "unit": "rad"},
            "prefer": None,
        },
        "predecessor": None,
        "plant": {
            "cases": [
                _case("nominal", "nominal", 1.0),
                _case("I low", "corner", 0.8),
                _case("I high", "corner", 1.2),
            ],
            "form": "K / (s*(I*s + f))",
            "ranges": [{"name": "I", "nominal": 1.0, "low": 0.8, "high": 1.2}],
            "poles": [[0.0, 0.0], [-6.0, 0.0]],
            "zeros": [],
            "interior_examined": 256,
        },
        "requirements": [
            {
                "id": "overshoot.max",
                "quantity": "overshoot",
                "bound": "max",
                "limit": 10.0,
                "unit": "%",
                "cases": None,
            },
            {
                "id": "settling_time.max",
                "quantity": "settling_time",
                "bound": "max",
                "limit": 2.0,
                "unit": "s",
                "cases": None,
                "band": 0.05,
            },
        ],
        "verdict": "met",
        "statement": {"text": "by the first candidate, a PI, on all 3 cases examined.", "facts": {}},
        "candidates": [first, second],
        "rejected": [
            {
                "structure": "P",
                "reason": "Slack −31 % at best: overshoot 13.1 % of at most 10 % (the whole gain line, "
                "both signs).",
                "closest": {
                    "parameters": {"gain": 0.9},
                    "worst_slack": -0.31,
                    "binding": None,
                    "slack": {"overshoot.max": -0.31},
                },
            }
        ],
        "limits": [
            {
                "name": "effort",
                "statement": "The input must reach 3 V.",
                "source": "A. Author (1999)",
                "violates": None,
            }
        ],
        "cautions": ["Model: 3 cases were examined.", "A model is not the machine."],
        "prices": [],
        "trade": None,
        "revision": None,
        "search": {
            "seed": 0,
            "budget": "normal",
            "evaluations": 41000,
            "seconds": 1.4,
            "interrupted": False,
            "limited": False,
        },
    }


@pytest.fixture
def record():
    return copy.deepcopy(sample())


@pytest.fixture
def drawn():
    """Lines as they come out of a terminal of that width, without colour."""

    def draw(lines, width=80):
        file = io.StringIO()
        out = console(file, width=width)
        for line in lines:
            out.print(line, no_wrap=True, overflow="ignore", crop=False)
        return file.getvalue()

    return draw
