"""True roots with dead time: Lambert's function, residuals in high precision, completeness, the order of a
row."""

import mpmath
import numpy as np
import pytest
from scipy.special import lambertw

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.encirclement import chain_abscissa, delayed_stable, roots_right_of
from synth.loop.poles.newton import characteristic
from synth.loop.poles.winding import missing_roots


def closed(num, den, delay):
    plant = Rational.of(num, den, delay)
    rows = np.arange(len(plant))
    return close(plant, Rational.of([[1.0]], [[1.0]]), rows, np.zeros(len(plant), dtype=int))


def horner(coefficients, s):
    total = mpmath.mpf(0)
    for c in coefficients:
        total = total * s + c
    return total


def random_loops(rng, m, order, degree):
    """Plants with dead time of mixed kind: integrators, lightly damped, unstable; delays over five
    decades."""
    den = np.ones((m, 1))
    from synth.loop.closed_loop import product

    for _ in range(order // 2):
        w, z = 10 ** rng.uniform(-1, 1, m), rng.choice([0.02, 0.3, 0.9, 1.0, -0.2], m)
        den = product(den, np.c_[np.ones(m), 2 * z * w, w * w])
    if order % 2:
        den = product(den, np.c_[np.ones(m), rng.choice([0.0, 0.5, 2.0], m)])
    num = rng.normal(size=(m, degree + 1)) * 10 ** rng.uniform(-1.5, 0.5, (m, 1))
    return closed(num, den, 10 ** rng.uniform(-3, 2, m))


@pytest.mark.parametrize("pole", [0.0, 1.0, -0.5])
@pytest.mark.parametrize("gain", [0.2, 1.3, -0.4])
def test_first_order_roots_are_lamberts(pole, gain):
    # s + a + k e^(-θs) = 0  =>  s = W_j(-k θ e^(aθ))/θ - a, every branch j
    delay = 0.8
    loops = closed([[gain]], [[1.0, pole]], delay)
    found = delayed_poles(loops, np.full(1, 60.0) * loops.time_scale)[0] / loops.time_scale[0]
    found = found[np.isfinite(found)]
    exact = (
        np.array([lambertw(-gain * delay * np.exp(pole * delay), j) for j in range(-9, 10)]) / delay - pole
    )
    inside = exact[np.abs(exact) <= 60.0]
    assert len(found) == len(inside) >= 14
    np.testing.assert_allclose(
        sorted(found, key=lambda s: (s.imag, s.real)),
        sorted(inside, key=lambda s: (s.imag, s.real)),
        rtol=1e-11,
        atol=1e-12,
    )


def test_a_double_root_is_found_twice():
    # s + e^(-1)/θ e^(-θs) has the double root -1/θ
    loops = closed([[np.exp(-1.0) / 2.0]], [[1.0, 0.0]], 2.0)
    found = delayed_poles(loops, np.zeros(1))[0] / loops.time_scale[0]
    np.testing.assert_allclose(found[:2].real, -0.5, atol=1e-6)
    np.testing.assert_allclose(found[:2].imag, 0.0, atol=1e-6)


@pytest.mark.parametrize(("order", "degree"), [(1, 0), (2, 1), (3, 3), (4, 1), (6, 5), (8, 4)])
def test_every_root_solves_the_equation_in_high_precision(order, degree):
    loops = random_loops(np.random.default_rng(order), 12, order, degree)
    found = delayed_poles(loops, 10.0 / loops.dead_time)
    with mpmath.workdps(40):
        for row, roots in enumerate(found):
            d, n = loops.denominator[row].tolist(), loops.numerator[row].tolist()
            theta = mpmath.mpf(float(loops.dead_time[row]))

            def delta(s, d=d, n=n, theta=theta):
                return horner(d, s) + horner(n, s) * mpmath.exp(-s * theta)

            for root in roots[np.isfinite(roots)][:6]:
                s = mpmath.mpc(root)
                step = delta(s) / mpmath.diff(delta, s)
                assert abs(step) < 1e-9 * abs(s) + 1e-13


@pytest.mark.parametrize(("order", "degree"), [(1, 1), (2, 0), (3, 1), (5, 4), (6, 6), (7, 2)])
def test_none_is_missing_and_the_rightmost_is_there(order, degree):
    rng = np.random.default_rng(100 + order)
    loops = random_loops(rng, 60, order, degree)
    found = delayed_poles(loops, np.zeros(len(loops)))
    best = np.nanmax(found.real, axis=1)
    chain = chain_abscissa(loops)
    line = np.fmax(best, chain) + 1e-5 / loops.dead_time
    count, _ = roots_right_of(loops, line)
    assert not (count > 0).any()
    # just left of the rightmost one the count finds it: no invented root either
    clear = best - 1e-5 / loops.dead_time > chain
    count, _ = roots_right_of(loops, best - 1e-5 / loops.dead_time)
    assert (count[clear] >= 1).all()
    assert np.array_equal(delayed_stable(loops), np.fmax(best, chain) < 0.0)
    wider = delayed_poles(loops, 28.0 / loops.dead_time)
    short = missing_roots(loops, wider, 20.0 / loops.dead_time)
    assert not np.isfinite(short.real).any()


def test_roots_that_are_left_out_are_located():
    loops = closed([[1.0]], [[1.0, 1.5, 0.7, 0.0]], 0.6)
    radius = 15.0 / loops.dead_time
    found = delayed_poles(loops, 1.4 * radius)
    kept = found.copy()
    kept[0, :4] = np.nan  # two pairs
    seeds = missing_roots(loops, kept, radius)[0]
    seeds = seeds[np.isfinite(seeds)]
    lost = found[0, :4]
    assert len(seeds) == 4
    for root in lost:
        assert np.abs(seeds - root).min() < 1e-2 * np.abs(root)


def test_rows_are_ordered_conjugate_and_alone_or_together_the_same():
    loops = random_loops(np.random.default_rng(3), 30, 4, 2)
    found = delayed_poles(loops, np.zeros(len(loops)))
    for row in range(len(loops)):
        roots = found[row][np.isfinite(found[row])]
        assert (np.diff(roots.real) <= 0.0).all()
        upper = np.flatnonzero(roots.imag > 0.0)
        assert np.array_equal(roots[upper + 1], roots[upper].conj())
        alone = delayed_poles(loops.rows(np.array([row])), np.zeros(1))[0]
        np.testing.assert_allclose(alone[np.isfinite(alone)], roots, rtol=1e-10, atol=1e-12)
        value, slope = characteristic(loops.rows(np.array([row])), roots[None])
        assert (np.abs(value / slope) < 1e-9 * np.abs(roots) + 1e-12).all()


def test_far_roots_tend_to_the_chain():
    # PI on a pure delay: L(∞) = k, the chain at ln(k)/θ
    loops = closed([[0.3, 0.4]], [[1.0, 0.0]], 1.0)
    found = delayed_poles(loops, 200.0 / loops.dead_time)[0]
    far = found[np.abs(found) > 100.0 / loops.dead_time]
    assert len(far) > 20
    np.testing.assert_allclose(far.real, chain_abscissa(loops)[0], rtol=2e-3)
