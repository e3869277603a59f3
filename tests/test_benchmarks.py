"""The benchmarks measure what they say: yardstick and reference agree with the core, the runner runs."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from synth.loop.evaluate import evaluate
from synth.loop.quantities import QUANTITIES, Measure

FOLDER = Path(__file__).parents[1] / "benchmarks"


@pytest.fixture(scope="module")
def parts():
    sys.path.insert(0, str(FOLDER))
    try:
        import exact
        import plain_scipy
        import populations
        import tables

        yield {"exact": exact, "plain": plain_scipy, "populations": populations, "tables": tables}
    finally:
        sys.path.remove(str(FOLDER))


@pytest.mark.parametrize("order", [4, 7])
def test_the_core_agrees_with_fifty_digits(parts, order):
    exact = parts["exact"]
    population = parts["populations"].designs(order, 4, seed=11)
    measures = tuple(Measure(name) for name in exact.NAMES)
    found = evaluate(population.plants, population.compensators, measures=measures, pairs=population.pairs)
    for row in range(4):
        reference = exact.quantities(population, row)
        for name in exact.NAMES:
            bound = 1e-6 * max(abs(reference[name]), QUANTITIES[name].scale or 0.0)
            assert found[name][row] == pytest.approx(reference[name], rel=0, abs=bound), name


def test_the_plain_loop_finds_the_same_but_for_its_grid(parts):
    population = parts["populations"].designs(6, 6, seed=12)
    found = evaluate(population.plants, population.compensators, pairs=population.pairs)
    plants, comps = population.plants, population.compensators
    for row in range(6):
        plain = parts["plain"].score(
            np.trim_zeros(plants.numerator[row], "f"),
            plants.denominator[row],
            comps.numerator[row],
            comps.denominator[row],
        )
        for name, rough in (("settling_time", 0.1), ("bandwidth", 0.02), ("sensitivity_peak", 0.01)):
            assert plain[name] == pytest.approx(found[name][row], rel=rough)
        for name in ("phase_margin", "overshoot", "control_peak"):
            assert plain[name] == pytest.approx(found[name][row], rel=0.05, abs=1.0)


def test_designs_are_stable_damped_and_the_same_each_time(parts):
    designs = parts["populations"].designs
    one, other = designs(6, 30, dead_time=False), designs(6, 30, dead_time=False)
    np.testing.assert_array_equal(one.compensators.numerator, other.compensators.numerator)
    found = evaluate(one.plants, one.compensators, measures=(Measure("decay_rate"),), pairs=one.pairs)
    assert found.stable.all()
    assert len(one.rows(70).plants) == 70


def test_a_table_in_words(parts):
    table = parts["tables"].Table(
        "Title", ["what", "ratio"], [["first", 1234.5], ["second", 0.5]], note="note"
    )
    assert (
        table.text() == "Title\nwhat       ratio\n----------------\nfirst   1.23e+03\nsecond       0.5\nnote"
    )


def test_the_runner_refuses_what_it_does_not_have_and_writes_json(tmp_path):
    run = [sys.executable, str(FOLDER / "run.py")]
    bad = subprocess.run([*run, "nothing"], capture_output=True, text=True, check=False)
    assert bad.returncode == 2
    assert "core" in bad.stderr
    code = """
import runpy, sys, types
folder, path = sys.argv[1:]
sys.path.insert(0, folder)
import tables
fake = types.ModuleType("bench_core")
fake.QUESTIONS = [lambda: tables.Table("T", ["a"], [[1.0]])]
sys.modules["bench_core"] = fake
sys.argv = ["run.py", "core", "--json", path]
runpy.run_path(folder + "/run.py", run_name="__main__")
"""
    path = tmp_path / "figures.json"
    done = subprocess.run(
        [sys.executable, "-c", code, str(FOLDER), str(path)], capture_output=True, text=True, check=True
    )
    assert "numpy" in done.stdout.splitlines()[0]
    record = json.loads(path.read_text(encoding="utf-8"))
    assert record["tables"] == [{"file": "bench_core.py", "title": "T", "columns": ["a"], "rows": [[1.0]]}]
    assert record["machine"]["cores"]
