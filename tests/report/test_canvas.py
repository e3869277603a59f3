"""Drawing: dots where they belong, nothing outside, round ticks."""

import math

import pytest

from synth.report.canvas import Canvas, Chart, ticks


def test_a_dot_sets_the_bit_of_its_place():
    canvas = Canvas(1, 1)
    for x, y in ((0, 0), (1, 3)):
        canvas.dot(x, y, "first")
    assert canvas.lines()[0].plain == chr(0x2800 + 0x01 + 0x80)


def test_what_lies_outside_or_is_not_finite_is_not_drawn():
    canvas = Canvas(2, 1)
    canvas.dot(-1, 0, "first")
    canvas.dot(0, 4, "first")
    canvas.line([(math.nan, 0.0), (1.0, 1.0), (math.inf, 1.0)], "first")
    canvas.line([(-9.0, -5.0), (-1.0, -1.0)], "first")
    assert canvas.lines()[0].plain == "  "


def test_a_wild_line_is_cut_to_the_canvas():
    canvas = Canvas(4, 1)
    canvas.line([(-1e12, 0.0), (1e12, 0.0)], "first")
    assert canvas.lines()[0].plain == chr(0x2800 + 0x01 + 0x08) * 4


def test_a_word_moves_in_and_does_not_cover_letters():
    canvas = Canvas(8, 2)
    canvas.word(6, 0, "limit", "axis")
    canvas.letter(1, 1, "◆", "first")
    canvas.word(0, 1, "hidden", "axis")
    assert [line.plain for line in canvas.lines()] == ["   limit", " ◆      "]


@pytest.mark.parametrize(
    ("low", "high", "most", "expected"),
    [
        (0.0, 1.0, 6, [0.0, 0.2, 0.4, 0.6, 0.8, 1.0]),
        (0.0, 1.0, 3, [0.0, 0.5, 1.0]),
        (-37.0, 12.0, 4, [-20.0, 0.0]),
        (2.0, 2.0, 4, []),
        (0.0, math.inf, 4, []),
    ],
)
def test_ticks_are_round_and_few(low, high, most, expected):
    assert ticks(low, high, most) == pytest.approx(expected)


def test_a_chart_puts_data_in_its_corners():
    chart = Chart((0.0, 10.0), (0.0, 1.0), 20, 5)
    chart.mark(0.0, 0.0, "a", "first")
    chart.mark(10.0, 1.0, "b", "first")
    chart.mark(math.nan, 1.0, "c", "first")
    lines = [line.plain for line in chart.lines("s", "y")]
    assert lines[0] == "  y"
    assert lines[1].endswith("│" + " " * 19 + "b") or lines[1].endswith("┤" + " " * 19 + "b")
    assert "┤a" in lines[5]
    assert lines[-1].endswith("s")
