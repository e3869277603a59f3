"""A record small enough to read, with every field that format.py asks for."""

import copy

import pytest

CANDIDATE = {
    "rank": 1,
    "structure": "PI",
    "parameters": {"gain": 2.0, "integral_time": 0.5},
    "settings": {"standard": {"gain": 2.0, "integral time": 0.5}},
    "compensator": {"domain": "s", "numerator": [1.0, 2.0], "denominator": [0.5, 0.0]},
    "meets_all": True,
    "worst_slack": 0.25,
    "binding": {"requirement": "overshoot.max", "case": "nominal"},
    "quantities": {"nominal": {"overshoot": 7.5}, "worst": {"overshoot": {"value": 7.5, "case": "nominal"}}},
    "slack": {"overshoot.max": 0.25},
    "closed_loop_poles": {"nominal": [[-1.0, 2.0], [-1.0, -2.0]]},
    "uncounted_poles": {"nominal": []},
    "verified": None,
    "curves": {"step": {}, "root_locus": {}},
    "rationale": [{"text": "Because.", "facts": {"overshoot.max": 0.25}}],
}
RECORD = {
    "format": "synth-record/1",
    "tool": {"version": "0.1.0"},
    "created": "2026-12-01T12:00:00Z",
    "spec": {
        "file": "mast.toml",
        "title": "Mast",
        "revision": "B",
        "sha256": "0" * 64,
        "text": "# verbatim\n",
    },
    "predecessor": None,
    "plant": {
        "cases": [
            {
                "name": "nominal",
                "kind": "rational",
                "parameters": {"K": 2.0},
                "numerator": [2.0],
                "denominator": [1.0, 1.0],
                "dead_time": 0.0,
            }
        ]
    },
    "requirements": [
        {
            "id": "overshoot.max",
            "quantity": "overshoot",
            "bound": "max",
            "limit": 10.0,
            "unit": "%",
            "cases": None,
        }
    ],
    "verdict": "met",
    "candidates": [CANDIDATE],
    "rejected": [],
    "limits": [],
    "cautions": ["A model is not the machine."],
    "revision": None,
    "search": {"seed": 0, "evaluations": 10, "seconds": 0.1, "interrupted": False},
}


@pytest.fixture
def record():
    return copy.deepcopy(RECORD)
