"""Formulas: what they give, what is struck and what stays, and every message with its place."""

import ast
import cmath
import math
import time

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from synth.errors import InputError
from synth.model.formula import FormulaError, parse


def rational(text, **parameters):
    columns = {name: np.atleast_1d(np.asarray(value, dtype=float)) for name, value in parameters.items()}
    return parse(text).rational(columns)


def first(text, **parameters):
    numerator, denominator, delay = rational(text, **parameters)
    return numerator[0].tolist(), denominator[0].tolist(), delay[0]


def complaint(text, **parameters):
    with pytest.raises(FormulaError) as caught:
        rational(text, **parameters)
    return caught.value


# what it gives


@pytest.mark.parametrize(
    ("text", "numerator", "denominator", "delay"),
    [
        ("1", [1], [1], 0),
        ("s", [1, 0], [1], 0),
        ("3*s^2 - s + .5", [3, -1, 0.5], [1], 0),
        ("2/(s+1)", [2], [1, 1], 0),
        ("(s+2)**2", [1, 4, 4], [1], 0),
        ("-s^2", [-1, 0, 0], [1], 0),  # the sign is weaker than the power
        ("2*-3*s", [-6, 0], [1], 0),
        ("2^3^2", [512], [1], 0),  # from the right
        ("2^-1", [0.5], [1], 0),
        ("s^-2", [1], [1, 0, 0], 0),
        ("sqrt(9)*pi", [3 * math.pi], [1], 0),
        ("1e-3*s", [1e-3, 0], [1], 0),
        ("exp(-0.5*s)/s", [1], [1, 0], 0.5),
        ("exp(-s/4)", [1], [1], 0.25),
        ("exp(-s)*exp(-2*s)", [1], [1], 3),  # several factors add
        ("exp(-s)^3", [1], [1], 3),
        ("exp(-3*s)/exp(-s)", [1], [1], 2),
        ("exp(-s)/s + exp(-s)/(s+1)", [2, 1], [1, 1, 0], 1),  # a dead time common to all terms
        ("exp(-0*s)", [1], [1], 0),
        (" 1 /\n( s + 1 ) ", [1], [1, 1], 0),
    ],
)
def test_values(text, numerator, denominator, delay):
    got = first(text)
    assert got[0] == pytest.approx(numerator, rel=1e-15)
    assert got[1] == pytest.approx(denominator, rel=1e-15)
    assert got[2] == pytest.approx(delay, rel=1e-15)


@pytest.mark.parametrize(
    ("text", "numerator", "denominator"),
    [
        # written by the sheet: stays
        ("(s+1)/(s+1)", [1, 1], [1, 1]),
        ("s/s", [1, 0], [1, 0]),
        ("s*(1/s)", [1, 0], [1, 0]),
        ("(s-1)*2/((s-1)*(s+3))", [2, -2], [1, 2, -3]),
        # brought in by the arithmetic: struck
        ("1/s + 1/s", [2], [1, 0]),
        ("1/s - 1/s^2", [1, -1], [1, 0, 0]),
        ("1/s + 1/(s*(s+1))", [1, 2], [1, 1, 0]),
        ("1/(s+1) + 1/(2*s+2)", [1.5], [1, 1]),
        ("1/(s^2+s) + 1/(s*(s+1))", [2], [1, 1, 0]),
        ("1/(s^2+3*s+2) + 1/(s^2+4*s+3)", [2, 5], [1, 6, 11, 6]),
        ("1/(s^2+s) + 1/(s^2+2*s)", [2, 3], [1, 3, 2, 0]),
        ("1/(1/s)", [1, 0], [1]),
        ("1/(1 + 1/s)", [1, 0], [1, 1]),
        ("(5/s) / (1 + 5/s)", [5], [1, 5]),
        ("(3/(s*(s+2))) / (1 + 3/(s*(s+2)))", [3], [1, 2, 3]),
        ("(1/(s+1))^2 + 1/(s+1)", [1, 2], [1, 2, 1]),
        # in a sum over the least common denominator, what still cancels by chance stays
        ("1/(s+1) - 1/((s+1)*(s+2))", [1, 1], [1, 3, 2]),
    ],
)
def test_what_is_struck(text, numerator, denominator):
    got = first(text)
    scale = got[1][0]
    assert np.array(got[0]) / scale == pytest.approx(numerator, rel=1e-12)
    assert np.array(got[1]) / scale == pytest.approx(denominator, rel=1e-12)


def test_cases_are_judged_one_by_one_where_they_differ():
    numerator, denominator, _ = rational("1/(a*s+1) + 1/(b*s+1)", a=[1, 2, 0], b=[1, 3, 1])
    np.testing.assert_allclose(numerator, [[0, 2], [5, 2], [1, 2]])
    np.testing.assert_allclose(denominator, [[0, 1, 1], [6, 5, 1], [0, 1, 1]])


def test_cases_stacked_agree_with_each_alone():
    text = "K*exp(-h*s)*(1 - a*s)/(s*(T*s + 1)) + K*exp(-h*s)/(T*s + 1)"
    rng = np.random.default_rng(1)
    values = {name: rng.uniform(0.1, 3, size=7) for name in "KhaT"}
    numerator, denominator, delay = parse(text).rational(values)
    for k in range(7):
        alone = parse(text).rational({name: value[k : k + 1] for name, value in values.items()})
        for stacked, row in zip((numerator, denominator, delay), alone, strict=True):
            np.testing.assert_array_equal(stacked[k], row[0])


def test_rounding_does_not_leave_a_pole_far_out():
    assert first("1/(0.1*s + 0.2*s - 0.3*s + 1)") == ([1], [0, 1], 0)


def test_names_and_numbers():
    formula = parse("I*Te + f/(2*pi) - I")
    assert formula.names == ("I", "Te", "f")
    assert not formula.uses_s
    got = formula.value(
        {"I": np.array([2.0, 3.0]), "Te": np.array([5.0, 7.0]), "f": np.array([0.0, math.pi])}
    )
    np.testing.assert_allclose(got, [8.0, 18.5])
    np.testing.assert_array_equal(parse("1/4").value({}, 3), [0.25] * 3)
    assert parse("θ_1*s").names == ("θ_1",)


# messages, each with its place

ONLY_FACTOR = "a dead time must be a factor of the whole; it cannot stand in one term of a sum"
ONLY_EXP = "exp(...) stands for dead time alone: write exp(-theta*s), theta a number or a name"


@pytest.mark.parametrize(
    ("text", "message", "position", "repaired"),
    [
        ("2s/(s+1)", "`*` is missing between `2` and `s`", 1, "2*s/(s+1)"),
        ("K(s+1)", "`*` is missing between `K` and `(`", 1, "K*(s+1)"),
        ("(s+1)(s+2)", "`*` is missing between `)` and `(`", 5, "(s+1)*(s+2)"),
        ("(s+1) s", "`*` is missing between `)` and `s`", 6, "(s+1)*s"),
        ("2(s + 1)(K s+1)", "`*` is missing between `2` and `(`", 1, "2*(s + 1)*(K*s+1)"),
        ("K 2", "`*` is missing between `K` and `2`", 2, "K*2"),
        ("sqrt(2)s", "`*` is missing between `)` and `s`", 7, "sqrt(2)*s"),
        ("2exp(-s)", "`*` is missing between `2` and `exp`", 1, "2*exp(-s)"),
        ("", "the formula is empty", 0, None),
        ("  ", "the formula is empty", 0, None),
        ("s +", "a term must follow here", 3, None),
        ("(s", "this `(` is never closed", 0, None),
        ("s)", "this `)` closes nothing", 1, None),
        ("()", "a number, a name or `(` must stand before `)`", 1, None),
        ("*s", "a number, a name or `(` must stand before `*`", 0, None),
        ("sin(s)", "`sin` is not known here; the functions are sqrt and exp", 0, None),
        ("exp s", "`exp` must be followed by `(`", 4, None),
        ("2·s", "`·` is no sign of arithmetic; write *", 1, None),
        ("s²", "`²` is no sign of arithmetic; write ^2", 1, None),
        ("s\x00", "`U+0000` is no sign of arithmetic", 1, None),
        ("1e999*s", "the number is too large", 0, None),
        ("s^0.5", "an exponent must be a whole number, such as 2 or -1", 2, None),
        ("s^n", "an exponent must be a whole number, such as 2 or -1", 2, None),
        ("2^1001", "an exponent must lie between -1000 and 1000", 2, None),
        ("exp(-2)", ONLY_EXP, 0, None),
        ("3*exp(-s^2)", ONLY_EXP, 2, None),
        ("exp(-1/s)", ONLY_EXP, 0, None),
        ("exp(1-s)", ONLY_EXP, 0, None),
        ("exp(s)", "the dead time is below 0: exp(-theta*s) takes a minus", 0, None),
        ("1/exp(-s)", "the dead time is below 0", 1, None),
        ("1 + exp(-s)", ONLY_FACTOR, 2, None),
        ("sqrt(s)", "the argument of sqrt must not contain `s`", 0, None),
        ("sqrt(1-2)", "the square root of a negative number", 0, None),
        ("s/(1-1)", "division by zero", 1, None),
        ("(s-s)^-1", "division by zero", 5, None),
        ("(s+1)^31", "the degree in s goes above 30", 5, None),
        ("1e200*1e200", "the coefficients leave the range of numbers", 0, None),
    ],
)  # fmt: skip
def test_messages(text, message, position, repaired):
    error = complaint(text, n=2, K=1)
    assert (error.message, error.position, error.repaired) == (message, position, repaired)
    assert isinstance(error, InputError)


def test_a_message_about_values_names_the_case():
    error = complaint("K/(T*s)", K=[1, 1, 1], T=[1, 2, 0])
    assert (error.message, error.case) == ("division by zero", 2)


def test_s_where_a_number_must_stand():
    with pytest.raises(FormulaError) as caught:
        parse("2*gas + s").value({"gas": np.ones(1)})
    assert (caught.value.message, caught.value.position) == ("`s` cannot stand here", 8)


def test_the_caret_stands_under_the_place():
    assert complaint("K*(s+1)(s+2)", K=1).excerpt() == "K*(s+1)(s+2)\n       ^"
    long = "+".join(["s"] * 100) + "+2s+" + "+".join(["s"] * 100)
    excerpt, caret = complaint(long).excerpt().split("\n")
    assert len(excerpt) <= 66
    assert excerpt[caret.index("^") - 1 :].startswith("2s")


@pytest.mark.parametrize(
    ("text", "outcome"),
    [
        ("+".join(f"{i}.5*s^2" for i in range(10_000)), None),
        ("+".join("1/(s+1)" for _ in range(10_000)), None),
        ("*".join("a" for _ in range(10_000)), None),
        ("+".join(f"1/(s+{i})" for i in range(10_000)), "the degree in s goes above 30"),
        ("(" * 5000 + "s" + ")" * 5000, "more than 60 levels inside one another"),
        ("-" * 10_000 + "s", "more than 60 levels inside one another"),
        ("2^" * 1000 + "2", "more than 60 levels inside one another"),
        ("1/(1+" * 50 + "s" + ")" * 50, None),
        ("s" * 500_000, "the formula is longer than 400000 characters"),
    ],
    ids=["sum", "fractions", "product", "poles", "brackets", "signs", "powers", "continued", "long"],
)
def test_large_formulas_get_an_answer_or_a_refusal_in_time(text, outcome):
    start = time.process_time()  # other work on the machine does not count
    if outcome is None:
        rational(text, a=[1.0])
    else:
        assert complaint(text, a=[1.0]).message == outcome
    assert time.process_time() - start < 2.0


# against other arithmetic


def python_value(text, names):
    """The text by Python's own syntax tree and complex numbers."""

    def walk(node):
        match node:
            case ast.Expression(body):
                return walk(body)
            case ast.Constant(value):
                return complex(value)
            case ast.Name(name):
                return names[name]
            case ast.UnaryOp(ast.USub(), operand):
                return -walk(operand)
            case ast.BinOp(left, operator, right):
                a, b = walk(left), walk(right)
                match operator:
                    case ast.Add():
                        return a + b
                    case ast.Sub():
                        return a - b
                    case ast.Mult():
                        return a * b
                    case ast.Div():
                        return a / b
                    case ast.Pow():
                        return a ** int(b.real)
            case ast.Call(ast.Name("sqrt"), [argument]):
                return cmath.sqrt(walk(argument))
            case ast.Call(ast.Name("exp"), [argument]):
                return cmath.exp(walk(argument))
        raise AssertionError(ast.dump(node))

    return walk(ast.parse(text.replace("^", "**"), mode="eval"))


def trees(leaves):
    def grow(inner):
        pairs = st.tuples(inner, st.sampled_from("+-*/"), inner).map(lambda p: f"({p[0]}{p[1]}{p[2]})")
        powers = st.tuples(inner, st.integers(-2, 3)).map(lambda p: f"({p[0]})^{p[1]}")
        return pairs | powers | inner.map(lambda t: f"-({t})")

    return st.recursive(leaves, grow, max_leaves=9)


SMALL = st.sampled_from(["1", "2", "0.5", "3"])
LEAVES = SMALL | st.sampled_from(["s", "(s+1)", "(s+2)", "(a*s+1)", "b", "sqrt(b)", "pi"])


@given(text=trees(LEAVES), delay=st.sampled_from(["", "*exp(-b*s)", "*exp(-0.25*s)"]))
def test_the_value_is_pythons_own(text, delay):
    text = f"({text}){delay}"
    parameters = {"a": 0.7, "b": 1.3}
    s = 0.31 + 0.77j
    names = {"s": s, "pi": complex(math.pi), "a": complex(0.7), "b": complex(1.3)}
    try:
        expected = python_value(text, names)
    except (ZeroDivisionError, OverflowError):
        assume(False)
    assume(1e-6 < abs(expected) < 1e6)
    formula = parse(text)
    assert formula.at(np.array([s]), parameters)[0] == pytest.approx(expected, rel=1e-9)
    try:
        numerator, denominator, dead = rational(text, **parameters)
    except FormulaError as error:
        refusal = error.message
        numerator = None
    if numerator is None:
        assert refusal in ("division by zero", "the degree in s goes above 30")
        return
    value = np.polyval(numerator[0], s) / np.polyval(denominator[0], s) * cmath.exp(-s * dead[0])
    assert value == pytest.approx(expected, rel=1e-6)


@given(st.text(alphabet="s1 2.e+-*/^()Kpixq,\n\tθ√", max_size=40) | st.text(max_size=20))
def test_any_text_is_read_or_refused(text):
    fault = None
    try:
        formula = parse(text)
        formula.rational({name: np.array([1.5, 0.0]) for name in formula.names}, 2)
    except FormulaError as error:
        fault = error
    if fault is not None:
        assert 0 <= fault.position <= len(text)
        assert fault.excerpt().count("\n") == 1
