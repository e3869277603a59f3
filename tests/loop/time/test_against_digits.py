"""Every time quantity of random loops of order 1 to 12 against 40-digit responses."""

import numpy as np
import pytest

from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.loop.time.stage import time_stage

TIME = (
    *(m for m in EVERY_QUANTITY if m.row.stage == "time"),
    Measure("late_deviation", after=3.0),
    Measure("settling_time", band=0.05),
    Measure("rise_time", span=(0.0, 0.5)),
)
RELATIVE = ("overshoot", "undershoot", "peak_time", "rise_time", "settling_time", "late_deviation")


def agree(got, expected, scale, tolerance=1e-6):
    assert abs(got - expected) <= tolerance * max(abs(expected), scale), (got, expected)


def refined(reference, name, times, index, order):
    """Zero of derivative `order` between the neighbours of times[index], by bisection in 40 digits."""
    low, high = times[max(index - 1, 0)], times[min(index + 1, len(times) - 1)]
    sign = float(reference(name, low, order)) > 0
    for _ in range(60):
        mid = 0.5 * (low + high)
        if (float(reference(name, mid, order)) > 0) == sign:
            low = mid
        else:
            high = mid
    return 0.5 * (low + high)


@pytest.mark.parametrize("order", range(1, 13))
def test_all_quantities(random_loops, exact, order):
    rng = np.random.default_rng(order)
    loops, poles = random_loops(
        rng, 40 if order < 7 else 400, order, light=bool(order % 2), least_damping=0.01
    )
    loops, poles = loops.rows(np.arange(min(4, len(loops)))), poles[:4]
    assert len(loops) >= 2
    got = time_stage(loops, poles, TIME)
    for i in range(len(loops)):
        check(exact(loops, i), loops, i, {m: v[i] for m, v in got.values.items()})


def test_loops_of_every_kind(special, exact):
    """Integrators, unstable plants, negative gains, direct paths, hidden modes, no final value ..."""
    loops, poles = special
    late = Measure("late_deviation", after=3.0 * float(loops.time_scale[0]))
    measures = (*(m for m in TIME if m.quantity != "late_deviation"), late)
    got = time_stage(loops, poles, measures)
    assert not any(doubt.any() for doubt in got.approximate.values())
    check(exact(loops, 0), loops, 0, {m: v[0] for m, v in got.values.items()})


def check(reference, loops, i, got):
    value = {m.quantity: v for m, v in got.items()}
    times = reference.times()
    curves = {name: reference.dense(name, times) for name in "yud"}
    if reference.limit["y"] == 0:
        assert all(np.isnan(value[name]) for name in RELATIVE)
    else:
        check_shape(reference, loops, i, got, times, curves["y"] / float(reference.limit["y"]))
    for name, key, sizes in (("u", "control_peak", curves["u"]), ("d", "disturbance_peak", curves["d"])):
        k = int(np.abs(sizes).argmax())
        at = refined(reference, name, times, k, 1) if 0 < k < len(times) - 1 else times[k]
        top = max(abs(float(reference(name, at))), abs(float(reference(name, times[k]))))
        top = max(top, abs(float(reference.limit[name])))
        agree(value[key], top, 0.0)
    for key, name in (("tracking_area", "y"), ("disturbance_area", "d")):
        if np.isfinite(value[key]):
            agree(value[key], area(reference, name, times), 0.0, 1e-5)
    assert np.isfinite(value["tracking_area"]) == (loops.denominator[i, -1] == 0.0)
    assert np.isfinite(value["disturbance_area"]) == (reference.limit["d"] == 0)


def check_shape(reference, loops, i, got, times, z):
    """What is counted in parts of the final value; z: the response at the times, in those parts."""
    final = float(reference.limit["y"])
    value = {m.quantity: v for m, v in got.items()}

    peak = int(z.argmax())
    if got[Measure("overshoot")] > 1e-7:
        at = refined(reference, "y", times, peak, 1) if peak else 0.0
        agree(value["overshoot"], 100 * (float(reference("y", at)) / final - 1), 1.0)
        if got[Measure("overshoot")] > 1e-3:
            agree(value["peak_time"], at, 0.0)
    else:
        assert z[peak] < 1 + 1e-8
    dip = int(z.argmin())
    at = refined(reference, "y", times, dip, 1) if dip else 0.0
    agree(value["undershoot"], max(0.0, -100 * float(reference("y", at)) / final), 1.0)

    for measure, v in got.items():
        if measure.quantity == "settling_time":
            outside = np.flatnonzero(np.abs(z - 1) > measure.band)
            edge = abs(float(reference("y", v)) / final - 1)
            assert abs(edge - measure.band) < 1e-7
            assert outside.size == 0 or times[outside[-1]] <= v * (1 + 1e-9)
        elif measure.quantity == "rise_time":
            reached = [0.0 if level == 0 else arrival(reference, times, z, level) for level in measure.span]
            agree(v, reached[1] - reached[0], 0.0)
        elif measure.quantity == "late_deviation":
            after = measure.after / loops.time_scale[i]
            late = np.abs(z[times >= after] - 1)
            k = int(late.argmax()) + int(np.count_nonzero(times < after)) if late.size else 0
            best = abs(float(reference("y", after)) / final - 1)
            if late.size:
                for t in (times[k], refined(reference, "y", times, k, 1)):
                    if t >= after:
                        best = max(best, abs(float(reference("y", t)) / final - 1))
            agree(v, 100 * best, 1.0)


def arrival(reference, times, z, level):
    final = float(reference.limit["y"])
    k = int((z >= level).argmax())
    if k == 0:
        return 0.0
    low, high = times[k - 1], times[k]
    for _ in range(60):
        mid = 0.5 * (low + high)
        low, high = (low, mid) if float(reference("y", mid)) / final >= level else (mid, high)
    return high


def area(reference, name, times):
    """Sum of the exact primitive's differences over dense zeros."""
    x = reference.dense(name, times) - float(reference.limit[name])
    k = np.flatnonzero(np.signbit(x[:-1]) != np.signbit(x[1:]))
    zeros = times[k] - x[k] * (times[k + 1] - times[k]) / (x[k + 1] - x[k])
    primitive = [float(reference(name, t, -1)) for t in (0.0, *zeros)]
    return np.abs(np.diff([*primitive, 0.0])).sum()
