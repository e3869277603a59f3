"""Everything that can be wrong in a sheet: each fault whole, with line, key, what was written, what is allowed."""

# ruff: noqa: E501 - a fault reads best on one line

import time

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.errors import InputError
from synth.loop.quantities import QUANTITIES
from synth.spec import parse_spec

PLANT = "[plant]\nnumerator = [2]\ndenominator = [1, 1]\n"  # three lines
BOUND = '[requirements]\novershoot = { max = "10 %" }\n'  # two lines
GOOD = PLANT + BOUND


def faults_of(text):
    with pytest.raises(InputError) as caught:
        parse_spec(text, "f.toml")
    assert all(f.file == "f.toml" for f in caught.value.faults)
    return [(f.line, f.key, f.what, f.given, f.allowed, f.nearest) for f in caught.value.faults]


def only(text):
    found = faults_of(text)
    assert len(found) == 1, found
    return found[0]


QUANTITY_NAMES = ", ".join(key for key, row in QUANTITIES.items() if row.listed)
FORMS = "exactly one of: transfer; numerator and denominator; gain, zeros and poles; or A, B, C and D"
FORMULA = "numbers, names, s, pi, sqrt(...), + - * / ^, ( ), exp(-theta*s)"
PERCENT = 'a percentage with its unit (%), such as "10 %"'
TIME = 'a time with its unit (us ms s min h), such as "1.2 s"'
NUMBER = "a number, or a formula of the parameters in quotes"
PARAMETER = 'a number in SI, or a number with its unit such as "2 ms", "47 uF" or "30 Hz"'
STRUCTURES = "P, PI, PD, PID, lag, lead, lead-lag, PI-lead, double-lead"
TOP = "title, revision, plant, parameters, cases, reference, requirements, prefer, search"


def test_every_fault_of_a_file_at_once():
    text = """title = 3
[plant]
transfer = "K(s+1)/(T*s+1)^2"
[parameters]
K = 1
T = { value = "1 s", tolerance = 20 }
[requirements]
settling_tme = { max = "1 s" }
bandwidth = { min = "3 Hz", max = "10 rad/s" }
overshoot = { max = 10 }
[search]
structures = ["PI", "PDI"]
[actuator]
max = 3
"""
    assert faults_of(text) == [
        (1, "title", "this must be a text", "3", 'a text in quotes, such as "B"', None),
        (3, "plant.transfer", "`*` is missing between `K` and `(`", "K(s+1)/(T*s+1)^2\n ^", FORMULA,
         "K*(s+1)/(T*s+1)^2"),
        (6, "parameters.T.tolerance", "a percentage must carry its unit", "20", PERCENT, '"20 %"'),
        (8, "requirements.settling_tme", "unknown quantity `settling_tme`", "settling_tme", QUANTITY_NAMES,
         "settling_time"),
        (9, "requirements.bandwidth", "the bounds contradict each other: min stands above max",
         'min = "3 Hz", max = "10 rad/s"', "min at most max; they are 18.8496 and 10 rad/s", None),
        (10, "requirements.overshoot.max", "a percentage must carry its unit", "10", PERCENT, '"10 %"'),
        (12, "search.structures[1]", "unknown structure", '"PDI"', STRUCTURES, "PID"),
        (13, "actuator", "`actuator` is not yet supported: the name is kept for a later version", None,
         "leave it out", None),
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        (BOUND, (1, "plant", "`plant` is missing", None, "the plant in exactly one form", None)),
        (PLANT, (1, "requirements", "`requirements` is missing", None, "at least one bound on a quantity", None)),
        (PLANT + "[requirements]", (4, "requirements", "there are no requirements", None,
                                    'at least one bound, such as overshoot = { max = "10 %" }', None)),
        (GOOD + "[refernce]\nstep = 1", (6, "refernce", "unknown key `refernce`", "refernce", TOP, "reference")),
        (GOOD + "[plant.extra]", (6, "plant.extra", "unknown key of a plant `extra`", "extra",
                                  "transfer, numerator, denominator, gain, zeros, poles, A, B, C, D, dead_time, "
                                  "valid_to, input, output", None)),
        (GOOD + "[prefilter]", (6, "prefilter", "`prefilter` is not yet supported: the name is kept for a later "
                                "version", None, "leave it out", None)),
        ("plant = 3\n" + BOUND, (1, "plant", "this must be a table", "3",
                                 "a table with transfer, numerator, denominator, gain, zeros, poles, A, B, C, D, "
                                 "dead_time, valid_to, input, output", None)),
    ],
)  # fmt: skip
def test_the_tables(text, fault):
    assert only(text) == fault


def plant(text):
    return f"[plant]\n{text}\n{BOUND}"


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("", (1, "plant", "the plant is not stated", None, FORMS, None)),
        ("numerator = [1]", (1, "plant.denominator", "`denominator` is missing", None, "beside numerator", None)),
        ("gain = 1\npoles = [-1]\nA = [[1]]",
         (1, "plant", "the plant is stated in more than one form", "gain, poles, A", FORMS, None)),
        ('transfer = "1/s"\ndead_time = "2 ms"',
         (3, "plant.dead_time", "in a formula, dead time is a factor", '"2 ms"',
          'write exp(-theta*s) in "transfer"', None)),
        ("transfer = 3", (2, "plant.transfer", "the transfer function must be a formula", "3",
                          'a formula in s, in quotes, such as "K / (s + 1)"', None)),
        ('transfer = "s^2/(s+1)"', (2, "plant.transfer", "more zeros than poles (2 and 1): no such plant",
                                    '"s^2/(s+1)"', None, None)),
        ("numerator = [0]\ndenominator = [1, 0]",
         (2, "plant.numerator", "the numerator is 0: this plant does nothing", "[0]", None, None)),
        ("numerator = [1]\ndenominator = [0, 0]",
         (3, "plant.denominator", "the denominator is 0", "[0, 0]", None, None)),
        ("numerator = []\ndenominator = [1]",
         (2, "plant.numerator", "at least one coefficient is needed", "[]", None, None)),
        ("numerator = 1\ndenominator = [1]",
         (2, "plant.numerator", "this must be a list", "1",
          "numbers, or formulas of the parameters in quotes, in [ ]", None)),
        ("numerator = [1]\ndenominator = [1, nan]",
         (3, "plant.denominator[1]", "`nan` is no number that can be meant", "nan", NUMBER, None)),
        ("numerator = [1e999]\ndenominator = [1]",
         (2, "plant.numerator[0]", "the number is not finite", "1e999", NUMBER, None)),
        ('numerator = [1]\ndenominator = [1, "s"]',
         (3, "plant.denominator[1]", "`s` cannot stand here", "s\n^", None, None)),
        ('numerator = [1]\ndenominator = [1, "1/0"]',
         (3, "plant.denominator[1]", "division by zero", "1/0\n ^", None, None)),
        ("numerator = [1]\ndenominator = [1, 0]\ndead_time = 2",
         (4, "plant.dead_time", "a dead time must carry its unit", "2",
          'a time with its unit, such as "2 ms", or a formula of the parameters such as "theta"', None)),
        ('numerator = [1]\ndenominator = [1, 0]\ndead_time = "2 sec"',
         (4, "plant.dead_time", "`sec` is no unit of time", '"2 sec"', TIME, '"2 s"')),
        ('numerator = [1]\ndenominator = [1, 0]\ndead_time = "-1 s"',
         (4, "plant.dead_time", "a dead time cannot be below 0", '"-1 s"', TIME, None)),
        ('gain = 1\npoles = ["-2+5j", -1]',
         (3, "plant.poles[0]", "its conjugate is missing: give both", '"-2+5j"', None, None)),
        ('gain = 1\npoles = ["-2+5j", "-2-6j"]',
         (3, "plant.poles[0]", "its conjugate is missing: give both", '"-2+5j"', None, None)),
        ('gain = 1\npoles = ["x +"]', (3, "plant.poles[0]", "a term must follow here", "x +\n   ^", None, None)),
        ("A = [[0, 1], [1]]\nB = [0, 1]\nC = [1, 0]",
         (2, "plant.A[1]", "A must be square: row 1 does not have 2 entries", "[1]", None, None)),
        ("A = [[0, 1], [1, 0]]\nB = [0]\nC = [1, 0]",
         (3, "plant.B", "B must have 2 entries for this A, one input and one output", "[0]", None, None)),
        ("A = [[0]]\nB = [1]\nC = [0]",
         (2, "plant.A", "the numerator is 0: this plant does nothing", "[[0]]", None, None)),
        ('transfer = "1/s"\nvalid_to = 30',
         (3, "plant.valid_to", "a frequency must carry its unit", "30",
          'a frequency with its unit (rad/s 1/s Hz kHz), such as "2 Hz" or "12.6 rad/s"', None)),
        ('transfer = "1/s"\ninput = "volts"',
         (3, "plant.input", "this must be a table", '"volts"',
          'a table such as { name = "torque command", unit = "V" }', None)),
        ('transfer = "(s+1)^-31"',
         (2, "plant.transfer", "the degree in s goes above 30", "(s+1)^-31\n     ^", None, None)),
        ('transfer = "1e308*1e308/s"',
         (2, "plant.transfer", "the coefficients leave the range of numbers", "1e308*1e308/s\n^", None, None)),
    ],
)  # fmt: skip
def test_the_plant(text, fault):
    assert only(plant(text)) == fault


def sheet(parameters, transfer="K/(T*s + 1)"):
    return (
        f'[plant]\ntransfer = "{transfer}"\n{BOUND}[parameters]\n{parameters}\n'  # parameters begin on line 6
    )


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ('K = 1\nT = { value = 1, tolerance = "100 %" }',
         (7, "parameters.T.tolerance", "a tolerance must be at least 0 % and below 100 %", '"100 %"', PERCENT, None)),
        ('K = 1\nT = { value = 1, tolerance = "-1 %" }',
         (7, "parameters.T.tolerance", "a tolerance must be at least 0 % and below 100 %", '"-1 %"', PERCENT, None)),
        ('K = 1\nT = { value = "2 s", range = ["3 s", "4 s"] }',
         (7, "parameters.T.range", "the nominal value lies outside its range", '["3 s", "4 s"]',
          "the lower and the upper value, with the nominal value between them", None)),
        ('K = 1\nT = { value = "2 s", range = ["4 s", "1 s"] }',
         (7, "parameters.T.range", "the lower end of the range stands above the upper", '["4 s", "1 s"]',
          "the lower and the upper value, with the nominal value between them", None)),
        ("K = 1\nT = { value = 2, range = [1] }",
         (7, "parameters.T.range", "a range has two values", "[1]",
          "the lower and the upper value, with the nominal value between them", None)),
        ('K = 1\nT = { value = 2, range = [1, 3], tolerance = "5 %" }',
         (7, "parameters.T", "a parameter takes a tolerance or a range, not both",
          '{ value = 2, range = [1, 3], tolerance = "5 %" }', "tolerance or range", None)),
        ('K = 1\nT = { tolerance = "5 %" }',
         (7, "parameters.T.value", "`value` is missing", None, "nominal value", None)),
        ("K = 1\nT = { value = 2, design = true }",
         (7, "parameters.T.design", "`design` is not yet supported: the name is kept for a later version", "true",
          "leave it out", None)),
        ('K = "2 furlong"\nT = 1',
         (6, "parameters.K", "`furlong` is no unit that is known here", '"2 furlong"',
          PARAMETER + "; convert others to SI", None)),
        ("K = nan\nT = 1", (6, "parameters.K", "`nan` is no number that can be meant", "nan", PARAMETER, None)),
        ("K = 1\nT = 1\ns = 2",
         (8, "parameters.s", "`s` has a meaning of its own in formulas", "s", "another name", None)),
        ('K = 1\nT = 1\n"a b" = 2',
         (8, 'parameters."a b"', "this name cannot stand in a formula", "a b",
          "letters, digits and _, not beginning with a digit", None)),
        ("K = 1\nT = 1\nM = 2",
         (8, "parameters.M", "the parameter `M` is not used", "M", "use it in the plant, or leave it out", None)),
        ("K = 0\nT = 1",
         (2, "plant.transfer", "the numerator is 0: this plant does nothing", '"K/(T*s + 1)"', None, None)),
        ('T = 1\n[parameters.K]\nvalue = 1\nrange = [0, 2]',
         (2, "plant.transfer", "the numerator is 0: this plant does nothing (in the case K low)", '"K/(T*s + 1)"',
          None, None)),
    ],
)  # fmt: skip
def test_parameters(text, fault):
    assert only(sheet(text)) == fault


def test_undefined_names_are_shown_where_they_stand():
    found = faults_of(sheet("K = 1\ntau = 3"))
    assert found == [
        (2, "plant.transfer", "`T` is used here and is no parameter", "T", "tau", "tau"),
        (
            7,
            "parameters.tau",
            "the parameter `tau` is not used",
            "tau",
            "use it in the plant, or leave it out",
            "T",
        ),
    ]
    text = '[plant]\nA = [[0, 1], [2, "-c"]]\nB = [0, 1]\nC = [1, 0]\n' + BOUND
    assert only(text) == (2, "plant.A[1][1]", "`c` is used here and is no parameter", "c",
                          "[parameters] with a line for it", None)  # fmt: skip


def test_a_negative_value_where_it_cannot_be():
    assert only(sheet("K = { value = 1, range = [-1, 2] }", "sqrt(K)/s")) == (
        2, "plant.transfer", "the square root of a negative number (in the case K low)", "sqrt(K)/s\n^", None, None,
    )  # fmt: skip
    assert only(sheet("K = { value = 0, range = [-1, 2] }", "exp(-K*s)/s")) == (
        2, "plant.transfer", "the dead time is below 0: exp(-theta*s) takes a minus (in the case K low)",
        "exp(-K*s)/s\n^", None, None,
    )  # fmt: skip


def cases(text):
    return sheet('K = { value = 1, tolerance = "10 %" }\nT = 1\n' + text)  # the cases begin on line 8


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ('[[cases]]\nname = "a"\nK = 2\n[[cases]]\nname = "a"\nT = 3',
         (12, "cases[1].name", "there is already a case of this name", '"a"', "a name of its own", None)),
        ('[[cases]]\nname = "nominal"\nK = 2',
         (9, "cases[0].name", "there is already a case of this name", '"nominal"', "a name of its own", None)),
        ('[[cases]]\nname = "K low"\nK = 2',
         (9, "cases[0].name", "there is already a case of this name", '"K low"', "a name of its own", None)),
        ('[[cases]]\nname = " "\nK = 2',
         (9, "cases[0].name", "a case must have a name", '" "', "a name of its own", None)),
        ("[[cases]]\nK = 2", (8, "cases[0].name", "`name` is missing", None, "the name of the case", None)),
        ('[[cases]]\nname = "a"', (8, "cases[0]", "this case overrides no parameter", "a", "K, T", None)),
        ('[[cases]]\nname = "a"\nTT = 2', (10, "cases[0].TT", "`TT` is no parameter", "TT", "K, T", "T")),
        ('[[cases]]\nname = "a"\nK = "x"',
         (10, "cases[0].K", "this does not begin with a finite number", '"x"', PARAMETER, None)),
        ('[cases]\nname = "a"',
         (8, "cases", "this must be a list", None, "[[cases]], one for each operating case", None)),
        ('[[cases]]\nname = "a"\nK = 0',
         (2, "plant.transfer", "the numerator is 0: this plant does nothing (in the case a)", '"K/(T*s + 1)"', None,
          None)),
    ],
)  # fmt: skip
def test_operating_cases(text, fault):
    assert only(cases(text)) == fault


def bound(text):
    return PLANT + "[requirements]\n" + text  # on line 5


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ('overshoot = "10 %"',
         ("", "this must be a table", '"10 %"', 'a bound such as { max = "10 %" }', '{ max = "10 %" }')),
        ("bandwidth = 3",
         ("", "this must be a table", "3", 'a bound such as { min = "2 Hz" }', "{ min = 3 }")),
        ("overshoot = {}", ("", "this bound has no limit", "{}", "min = ... or max = ...", None)),
        ("overshoot = []", ("", "the list is empty", "[]", "a bound, or a list of bounds", None)),
        ("overshoot = { max = true }",
         (".max", "this must be a number with its unit, in quotes", "true", PERCENT, None)),
        ('overshoot = { maximum = "3 %" }',
         (".maximum", "unknown key of a bound `maximum`", "maximum", "min, max, cases", "max")),
        ('settling_time = { max = "0 s" }',
         (".max", "a limit of 0 on the settling time cannot be meant", '"0 s"', TIME, None)),
        ('overshoot = { max = "-1 %" }', (".max", "the overshoot is never below 0", '"-1 %"', PERCENT, None)),
        ("damping_ratio = { min = 1.2 }", (".min", "the damping ratio is never above 1", "1.2", "at most 1", None)),
        ('phase_margin = { min = "190 deg" }',
         (".min", "the phase margin is never above 180 deg", '"190 deg"', "at most 180 deg", None)),
        ("sensitivity_peak = { max = inf }",
         (".max", "the number is not finite", "inf", "a bare number, such as 0.7", None)),
        ('overshoot = { max = "10 %", band = "5 %" }',
         (".band", "unknown key of a bound `band`", "band", "min, max, cases", None)),
        ('settling_time = { max = "1 s", band = "500 %" }',
         (".band", "a band must lie above 0 % and below 100 %", '"500 %"', PERCENT, None)),
        ('rise_time = { max = "1 s", span = "90-10 %" }',
         (".span", "a span must go from a lower to a higher level between 0 and 100 %", '"90-10 %"',
          'two percentages, the lower first, such as "10-90 %" or "0-100 %"', None)),
        ("damping_ratio = { min = 0.5, below = 3 }",
         (".below", "a frequency must carry its unit", "3",
          'a frequency with its unit (rad/s 1/s Hz kHz), such as "2 Hz" or "12.6 rad/s"', None)),
        ('gain_margin = { min = "6 dB", cases = ["nominl"] }',
         (".cases[0]", "there is no plant case of this name", '"nominl"', "nominal", "nominal")),
        ('gain_margin = { min = "6 dB", cases = "nominal" }',
         (".cases", "this must be a list", '"nominal"', 'names of plant cases, such as ["nominal"]', None)),
        ('gain_margin = { min = "6 dB", cases = [] }',
         (".cases", "a bound that is judged on no case says nothing", "[]", "nominal", None)),
        ('settling_time = [{ max = "1 s" }, { min = "3 s", max = "2 s", band = "5 %" }]',
         ("[1]", "the bounds contradict each other: min stands above max", 'min = "3 s", max = "2 s"',
          "min at most max; they are 3 and 2 s", None)),
        ('settling_time = [{ max = "1 s" }, { min = "2 s" }]',
         ("[0]", "the bounds contradict each other: min stands above max", 'min = "2 s", max = "1 s"',
          "min at most max; they are 2 and 1 s", None)),
    ],
)  # fmt: skip
def test_bounds(text, fault):
    where, *rest = fault
    key = "requirements." + text.split(" ")[0] + where
    assert only(bound(text)) == (5, key, *rest)


@pytest.mark.parametrize("name", ["Ms", "overshot", "late_deviation", "settling time"])
def test_unknown_quantities(name):
    near = {"Ms": "sensitivity_peak", "overshot": "overshoot", "settling time": "settling_time"}.get(name)
    line, key, what, given_, words, nearest = only(bound(f'"{name}" = {{ max = 1 }}'))
    assert (line, what, given_, words) == (5, f"unknown quantity `{name}`", name, QUANTITY_NAMES)
    assert key == ("requirements." + name if " " not in name else f'requirements."{name}"')
    assert near is None or nearest == near


def test_bounds_on_different_measures_or_cases_do_not_contradict():
    parse_spec(bound('settling_time = [{ max = "1 s" }, { min = "2 s", band = "1 %" }]'))
    two = cases('[[cases]]\nname = "a"\nK = 2\n')
    split = 'overshoot = [{ max = "10 %", cases = ["a"] }, { min = "20 %", cases = ["K low", "K high"] }]'
    parse_spec(two.replace('overshoot = { max = "10 %" }', split))


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ('[prefer]\nminimize = "overshoot"',
         (7, "prefer.minimize", "unknown key of [prefer] `minimize`", "minimize", "minimise, maximise, reserve",
          "minimise")),
        ('[prefer]\nminimise = "overshot"',
         (7, "prefer.minimise", "unknown quantity", '"overshot"', QUANTITY_NAMES, "overshoot")),
        ('[prefer]\nreserve = "5 %"',
         (6, "prefer", "[prefer] names no quantity", None, 'minimise = "..." or maximise = "..."', None)),
        ('[prefer]\nminimise = "overshoot"\nmaximise = "bandwidth"',
         (6, "prefer", "one quantity can be preferred, not two", None, "minimise or maximise", None)),
        ('[prefer]\nminimise = "overshoot"\nreserve = "100 %"',
         (8, "prefer.reserve", "a reserve must be at least 0 % and below 100 %", '"100 %"', PERCENT, None)),
        ('[search]\nbudget = "fast"',
         (7, "search.budget", "unknown budget", '"fast"', "quick, normal, thorough", None)),
        ("[search]\nseed = -1",
         (7, "search.seed", "this must be a whole number", "-1", "a whole number from 0 to 4294967295", None)),
        ("[search]\nseed = true",
         (7, "search.seed", "this must be a whole number", "true", "a whole number from 0 to 4294967295", None)),
        ("[search]\nstructures = []",
         (7, "search.structures", "no structure is named", "[]", STRUCTURES, None)),
        ("[reference]\nstep = 0",
         (7, "reference.step", "a step of 0 is no step", "0",
          "a bare number in the plant's own units (SI), such as 2.5", None)),
    ],
)  # fmt: skip
def test_preference_search_and_reference(text, fault):
    assert only(GOOD + text) == fault


@pytest.mark.parametrize(
    "text",
    [
        plant('transfer = "' + "+".join(f"a{i}*s^2" for i in range(10_000)) + '"'),
        GOOD + "#" * 10_000_000,
        GOOD + "[parameters]\n" + "\n".join(f"a{i} = {i}" for i in range(9_000)),
        GOOD + "\n".join(f'[[cases]]\nname = "c{i}"\nK = 1' for i in range(5_000)),
        bound("overshoot = [" + '{ max = "1 %" },' * 10_000 + "]"),
        "x = [" + "1, " * 80_000 + "]",
    ],
    ids=["names", "10 MB", "parameters", "cases", "bounds", "list"],
)
def test_large_texts_are_answered_in_time(text):
    start = time.process_time()  # other work on the machine does not count
    try:
        parse_spec(text)
    except InputError as error:
        assert len(error.faults) <= 201  # noqa: PT017
    assert time.process_time() - start < 2.0


PIECES = st.sampled_from(
    ["[plant]", "[[cases]]", "[parameters]", "[requirements]", "[prefer]", "[search]", 'transfer = "K/(s+1)"', "K = 1",
     'name = "a"', "gain = 1", "poles = [-1]", 'zeros = ["1j"]', "A = [[1]]", "B = [1]", "C = [[1]]", "D = 3",
     'overshoot = { max = "1 %" }', "overshoot = { max = 1e999 }", 'settling_time = [{ max = "1 s", band = "5 %" }]',
     "damping_ratio = 0.5", 'minimise = "overshoot"', 'structures = ["PI", 3]', "seed = 1.5", "x = [[1], {a = 2}]",
     'numerator = [1, "K"]', "denominator = [[1]]", 'dead_time = "K"', "cases = 1", "K = { value = 1, range = 3 }"]
)  # fmt: skip


@given(st.lists(PIECES, max_size=9).map("\n".join) | st.text(max_size=40))
def test_any_sheet_is_read_or_refused(text):
    faults = ()
    try:
        parse_spec(text, "f.toml")
    except InputError as error:
        faults = error.faults
    for fault in faults:
        assert fault.file == "f.toml"
        assert 1 <= (fault.line or 1) <= text.count("\n") + 1
