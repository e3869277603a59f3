"""The benchmarks measure what they say: yardstick and reference agree with the core, the runner runs."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import QUANTITIES, Measure
from synth.requirements import numbered
from synth.search import Settings, Task, propose
from synth.search.archive import Rows
from synth.search.objective import Objective
from synth.search.scales import response
from synth.structures import by_name

FOLDER = Path(__file__).parents[1] / "benchmarks"


@pytest.fixture(scope="module")
def parts():
    sys.path.insert(0, str(FOLDER))
    try:
        import bench_global
        import exact
        import independent
        import plain_scipy
        import populations
        import tables

        yield {
            "exact": exact,
            "plain": plain_scipy,
            "populations": populations,
            "tables": tables,
            "independent": independent,
            "global": bench_global,
        }
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


FAKE = """
import runpy, sys, types
folder, path, *more = sys.argv[1:]
sys.path.insert(0, folder)
import tables
fake = types.ModuleType("bench_core")
fake.QUESTIONS = [lambda: tables.Table("T", ["a"], [[1.0]])]
fake.LONG = [lambda: tables.Table("L", ["b"], [[2.0]])]
sys.modules["bench_core"] = fake
sys.argv = ["run.py", "core", "--json", path, *more]
runpy.run_path(folder + "/run.py", run_name="__main__")
"""


def test_the_runner_refuses_what_it_does_not_have_and_writes_json(tmp_path):
    run = [sys.executable, str(FOLDER / "run.py")]
    bad = subprocess.run([*run, "nothing"], capture_output=True, text=True, check=False)
    assert bad.returncode == 2
    assert "core" in bad.stderr
    code = FAKE
    path = tmp_path / "figures.json"
    done = subprocess.run(
        [sys.executable, "-c", code, str(FOLDER), str(path)], capture_output=True, text=True, check=True
    )
    assert "numpy" in done.stdout.splitlines()[0]
    record = json.loads(path.read_text(encoding="utf-8"))
    assert record["tables"] == [{"file": "bench_core.py", "title": "T", "columns": ["a"], "rows": [[1.0]]}]
    assert record["machine"]["cores"]


def test_the_long_questions_are_asked_on_demand_alone(tmp_path):
    path = tmp_path / "figures.json"
    run = [sys.executable, "-c", FAKE, str(FOLDER), str(path)]
    for more, titles in (([], ["T"]), (["--full"], ["T", "L"])):
        subprocess.run([*run, *more], capture_output=True, check=True)
        record = json.loads(path.read_text(encoding="utf-8"))
        assert [t["title"] for t in record["tables"]] == titles


LAGS = Task(
    plants=Rational.of([2.0], [0.1, 1.1, 1.0]),
    case_names=("nominal",),
    bounds=numbered(
        [
            (Measure("sensitivity_peak"), "max", 1.5, None),
            (Measure("bandwidth"), "min", 3.0, None),
            (Measure("overshoot"), "max", 5.0, None),
            (Measure("static_error"), "max", 40.0, None),
        ]
    ),
    structures=(by_name("PI"), by_name("lead")),
)


def test_the_independent_search_needs_nothing_of_ours_to_find_the_same(parts):
    outcome = propose(LAGS, Settings())
    objective = Objective(LAGS)
    for n, scan in enumerate(outcome.scans):
        best = parts["independent"].search(objective, n, 6000)
        assert 6000 <= best.evaluations < 7000
        assert best.slack == pytest.approx(scan.best_slack, abs=2e-3)
        wide = np.zeros((1, objective.width))
        wide[0, : len(best.x)] = best.x
        row = Rows(np.array([n]), wide, np.array([best.sign]), np.array([-1]))
        assert objective.score(row).worst()[0] == pytest.approx(best.slack, abs=1e-12)


def test_both_of_its_spaces_stay_in_the_box_and_one_goes_by_the_crossover(parts):
    objective = Objective(LAGS)
    for n in (0, 1):
        low, high = objective.boxes[n]
        for make in (parts["independent"]._own, parts["independent"]._by_crossover):
            space = make(objective, n)
            points = np.random.default_rng(1).uniform(space.low, space.high, (50, len(space.low)))
            rows = space.rows(points)
            x = rows.x[:, : len(low)]
            assert ((x >= low) & (x <= high)).all()
            assert set(rows.sign) == {-1.0, 1.0}
        w = np.exp(points[:, 0]) / objective.scales.time
        inside = (np.abs(rows.x[:, 0]) < 30.0) & (np.abs(points[:, 0]) < 5.0)
        size = np.abs(response(objective.realise(rows), w)) * np.abs(response(LAGS.plants, w))
        np.testing.assert_allclose(np.diag(size)[inside], 1.0, rtol=1e-9)


def test_a_comparison_counts_by_what_was_said_of_the_structure(parts):
    pair = parts["global"].Pair
    table = parts["global"].compared(
        "T", [pair("a PI", 0.1, 0.104, "met"), pair("b PI", 0.1, 0.12, "met"), pair("c PD", 0.2, 0.1, "far")]
    )
    assert table.rows == [["far", 1, 1, 0.0, "", 1], ["met", 2, 1, pytest.approx(0.02), "b PI", 0]]
