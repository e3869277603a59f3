"""The scoring core: speed against a plain scipy.signal loop, accuracy beside it, staging, processes, memory.

All quantities of the table for every loop, except where a table says otherwise.
"""

from __future__ import annotations

import multiprocessing
import resource
import subprocess
import sys
from collections.abc import Callable
from functools import partial
from pathlib import Path

import exact
import numpy as np
import plain_scipy
from populations import Population, cloud, designs, starts
from tables import Table, interleaved, seconds

from synth.loop.evaluate import Screen, evaluate
from synth.loop.quantities import EVERY_QUANTITY

SAMPLE = 12  # loops that the plain scipy loop is timed on


def scored(population: Population, screen: Screen | None = None) -> Callable[[], object]:
    return lambda: evaluate(population.plants, population.compensators, pairs=population.pairs, screen=screen)


def plainly(population: Population, count: int = SAMPLE) -> list[dict[str, float]]:
    plants, comps = population.plants, population.compensators
    return [
        plain_scipy.score(
            np.trim_zeros(plants.numerator[i], "f"),
            plants.denominator[i],
            np.trim_zeros(comps.numerator[i], "f"),
            comps.denominator[i],
            float(plants.dead_time[i]),
        )
        for i in range(count)
    ]


def speed() -> Table:
    """One call of many loops against the plain loop."""
    cases = [(f"order {n}, random designs", designs(n, 1024), 7) for n in (4, 6, 8, 10)]
    cases += [(f"order {n}, cloud of 10 %", cloud(n, 1024, 0.1), 7) for n in (4, 6, 8, 10)]
    cases += [("order 6, random designs", designs(6, 1024).rows(count), 7) for count in (64, 8, 1)]
    return _against_scipy("Every quantity, one core: core against a plain scipy.signal loop", cases)


def dead_time() -> Table:
    """The same with dead time, exact in the core, by a Padé approximation in the plain loop."""
    cases = [(f"order {n} with dead time", designs(n, 1024, dead_time=True), 7) for n in (4, 6, 8)]
    six = designs(6, 1024, dead_time=True)
    cases += [("order 6 with dead time", six.rows(count), 5) for count in (256, 64)]
    return _against_scipy(
        "Every quantity with dead time, one core: core against a plain scipy.signal loop", cases
    )


def _against_scipy(title: str, cases: list[tuple[str, Population, int]]) -> Table:
    table = Table(
        title,
        ["population", "loops a call", "core [us/loop]", "scipy [us/loop]", "ratio"],
        note=f"scipy: np.roots, three signal.step and one freqresp of 1000 points each, read off the grid; "
        f"mean of {SAMPLE} loops. Processor time, medians of runs taken in turns.",
    )
    for name, population, repeats in cases:
        count, sample = len(population.plants), population.rows(SAMPLE)
        works = {"core": scored(population), "scipy": partial(plainly, sample)}
        taken = interleaved(works, repeats)
        core, plain = 1e6 * taken["core"] / count, 1e6 * taken["scipy"] / SAMPLE
        table.rows.append([name, count, core, plain, plain / core])
    return table


def accuracy() -> Table:
    """Largest errors of both routes against 50-digit arithmetic."""
    table = Table(
        "Largest error over 40 random designs of order 6, relative to max(value, own scale)",
        ["quantity", "core", "scipy grid"],
        note="Reference: 50-digit poles, residues and polynomials of the same coefficients; extrema and "
        "crossings refined in that arithmetic from a dense scan.",
    )
    population = designs(6, 1024).rows(40)
    found = evaluate(population.plants, population.compensators, pairs=population.pairs)
    plain = plainly(population, 40)
    reference = [exact.quantities(population, i) for i in range(40)]
    for name in exact.NAMES:
        values = np.array([r[name] for r in reference])
        scale = dict((m.quantity, m.row.scale or 0.0) for m in EVERY_QUANTITY)[name]
        size = np.maximum(np.abs(values), scale)
        core_error = float(np.nanmax(np.abs(found[name] - values) / size))
        plain_error = float(np.nanmax(np.abs(np.array([p.get(name, np.nan) for p in plain]) - values) / size))
        table.rows.append([name.replace("_", " "), core_error, plain_error])
    return table


def staging() -> Table:
    """What leaving loops early saves, and what it costs where nothing leaves."""
    table = Table(
        "Staging: poles (damping 0.1), frequency (Ms 2), time",
        ["population", "stable", "reach the end", "full [us/loop]", "staged [us/loop]", "gain"],
    )
    screen = Screen(least_damping=0.1, most_peak=2.0)
    for name, population in (
        ("order 6, random starts", starts(6, 1024)),
        ("order 8, random starts", starts(8, 1024)),
        ("order 6, wide cloud (60 %)", cloud(6, 1024, 0.6)),
        ("order 8, wide cloud (60 %)", cloud(8, 1024, 0.6)),
        ("order 6, wide cloud (120 %)", cloud(6, 1024, 1.2)),
        ("order 8, wide cloud (120 %)", cloud(8, 1024, 1.2)),
        ("order 6, narrow cloud (2 %)", cloud(6, 1024, 0.02)),
        ("order 8, narrow cloud (2 %)", cloud(8, 1024, 0.02)),
    ):
        taken = interleaved({"full": scored(population), "staged": scored(population, screen)}, 5)
        through = evaluate(population.plants, population.compensators, pairs=population.pairs, screen=screen)
        share = [f"{100.0 * part.mean():.0f} %" for part in (through.stable, through.reached == 2)]
        full, staged = (1e6 * taken[k] / 1024 for k in ("full", "staged"))
        table.rows.append([name, *share, full, staged, full / staged])
    return table


def processes() -> Table:
    """Two persistent worker processes against one."""
    population = designs(6, 1024)
    work = scored(population)
    context = multiprocessing.get_context("fork")
    global _JOB
    _JOB = work
    with context.Pool(2) as pool:
        parts = [0] * 8
        taken = interleaved(
            {"one": lambda: [work() for _ in parts], "two": lambda: pool.map(_run_job, parts, chunksize=1)},
            3,
            wall=True,
        )
    table = Table(
        "Eight calls of 1024 loops, order 6",
        ["processes", "[s]", "speed-up"],
        [["1", taken["one"], 1.0], ["2", taken["two"], taken["one"] / taken["two"]]],
    )
    return table


_JOB: Callable[[], object] = lambda: None  # noqa: E731


def _run_job(_: int) -> int:
    _JOB()
    return 0


def memory() -> Table:
    """Peak memory of one call of 100,000 loops, in a process of its own."""
    script = f"""
import sys
sys.path[:0] = [{str(Path(__file__).parent)!r}, {str(Path(__file__).parents[1])!r}]
from bench_core import peak_memory
print(*peak_memory())
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    before, after, taken = (float(v) for v in done.stdout.split())
    return Table(
        "One call of 100,000 loops, order 6, every quantity",
        ["", "value"],
        [
            ["peak memory [MB]", after],
            ["of it before the call [MB]", before],
            ["[us/loop]", 1e6 * taken / 1e5],
        ],
    )


def peak_memory() -> tuple[float, float, float]:
    """Peak resident memory [MB] before and after, and seconds."""
    population = designs(6, 1024).rows(100_000)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0
    taken = seconds(scored(population))
    return before, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0, taken


# memory is the process's peak: asked before the large populations with dead time are made
QUESTIONS = [speed, accuracy, staging, processes, memory, dead_time]
