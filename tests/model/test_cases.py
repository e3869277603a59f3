"""The corner rule, and points inside the box."""

import numpy as np

from synth.model import ParameterRange, PlantCases, case_points
from synth.model.cases import spread
from synth.model.forms import from_coefficients, from_formula

INERTIA = ParameterRange("I", 0.85, 0.68, 1.02)
THETA = ParameterRange("theta", 0.002, 0.001, 0.004)
K = ParameterRange("K", 3.2, 3.2, 3.2)
FORM = from_formula("K*exp(-theta*s)/(I*s^2)")


def test_corners_of_two_parameters():
    cases = PlantCases.build(FORM, (K, INERTIA, THETA), (("ice on the mast", {"I": 1.4}),))
    assert cases.names == (
        "nominal",
        "I low, theta low",
        "I low, theta high",
        "I high, theta low",
        "I high, theta high",
        "ice on the mast",
    )
    assert [c.kind for c in cases.cases] == ["nominal", *["corner"] * 4, "operating"]
    assert cases.cases[3].parameters == {"K": 3.2, "I": 1.02, "theta": 0.001}
    p = cases.cases[3].plant
    np.testing.assert_allclose(p.numerator[0] / p.denominator[0], 3.2 / 1.02)
    assert cases.cases[5].parameters == {"K": 3.2, "I": 1.4, "theta": 0.002}  # not crossed with tolerances
    np.testing.assert_array_equal(cases.rational.dead_time, [0.002, 0.001, 0.004, 0.001, 0.004, 0.002])
    assert len(cases) == 6


def test_nothing_varies():
    cases = PlantCases.build(from_coefficients([1], [1, 1]))
    assert cases.names == ("nominal",)
    assert len(cases.interior()) == 0
    assert len(cases.interior().rational) == 0


def many(count):
    return tuple(ParameterRange(f"p{i}", 1.0, 0.5, 2.0) for i in range(count))


def test_up_to_64_corners_all_of_them_beyond_that_extremes_and_a_sample():
    assert len(case_points(many(6))) == 1 + 64
    points = case_points(many(7))
    assert len(points) == 1 + 14 + 64
    assert points[1].name == "p0 low"
    assert points[1].parameters["p0"] == 0.5
    assert points[1].parameters["p1"] == 1.0
    assert points[15].name == "sample 1"
    assert len({tuple(p.parameters.values()) for p in points}) == len(points)
    again = case_points(many(7))
    assert [p.parameters for p in again] == [p.parameters for p in points]


def test_interior_lies_inside_and_is_the_same_every_time():
    cases = PlantCases.build(FORM, (K, INERTIA, THETA))
    inside = cases.interior(256, seed=4)
    values = np.array([[c.parameters["I"], c.parameters["theta"]] for c in inside.cases])
    assert len(inside) == len(inside.rational) == 256
    assert ((values > [0.68, 0.001]) & (values < [1.02, 0.004])).all()
    assert all(c.parameters["K"] == 3.2 and c.kind == "interior" for c in inside.cases)
    assert cases.interior(256, seed=4).cases == inside.cases
    assert cases.interior(256, seed=5).cases != inside.cases
    # evenly: every cell of an 8 by 8 grid of the box is met
    cell = ((values - [0.68, 0.001]) / [0.34, 0.003] * 8).astype(int)
    assert len({tuple(c) for c in cell}) == 64


def test_spread_fills_the_line_better_than_chance():
    """The largest gap of the golden sequence stays below 2.7/n; random points leave about ln(n)/n."""
    for count in (10, 100, 1000):
        points = np.sort(spread(count, 1, seed=0)[:, 0])
        gaps = np.diff(np.concatenate([points, [points[0] + 1.0]]))
        assert gaps.max() < 2.7 / count
