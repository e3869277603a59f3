"""Poles that coincide or nearly do: no digit lost, and no step where one form hands over to the other."""

import mpmath as mp
import numpy as np
import pytest

from synth.loop.closed_loop import Loops
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.loop.time.clusters import cluster_modes
from synth.loop.time.residues import CROWDED, crowding, step_modes
from synth.loop.time.stage import time_stage

TIMES = np.concatenate([np.linspace(0.0, 15.0, 40), [25.0, 60.0]])

GROUPS = {
    "double": ([-1.0] * 2, ()),
    "triple": ([-1.0] * 3, (-3.0,)),
    "four": ([-1.0] * 4, (2.0,)),
    "eight": ([-1.0] * 8, ()),
    "double pair": ([-1 + 2j, -1 - 2j] * 2, ()),
    "triple pair": ([-0.5 + 1j, -0.5 - 1j] * 3, (-2.0,)),
    "two groups": ([-1.0, -1.0, -1.0, -40.0, -40.0, -41.0], ()),
    "mixed": ([-1.0, -1.0 + 1e-6j, -1.0 - 1e-6j, -5.0 + 5j, -5.0 - 5j, -5.0 + 5j, -5.0 - 5j], ()),
    "close": ([-1.0, -1.0001, -1.0002, -3.0], (-1.5,)),
    "ten in a bunch": (list(-np.linspace(0.8, 1.2, 10)), ()),
}


def exact_step(loops, poles, t):
    """Deviation y - 1 by inversion of T(s)/s with the poles moved apart by 1e-30, in 400 digits."""
    with mp.workdps(400):
        scale = mp.mpf(float(loops.time_scale[0]))
        roots = [mp.mpc(complex(p)) * (1 + mp.mpf(10) ** -30 * (k + 1)) for k, p in enumerate(poles)]
        top = [mp.mpf(float(c)) for c in loops.numerator[0]]
        lead = mp.mpf(float(loops.closed[0, 0]))
        total = [mp.mpf(0)] * len(t)
        for i, p in enumerate(roots):
            value = mp.mpf(0)
            for c in top:
                value = value * (p * scale) + c
            bottom = lead * p * scale
            for j, q in enumerate(roots):
                if j != i:
                    bottom *= (p - q) * scale
            for k, now in enumerate(t):
                total[k] += value / bottom * mp.exp(p * now)
        return np.array([float(mp.re(x)) for x in total])


@pytest.mark.parametrize("name", GROUPS)
def test_curves(unity_loop, name):
    poles, zeros = GROUPS[name]
    loops, found = unity_loop(poles, zeros)
    assert crowding(found)[0] > 100.0
    got = cluster_modes(loops, found, ("y",)).curves(TIMES[None] / loops.time_scale[0])[0, 0]
    # the coefficients of the denominator are rounded: what that does is measured by the exact roots
    np.testing.assert_allclose(got, exact_step(loops, poles, TIMES), atol=2e-12)


@pytest.mark.parametrize("gap", 10.0 ** -np.arange(1.0, 9.0))
def test_both_forms_agree_where_both_are_good(unity_loop, gap):
    loops, found = unity_loop([-1.0, -1.0 - gap, -2.0 + 1j, -2.0 - 1j])
    apart = step_modes(loops, found, ("y", "u", "d")).curves(TIMES[None])
    together = cluster_modes(loops, found, ("y", "u", "d")).curves(TIMES[None])
    np.testing.assert_allclose(apart, together, atol=1e-14 * crowding(found)[0] + 1e-13)


@pytest.mark.parametrize("count", [2, 3, 5, 8])
def test_repeated_real_pole(unity_loop, count):
    """T = 1/(s + 1)^k: 1 - z = e^(-t) sum_(j < k) t^j / j!."""
    loops, found = unity_loop([-1.0] * count)
    measures = tuple(m for m in EVERY_QUANTITY if m.row.stage == "time")
    got = {m.quantity: float(v[0]) for m, v in time_stage(loops, found, measures).values.items()}

    def left(t):
        return mp.exp(-t) * mp.fsum(t**j / mp.factorial(j) for j in range(count))

    def time_of(level):
        low, high = mp.mpf(0), mp.mpf(60)
        for _ in range(100):
            mid = (low + high) / 2
            low, high = (mid, high) if left(mid) > level else (low, mid)
        return float(low)

    assert got["overshoot"] == got["undershoot"] == 0.0
    scale = loops.time_scale[0]
    with mp.workdps(30):
        np.testing.assert_allclose(got["settling_time"] * scale, time_of(mp.mpf("0.02")), rtol=1e-9)
        rise = time_of(mp.mpf("0.1")) - time_of(mp.mpf("0.9"))
    np.testing.assert_allclose(got["rise_time"] * scale, rise, rtol=1e-9)
    np.testing.assert_allclose(got["tracking_area"] * scale, count, rtol=1e-6)


def test_double_pair_peaks(unity_loop):
    """T = 25/(s^2 + 2 s + 5)^2: y' = 25/16 e^(-t) (sin 2t - 2t cos 2t), so the peak is at tan 2t = 2t."""
    loops, found = unity_loop([-1 + 2j, -1 - 2j] * 2)
    measures = (Measure("overshoot"), Measure("peak_time"))
    got = time_stage(loops, found, measures).values
    x = float(mp.findroot(lambda v: mp.tan(v) - v, 4.49))
    np.testing.assert_allclose(got[measures[1]] * loops.time_scale, 2 * x / 4, rtol=1e-7)
    at = float(
        mp.quad(lambda t: 25 / 16 * mp.exp(-t) * (mp.sin(2 * t) - 2 * t * mp.cos(2 * t)), [0, 1, x / 2])
    )
    np.testing.assert_allclose(got[measures[0]], 100 * (at - 1), rtol=1e-8)


def test_crowded_and_plain_loops_share_a_batch(unity_loop):
    plain, plain_poles = unity_loop([-1.0, -3.0, -5.0 + 1j, -5.0 - 1j])
    crowded, crowded_poles = unity_loop([-1.0, -1.0, -1.0, -1.0])
    assert crowding(crowded_poles)[0] > CROWDED > crowding(plain_poles)[0]
    both = Loops(*(np.concatenate([getattr(plain, f), getattr(crowded, f)]) for f in Loops.__slots__))
    measures = tuple(m for m in EVERY_QUANTITY if m.row.stage == "time")
    got = time_stage(both, np.concatenate([plain_poles, crowded_poles]), measures)
    for i, (loops, poles) in enumerate(((plain, plain_poles), (crowded, crowded_poles))):
        alone = time_stage(loops, poles, measures)
        for m in measures:
            np.testing.assert_allclose(got.values[m][i], alone.values[m][0], rtol=1e-10)
