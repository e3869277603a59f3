"""Units: what a number with its unit is worth, and what is said where it cannot be one."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from synth.spec.units import PARAMETER_UNITS, UNITS, UnitFault, allowed, measured, parameter, sample, span


@pytest.mark.parametrize(
    ("text", "dimension", "value"),
    [
        ("1.2 s", "time", 1.2),
        ("250us", "time", 250e-6),
        ("2 ms", "time", 0.002),
        ("1.5 min", "time", 90.0),
        ("2 h", "time", 7200.0),
        ("1 Hz", "frequency", 2 * math.pi),
        ("1 kHz", "frequency", 2000 * math.pi),
        ("3 rad/s", "frequency", 3.0),
        ("3 1/s", "frequency", 3.0),
        ("3 1/s", "rate", 3.0),
        ("45 deg", "angle", 45.0),
        ("6 dB", "decibel", 6.0),
        ("10 %", "percent", 10.0),
        (" .5  % ", "percent", 0.5),
        ("+1e-3 s", "time", 0.001),
        (0.7, "ratio", 0.7),
        (2, "plant", 2.0),
    ],
)
def test_measured(text, dimension, value):
    assert measured(text, dimension) == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("value", "si"),
    [
        (3, 3.0),
        ("2 ms", 0.002),
        ("47 uF", 47e-6),
        ("47 µF", 47e-6),
        ("33 nH", 33e-9),
        ("2.2 kOhm", 2200.0),
        ("30 deg", math.pi / 6),
        ("30 Hz", 60 * math.pi),
        ("600 rpm", 20 * math.pi),
        ("20 %", 0.2),
        ("20 dB", 10.0),
        ("-3 V", -3.0),
        ("5 mm", 0.005),
        ("250 g", 0.25),
    ],
)
def test_parameters_become_si(value, si):
    assert parameter(value) == pytest.approx(si, rel=1e-15)


@given(number=st.floats(-1e9, 1e9), dimension=st.sampled_from([d for d in UNITS if UNITS[d]]), data=st.data())
def test_what_is_written_in_a_unit_comes_back(number, dimension, data):
    unit = data.draw(st.sampled_from(list(UNITS[dimension])))
    worth = UNITS[dimension][unit]
    assert measured(f"{number!r} {unit}", dimension) == pytest.approx(number * worth, rel=1e-15)
    if not unit[0].isdigit():
        assert measured(f"{number!r}{unit}", dimension) / worth == pytest.approx(number, rel=1e-14)


@given(number=st.floats(-1e9, 1e9), unit=st.sampled_from(list(PARAMETER_UNITS)))
def test_parameters_in_any_unit_come_back(number, unit):
    assert parameter(f"{number!r} {unit}") / PARAMETER_UNITS[unit] == pytest.approx(number, rel=1e-14)


RATIO = "a bare number, such as 0.7"
ANGLE = 'an angle with its unit (deg), such as "45 deg"'
DECIBEL = 'a figure in dB with its unit (dB), such as "6 dB"'
NO_UNIT = "a bare number must stand here, without a unit"
PLANT_NO_UNIT = "a bare number in the plant's own units (SI) must stand here, without a unit"
TIME = 'a time with its unit (us ms s min h), such as "1.2 s"'
FREQUENCY = 'a frequency with its unit (rad/s 1/s Hz kHz), such as "2 Hz" or "12.6 rad/s"'
PERCENT = 'a percentage with its unit (%), such as "10 %"'
PLANT = "a bare number in the plant's own units (SI), such as 2.5"


@pytest.mark.parametrize(
    ("value", "dimension", "what", "words", "nearest"),
    [
        (1.2, "time", "a time must carry its unit", TIME, None),
        ("1.2", "time", "a time must carry its unit", TIME, None),
        ("1.2 sec", "time", "`sec` is no unit of time", TIME, '"1.2 s"'),
        ("3 Hz", "time", "`Hz` is no unit of time", TIME, None),
        ("3 hz", "frequency", "`hz` is no unit of frequency", FREQUENCY, '"3 Hz"'),
        ("3 rad/sec", "frequency", "`rad/sec` is no unit of frequency", FREQUENCY, '"3 rad/s"'),
        (4, "frequency", "a frequency must carry its unit", FREQUENCY, None),
        ("3 Hz", "rate", "`Hz` is no unit of rate", 'a rate with its unit (1/s), such as "3 1/s"', None),
        ("3/s", "rate", "`/s` is no unit of rate", 'a rate with its unit (1/s), such as "3 1/s"', '"3 1/s"'),
        (10, "percent", "a percentage must carry its unit", PERCENT, '"10 %"'),
        ("45°", "angle", "`°` is no unit of angle", ANGLE, '"45 deg"'),
        ("6 db", "decibel", "`db` is no unit of figure in dB", DECIBEL, '"6 dB"'),
        ("6 dB", "ratio", NO_UNIT, RATIO, "1.99526"),
        ("70 %", "ratio", NO_UNIT, RATIO, "0.7"),
        ("1.7", "ratio", "a bare number must not stand in quotes", RATIO, "1.7"),
        ("3 s", "plant", PLANT_NO_UNIT, PLANT, None),
        (True, "ratio", "this must be a number", RATIO, None),
        ([1], "time", "this must be a number with its unit, in quotes", TIME, None),
        (math.nan, "ratio", "`nan` is no number that can be meant", RATIO, None),
        (-math.inf, "plant", "the number is not finite", PLANT, None),
        (10**400, "plant", "the number is not finite", PLANT, None),
        ("1e999 s", "time", "the number is not finite", TIME, None),
        ("1e308 h", "time", "the number is not finite", TIME, None),
        ("inf s", "time", "this does not begin with a finite number", TIME, None),
        ("nan %", "percent", "this does not begin with a finite number", PERCENT, None),
        ("1,5 s", "time", "decimals are written with a point", TIME, '"1.5 s"'),
        ("", "time", "this does not begin with a finite number", TIME, None),
    ],
)  # fmt: skip
def test_faults(value, dimension, what, words, nearest):
    with pytest.raises(UnitFault) as caught:
        measured(value, dimension)
    fault = caught.value
    assert (fault.what, fault.allowed, fault.nearest) == (what, words, nearest)


PARAMETER = 'a number in SI, or a number with its unit such as "2 ms", "47 uF" or "30 Hz"'


@pytest.mark.parametrize(
    ("value", "what", "words", "nearest"),
    [
        ("2 furlong", "`furlong` is no unit that is known here", PARAMETER + "; convert others to SI", None),
        ("2 sec", "`sec` is no unit that is known here", PARAMETER + "; convert others to SI", '"2 s"'),
        ("20", "a bare number must not stand in quotes", PARAMETER, "20"),
        ("K", "this does not begin with a finite number", PARAMETER, None),
        ("9000 dB", "the number is not finite", PARAMETER, None),
        (False, "a parameter must be a number", PARAMETER, None),
        (math.inf, "the number is not finite", PARAMETER, None),
    ],
)
def test_faults_of_parameters(value, what, words, nearest):
    with pytest.raises(UnitFault) as caught:
        parameter(value)
    fault = caught.value
    assert (fault.what, fault.allowed, fault.nearest) == (what, words, nearest)


@pytest.mark.parametrize(
    ("text", "levels"),
    [
        ("10-90 %", (0.1, 0.9)),
        ("0-100 %", (0.0, 1.0)),
        ("5 % to 95 %", (0.05, 0.95)),
        (" 0 – 63.2% ", (0, 0.632)),
    ],
)
def test_spans(text, levels):
    assert span(text) == pytest.approx(levels)


@pytest.mark.parametrize(
    ("value", "what"),
    [
        ("90-10 %", "a span must go from a lower to a higher level between 0 and 100 %"),
        ("0-150 %", "a span must go from a lower to a higher level between 0 and 100 %"),
        ("10-90", "this is no span"),
        (10, "this is no span"),
    ],
)
def test_faults_of_spans(value, what):
    with pytest.raises(UnitFault) as caught:
        span(value)
    words = 'two percentages, the lower first, such as "10-90 %" or "0-100 %"'
    assert (caught.value.what, caught.value.allowed) == (what, words)


@given(st.text(max_size=12) | st.text(alphabet="0123456789.eE+- smhz%/dBµ", max_size=12))
def test_any_text_is_a_number_or_a_fault(text):
    for read in (parameter, span, *(lambda t, d=d: measured(t, d) for d in UNITS)):
        try:
            values = read(text)
        except UnitFault:
            continue
        assert all(math.isfinite(v) for v in (values if isinstance(values, tuple) else (values,)))


@pytest.mark.parametrize("dimension", list(UNITS))
def test_the_samples_are_allowed(dimension):
    text = sample(dimension)
    assert text in allowed(dimension)
    measured(text.strip('"') if '"' in text else float(text), dimension)
