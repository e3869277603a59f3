"""Roots of a stack against 50-digit roots, closed forms and laws; Routh's verdict against the roots."""

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.poles.roots import _polished, closed_roots, routh_stable


def reference_roots(row):
    """Simple roots, in 60 digits, of the polynomial with these very doubles as coefficients."""
    with mpmath.workdps(60):
        coefficients = [mpmath.mpf(float(c)) for c in row]
        out = []
        for start in np.roots(row):
            root = mpmath.mpc(start)
            for _ in range(12):  # Newton doubles the digits each time
                value = slope = mpmath.mpf(0)
                for c in coefficients:
                    slope = slope * root + value
                    value = value * root + c
                root -= value / slope
            out.append(complex(root))
        return np.array(out)


def largest_error(found, exact):
    """Largest relative distance of the two root sets, each root to its nearest, none used twice."""
    left, worst = list(exact), 0.0
    for root in found:
        k = int(np.argmin([abs(root - e) for e in left]))
        worst = max(worst, abs(root - left[k]) / abs(left[k]))
        left.pop(k)
    return worst


def spread_polynomials(n, rows, spread, seed):
    """Polynomials from random roots: real or complex, magnitudes log-normal."""
    rng = np.random.default_rng(seed)
    out = []
    for _ in range(rows):
        roots = []
        while len(roots) < n:
            size = 10.0 ** rng.normal(scale=spread)
            if len(roots) <= n - 2 and rng.random() < 0.6:
                angle = rng.uniform(np.pi / 2, np.pi)
                roots += [size * np.exp(1j * angle), size * np.exp(-1j * angle)]
            else:
                roots.append(-size)
        out.append(np.real(np.poly(roots)) * rng.uniform(0.5, 2.0))
    return np.array(out)


@pytest.mark.parametrize(
    ("n", "spread", "bound"),
    [(3, 0.3, 1e-13), (6, 0.3, 2e-12), (6, 1.5, 5e-13), (8, 0.5, 2e-12), (10, 0.5, 2e-11), (10, 2.0, 1e-12)],
)
def test_roots_agree_with_fifty_digits(n, spread, bound):
    rows = spread_polynomials(n, 12, spread, seed=n)
    found = closed_roots(rows)
    for row, roots in zip(rows, found, strict=True):
        assert largest_error(roots, reference_roots(row)) < bound


def test_real_roots_over_eight_decades():
    exact = -(10.0 ** np.arange(-3, 6.0))
    (found,) = closed_roots(np.poly(exact)[None, :])
    np.testing.assert_array_equal(found.imag, 0.0)
    np.testing.assert_allclose(found.real, exact, rtol=2e-14)


def test_a_light_pair_beside_roots_thirty_decades_apart():
    """Every root to its last digits, and the damping of the pair with it."""
    row = np.array([2.73916896e-14, 7.04932740e01, 4.91122905, 3.72742722e02, 2.59585454e01, 6.08258153e-14])
    (found,) = closed_roots(row[None, :])
    exact = reference_roots(row)
    assert largest_error(found, exact) < 1e-14
    pair = found[found.imag > 0.0][0]
    nearest = exact[np.argmin(np.abs(exact - pair))]
    assert pair.real == pytest.approx(nearest.real, rel=1e-9)


def test_the_polish_moves_roots_to_their_last_digits():
    """From roots with an error of 1e-4 to rounding: the step itself, not LAPACK, is what is tested here."""
    exact = np.array([-1.0, -2.5, -0.3 + 4.0j, -0.3 - 4.0j, -60.0])
    row = np.real(np.poly(exact))[None, :]
    off = exact * np.array([1.0 + 1e-4, 1.0 - 1e-4, 1.0 + 1e-4j, 1.0 - 1e-4j, 1.0 + 1e-4])
    better = _polished(row, off[None, :])
    np.testing.assert_allclose(better[0], exact, rtol=1e-14)


@pytest.mark.parametrize(("multiplicity", "bound"), [(2, 1e-7), (3, 5e-5), (4, 1e-3)])
def test_repeated_roots_come_as_near_as_rounding_lets_them(multiplicity, bound):
    (found,) = closed_roots(np.poly([-3.0] * multiplicity + [-1.0])[None, :])
    assert largest_error(found, np.array([-1.0] + [-3.0] * multiplicity)) < bound


@pytest.mark.parametrize("others", [[], [-1.0, -10.0, -0.2], [-2.0 + 1.0j, -2.0 - 1.0j]])
@pytest.mark.parametrize("copies", [2, 3, 4, 5, 6, 8])
def test_a_repeated_root_stays_a_root_of_nearly_the_same_polynomial(copies, others):
    """The copies lie about eps^(1/copies) off, but in a ring: the product over all roots is the row again."""
    row = np.real(np.poly([-3.0] * copies + others))
    (found,) = closed_roots(row[None, :])
    again = np.real(np.poly(found))
    assert np.abs(again - row).max() / np.abs(row).max() < 5e-14


def test_pairs_stand_together_upper_first_exactly_conjugate_by_decreasing_real_part():
    rows = spread_polynomials(9, 300, 0.5, seed=4)
    for roots in closed_roots(rows):
        assert (np.diff(roots.real) <= 0.0).all()
        k = 0
        while k < len(roots):
            if roots[k].imag == 0.0:
                k += 1
                continue
            assert roots[k].imag > 0.0
            assert roots[k + 1] == roots[k].conjugate()
            k += 2


def test_pairs_of_one_real_part_keep_together():
    row = np.polymul([1.0, 2.0, 5.0], [1.0, 2.0, 10.0])  # -1 ± 2j, -1 ± 3j
    (roots,) = closed_roots(row[None, :])
    assert roots[0] == roots[1].conjugate()
    assert roots[2] == roots[3].conjugate()


def test_each_row_alone_gives_the_same():
    rows = spread_polynomials(7, 20, 0.5, seed=5)
    together = closed_roots(rows)
    alone = np.concatenate([closed_roots(row[None, :]) for row in rows])
    np.testing.assert_allclose(together, alone, rtol=1e-13)


@given(st.integers(-100, 100), st.integers(0, 10**6))
@settings(max_examples=30, deadline=None)
def test_roots_scale_with_time(power, seed):
    rows = spread_polynomials(6, 2, 0.5, seed)
    stretched = rows * 2.0 ** (power * np.arange(7))  # every root times 2^power, exactly
    np.testing.assert_allclose(closed_roots(stretched), closed_roots(rows) * 2.0**power, rtol=1e-6)


def test_a_root_at_zero_is_exactly_zero():
    (roots,) = closed_roots(np.array([[1.0, 3.0, 2.0, 0.0, 0.0]]))
    assert (roots[:2] == 0.0).all()


def test_rows_that_are_degenerate_do_not_disturb_the_others():
    bad = [[0.0, 1.0, 2.0], [np.nan, 1.0, 1.0], [0.0, 0.0, 0.0], [np.inf, 1.0, 1.0]]
    rows = np.array([[1.0, 3.0, 2.0], *bad])
    found = closed_roots(rows)
    np.testing.assert_allclose(found[0], [-1.0, -2.0])
    assert found[1, 0] == -2.0
    assert np.isnan(found[1, 1])
    assert np.isnan(found[2:]).all()
    assert list(routh_stable(rows)) == [True, False, False, False, False]


@pytest.mark.parametrize("n", [1, 2, 3, 4, 5, 6, 8, 10])
def test_routh_agrees_with_the_roots(n):
    rng = np.random.default_rng(n)
    rows = spread_polynomials(n, 400, 0.5, seed=n)
    rows *= np.exp(rng.normal(scale=1.5 / n, size=rows.shape))  # a good part of them becomes unstable
    verdict = routh_stable(rows)
    np.testing.assert_array_equal(verdict, closed_roots(rows).real.max(axis=1) < 0.0)
    np.testing.assert_array_equal(verdict, routh_stable(-rows))
    if n > 2:
        assert 0.05 < verdict.mean() < 0.999


@pytest.mark.parametrize("ratio", [1e-3, 1e-6, 1e-10, -1e-10, -1e-6])
def test_routh_sees_light_damping_of_either_sign(ratio):
    row = np.polymul([1.0, 2.0 * ratio, 1.0], [1.0, 3.0, 5.0, 2.0])
    assert routh_stable(row[None, :])[0] == (ratio > 0.0)


@pytest.mark.parametrize(
    ("row", "stable"),
    [
        ([2.0], True),
        ([-2.0], True),
        ([0.0], False),
        ([1.0, 0.0], False),
        ([1.0, 0.0, 1.0], False),
        ([1.0, 1.0, 1.0, 1.0], False),  # ±j and -1
        ([1.0, 1.0, 2.0, 2.0, 3.0], False),  # a zero in the first column, two roots in the right half plane
        ([1.0, 2.0, 3.0, 4.0, 5.0], False),
        ([1.0, 4.0, 6.0, 4.0, 1.0], True),
    ],
)
def test_routh_at_its_edges(row, stable):
    assert routh_stable(np.array([row]))[0] == stable


@given(st.floats(0.05, 20.0), st.floats(0.05, 20.0), st.floats(0.05, 20.0), st.floats(-0.2, 0.2))
@settings(max_examples=60, deadline=None)
def test_routh_third_order_is_the_product_rule(a, b, c, off):
    """s³ + a s² + b s + c is stable exactly when a b > c (all positive)."""
    c = a * b * (1.0 + off) if abs(off) > 1e-3 else c
    assert routh_stable(np.array([[1.0, a, b, c]]))[0] == (a * b > c)
