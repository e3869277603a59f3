"""Whatever the coefficients are, a batch runs through: no exception, no warning, no impossible value."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate

KINDS = {
    "any": lambda a, rng: a,
    "positive": lambda a, rng: np.abs(a),
    "sixteen decades": lambda a, rng: a * 10.0 ** rng.integers(-8, 9, size=a.shape),
    "integers": lambda a, rng: np.round(a),
    "with zeros": lambda a, rng: np.where(rng.random(a.shape) < 0.3, 0.0, np.abs(a)),
    "six decades": lambda a, rng: np.abs(a) * 10.0 ** rng.uniform(-3, 3, size=a.shape),
}
# (least, most) that a quantity of a stable loop can be
RANGES = {
    "damping_ratio": (0.0, 1.0),
    "decay_rate": (0.0, np.inf),
    "static_error": (0.0, np.inf),
    "velocity_error": (0.0, np.inf),
    "overshoot": (0.0, np.inf),
    "undershoot": (0.0, np.inf),
    "settling_time": (0.0, np.inf),
    "phase_margin": (0.0, np.inf),
    "gain_margin": (0.0, np.inf),
    "delay_margin": (0.0, np.inf),
    "sensitivity_peak": (0.0, np.inf),
    "control_peak": (0.0, np.inf),
    "disturbance_peak": (0.0, np.inf),
    "disturbance_area": (0.0, np.inf),
}
# never absent in a stable loop
ALWAYS = (
    "damping_ratio",
    "decay_rate",
    "final_value",
    "static_error",
    "velocity_error",
    "disturbance_integral",
    "disturbance_residue",
    "gain_margin",
    "sensitivity_peak",
    "complementary_peak",
    "noise_gain",
    "control_peak",
    "disturbance_peak",
    "disturbance_area",
)


def check(kind, seed, dead_time):
    rng = np.random.default_rng(seed)

    def rows(count, width):
        return KINDS[kind](rng.normal(size=(count, width)), rng)

    theta = rng.uniform(0.01, 2.0, size=4) if dead_time else 0.0
    plants = Rational.of(rows(4, rng.integers(1, 5)), rows(4, rng.integers(3, 6)), theta)
    comps = Rational.of(rows(4, 2), rows(4, rng.integers(2, 4)))
    found = evaluate(plants, comps)
    for name, (least, most) in RANGES.items():
        values = found[name][found.stable]
        values = values[~np.isnan(values)]
        assert ((values >= least) & (values <= most)).all(), name
    for name in ALWAYS:
        assert not np.isnan(found[name][found.stable]).any(), name


@pytest.mark.parametrize("kind", KINDS)
@given(st.integers(0, 10**6))
@settings(max_examples=15, deadline=None)
def test_without_dead_time(kind, seed):
    check(kind, seed, dead_time=False)


@pytest.mark.parametrize("kind", ["any", "positive", "integers", "with zeros"])  # stiff ones take minutes
@given(st.integers(0, 10**6))
@settings(max_examples=3, deadline=None)
def test_with_dead_time(kind, seed):
    check(kind, seed, dead_time=True)
