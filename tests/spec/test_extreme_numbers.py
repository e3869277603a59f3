"""Numbers at the ends of the range in every plant form: read, or refused in words; no warning on the way."""

import pytest

from synth.errors import InputError
from synth.spec import parse_spec

FORMS = [
    'transfer = "{0}*(s + {0})/(s^2 + {0}*s + {0})"',
    "numerator = [{0}]\ndenominator = [{0}, {0}, 1]",
    "gain = {0}\nzeros = [{0}]\npoles = [{0}, -1, {0}]",
    "A = [[{0}, 1, 0], [1, {0}, {0}], [0, {0}, -2]]\nB = [0, {0}, 1]\nC = [{0}, 0, 1]\nD = {0}",
]


@pytest.mark.parametrize("number", ["1e308", "-1e200", "1e160", "1e-160", "-1e-308", "5e-324"])
@pytest.mark.parametrize("form", FORMS, ids=["formula", "coefficients", "roots", "matrices"])
def test_extreme_numbers(form, number):
    text = f'[plant]\n{form.format(number)}\n[requirements]\novershoot = {{ max = "1 %" }}\n'
    try:
        spec = parse_spec(text)
    except InputError as error:
        message = error.faults[0].what
    else:
        message = ""
        assert abs(spec.cases.rational.denominator).max() < float("inf")
    assert message in (
        "", "the coefficients leave the range of numbers", "the numerator is 0: this plant does nothing",
        "the denominator is 0", "division by zero",
    )  # fmt: skip
