"""Read a sheet and say what no compensator can do on its plant; nothing is searched or written."""

from __future__ import annotations

from pathlib import Path

import numpy as np

import synth
from synth.jobs.clock import now
from synth.limits import assess
from synth.record import CHECK_FORMAT, Check
from synth.record.sheet import limit_part, plant_part, requirement_part, spec_part
from synth.spec import Spec, read_spec
from synth.wording.caveats import HARDWARE


def check(spec_path: str | Path) -> Check:
    """The plant, its cases, and its limits, as a document of its own ("synth-check/1")."""
    spec = read_spec(spec_path)
    limits = assess(spec.cases, spec.bounds, spec.reference_step)
    return {
        "format": CHECK_FORMAT,
        "tool": {"version": synth.__version__},
        "created": now(),
        "spec": spec_part(spec),
        "plant": plant_part(spec, None),
        "requirements": [requirement_part(b) for b in spec.bounds],
        "limits": [limit_part(limit) for limit in limits],
        "cautions": [*_cautions(spec), HARDWARE],
    }


def _cautions(spec: Spec) -> list[str]:
    """What the plant alone calls for."""
    unstable = sum(bool((np.array(c.plant.poles()).real > 0.0).any()) for c in spec.cases.cases)
    if not unstable:
        return []
    where = "" if unstable == len(spec.cases) else f" on {unstable} of its {len(spec.cases)} cases"
    return [f"The plant is unstable without its loop{where}: the loop must never be broken while it runs."]
