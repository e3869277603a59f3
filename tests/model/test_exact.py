"""Coefficients from roots and matrices, against high precision."""

import mpmath as mp
import numpy as np
import pytest

from synth.model.exact import polynomial_of_roots, transfer_function


def expanded(roots):
    """Π(s - root) with 60 digits."""
    with mp.workdps(60):
        out = [mp.mpc(1)]
        for r in roots:
            r = mp.mpc(r)
            out = [a - r * b for a, b in zip([*out, mp.mpc(0)], [mp.mpc(0), *out], strict=True)]
        return np.array([float(c.real) for c in out])


def test_roots_expand_to_the_last_bit():
    rng = np.random.default_rng(0)
    for _ in range(20):
        real = list(rng.normal(size=6) * 10.0 ** rng.uniform(-3, 3, 6))
        upper = rng.normal(size=4) + 1j * np.abs(rng.normal(size=4))
        roots = [*map(complex, real), *upper, *upper.conj()]
        np.testing.assert_array_equal(polynomial_of_roots(roots), expanded(roots))


def test_roots_that_cancel_in_the_sum_leave_an_exact_zero():
    np.testing.assert_array_equal(polynomial_of_roots([0.1 + 0j, -0.1 + 0j]), [1.0, 0.0, -0.1 * 0.1])
    np.testing.assert_array_equal(polynomial_of_roots([]), [1.0])


def horner(coefficients, s):
    out = mp.mpc(0)
    for c in coefficients:
        out = out * mp.mpc(s) + mp.mpf(float(c))
    return out


def precise(a, b, c, d, s):
    """C (sI - A)^-1 B + D with 60 digits."""
    with mp.workdps(60):
        n = len(a)
        m = mp.matrix(n, n)
        for i in range(n):
            for j in range(n):
                m[i, j] = (s if i == j else 0) - mp.mpf(float(a[i, j]))
        x = mp.lu_solve(m, mp.matrix([mp.mpf(float(v)) for v in b]))
        return complex(sum(mp.mpf(float(c[i])) * x[i] for i in range(n)) + mp.mpf(float(d)))


@pytest.mark.parametrize(("order", "spread"), [(1, 0.0), (4, 3.0), (12, 0.0), (12, 2.0), (20, 0.0)])
def test_state_space_agrees_with_high_precision(order, spread):
    rng = np.random.default_rng(order)
    scale = 10.0 ** rng.uniform(-spread, spread, order)
    a = rng.normal(size=(order, order)) * scale[:, None] / scale
    b, c, d = rng.normal(size=order) * scale, rng.normal(size=order) / scale, float(rng.normal())
    num, den = transfer_function(a, b, c, d)
    assert den[0] == 1.0
    for s in (0.3 + 0.0j, 2j, 1.0 + 5j):
        with mp.workdps(40):
            value = horner(num, s) / horner(den, s)
        np.testing.assert_allclose(complex(value), precise(a, b, c, d, s), rtol=1e-9)
    np.testing.assert_allclose(num[0], d)


def test_a_chain_has_no_zeros():
    """Masses and springs: the excess of poles is the order, whatever the round-off of the entries."""
    n = 8
    k = np.diag(np.full(n, 0.7)) - np.diag(np.full(n - 1, 0.3), 1) - np.diag(np.full(n - 1, 0.3), -1)
    a = np.block([[np.zeros((n, n)), np.eye(n)], [-k, -0.1 * k]])
    b, c = np.zeros(2 * n), np.zeros(2 * n)
    b[n], c[n - 1] = 1.0, 1.0
    num, den = transfer_function(a, b, c, 0.0)
    # each of the n - 1 springs with its damper gives one zero, at -0.7·... : (0.3 + 0.03 s)^(n-1)
    assert np.flatnonzero(num)[0] == 2 * n - (n - 1)
    zeros = np.roots(num[np.flatnonzero(num)[0] :])
    np.testing.assert_allclose(zeros.real.mean(), -10.0, rtol=1e-10)
    assert len(den) == 2 * n + 1


def test_rounding_of_entries_leaves_no_far_zero_and_keeps_the_integrator():
    """0.1 · 0.3 is not 0.03 in binary: without care a zero at 1e17 and a pole at 1e-18 would appear."""
    a = np.array([[0.1, 0.3], [0.1 * 0.1, 0.03]])  # rows proportional but for rounding
    b, c = np.array([0.3, -0.1]), np.array([0.1, 0.3])
    num, den = transfer_function(a, b, c, 0.0)
    assert den[-1] == 0.0
    assert num[0] == 0.0
    assert num[1] == 0.0


def test_a_small_pole_is_no_integrator():
    _, den = transfer_function(np.diag([-1e-17, -1.0]), np.ones(2), np.ones(2), 0.0)
    np.testing.assert_allclose(den, [1.0, 1.0, 1e-17], rtol=1e-12)


def test_hidden_modes_stay():
    """An uncontrollable and an unobservable mode are in both polynomials."""
    num, den = transfer_function(
        np.diag([-1.0, 2.0, -3.0]), np.array([1.0, 0.0, 1.0]), np.array([1.0, 1.0, 0.0]), 0.0
    )
    np.testing.assert_allclose(np.sort(np.roots(den)), [-3.0, -1.0, 2.0], rtol=1e-12)
    np.testing.assert_allclose(np.sort(np.roots(num[1:])), [-3.0, 2.0], rtol=1e-12)


def test_a_state_space_of_order_0_is_a_gain():
    num, den = transfer_function(np.zeros((0, 0)), np.zeros(0), np.zeros(0), 2.5)
    np.testing.assert_array_equal(num / den, [2.5])


def test_washout_keeps_its_zero_at_the_origin():
    """s/(s + 0.3) as D - C B/(s + 0.3): the zero at 0 is exact."""
    num, _ = transfer_function(np.array([[-0.3]]), np.array([0.1]), np.array([-3.0]), 0.1 * 3.0 / 0.3)
    assert num[-1] == 0.0
