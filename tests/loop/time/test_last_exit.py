"""The settling time is the LAST exit: cases made to be missed, and a wide search for late exits."""

import mpmath as mp
import numpy as np
import pytest

from synth.loop.quantities import Measure
from synth.loop.time.stage import time_stage

SETTLING = Measure("settling_time")


def settling(loops, poles, band=0.02):
    measure = Measure("settling_time", band=band)
    return time_stage(loops, poles, (measure,)).values[measure] * loops.time_scale


@pytest.mark.parametrize("zeta", [0.1, 0.25, 0.45])
@pytest.mark.parametrize("count", [2, 3, 5])
@pytest.mark.parametrize("gap", [1e-3, 1e-5, 1e-7, 1e-8, -1e-8, -1e-7, -1e-5, -1e-3])
def test_grazing_extrema(unity_loop, zeta, count, gap):
    """The band is the height of an extremum times 1 + gap: left just after it, or half a period before."""
    loops, poles = unity_loop([-zeta + 1j * np.sqrt(1 - zeta**2), -zeta - 1j * np.sqrt(1 - zeta**2)])
    with mp.workdps(40):
        z = mp.mpf(zeta)
        root = mp.sqrt(1 - z * z)
        height = mp.exp(-count * mp.pi * z / root)
        band = mp.mpf(float(height * (1 + mp.mpf(gap))))

        def excess(t):
            wave = mp.cos(root * t) + z / root * mp.sin(root * t)
            return abs(mp.exp(-z * t) * wave) - band

        last = count if band < height else count - 1
        expected = mp.findroot(excess, (last * mp.pi / root, (last + 0.5) * mp.pi / root), solver="anderson")
    got = settling(loops, poles, float(band))
    np.testing.assert_allclose(got, float(expected), rtol=1e-8 if abs(gap) > 1e-7 else 3e-8)


@pytest.mark.parametrize("ratio", [1e-2, 1e-3, 1e-4])
@pytest.mark.parametrize("share", [0.03, 0.05, 0.3, -0.03, -0.05])
def test_slow_dipole(unity_loop, ratio, share):
    """A fast pair, and a slow pole beside a zero that leaves it a share just above the band."""
    # T = (s/z + 1) / ((s/p + 1) fast): the residue of T/s at -p is -(1 - p/z) / fast(-p)
    p = ratio
    fast = [-1.0 + 1.0j, -1.0 - 1.0j]
    damp = (p * p - 2 * p + 2) / 2
    z = p / (1 - share * damp)
    loops, poles = unity_loop([*fast, -p], [-z])
    got = settling(loops, poles)[0]
    np.testing.assert_allclose(got, np.log(abs(share) / 0.02) / p, rtol=1e-6)


@pytest.mark.parametrize("omega", [3.0, 30.0])
@pytest.mark.parametrize("zeta", [0.003, 0.01])
@pytest.mark.parametrize("size", [0.0205, 0.03])
def test_fast_response_with_a_small_ringing_tail(unity_loop, exact, omega, zeta, size):
    """Long after the response has arrived, a lightly damped mode still leaves the band."""
    pair = [omega * complex(-zeta, np.sqrt(1 - zeta**2)), omega * complex(-zeta, -np.sqrt(1 - zeta**2))]
    # a complex zero close to the pair scales its residue
    off = size * 2 * zeta * omega * 10
    loops, poles = unity_loop([-40.0, -60.0, *pair], [pair[0] - off, pair[1] - off])
    got = settling(loops, poles)[0] / loops.time_scale[0]
    check_last_exit(exact(loops, 0), got, 0.02)


def check_last_exit(reference, got, band):
    """On the band's edge at `got`, outside just before, inside at every time dense enough after it."""
    final = reference.limit["y"]
    times = reference.times(4)
    z = reference.dense("y", times) / float(final)
    outside = np.flatnonzero(np.abs(z - 1) > band * (1 + 1e-9))
    if got == 0.0:
        assert outside.size == 0
        return
    edge = abs(reference("y", got) / final - 1)
    assert abs(edge - band) < 1e-8  # crowded poles: what rounding of the coefficients leaves
    after = times > got * (1 + 1e-7)
    assert not (np.abs(z[after] - 1) > band * (1 + 1e-9)).any()
    assert abs(reference("y", got * (1 - 1e-5)) / final - 1) > band * (1 - 1e-3)


@pytest.mark.parametrize("order", [3, 4, 5, 6, 8, 10])
@pytest.mark.parametrize("light", [False, True])
def test_no_late_exit_among_many(random_loops, exact, order, light):
    """2,400 random loops, half on lightly damped plants: dense times after the exit stay in the band."""
    rng = np.random.default_rng(100 * order + light)
    loops, poles = random_loops(rng, 1600 if order > 5 else 400, order, light)
    loops, poles = loops.rows(np.arange(min(200, len(loops)))), poles[:200]
    assert len(loops) >= 20
    for band in (0.02, 0.05):
        measure = Measure("settling_time", band=band)
        got = time_stage(loops, poles, (measure,)).values[measure]
        final = loops.numerator[:, -1] / loops.closed[:, -1]
        # slopes of the polynomial, not the product over the poles that the code under test uses
        residue = evaluate_rows(loops.numerator, poles) / (
            poles * evaluate_rows(slope_of(loops.closed), poles)
        )
        residue /= final[:, None]
        life = np.log(np.maximum(np.abs(residue), 1e-3) * poles.shape[1] / 0.01) / -poles.real
        span = np.maximum(life.max(axis=1) - got, 1e-6)
        early = got[:, None] * (1 + 1e-6) + np.geomspace(1e-6, 1.0, 300) * span[:, None]
        period = np.arange(1, 900) * (2 * np.pi / 24) / np.abs(poles.imag).max(axis=1).clip(1e-3)[:, None]
        for times in (early, got[:, None] + period):
            z = np.einsum("mi,mti->mt", residue, np.exp(poles[:, None, :] * times[:, :, None])).real
            assert (np.abs(z) <= band * (1 + 1e-6)).all()
        edge = np.abs(np.einsum("mi,mi->m", residue, np.exp(poles * got[:, None])).real)
        for i in np.flatnonzero((got > 0) & (np.abs(edge - band) > 1e-7 * band)):
            # slopes at crowded poles lose digits: these few in 40
            check_last_exit(exact(loops, i), got[i], band)


def evaluate_rows(rows, at):
    value = np.zeros_like(at)
    for k in range(rows.shape[1]):
        value = value * at + rows[:, k, None]
    return value


def slope_of(rows):
    degree = rows.shape[1] - 1
    return rows[:, :-1] * np.arange(degree, 0, -1)


def test_lightly_damped_loops_are_read_from_their_end(unity_loop):
    """zeta = 1e-5: 62,000 periods. The envelope meets the band within half a period after the exit."""
    zeta = 1e-5
    root = np.sqrt(1 - zeta**2)
    loops, poles = unity_loop([-zeta + 1j * root, -zeta - 1j * root])
    got = settling(loops, poles)[0]
    end = np.log(50 / root) / zeta
    assert end - np.pi < got <= end
    z = np.exp(-zeta * got) * (np.cos(root * got) + zeta / root * np.sin(root * got))
    np.testing.assert_allclose(abs(z), 0.02, rtol=1e-8)
