"""Laws: rows do not see each other, time has no unit, fewer questions give the same answers."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from synth.loop.closed_loop import Rational
from synth.loop.evaluate import evaluate
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.loop.time import areas, crossings, peaks
from synth.loop.time.answers import LONG
from synth.loop.time.stage import time_stage

TIME = (
    *(m for m in EVERY_QUANTITY if m.row.stage == "time"),
    Measure("late_deviation", after=2.0),
    Measure("settling_time", band=0.05),
)


@pytest.mark.parametrize("order", [2, 4, 6, 9])
def test_each_row_is_the_row_alone(random_loops, order):
    loops, poles = random_loops(
        np.random.default_rng(order), 120, order, light=order == 4, least_damping=1e-3
    )
    together = time_stage(loops, poles, TIME)
    assert len(loops) >= 5
    for i in range(0, len(loops), 7):
        alone = time_stage(loops.rows(np.array([i])), poles[[i]], TIME)
        for m in TIME:
            tolerance = 1e-6 if m.row.dimension == "plant" or "area" in m.quantity else 1e-8
            np.testing.assert_allclose(together.values[m][i], alone.values[m][0], rtol=tolerance, atol=1e-9)


def test_fewer_questions_give_the_same_answers(random_loops):
    loops, poles = random_loops(np.random.default_rng(5), 100, 5)
    together = time_stage(loops, poles, TIME).values
    for m in TIME:
        alone = time_stage(loops, poles, (m,)).values[m]
        np.testing.assert_allclose(together[m], alone, rtol=1e-6, atol=1e-9)


@settings(max_examples=40, deadline=None)
@given(
    stretch=st.floats(1e-6, 1e6),
    gain=st.floats(0.2, 3.0),
    zeta=st.floats(0.05, 1.5),
    lag=st.floats(0.02, 5.0),
)
def test_time_has_no_unit(stretch, gain, zeta, lag):
    """P(s k), C(s k): times and areas are k times as long, everything else is the same."""

    def measured(k):
        plant = Rational.of([1.0], np.polymul([k * k, 2 * zeta * k, 1.0], [lag * k, 1.0]))
        pi = Rational.of([gain * k, gain * 0.3], [k, 0.0])
        measures = (*TIME[:-2], Measure("late_deviation", after=2.0 * k))
        return measures, evaluate(plant, pi, measures=measures)

    measures, one = measured(1.0)
    _, other = measured(stretch)
    if not one.stable.all() or one.abscissa[0, 0] > -1e-3:
        return
    for i, m in enumerate(measures):
        power = stretch**m.row.time_power
        np.testing.assert_allclose(
            other.values[0, 0, i],
            one.values[0, 0, i] * power,
            rtol=3e-6,
            atol=1e-8 * power,
            err_msg=m.quantity,
        )


def test_a_supremum_that_comes_late_is_followed(unity_loop):
    """Two lightly damped modes that beat: the highest peak comes after more blocks than one plan holds."""
    zeta = 2e-4
    slow, fast = (w * complex(-zeta, 1.0) for w in (1.0, 1.02))
    loops, poles = unity_loop([slow, np.conj(slow), fast, np.conj(fast)])
    measures = (Measure("overshoot"), Measure("peak_time"))
    got = time_stage(loops, poles, measures).values
    t = np.linspace(0.0, 700.0, 2_000_001) / loops.time_scale[0]
    residue = np.array(
        [
            np.polyval(loops.numerator[0], p)
            / (p * loops.closed[0, 0] * np.prod([p - q for j, q in enumerate(poles[0]) if j != i]))
            for i, p in enumerate(poles[0])
        ]
    )
    y = sum(2 * (r * np.exp(p * t)).real for r, p in zip(residue[::2], poles[0][::2], strict=True))
    np.testing.assert_allclose(got[measures[0]], 100 * y.max(), rtol=1e-6)
    np.testing.assert_allclose(got[measures[1]], t[y.argmax()], rtol=1e-5)
    assert t[y.argmax()] * abs(poles[0][0]) > LONG  # past one plan of about a radian and a half a cell


@pytest.mark.parametrize("decades", [6, 12, 24, 40, 60, 100, 140])
@pytest.mark.parametrize("gain", [1.0, 9.0])
def test_time_constants_many_decades_apart(decades, gain):
    """The fast lag is over at once: what is left is a single lag, whose times are logarithms."""
    lags = np.polymul([10.0 ** (decades / 2), 1.0], [10.0 ** (-decades / 2), 1.0])
    measures = tuple(map(Measure, ("settling_time", "rise_time", "overshoot", "disturbance_peak")))
    found = evaluate(Rational.of([1.0], lags), Rational.of([gain], [1.0]), measures=measures)
    slow = 10.0 ** (decades / 2) / (1.0 + gain)
    expected = [slow * np.log(50.0), slow * np.log(9.0), 0.0, 1.0 / (1.0 + gain)]
    np.testing.assert_allclose(found.values[0, 0], expected, rtol=30.0 * 10.0**-decades + 1e-12)
    assert not found.approximate.any()


def test_time_constants_beyond_the_number_range_are_absent():
    """The fourth power of a pole 125 decades off is none: no settling time of 0."""
    for lags in (np.polymul([1e125, 1.0], [1e-125, 1.0]), np.polymul([1.0, 1.0], [1e-250, 1.0])):
        found = evaluate(Rational.of([1.0], lags), Rational.of([1.0], [1.0]), measures=TIME)
        assert found.stable.all()
        assert np.isnan(found.values).all()


def test_areas_that_are_not_proven_say_so(unity_loop):
    """Two lightly damped modes share the tail for ten thousand periods: no single mode stands for both."""
    zeta = 1e-4
    slow, fast = complex(-zeta, 1.0), 2.3 * complex(-1.1 * zeta, 1.0)
    loops, poles = unity_loop([slow, np.conj(slow), fast, np.conj(fast)])
    measure = Measure("tracking_area")
    assert time_stage(loops, poles, (measure,)).approximate[measure].all()
    loops, poles = unity_loop([slow, np.conj(slow), -1.0])
    assert not time_stage(loops, poles, (measure,)).approximate[measure].any()


def test_no_loops_and_no_questions(unity_loop):
    loops, poles = unity_loop([-1.0, -2.0])
    none = np.zeros(0, dtype=np.intp)
    empty = time_stage(loops.rows(none), poles[none], TIME)
    assert all(v.shape == (0,) for v in empty.values.values())
    assert time_stage(loops, poles, ()).values == {}


@pytest.mark.parametrize("order", [3, 7, 11])
def test_wild_loops_are_read_or_flagged(order):
    """Poles over ten decades, damping down to 1e-4: every value is there, no warning, no endless search."""
    rng = np.random.default_rng(order)
    top, bottom = [], []
    for _ in range(60):
        roots = []
        while len(roots) < order:
            size, zeta = 10.0 ** rng.uniform(-5, 5), min(10.0 ** rng.uniform(-4, 0), 0.999)
            if len(roots) + 2 <= order and rng.random() < 0.5:
                roots += [size * complex(-zeta, s * np.sqrt(1 - zeta**2)) for s in (1, -1)]
            else:
                roots.append(-size)
        closed = np.real(np.poly(roots))
        width = int(rng.integers(1, order + 1))
        row = np.pad((closed * rng.uniform(-0.5, 0.9, order + 1))[-width:], (order + 1 - width, 0))
        row[-1] = closed[-1]
        top.append(row)
        bottom.append(closed - row)
    found = evaluate(Rational.of(np.array(top), np.array(bottom)), Rational.of([1.0], [1.0]), measures=TIME)
    assert found.stable.mean() > 0.8
    for name in (
        "overshoot",
        "undershoot",
        "settling_time",
        "control_peak",
        "disturbance_peak",
        "tracking_area",
    ):
        assert np.isfinite(found[name][found.stable]).all()


def test_a_flood_of_doubtful_cells_is_cut_and_flagged(random_loops, monkeypatch):
    loops, poles = random_loops(np.random.default_rng(8), 60, 6, light=True)
    whole = time_stage(loops, poles, TIME)
    for module in (crossings, peaks, areas):
        monkeypatch.setattr(module, "MANY", 10)
        monkeypatch.setattr(module, "FEW", 1)
    cut = time_stage(loops, poles, TIME)
    for m in (Measure("settling_time"), Measure("overshoot"), Measure("control_peak")):
        wrong = np.abs(cut.values[m] - whole.values[m]) > 1e-6 * np.abs(whole.values[m]) + 1e-8
        assert not (wrong & ~cut.approximate[m]).any()
    assert any(cut.approximate[m].any() for m in TIME)
