"""A whole report, to the letter, at 80 columns; and that it keeps its width at any other.

page_80.txt is read by people: when the look changes on purpose, look at the new page before replacing it.
"""

from pathlib import Path

import pytest

from synth.report import one_candidate, page
from synth.report.theme import Columns, hanging


def test_the_whole_page_at_80_columns(record, drawn):
    expected = Path(__file__).with_name("page_80.txt").read_text(encoding="utf-8")
    assert drawn(page(record, 80)) == expected


@pytest.mark.parametrize("width", [64, 72, 80, 100, 120, 132])
def test_no_line_is_wider_than_the_terminal(record, drawn, width):
    text = drawn(page(record, width), width)
    assert max(map(len, text.splitlines())) <= width
    assert "\x1b" not in text


def test_one_candidate_alone(record, drawn):
    text = drawn(one_candidate(record, record["candidates"][1], 80))
    assert text.splitlines()[2] == "Candidate 2 in full  lead, order 1"
    assert "Beside the limits" not in text
    # the one asked for leads the picture, the others are drawn behind it
    assert "  ━━ 2 lead   ╍╍ 1 PI" in text


def test_a_rank_that_is_not_there(record, drawn):
    assert "There is no candidate 7." in drawn(page(record, 80, in_full=7))


def test_interrupted_not_met_and_a_doubted_candidate_stand_out(record, drawn):
    record["search"]["interrupted"] = True
    record["verdict"] = "not met"
    record["candidates"][0]["verified"] = {
        "agrees": False,
        "largest_relative_difference": 0.02,
        "details": ["overshoot 9.2 against 11"],
    }
    text = drawn(page(record, 80))
    assert text.splitlines()[2].startswith("NOT MET  ")
    assert "Interrupted: the best found so far, not the end of the search." in text
    assert "second opinion disagrees: do not use before it is understood" in text
    assert "DISAGREES by 0.02, relative. overshoot 9.2 against 11" in " ".join(text.split())


def test_names_that_look_like_markup_are_shown_as_they_are(record, drawn):
    record["spec"]["title"] = "[bold]Mast[/bold] :smile:"
    record["plant"]["cases"][2]["name"] = "[red]"
    record["candidates"][0]["binding"]["case"] = "[red]"
    text = drawn(page(record, 80))
    assert "[bold]Mast[/bold] :smile:" in text
    assert "overshoot, [red]" in text


def test_a_record_with_required_fields_alone_is_still_a_report(record, drawn):
    for candidate in record["candidates"]:
        for key in ("also", "units", "order", "judged", "modes"):
            del candidate[key]
        candidate["compensator"].pop("factors")
        candidate["curves"] = {"step": {}, "root_locus": {}}
    record["plant"] = {"cases": record["plant"]["cases"][:1]}
    for key in ("reference_step", "valid_to", "input", "output", "prefer"):
        del record["spec"][key]
    for key in ("job", "statement", "prices", "trade"):
        del record[key]
    record["search"] = {"seed": 0, "evaluations": 1, "seconds": 0.1, "interrupted": False}
    text = drawn(page(record, 80))
    assert "C(s) = [1.5, 6]  over  [1, 0]" in text
    assert "overshoot  9.2 %  ≤ 10 %" in text.replace("            ", "  ").replace("   ", "  ")


def test_a_price_list(record, drawn):
    record["prices"] = [
        {
            "requirement": "settling_time.max",
            "structure": "PI",
            "limit": 2.0,
            "needed": 2.137,
            "cost": 0.0685,
            "parameters": {"gain": 1.0},
        }
    ]
    text = drawn(page(record, 80))
    assert (
        "\nWhat it would take  one limit moved, all the others met; cheapest first\n"
        "  settling time (5 %)  ≤ 2 s  →  2.137 s  with a PI\n"
    ) in text


def test_a_violated_limit_comes_first_with_what_to_relax(record, drawn):
    record["verdict"] = "impossible"
    record["limits"].append(
        {
            "name": "zero",
            "statement": "The zero at 0.5 rad/s forbids it.",
            "source": "B. Author (1987)",
            "violates": "settling_time.max",
            "relax": {"requirement": "settling_time.max", "to": 4.1},
        }
    )
    text = drawn(page(record, 80))
    assert (
        "  - The zero at 0.5 rad/s forbids it. Violated by settling time (5 %). Relax it\n"
        "    to 4.1 s. [B. Author (1987)]\n"
        "  - The input must reach 3 V."
    ) in text


def test_a_trade_off_is_a_table_and_a_picture(record, drawn):
    record["trade"] = {
        "quantities": ["settling_time", "control_peak"],
        "points": [
            {
                "structure": "PI",
                "parameters": {"gain": 1.0},
                "first": 0.2 + 0.1 * i,
                "second": 20.0 - 4.0 * i,
                "worst_slack": 0.1,
            }
            for i in range(4)
        ],
    }
    text = drawn(page(record, 80))
    assert "Trade-off  settling time against control peak; everything else is met" in text
    assert "              0.2               20  PI" in text
    assert text.split("Trade-off")[1].split("Structures not used")[0].count("◆") == 4


def test_where_no_single_limit_does_it_that_is_said(record, drawn):
    record = record | {"verdict": "not met", "prices": []}
    assert "What it would take\n  No single limit was found that, moved alone," in drawn(page(record, 80))
    stopped = record | {"search": record["search"] | {"interrupted": True}}
    assert "What it would take" not in drawn(page(stopped, 80))


def test_an_order_that_is_not_that_of_the_slacks_is_explained(record, drawn):
    words = "by slack less a charge for each tuned value"
    assert words not in drawn(page(record, 80))
    first, second = record["candidates"]
    second |= {"meets_all": True, "worst_slack": 2.0 * first["worst_slack"]}
    assert words in drawn(page(record, 80))


@pytest.mark.parametrize("width", range(20, 34))
def test_a_number_and_its_unit_of_two_words_stay_on_one_line(drawn, width):
    text = drawn([hanging("  ", "u jumps to 39.4 N m at the instant of it", width)], width)
    assert "39.4 N m" in text


def test_a_narrow_page_keeps_what_matters_of_a_table(drawn):
    table = Columns(("<", ">", "<", "<"), spare=((2,),))
    table.add("settling time", "0.88 s", "≤ 1.5 s", "on the second payload")
    wide = ["  settling time  0.88 s  ≤ 1.5 s  on the second payload\n"]
    assert [drawn(table.lines(width)) for width in (80,)] == wide
    assert drawn(table.lines(48)) == "  settling time  0.88 s  ≤ 1.5 s  on the second…\n"
    assert drawn(table.lines(35)) == "  settling time\n    0.88 s  ≤ 1.5 s  on the second…\n"
    assert drawn(table.lines(26)) == "  settling time\n    0.88 s  on the second…\n"
