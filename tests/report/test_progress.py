"""The display of a running search: on a terminal alone, gone when it is over."""

import io

from rich.console import Console

from synth.report.progress import Watch, drawn
from synth.report.theme import THEME, console
from synth.search.outcome import Progress

LOOK = Progress("polish", 3000, 6000, 1.25, ("PI", 0.081), {"P": -0.31, "PI": 0.081, "lag": -0.02})


def test_one_look_says_how_far_and_what_is_best():
    assert drawn(LOOK).plain.splitlines() == [
        "━" * 12 + "─" * 12 + "  polish  3,000 loops, 1.2 s; Ctrl-C keeps the best so far",
        "best so far  PI +8.1 %",
        "PI +8.1 %  lag −2.0 %  P −31.0 %",
    ]


def test_more_than_expected_is_a_full_bar():
    look = Progress("finals", 9000, 6000, 2.0, None, {})
    assert drawn(look).plain.startswith("━" * 24 + "  finals  9,000 loops")


def test_nothing_is_shown_where_nobody_looks():
    file = io.StringIO()
    with Watch(console(file, width=80)) as watch:
        for _ in range(3):
            watch(LOOK)
    assert file.getvalue() == ""


def test_a_terminal_sees_it_and_keeps_nothing_of_it(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    file = io.StringIO()
    out = Console(file=file, theme=THEME, width=80, force_terminal=True)
    watch = Watch(out)
    with watch:
        watch._begun -= 10.0
        watch._last -= 10.0
        watch(LOOK)
    assert "best so far" in file.getvalue()
    assert file.getvalue().rstrip("\n").endswith("\x1b[2K")
