"""Nobody is told `impossible` falsely: a sheet made of the figures of a loop that exists violates no limit.

Plants with right-half-plane zeros and poles, integrators, zeros at s = 0, resonances and dead time;
compensators of any kind that stabilises them, by pole placement and by chance: negative gains, unstable
compensators, and loops that reach only part of the reference among them.
"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.limits import assess
from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.model import Plant, PlantCases
from synth.requirements import Bound, slack_of
from synth.structures import REGISTRY

MEASURES = (
    *EVERY_QUANTITY,
    Measure("settling_time", band=0.05),
    Measure("settling_time", band=0.3),
    Measure("rise_time", span=(0.0, 1.0)),
    Measure("rise_time", span=(0.0, 0.5)),
)


def random_plant(rng, dead_time):
    """A strictly proper or biproper plant of order 1 to 3, awkward more often than not."""
    order = int(rng.integers(1, 4))
    poles = []
    while len(poles) < order:
        kind = rng.integers(0, 6)
        size = float(np.exp(rng.normal(0.0, 0.8)))
        if kind <= 1:
            poles.append(size)  # unstable
        elif kind == 2:
            poles.append(0.0)
        elif kind == 3 and len(poles) + 2 <= order:
            zeta = rng.choice([-0.3, 0.05, 0.5])
            poles += [size * complex(-zeta, s * np.sqrt(1 - zeta**2)) for s in (1, -1)]
        else:
            poles.append(-size)
    zeros = []
    for _ in range(int(rng.integers(0, order + 1))):
        size = float(np.exp(rng.normal(0.0, 0.8)))
        zeros.append([size, -size, 0.0, size][int(rng.integers(0, 4))])
    if 0.0 in poles:
        zeros = [z for z in zeros if z != 0.0]
    return Plant.from_roots(float(rng.choice([-2.0, 0.5, 3.0])), zeros, poles, dead_time)


def placed(plant, rng, count=24):
    """Compensators of order n that put the closed-loop poles (without dead time) at random places."""
    den = np.array(plant.denominator)
    n = plant.order
    num = np.concatenate([np.zeros(n + 1 - len(plant.numerator)), plant.numerator])
    out = []
    for _ in range(count):
        pace = float(np.exp(rng.uniform(-1.5, 2.5)))
        want = np.array([1.0])
        for _ in range(n):
            zeta = rng.uniform(0.3, 1.0)
            w = pace * float(np.exp(rng.normal(0, 0.5)))
            want = np.polymul(want, [1.0, 2 * zeta * w, w * w])
        # D X + N Y = want, X and Y of degree n; the freedom left is drawn: Y(0), or X(0) = 0
        system = np.zeros((2 * n + 1, 2 * n + 2))
        for i in range(n + 1):
            system[i : i + n + 1, i] = den
            system[i : i + n + 1, n + 1 + i] = num
        row = np.zeros(2 * n + 2)
        row[n if rng.random() < 0.4 else 2 * n + 1] = 1.0
        value = 0.0 if row[n] else rng.normal() * pace
        try:
            solution = np.linalg.solve(np.vstack([system, row]), np.append(want, value))
        except np.linalg.LinAlgError:
            continue
        out.append((solution[n + 1 :], solution[: n + 1]))
    return out


def compensators(plant, rng):
    rows = placed(plant, rng)
    for structure in REGISTRY.values():
        low, high = structure.box()
        x = rng.uniform(np.maximum(low, -3.5), np.minimum(high, 3.5), size=(24, len(low)))
        made = structure.realise(structure.from_search(x, rng.choice([-1.0, 1.0], 24), 1.0, 1.0))
        rows += list(zip(made.numerator, made.denominator, strict=True))
    width = max(max(len(n), len(d)) for n, d in rows)
    pad = [[np.concatenate([np.zeros(width - len(p)), p]) for p in row] for row in rows]
    usable = [row for row in pad if np.isfinite(row).all() and np.any(row[1]) and _proper(*row)]
    return Rational.of(np.array([r[0] for r in usable]), np.array([r[1] for r in usable]))


def _proper(num, den):
    return not np.any(num) or np.flatnonzero(num)[0] >= np.flatnonzero(den)[0]


def sheet_of(values, measures):
    """Bounds that these very values meet with nothing to spare, on both sides."""
    bounds = []
    for value, measure in zip(values, measures, strict=True):
        if not np.isfinite(value):
            continue
        for side in ("min", "max"):
            if value != 0.0 or measure.row.scale is not None:
                bound = Bound(f"{measure.quantity}.{side}.{len(bounds)}", measure, side, float(value))
                assert slack_of(bound, np.array([value]))[0] >= 0.0
                bounds.append(bound)
    return bounds


def check_against_real_loops(seed, dead_time):
    rng = np.random.default_rng(seed)
    plant = random_plant(rng, dead_time)
    cases = PlantCases.of_plant(plant)
    rows = compensators(plant, rng)
    stable = evaluate(plant.rational(), rows, measures=(Measure("decay_rate"),)).stable[:, 0]
    rows = rows.rows(np.flatnonzero(stable)[:12])
    if not len(rows):
        return 0
    step = float(np.random.default_rng(seed).choice([0.5, -2.0]))
    values = evaluate(plant.rational(), rows, measures=MEASURES, reference_step=step).values[:, 0, :]
    for row in values:
        bounds = sheet_of(row, MEASURES)
        broken = [limit for limit in assess(cases, bounds, step) if limit.violates]
        assert not broken, (
            plant,
            broken,
            dict(zip((b.id for b in bounds), (b.limit for b in bounds), strict=True)),
        )
        for _ in range(2):  # fewer requirements force less; other branches of the limits
            some = [b for b in bounds if rng.random() < 0.3]
            assert not [limit for limit in assess(cases, some, step) if limit.violates]
    return len(values)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1))
def test_no_loop_breaks_a_limit(seed):
    check_against_real_loops(seed, 0.0)


@settings(max_examples=12, deadline=None, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.floats(0.05, 0.6))
def test_no_loop_with_dead_time_breaks_a_limit(seed, dead_time):
    check_against_real_loops(seed, dead_time)


def test_the_attack_meets_real_opponents():
    """Enough stabilised loops, on enough awkward plants, for the tests above to mean something."""
    loops, kinds = 0, set()
    for seed in range(25):
        count = check_against_real_loops(seed, 0.0)
        plant = random_plant(np.random.default_rng(seed), 0.0)
        loops += count
        if count:
            kinds |= {
                ("pole", bool((plant.poles().real > 0).any())),
                ("zero", bool((plant.zeros().real > 0).any())),
            }
    assert loops > 150
    assert kinds == {("pole", True), ("pole", False), ("zero", True), ("zero", False)}


@pytest.mark.parametrize("gain", [1.1, 3.0, 50.0])
def test_a_slow_loop_on_an_unstable_plant_is_possible(gain):
    """P on 1/(s - 1): y∞ = K/(K - 1) is above 1, and there is no overshoot at all."""
    plant = Plant.from_coefficients([1], [1, -1])
    values = evaluate(plant.rational(), Rational.of([[gain]], [[1.0]]), measures=MEASURES).values[0, 0]
    assert values[[m.quantity for m in MEASURES].index("overshoot")] == 0.0
    assert not [x for x in assess(PlantCases.of_plant(plant), sheet_of(values, MEASURES)) if x.violates]
