"""Small tasks that the search tests share."""

import numpy as np

from synth.loop.closed_loop import Rational
from synth.loop.quantities import Measure
from synth.requirements import numbered
from synth.search import Aim, Task
from synth.structures import REGISTRY, by_name


def bounds(*parts):
    """(quantity, side, limit) or (Measure, side, limit) each."""
    made = [(Measure(q) if isinstance(q, str) else q, side, limit, None) for q, side, limit in parts]
    return numbered(made)


def servo(structures=None, prefer=None, limits=None):
    """1/(s (s/20 + 1)), asked for a quick and well damped step."""
    limits = limits or (
        ("damping_ratio", "min", 0.6),
        ("overshoot", "max", 12.0),
        ("settling_time", "max", 0.6),
        ("sensitivity_peak", "max", 1.6),
        ("control_peak", "max", 60.0),
    )
    names = structures or tuple(REGISTRY)
    return Task(
        plants=Rational.of([1.0], [0.05, 1.0, 0.0]),
        case_names=("nominal",),
        bounds=bounds(*limits),
        structures=tuple(by_name(n) for n in names),
        prefer=Aim(Measure(prefer), "min") if prefer else None,
    )


def cases(count, structures=("PI",), spread=0.3, seed=0):
    """Two lags whose gain and slower time constant vary; `count` cases, the nominal first."""
    rng = np.random.default_rng(seed)
    gain = 2.0 * (1.0 + spread * np.append(0.0, rng.uniform(-1.0, 1.0, count - 1)))
    slow = 1.0 + spread * np.append(0.0, rng.uniform(-1.0, 1.0, count - 1))
    denominator = np.column_stack([0.1 * slow, slow + 0.1, np.ones(count)])
    return Task(
        plants=Rational.of(gain[:, None], denominator),
        case_names=("nominal", *(f"case {i}" for i in range(1, count))),
        bounds=bounds(
            ("sensitivity_peak", "max", 1.7),
            ("bandwidth", "min", 1.5),
            ("overshoot", "max", 15.0),
            ("static_error", "max", 0.0),
        ),
        structures=tuple(by_name(n) for n in structures),
    )
