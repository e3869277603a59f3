"""From plants and compensators to one scaled characteristic polynomial: exact scaling, nothing cancelled."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import POLYNOMIALS, Rational, close, exact_degree, product, trimmed


def first(plant, comp):
    return close(plant, comp, np.array([0]), np.array([0]))


@given(st.integers(0, 10**6), st.integers(-40, 40), st.integers(-60, 60))
@settings(max_examples=40, deadline=None)
def test_the_scaled_loop_is_the_loop(seed, time_power, gain_power):
    """L, C S and P S of the scaled polynomials, put back into SI, against P and C evaluated as they stand."""
    rng = np.random.default_rng(seed)
    unit = 2.0**time_power
    num, den, top, bottom = (
        rng.normal(size=size) * unit ** np.arange(size - 1.0, -1.0, -1.0) for size in (2, 4, 2, 3)
    )
    num = num * 2.0**gain_power
    loops = first(Rational.of([num], [den], 0.3 * unit), Rational.of([top], [bottom]))
    s = (0.3 + 1.1j) / unit
    p = s * loops.time_scale[0]
    plant, comp = np.polyval(num, s) / np.polyval(den, s), np.polyval(top, s) / np.polyval(bottom, s)
    top_, bottom_ = np.polyval(loops.numerator[0], p), np.polyval(loops.denominator[0], p)
    assert top_ / bottom_ == pytest.approx(plant * comp, rel=1e-12)
    control, load = (np.polyval(part[0], p) / bottom_ for part in (loops.control, loops.load))
    assert control / loops.plant_gain[0] == pytest.approx(comp, rel=1e-12)
    assert load * loops.plant_gain[0] == pytest.approx(plant, rel=1e-12)
    assert loops.dead_time[0] * loops.time_scale[0] == pytest.approx(0.3 * unit, rel=1e-15)
    np.testing.assert_array_equal(loops.closed, loops.numerator + loops.denominator)


def test_scales_are_powers_of_two_near_the_poles():
    loops = first(Rational.of([[1e6]], [[1.0, 3e3, 2e6]]), Rational.of([[1.0]], [[1.0]]))
    assert np.frexp(loops.time_scale[0])[0] == 0.5
    assert np.frexp(loops.plant_gain[0])[0] == 0.5
    size = np.abs(np.roots(loops.closed[0]))
    assert 0.4 < np.exp(np.log(size).mean()) < 2.5


def test_a_zero_on_a_pole_is_never_struck_out():
    loops = first(Rational.of([[1.0]], [[1.0, -1.0]]), Rational.of([[1.0, -1.0]], [[1.0, 5.0]]))
    roots = np.sort(np.roots(loops.closed[0]).real) / loops.time_scale[0]
    np.testing.assert_allclose(roots, [-6.0, 1.0], rtol=1e-12)


@pytest.mark.parametrize("zero", ["plant", "compensator"])
def test_a_transfer_function_of_nothing_leaves_the_open_loop(zero):
    plant = Rational.of([[0.0 if zero == "plant" else 1.0]], [[1.0, 2.0]])
    comp = Rational.of([[0.0 if zero == "compensator" else 1e-3]], [[1.0, 5e4]])
    loops = first(plant, comp)
    assert np.isfinite(loops.closed).all()
    assert (loops.numerator == 0.0).all()
    np.testing.assert_allclose(
        np.sort(np.roots(loops.closed[0])) / loops.time_scale, [-5e4, -2.0], rtol=1e-12
    )


def test_loops_of_several_orders_are_each_as_closed_alone():
    plants = Rational.of([[0.0, 0.0, 3.0], [0.0, 1e-3, 2.0]], [[0.0, 5.0, 1.0], [4e3, 7.0, 1.0]], [0.5, 2.0])
    comps = Rational.of([[0.0, 0.7], [9.0, 0.2]], [[0.0, 1.0], [30.0, 0.0]])
    plant_of, comp_of = np.array([0, 0, 1, 0]), np.array([1, 0, 0, 0])
    loops = close(plants, comps, plant_of, comp_of)
    assert loops.order == 2  # the third-order pair is not among them
    assert [rows.tolist() for rows, _ in loops.by_order()] == [[1, 3], [0, 2]]
    for rows, some in loops.by_order():
        for i, row in enumerate(rows):
            alone = close(plants, comps, plant_of[[row]], comp_of[[row]])
            assert alone.order == some.order
            for name in (*POLYNOMIALS, "dead_time", "time_scale", "plant_gain"):
                np.testing.assert_array_equal(getattr(some, name)[i], getattr(alone, name)[0])


def test_products_degrees_and_padding():
    rng = np.random.default_rng(0)
    a, b = rng.normal(size=(5, 4)), rng.normal(size=(5, 3))
    np.testing.assert_allclose(
        product(a, b), [np.polymul(x, y) for x, y in zip(a, b, strict=True)], rtol=1e-14
    )
    rows = np.array([[0.0, 0.0, 3.0], [0.0, 0.0, 0.0], [1.0, 0.0, 0.0]])
    assert exact_degree(rows).tolist() == [0, -1, 2]
    assert trimmed(rows, 4).shape == (3, 5)
    assert trimmed(rows[:1], 0).tolist() == [[3.0]]
