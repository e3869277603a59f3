"""Anything typed, anything in a file: an exit code of the list, no traceback, no file touched but its own."""

import os
import resource
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

SHEET = Path(__file__).with_name("block.toml").read_text(encoding="utf-8")
CODES = {0, 1, 2}  # 3 is a fault of the program, 130 needs Ctrl-C


@pytest.fixture(scope="module")
def folder(tmp_path_factory, searched_once, synth):
    """A folder with a sheet, a broken one, and a record."""
    place = tmp_path_factory.mktemp("typed")
    searched_once.chdir(place)
    (place / "block.toml").write_text(SHEET)
    (place / "broken.toml").write_text("[plant]\ntransfer = 2s\n")
    assert synth("propose", "block.toml", "--record", "first.json").code == 0
    return place


WORDS = st.sampled_from(
    ["propose", "show", "compare", "adopt", "rerun", "check", "score", "structures", "schema", "new", "help",
     "block.toml", "broken.toml", "first.json", "nowhere", ".", "/", "", "-", "--", "-1", "0", "1", "99",
     "--record", "--json", "--seed", "--budget", "--time-limit", "--show", "--rank", "--note", "--against",
     "--trade", "--compensator", "--study", "--help", "--version", "quick", "thorough", "1 s", "20",
     "overshoot,rise_time", "1/s", "(s+1)/s", "s", "1e999/s", "2s", "exp(-s)", "--seed=3", "--json=1",
     "--rec", "mine.json", "no/where.json", "\x00", "\udcff", "é", "[bold]", "a" * 300, "nonsense://h/d"]
)  # fmt: skip
VERBS = st.sampled_from(["show", "compare", "adopt", "check", "score", "propose", "rerun", "new"])
FILES = st.sampled_from(["block.toml", "first.json", "broken.toml", "nowhere", "."])
CLOSE = st.tuples(VERBS, FILES, st.lists(WORDS, max_size=4)).map(lambda parts: [*parts[:2], *parts[2]])
LINES = st.lists(WORDS, max_size=6) | CLOSE


@given(LINES)
@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_command_line(folder, files_in, synth, words):
    before = files_in(folder)
    code, out, err = synth(*words)
    assert code in CODES, (words, err)
    assert "Traceback" not in out + err
    after = files_in(folder)
    assert {name: after.get(name) for name in before} == before  # nothing is changed or taken away
    for name in set(after) - set(before):
        asked = [w.split("=")[-1].split(":")[-1] for w in words]
        assert name.startswith(("records/", "first.adopted-")) or name in asked, (words, name)
        os.unlink(folder / name)


CHAIN = "/".join(["1"] + ["(s + 1)"] * 60)
POLES = "[" + ", ".join(f"-{k}" for k in range(1, 61)) + "]"
UNSURE = "".join(f'a{k} = {{ value = 1, tolerance = "5 %" }}\n' for k in range(60))
LARGE = {
    "10 MB": SHEET + "# " + "x" * 10_000_000,
    "10,000 terms": SHEET.replace("K / (", "(" + " + ".join(["K"] * 10_000) + ") / ("),
    "10,000 factors": SHEET.replace("K / (", "K*" + "*".join(["1.0"] * 10_000) + " / ("),
    "1e308": SHEET.replace("K = 2", "K = 1e308"),
    "1e-308": SHEET.replace("K = 2", "K = 1e-308"),
    "degree 60, formula": SHEET.replace("K / ((T*s + 1)*(0.1*s + 1))", CHAIN + "/(T*s + K)"),
    "degree 60, roots": SHEET.replace(
        'transfer = "K / ((T*s + 1)*(0.1*s + 1))"', f"gain = 1e80\nzeros = []\npoles = {POLES}"
    ).replace("[parameters]\nK = 2\nT = 1.0\n[[cases]]\nname = \"cold\"\nT = 1.1\n", ""),
    "60 parameters with tolerances": SHEET.replace(
        "K / (", "K*(" + " + ".join(f"a{k}" for k in range(60)) + ") / ("
    ).replace("T = 1.0\n", "T = 1.0\n" + UNSURE),
}  # fmt: skip


@pytest.mark.parametrize("name", LARGE)
def test_large_sheets_get_an_answer_or_a_refusal_within_bounds(tmp_path, begun, name):
    """Two gigabytes of address space, most of which numpy takes, and ten seconds of processor time."""
    (tmp_path / "large.toml").write_text(LARGE[name])

    def bounded():
        resource.setrlimit(resource.RLIMIT_AS, (2_000_000_000, 2_000_000_000))
        resource.setrlimit(resource.RLIMIT_CPU, (10, 10))

    done = begun(tmp_path, "check", "large.toml", preexec_fn=bounded)
    out, err = done.communicate()
    assert done.returncode in CODES, err
    assert len(out) + len(err) < 50_000
    assert os.listdir(tmp_path) == ["large.toml"]


EXTREME = ["1e308/(1e308*s + 1e307)", "1e-300/(1e-300*s + 1e-301)", "1e250/(s + 1e-3)"]


@pytest.mark.parametrize("plant", EXTREME)
def test_extreme_coefficients_are_scored_and_doubted_at_most(written, begun, plant):
    """The products D_P D_C of the second opinion leave the range of doubles unless they are scaled."""
    text = f'[plant]\ntransfer = "{plant}"\n[requirements]\novershoot = {{ max = "10 %" }}\n'
    path = written("extreme.toml", text)
    done = begun(path.parent, "score", path, "--compensator", "(20*s + 2)/(10*s)")
    _, err = done.communicate()
    assert done.returncode in CODES, err
    assert "Traceback" not in err
