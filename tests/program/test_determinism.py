"""One sheet, one seed, one version: one record, but for time stamps and seconds, whatever runs beside it."""

import json
from concurrent.futures import ThreadPoolExecutor

import pytest

SHEETS = {
    "one case": """\
[plant]
transfer = "4 / (s*(s + 1)*(0.2*s + 1))"
[requirements]
overshoot = { max = "15 %" }
phase_margin = { min = "40 deg" }
[search]
structures = ["lead", "PD"]
budget = "quick"
""",
    "cases": """\
[plant]
transfer = "K*exp(-L*s) / (T*s + 1)"
[parameters]
K = { value = 2, tolerance = "20 %" }
T = 1.5
L = { value = "0.2 s", range = ["0.1 s", "0.3 s"] }
[[cases]]
name = "cold"
T = 1.8
[requirements]
overshoot = { max = "10 %" }
settling_time = { max = "4 s" }
sensitivity_peak = { max = 1.8 }
[search]
structures = ["PI"]
budget = "quick"
""",
}
# how the processes differ: the order of sets, threads of the numerical library, time zone, width
WORLDS = [
    {"PYTHONHASHSEED": "0", "OPENBLAS_NUM_THREADS": "1"},
    {"PYTHONHASHSEED": "1", "OPENBLAS_NUM_THREADS": "1", "TZ": "Asia/Tokyo", "COLUMNS": "40"},
    {"PYTHONHASHSEED": "77", "OPENBLAS_NUM_THREADS": "2", "LC_ALL": "C"},
]


PROPOSE = ("propose", "sheet.toml", "--json")


def record_of(run):
    out, err = run.communicate()
    assert run.returncode in (0, 1), err
    record = json.loads(out)
    record["created"] = record["search"]["seconds"] = None
    return json.dumps(record)


@pytest.mark.parametrize("workers", [1, 2])
@pytest.mark.parametrize("kind", SHEETS)
def test_the_same_record_bit_for_bit(tmp_path, begun, kind, workers):
    (tmp_path / "sheet.toml").write_text(SHEETS[kind])
    with ThreadPoolExecutor(workers) as pool:  # runs one after another, or two at once
        found = list(
            pool.map(
                lambda world: record_of(begun(tmp_path, *PROPOSE, world=world)),
                WORLDS[: 3 if workers == 1 else 2],
            )
        )
    assert len(set(found)) == 1
    assert json.loads(found[0])["candidates"]


def test_another_seed_is_another_search(tmp_path, begun):
    (tmp_path / "sheet.toml").write_text(SHEETS["one case"])
    runs = (begun(tmp_path, *PROPOSE, "--seed", seed, world=WORLDS[0]) for seed in "05")
    one, other = (json.loads(record_of(run)) for run in runs)
    assert one["search"]["seed"] == 0
    assert other["search"]["seed"] == 5
    assert one["candidates"] != other["candidates"]
