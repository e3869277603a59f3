"""The rerun's part of the page, and the comparison, to the letter."""

from synth.report import comparison
from synth.report.revision import revision


def _revised(record):
    record["revision"] = {
        "advice": "retune",
        "about": "the adopted PI",
        "changes": [
            {"what": "I", "case": None, "old": 1.0, "new": 1.3},
            {"what": "operating case", "case": "ice", "old": None, "new": {"I": 1.5}},
            {
                "what": "plant",
                "case": None,
                "old": "K/(s*(I*s + f))",
                "new": "K*exp(-0.01*s)/(s*(I*s + f)*(T*s + 1))",
            },
        ],
        "adopted": {
            "rank": 1,
            "structure": "PI",
            "meets_all": False,
            "worst_slack": -0.04,
            "binding": {"requirement": "overshoot.max", "case": "I high"},
            "was": 0.08,
        },
        "earlier": [
            {
                "rank": 1,
                "structure": "PI",
                "meets_all": False,
                "worst_slack": -0.04,
                "binding": {"requirement": "overshoot.max", "case": "I high"},
                "was": 0.08,
            },
            {
                "rank": 2,
                "structure": "lead",
                "meets_all": False,
                "worst_slack": "-inf",
                "binding": None,
                "was": 0.02,
            },
        ],
        "moved": {"gain": [1.5, 1.2], "integral_time": [0.25, 0.3]},
        "successor": 1,
        "evidence": [{"text": "Untouched, it falls short in overshoot.", "facts": {}}],
    }
    return record


def test_advice_changes_and_earlier_candidates(record, drawn):
    assert drawn(revision(_revised(record), 80)) == (
        "\n"
        "Advice\n"
        "  RETUNE  The adopted PI needs other values.\n"
        "  - Untouched, it falls short in overshoot.\n"
        "    gain              1.5  →    1.2  −20.0 %\n"
        "    integral time  0.25 s  →  0.3 s  +20.0 %\n"
        "\n"
        "What changed  from the predecessor's sheet to this one\n"
        "  I                    1  →    1.3  (+30.0 %)\n"
        "  operating case, ice  —  →  I 1.5\n"
        "  plant: K/(s*(I*s + f)) → K*exp(-0.01*s)/(s*(I*s + f)*(T*s + 1))\n"
        "\n"
        "Earlier candidates  as they are, on the revised plant\n"
        "    structure     slack was         is  held back by\n"
        " 1  PI (adopted)     +8.0 %  →  −4.0 %  overshoot, I high\n"
        " 2  lead             +2.0 %  →      −∞\n"
    )


def test_one_adopted_from_an_older_record_has_a_row_of_its_own(record, drawn):
    revised = _revised(record)
    revised["revision"]["adopted"]["was"] = 0.09
    text = drawn(revision(revised, 80))
    assert "\n    PI (adopted, rank 1)     +9.0 %  →  −4.0 %  overshoot, I high\n" in text
    assert "\n 1  PI                       +8.0 %  →  −4.0 %  overshoot, I high\n" in text


def test_a_limit_that_moved_reads_with_its_unit_and_side(record, drawn):
    revised = _revised(record)
    revised["revision"]["changes"] = [
        {"what": "settling_time.max", "case": None, "old": 2.5, "new": 2.0},
        {"what": "bandwidth.min", "case": None, "old": 3.0, "new": None},
    ]
    assert drawn(revision(revised, 80)).split("\n\n")[1].splitlines()[1:] == [
        "  settling time (5 %) ≤    2.5 s  →  2 s  (−20.0 %)",
        "  bandwidth ≥            3 rad/s  →    —",
    ]


def test_a_record_without_a_candidate_leaves_nothing_to_keep(record, drawn):
    revised = _revised(record)
    del revised["revision"]["about"]
    text = drawn(revision(revised, 80))
    assert "RETUNE  The earlier record has no candidate to judge: the verdict below is\n" in text


def test_each_advice_has_its_words(record, drawn):
    revised = _revised(record)
    for advice, words in (
        ("keep", "KEEP  The adopted PI meets everything on the revised plant, untouched."),
        ("restructure", "RESTRUCTURE  The adopted PI does not meet the sheet, and no other values for"),
        ("relax", "RELAX  The adopted PI does not meet the sheet, and nothing else that was"),
    ):
        revised["revision"]["advice"] = advice
        assert words in drawn(revision(revised, 80))


def test_candidates_of_two_records_side_by_side(record, drawn):
    other = _revised(record) | {"verdict": "not met"}
    text = drawn(comparison([("a.json", record), ("b.json", other)], 80))
    assert text == (
        "A  Mast drive, revision B: met (a.json, 2026-12-01T12:00:00Z)\n"
        "B  Mast drive, revision B: not met (b.json, 2026-12-01T12:00:00Z)\n"
        "\n"
        "Side by side  worst plant case of each\n"
        "                              A1       A2       B1       B2\n"
        "  structure                   PI     lead       PI     lead\n"
        "  order                        1        1        1        1\n"
        "  meets its sheet            yes       no      yes       no\n"
        "  worst slack             +8.0 %   −5.0 %   +8.0 %   −5.0 %\n"
        "  overshoot, %               9.2*       7      9.2*       7\n"
        "  settling time (5 %), s     1.2      2.1!     1.2      2.1!\n"
        "  settling time, s           1.2      2.1      1.2      2.1\n"
        "  gain margin, dB              ∞        ∞        ∞        ∞\n"
        "  sensitivity peak Ms        1.4      1.4      1.4      1.4\n"
        "  control peak, V              3       24        3       24\n"
        "  * holds it back   ! falls short of its own sheet\n"
        "\n"
        "Tuned values\n"
        "  A1  PI           gain 1.5 · integral time 0.25 s\n"
        "  A2  lead         gain 6 · zero 4 rad/s · pole 25 rad/s\n"
        "  B1  PI           gain 1.5 · integral time 0.25 s\n"
        "  B2  lead         gain 6 · zero 4 rad/s · pole 25 rad/s\n"
    )


def test_sheets_that_differ_are_told_apart(record, drawn):
    import copy

    other = copy.deepcopy(record)
    other["requirements"][0]["limit"] = 8.0
    text = drawn(comparison([("a.json", record), ("b.json", other)], 80))
    assert text.endswith("\nThe sheets differ\n  A  overshoot ≤ 10 %\n  B  overshoot ≤ 8 %\n")
