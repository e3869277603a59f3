"""Every kind of change between two sheets is found, once, and nothing else."""

import copy

import pytest

from synth.record.changes import changes

PLANT = {
    "form": "K / (T*s + 1)",
    "ranges": [
        {"name": "K", "nominal": 2.0, "low": 2.0, "high": 2.0},
        {"name": "T", "nominal": 1.0, "low": 0.8, "high": 1.2},
    ],
    "cases": [
        {
            "name": "nominal",
            "kind": "rational",
            "role": "nominal",
            "parameters": {"K": 2.0, "T": 1.0},
            "numerator": [2.0],
            "denominator": [1.0, 1.0],
            "dead_time": 0.0,
        },
        {
            "name": "cold",
            "kind": "rational",
            "role": "operating",
            "parameters": {"K": 2.0, "T": 3.0},
            "numerator": [2.0],
            "denominator": [3.0, 1.0],
            "dead_time": 0.0,
        },
    ],
}
REQUIREMENTS = [
    {
        "id": "overshoot.max",
        "quantity": "overshoot",
        "bound": "max",
        "limit": 10.0,
        "unit": "%",
        "cases": None,
    }
]
SPEC = {"reference_step": 1.0}


@pytest.fixture
def sheets():
    old = copy.deepcopy((PLANT, REQUIREMENTS, SPEC))
    return old, copy.deepcopy(old)


def test_the_same_sheet_has_no_changes(sheets):
    assert changes(*sheets) == []


def test_a_moved_nominal_counts_once(sheets):
    old, new = sheets
    new[0]["ranges"][1] = {"name": "T", "nominal": 1.5, "low": 1.2, "high": 1.8}
    new[0]["cases"][0]["parameters"]["T"] = 1.5
    new[0]["cases"][0]["denominator"] = [1.5, 1.0]
    assert changes(old, new) == [{"what": "T", "case": None, "old": 1.0, "new": 1.5}]


def test_a_nominal_that_an_operating_case_takes_over_counts_once(sheets):
    old, new = sheets
    for case in new[0]["cases"]:
        case["parameters"]["K"] = 2.5
    assert changes(old, new) == [{"what": "K", "case": None, "old": 2.0, "new": 2.5}]


def test_a_wider_tolerance(sheets):
    old, new = sheets
    new[0]["ranges"][1]["high"] = 1.5
    assert changes(old, new) == [{"what": "T high", "case": None, "old": 1.2, "new": 1.5}]


def test_operating_cases_come_go_and_move(sheets):
    old, new = sheets
    new[0]["cases"][1]["parameters"]["T"] = 4.0
    assert changes(old, new) == [{"what": "T", "case": "cold", "old": 3.0, "new": 4.0}]
    new[0]["cases"][1]["name"] = "colder"
    assert changes(old, new) == [
        {"what": "operating case", "case": "colder", "old": None, "new": {"K": 2.0, "T": 4.0}},
        {"what": "operating case", "case": "cold", "old": {"K": 2.0, "T": 3.0}, "new": None},
    ]


def test_another_formula_and_another_step(sheets):
    old, new = sheets
    new[0]["form"] = "K / (T*s + 1)^2"
    new[2]["reference_step"] = 0.5
    assert changes(old, new) == [
        {"what": "plant", "case": None, "old": "K / (T*s + 1)", "new": "K / (T*s + 1)^2"},
        {"what": "reference step", "case": None, "old": 1.0, "new": 0.5},
    ]


def test_a_plant_without_names_is_compared_by_its_coefficients(sheets):
    old, new = sheets
    for plant in (old[0], new[0]):
        plant.pop("ranges", None)
        plant.pop("form", None)
        plant["cases"] = [dict(plant["cases"][0]) | {"parameters": {}}]
    new[0]["cases"][0]["denominator"] = [1.5, 1.0]
    assert changes(old, new) == [{"what": "denominator", "case": None, "old": [1.0, 1.0], "new": [1.5, 1.0]}]


def test_limits_that_move_come_and_go(sheets):
    old, new = sheets
    new[1][0]["limit"] = 12.0
    new[1].append(
        {"id": "phase_margin.min", "quantity": "phase_margin", "bound": "min", "limit": 45.0, "unit": "deg"}
    )
    assert changes(old, new) == [
        {"what": "overshoot.max", "case": None, "old": 10.0, "new": 12.0},
        {"what": "phase_margin.min", "case": None, "old": None, "new": 45.0},
    ]
