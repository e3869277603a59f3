"""Loops of every kind that a definition must not stumble over, at slow and fast time scales."""

import numpy as np
import pytest

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.stage import pole_stage

# kind: plant numerator, denominator; compensator numerator, denominator; all stable in closed loop
SPECIAL = {
    "integrator": ([1.0], [1.0, 1.0, 0.0], [1.0, 2.0], [0.05, 1.0]),
    "two integrators": ([1.0], [1.0, 0.0, 0.0], [2.0, 1.0], [0.1, 1.0]),
    "integrator under integral action": ([1.0], [0.25, 1.0, 0.0], [2.0, 0.5], [1.0, 0.0]),
    "unstable plant": ([1.0], [0.2, 0.8, -1.0], [2.0, 4.0], [0.05, 1.0]),
    "unstable pair": ([1.0], [1.0, -0.4, 1.0], [3.0, 2.0, 0.5], [0.02, 1.0, 0.0]),
    "conditionally stable": ([4.0], [8e-5, 0.024, 1.0, 0.0, 0.0, 0.0], [1.0, 2.0, 1.0], [3e-5, 0.0125, 1.0]),
    "negative gains": ([-2.0], [0.3, 1.3, 1.0], [-0.8, -1.0], [0.8, 0.0]),
    "negative final value": ([-0.5], [0.25, 1.25, 1.0], [1.0], [1.0]),
    "no final value": ([1.0, 0.0], [1.0, 1.0, 1.0], [2.0], [0.125, 1.0]),
    "right half plane zero": ([-0.5, 1.0], [1.0, 2.5, 1.0], [1.0, 0.5], [1.0, 0.0]),
    "jump the wrong way": ([-0.5, 1.0], [1.0, 1.5], [0.5, 0.25], [1.0, 0.0]),
    "direct path": ([0.5, 1.0], [1.0, 1.0], [1.0, 2.0], [1.0, 5.0]),
    "direct path under integral action": ([0.5, 1.0], [1.0, 1.0], [0.75, 0.5], [1.0, 0.0]),
    "pure gain, integral action": ([3.0], [1.0], [2.0], [1.0, 0.0]),
    "pure gain, filtered": ([3.0], [1.0], [0.5, 2.0], [0.25, 1.0, 0.0]),
    "first order": ([2.0], [1.0, 0.5], [1.5], [1.0]),
    "zero on a slow pole": ([0.75], [1.0, 1.125, 0.125], [1.0, 0.125], [1.0, 0.0]),
    "zero on a light pair": ([1.0], [1.0, 1.015625, 1.015625, 1.0], [1.0, 0.015625, 1.0], [0.125, 1.0, 0.0]),
    "slow pole beside a zero": ([1.0, 0.001], [1.0, 1.0, 0.0], [2.0], [0.1, 1.0]),
}


@pytest.fixture(params=[-6, -2, 0, 5], ids=lambda e: f"1e{e} s")
def unit(request):
    return 10.0**request.param


@pytest.fixture(params=SPECIAL)
def special(request, unit):
    """(loops, poles) of one loop of the kind, its time counted in `unit` seconds."""
    parts = [np.array(p) * unit ** np.arange(len(p) - 1, -1, -1, dtype=float) for p in SPECIAL[request.param]]
    one = np.array([0])
    loops = close(Rational.of(*parts[:2]), Rational.of(*parts[2:]), one, one)
    stage = pole_stage(loops, ())
    assert stage.stable.all()
    return loops, stage.poles
