"""Every way of writing a plant: the same plant, the same numbers; what is wrong is told with its key."""

import numpy as np
import pytest

from synth.model.forms import FormError, from_coefficients, from_formula, from_matrices, from_roots
from synth.model.formula import FormulaError

VALUES = {"K": np.array([3.0, 1.5]), "T": np.array([0.5, 0.25]), "theta": np.array([0.1, 0.2])}
# K / (s (T s + 1)) e^(-theta s), written five ways
WAYS = [
    from_formula("K * exp(-theta*s) / (s * (T*s + 1))"),
    from_coefficients(["K"], ["T", 1, 0], "theta"),
    from_roots("K/T", [], [0.0, "-1/T"], "theta"),
    from_matrices([[0, 1], [0, "-1/T"]], [[0], ["K/T"]], [[1, 0]], 0, "theta"),
    from_matrices([[0, 1], [0, "-1/T"]], [0, "K/T"], [1, 0], [[0.0]], "theta"),
]


@pytest.mark.parametrize("form", WAYS, ids=lambda f: type(f).__name__)
def test_ways_of_writing_agree(form):
    assert set(form.names) == set(VALUES)
    plants = form.plants(VALUES)
    assert len(plants) == 2
    s = np.array([0.3j, 2.0 + 1j])
    for k in range(2):
        one = {n: float(v[k]) for n, v in VALUES.items()}
        exact = one["K"] / (s * (one["T"] * s + 1)) * np.exp(-s * one["theta"])
        stacked = np.polyval(plants.numerator[k], s) / np.polyval(plants.denominator[k], s)
        np.testing.assert_allclose(stacked * np.exp(-s * plants.dead_time[k]), exact, rtol=1e-13)
        np.testing.assert_allclose(form.at(s, one), exact, rtol=1e-13)
        assert plants.denominator[k, -1] == 0.0  # the integrator is exact


def test_no_parameters_still_gives_the_rows_asked_for():
    assert len(from_coefficients([1], [1, 1]).plants({}, 3)) == 3
    assert len(from_matrices([[-1]], [1], [1]).plants({}, 2)) == 2


def test_complex_roots():
    form = from_roots(2.0, [], ["-2+5j", "-2 - 5j", 0.0])
    np.testing.assert_allclose(form.plants({}).denominator[0], [1, 4, 29, 0])
    np.testing.assert_allclose(form.at(np.array([1j]), {}), 2.0 / ((1j + 2 - 5j) * (1j + 2 + 5j) * 1j))


def test_an_order_may_differ_between_cases():
    plants = from_coefficients([1], ["T", 1]).plants({"T": np.array([0.0, 2.0])})
    np.testing.assert_array_equal(plants.denominator, [[0, 1], [2, 1]])


def test_a_pole_gives_inf():
    assert np.isinf(from_matrices([[0.0]], [1], [1]).at(np.array([0j]), {})[0])
    assert np.isinf(from_roots(1, [], [0.0]).at(np.array([0j]), {})[0])


@pytest.mark.parametrize(
    ("make", "key", "words"),
    [
        (lambda: from_coefficients([], [1]), "numerator", "at least one coefficient"),
        (lambda: from_coefficients([1], [float("nan")]), "denominator[0]", "finite"),
        (lambda: from_coefficients([True], [1]), "numerator[0]", "number or a formula"),
        (lambda: from_coefficients(["s"], [1]), "numerator[0]", "`s` cannot stand here"),
        (lambda: from_roots(1, ["1+2j"], [-1]), "zeros[0]", "conjugate is missing"),
        (lambda: from_roots(1, [], [-1 - 2j]), "poles[0]", "conjugate is missing"),
        (lambda: from_roots(1, [], ["inf"]), "poles[0]", "finite"),
        (lambda: from_matrices([[1, 2]], [1], [1]), "A[0]", "square"),
        (lambda: from_matrices([], [1], [1]), "A", "no rows"),
        (lambda: from_matrices([[1]], [1, 2], [1]), "B", "1 entries"),
        (lambda: from_matrices([[1]], [1], [[1], [2]]), "C", "1 entries"),
        (lambda: from_matrices([[1]], [1], [1], [1, 2]), "D", "one number"),
        (lambda: from_coefficients([1, 0, 0], [1, 1]).plants({}), None, "more zeros than poles (2 and 1)"),
        (lambda: from_coefficients([1], [0, 0]).plants({}), None, "denominator is 0"),
        (lambda: from_coefficients([0], [1, 0]).plants({}), None, "does nothing"),
        (lambda: from_coefficients([1], [1, 0], -1.0).plants({}), "dead_time", "0 or more"),
        (lambda: from_coefficients(["K"], [1, 0]).plants({}), None, "no value for K"),
        (lambda: from_roots(1, [], [-1e300, -1e300]).plants({}), None, "range of numbers"),
        (lambda: from_coefficients([1], [1] * 40).plants({}), "denominator", "above 30"),
    ],
)
def test_faults_say_where(make, key, words):
    with pytest.raises(FormError) as caught:
        make()
    assert caught.value.key == key
    assert words in caught.value.message
    assert caught.value.faults[0].key == key


def test_the_case_is_named():
    with pytest.raises(FormError) as caught:
        from_coefficients([1], ["K"]).plants({"K": np.array([1.0, 0.0])})
    assert caught.value.case == 1
    with pytest.raises(FormulaError):
        from_coefficients(["K +"], [1])
