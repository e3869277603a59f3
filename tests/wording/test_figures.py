"""How numbers read."""

import math

import pytest

from synth.wording.figures import change, exact, figure, percent, quantity, unit_for


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (1.0, "1"),
        (12.3456, "12.35"),
        (-0.012345, "−0.01235"),
        (123456.0, "123500"),
        (1234567.0, "1.235e6"),
        (0.00001234, "1.234e−5"),
        (0.99996, "1"),
        (9999.6, "10000"),
        (math.inf, "∞"),
        (-math.inf, "−∞"),
        (math.nan, "—"),
    ],
)
def test_four_significant_digits(value, text):
    assert figure(value) == text


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (0.0023, "s", "2.3 ms"),
        (0.82, "s", "0.82 s"),
        (0.05, "s", "50 ms"),
        (1200.0, "s", "1200 s"),
        (36000.0, "s", "10 h"),
        (4.7e-5, "s", "47 µs"),
        (math.inf, "s", "∞"),
        (45.0, "deg", "45 deg"),
        (1.7, "", "1.7"),
    ],
)
def test_times_in_the_unit_that_suits_them(value, unit, text):
    assert quantity(value, unit) == text


def test_values_beside_one_another_share_a_unit():
    unit = unit_for("s", [0.2, 0.0021, math.inf])
    assert [unit.number(v) for v in (0.2, 0.0021)] == ["0.2", "0.0021"]
    assert unit.word == "s"


@pytest.mark.parametrize(
    ("slack", "text"),
    [
        (0.081, "+8.1 %"),
        (-0.31, "−31.0 %"),
        (1.0, "+100 %"),
        (0.0, "0 %"),
        (6.7e-5, "+0.0067 %"),
        (-math.inf, "−∞"),
    ],
)
def test_slack_in_percent(slack, text):
    assert percent(slack) == text


def test_tuned_values_keep_every_digit_that_was_scored():
    assert exact(0.0018163) == "0.0018163"
    assert exact(3.0) == "3"
    assert float(exact(1.0 / 3.0)) == 1.0 / 3.0


@pytest.mark.parametrize(
    ("old", "new", "text"),
    [
        (2.0, 2.2, "+10.0 %"),
        (2.0, 1.5, "−25.0 %"),
        (29.0, 1740.0, "×60"),
        (10.0, 1.0, "÷10"),
        (1.0, -1.0, "−200 %"),
        (0.0, 1.0, ""),
    ],
)
def test_a_change_in_percent_or_as_a_factor(old, new, text):
    assert change(old, new) == text
