"""The largest integral gain that a bound on Ms allows, for the whole table of published plants.

One requirement and a preference, as a sheet would say it; the optima come from another route.
"""

from __future__ import annotations

import time
import tomllib
from pathlib import Path

import numpy as np
from tables import Table

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.requirements import Bound
from synth.search import Aim, Task, propose
from synth.structures import by_name

ROWS = tomllib.loads(
    (Path(__file__).parent.parent / "tests" / "references" / "optimum_pi.toml").read_text(encoding="utf-8")
)["optimum"]


def _gain(row: dict[str, object], structure: str) -> float:
    """K/Ti of the first candidate, NaN where none meets the bound."""
    peak = float(row["sensitivity_peak"])  # type: ignore[arg-type]
    task = Task(
        plants=Rational.of(row["numerator"], row["denominator"], row["dead_time"]),
        case_names=("nominal",),
        bounds=(Bound("sensitivity_peak.max", Measure("sensitivity_peak"), "max", peak),),
        structures=(by_name(structure),),
        prefer=Aim(Measure("disturbance_integral"), "min"),
    )
    found = [c for c in propose(task).candidates if c.meets_all]
    return found[0].parameters["gain"] / found[0].parameters["integral_time"] if found else float("nan")


def largest_integral_gain() -> Table:
    """How near the search comes to the optimum, and whether a PID is ever worse than the best PI."""
    table = Table(
        f"Largest integral gain under a bound on Ms, {len(ROWS)} plants of tests/references/optimum_pi.toml",
        ["structure", "found", "worst short of it", "median", "worse than the best PI", "seconds a plant"],
    )
    optimum = np.array([float(row["integral_gain"]) for row in ROWS])
    for structure in ("PI", "PID"):
        begun = time.process_time()
        gain = np.array([_gain(row, structure) for row in ROWS])
        taken = (time.process_time() - begun) / len(ROWS)
        short = np.maximum(1.0 - gain / optimum, 0.0)
        worse = int(np.count_nonzero(~(gain >= optimum * (1.0 - 2.5e-4))))
        table.rows.append(
            [
                structure,
                f"{np.count_nonzero(np.isfinite(gain))} of {len(ROWS)}",
                float(np.nanmax(short)),
                float(np.nanmedian(short)),
                worse,
                taken,
            ]
        )
    return table


QUESTIONS = (largest_integral_gain,)
