"""Step responses with dead time: hand formulas, an independent march, printed values, and laws."""

from math import factorial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.optimize import brentq, minimize_scalar
from scipy.signal import tf2ss

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.encirclement import delayed_stable
from synth.loop.quantities import EVERY_QUANTITY, Measure
from synth.loop.time.delayed import delayed_time_stage
from synth.loop.time.delayed_curves import delayed_step_curves


class Reference:
    """y, u of a unit reference step and y of a unit load step for one row of Loops, up to `delays` delays."""

    def __init__(self, loops, row: int, delays: int) -> None:
        den = loops.denominator[row]
        nums = np.array([loops.numerator[row], loops.control[row], loops.load[row]])
        a, b, c, d = tf2ss(nums, den)
        self.theta, self.c, self.d, self.delays = float(loops.dead_time[row]), c, d[:, 0], delays
        self.pieces: list = []
        x = np.zeros(a.shape[0])
        for k in range(delays):
            # the error over this delay: 1 less the output of one delay ago
            found = solve_ivp(
                lambda t, x, k=k: a @ x + b[:, 0] * self.error(k, t),
                (0.0, self.theta),
                x,
                method="DOP853",
                rtol=1e-11,
                atol=1e-13,
                dense_output=True,
            )
            self.pieces.append(found.sol)
            x = found.y[:, -1]

    def error(self, k: int, t):
        """e at time t of delay k, a number or an array; the recursion goes down only while y jumps."""
        if self.d[0] == 0.0 and k > 0:
            return 1.0 - self.c[0] @ self.pieces[k - 1](t)
        if k == 0:
            return np.ones_like(t)
        return 1.0 - (self.c[0] @ self.pieces[k - 1](t) + self.d[0] * self.error(k - 1, t))

    def _out(self, k: int, t):
        return self.c @ self.pieces[k](t) + np.multiply.outer(self.d, self.error(k, t))

    def signal(self, which: int, tau: float) -> float:
        """Output 0 (y), 1 (u) or 2 (d) at own time tau: y and d come one delay later."""
        k = min(int(tau / self.theta), self.delays - 1)
        return float(self._out(k, tau - k * self.theta)[which])

    def sampled(self, which: int, per_delay: int):
        """Own times and values, right-continuous at the delays."""
        part = np.linspace(0.0, self.theta, per_delay + 1)
        times, values = [], []
        for k in range(self.delays):
            times.append(k * self.theta + part)
            values.append(self._out(k, part)[which])
        return np.concatenate(times), np.concatenate(values)

    def quantities(self, final: float, per_delay: int = 400) -> dict[str, float]:
        """Read-off of a dense curve, each event refined by bracketing on the integrator's own output."""
        theta = self.theta
        t, y = self.sampled(0, per_delay)
        z = y / final
        out: dict[str, float] = {}
        top, when = self._peak(0, t, z, 1.0 / final)
        out["overshoot"] = 100.0 * max(0.0, top - 1.0)
        out["peak_time"] = when + theta if top > 1.0 else np.nan
        out["undershoot"] = 100.0 * max(0.0, self._peak(0, t, -z, -1.0 / final)[0])
        outside = np.flatnonzero(np.abs(z - 1.0) > 0.02)
        i = int(outside[-1])
        edge = 1.0 + 0.02 * np.sign(z[i] - 1.0)
        out["settling_time"] = theta + self._cross(0, t[i], t[i + 1], edge * final)
        lows = [int(np.flatnonzero(z >= level)[0]) for level in (0.1, 0.9)]
        arrivals = [
            self._cross(0, t[i - 1], t[i], level * final) for i, level in zip(lows, (0.1, 0.9), strict=True)
        ]
        out["rise_time"] = arrivals[1] - arrivals[0]
        for name, which in (("control_peak", 1), ("disturbance_peak", 2)):
            t, v = self.sampled(which, per_delay)
            out[name] = max(self._peak(which, t, v, 1.0)[0], self._peak(which, t, -v, -1.0)[0])
        return out

    def area(self, which: int, offset: float, per_delay: int = 4000) -> float:
        """∫ abs(signal - offset) dτ by the trapezoidal rule and Richardson, fair to about 1e-7."""
        t, v = self.sampled(which, per_delay)
        fine = np.trapezoid(np.abs(v - offset), t)
        return float(fine)

    def _peak(self, which: int, t, v, factor: float) -> tuple[float, float]:
        i = int(np.argmax(v))
        low, high = t[max(i - 1, 0)], t[min(i + 1, len(t) - 1)]
        k = min(int((t[i] + 1e-12) / self.theta), self.delays - 1)
        low, high = max(low, k * self.theta), min(high, (k + 1) * self.theta)
        if high <= low:
            return float(v[i]), float(t[i])
        found = minimize_scalar(
            lambda s: -factor * self.signal(which, s),
            bounds=(low, high),
            method="bounded",
            options={"xatol": 1e-11},
        )
        return (-float(found.fun), float(found.x)) if -found.fun > v[i] else (float(v[i]), float(t[i]))

    def _cross(self, which: int, low: float, high: float, level: float) -> float:
        if high <= low:
            return float(high)
        high = min(high, np.nextafter((int(low / self.theta + 1e-9) + 1) * self.theta, 0.0))
        a, b = self.signal(which, low) - level, self.signal(which, high) - level
        return (
            float(high)
            if a * b > 0.0
            else float(brentq(lambda s: self.signal(which, s) - level, low, high, xtol=1e-13))
        )


TIME = tuple(m for m in EVERY_QUANTITY if m.row.stage == "time")


def closed(plant_num, plant_den, delay, num=((1.0,),), den=((1.0,),)):
    plant, compensator = Rational.of(plant_num, plant_den, delay), Rational.of(num, den)
    m = max(len(plant), len(compensator))
    return close(plant, compensator, np.arange(m) % len(plant), np.arange(m) % len(compensator))


def stage(loops, measures=TIME):
    """SI values by name, and whether any was flagged."""
    found = delayed_time_stage(loops, delayed_poles(loops, np.zeros(len(loops))), measures)
    values = {}
    for m, v in found.values.items():
        si = v * loops.time_scale**m.row.time_power * loops.plant_gain**m.row.gain_power
        values[m.quantity] = si
    return values, {m.quantity: flag for m, flag in found.approximate.items()}


def integrating_response(gain, delay, t):
    """y of K/s e^(-θs) in unity feedback: the finite alternating series Σ (-1)^m (K (t -
    (m+1)θ))^(m+1)/(m+1)!."""
    total = np.zeros_like(t)
    for m in range(int(t.max() / delay) + 1):
        late = np.maximum(t - (m + 1) * delay, 0.0)
        total += (-1.0) ** m * (gain * late) ** (m + 1) / factorial(m + 1)
    return total


@pytest.mark.parametrize("delay", [0.5, 4.0])
def test_curve_is_the_alternating_series(delay):
    loops = closed([[0.9 / delay]], [[1.0, 0.0]], delay)
    t = np.linspace(0.0, 9.0 * delay, 400)
    y, u, d = (c[0] for c in delayed_step_curves(loops, t / loops.time_scale[0]))
    exact = integrating_response(0.9 / delay, delay, t)
    np.testing.assert_allclose(y, exact, atol=2e-9)
    np.testing.assert_allclose(u * loops.plant_gain[0] ** -1, 1.0 - exact, atol=2e-9)
    # C = 1, so the load's response is the reference's
    np.testing.assert_allclose(d * loops.plant_gain[0], exact, atol=2e-9)


def test_integrating_plant_hand_values():
    # K θ = 1, second delay: y = τ - (τ-1)²/2 with τ = t - θ in delays: top 3/2 at τ = 2, no later peak is
    # higher
    values, _ = stage(closed([[0.5]], [[1.0, 0.0]], 2.0))
    assert values["overshoot"][0] == pytest.approx(50.0, rel=1e-7)
    assert values["peak_time"][0] == pytest.approx(6.0, rel=1e-7)
    # 10 % at τ = 0.1, 90 % at 0.9
    assert values["rise_time"][0] == pytest.approx(1.6, rel=1e-8)
    assert values["undershoot"][0] == 0.0
    assert values["control_peak"][0] == pytest.approx(1.0, rel=1e-9)


def test_half_gain_integrating_plant():
    # K θ = 1/2: peak inside the third delay, where y' = K (1 - y(t - θ)) = 0, i.e. when y(t - θ) = 1
    loops = closed([[0.5]], [[1.0, 0.0]], 1.0)
    values, _ = stage(loops)
    t = np.linspace(0.0, 30.0, 300_001)
    y = integrating_response(0.5, 1.0, t)
    assert values["overshoot"][0] == pytest.approx(100.0 * (y.max() - 1.0), abs=1e-6)
    one = brentq(lambda s: integrating_response(0.5, 1.0, np.array([s]))[0] - 1.0, 2.0, 4.0)
    assert values["peak_time"][0] == pytest.approx(one + 1.0, rel=1e-6)


def test_pure_gain_and_delay_is_a_staircase():
    # k e^(-θs): y = k, k - k², ... ; the band is left for good when |k|^m/(1+k)... falls below it
    k, delay = 0.6, 1.5
    loops = closed([[k]], [[1.0]], delay)
    values, flags = stage(loops)
    final = k / (1 + k)
    steps = np.array([k * (1 - (-k) ** m) / (1 + k) for m in range(1, 60)]) / final
    assert values["overshoot"][0] == pytest.approx(100.0 * (steps.max() - 1.0), rel=1e-8)
    assert values["peak_time"][0] == pytest.approx(delay)
    last = np.flatnonzero(np.abs(steps - 1.0) > 0.02)[-1]
    assert values["settling_time"][0] == pytest.approx((last + 2) * delay)
    assert values["rise_time"][0] == pytest.approx(0.0, abs=1e-12)
    assert values["control_peak"][0] == pytest.approx(1.0)
    assert np.isinf(values["tracking_area"][0])
    assert not flags["overshoot"][0]


def test_integral_control_of_a_pure_delay_jumps_only_where_it_should():
    # PI on a pure delay, L(∞) = 0.3: the error is 1 until θ and y jumps by 0.3 there
    loops = closed([[1.0]], [[1.0]], 1.0, [[0.3, 0.5]], [[1.0, 0.0]])
    t = np.array([0.0, 0.999999999, 1.0, 1.5, 1.999999999, 2.0, 2.5])
    y, _, _ = delayed_step_curves(loops, t / loops.time_scale[0])
    # first delay: 0.3 + 0.5 τ; then 0.3 (1 - y) + 0.5 ∫(1 - y)
    second = 0.3 * (1.0 - 0.3 - 0.5 * 0.5) + 0.5 * (1.0 + 0.5 - (0.3 * 0.5 + 0.25 * 0.25))
    expected = [0.0, 0.0, 0.3, 0.55, 0.8, 0.3 * 0.7 + 0.5, second]
    np.testing.assert_allclose(y[0], expected, atol=1e-8)


def tuned(rng, m, kind):
    """Second-order plants with delay under filtered PID near the usual settings; or with a direct path."""
    o, z = np.ones(m), np.zeros(m)
    delay = 10 ** rng.uniform(-0.5, 0.5, m)
    if kind == "direct":
        k = rng.uniform(0.1, 0.35, m)
        return closed(np.c_[k, o], np.c_[o, o], delay, np.c_[0.8 * (1 + delay), 0.8 * o], np.c_[1 + delay, z])
    tau = delay * rng.uniform(0.7, 6.0, m)
    lag = tau * rng.uniform(0.1, 0.9, m)
    gain, ti = rng.uniform(0.5, 1.3, m) * tau / (2 * delay), np.minimum(tau, 6 * delay)
    td, tf = lag * rng.uniform(0.5, 1.0, m), lag * rng.choice([0.3, 0.05], m)
    num = np.c_[gain * ti * td, gain * (ti + td), gain]
    return closed(np.c_[o], np.c_[tau * lag, tau + lag, o], delay, num, np.c_[ti * tf, ti, z])


@pytest.mark.parametrize("kind", ["pid", "direct"])
def test_every_quantity_against_an_independent_march(kind):
    loops = tuned(np.random.default_rng(4), 60, kind)
    loops = loops.rows(np.flatnonzero(delayed_stable(loops)))
    poles = delayed_poles(loops, np.zeros(len(loops)))
    found = delayed_time_stage(loops, poles, TIME)
    ours = {m.quantity: v for m, v in found.values.items()}
    delays = np.ceil(17.0 / -np.nanmax(poles.real, axis=1) / loops.dead_time).astype(int) + 3
    checked = 0
    for row in np.argsort(delays)[: 3 if kind == "pid" else 1]:
        reference = Reference(loops, row, int(delays[row]))
        base = loops.numerator[row, -1] + loops.denominator[row, -1]
        expected = reference.quantities(loops.numerator[row, -1] / base)
        for name, value in expected.items():
            floor = 1.0 if name in ("overshoot", "undershoot") else 0.0
            error = abs(ours[name][row] - value)
            assert error <= 1e-6 * max(abs(value), floor) or (
                np.isnan(value) and np.isnan(ours[name][row])
            ), name
        if loops.denominator[row, -1] == 0.0:
            tracking = reference.area(0, 1.0) + loops.dead_time[row]
            assert ours["tracking_area"][row] == pytest.approx(tracking, rel=1e-5)
            assert ours["disturbance_area"][row] == pytest.approx(reference.area(2, 0.0), rel=1e-5)
        checked += 1
    assert checked


def test_marching_on_and_the_modes_agree():
    # with a delay small against the dynamics the response is handed to the modes early; a march to the end
    # agrees
    loops = closed([[1.0]], [[30.0, 1.0]], 0.25, [[4.0, 0.3]], [[1.0, 0.0]])
    t = np.linspace(0.0, 0.25 * 190.0, 777) / loops.time_scale[0]
    marched = delayed_step_curves(loops, t)
    late = delayed_step_curves(loops, np.append(t, 1e4 / loops.time_scale[0]))
    for one, other in zip(marched, late, strict=True):
        np.testing.assert_allclose(one[0], other[0, :-1], atol=3e-9)


@pytest.mark.parametrize("ratio", [1e-4, 1e-2])
def test_small_delay_tends_to_the_loop_without(ratio):
    # second-order closed loop, ζ = 0.5: 16.303 % overshoot without delay; a small delay moves it in
    # proportion
    loops = closed([[1.0]], [[1.0, 1.0, 0.0]], ratio)
    values, _ = stage(loops)
    without = 100.0 * np.exp(-np.pi * 0.5 / np.sqrt(0.75))
    assert values["overshoot"][0] == pytest.approx(without, abs=150.0 * ratio)
    assert values["overshoot"][0] > without
    assert values["peak_time"][0] == pytest.approx(np.pi / np.sqrt(0.75), abs=10.0 * ratio)


def test_lightly_damped_loop_settles_at_the_last_exit():
    # integral control with the gain just below the stability limit: hundreds of swings, settled by the last
    # mode
    loops = closed([[1.56]], [[1.0, 0.0]], 1.0)
    values, flags = stage(loops)
    pole = delayed_poles(loops, np.zeros(1))[0, 0] / loops.time_scale[0]
    assert -0.005 < pole.real < 0.0
    # residue of T/s at the pole, from the hand-made derivative of s + K e^(-s)
    amplitude = 2.0 * abs(1.56 * np.exp(-pole) / (pole * (1.0 - 1.56 * np.exp(-pole))))
    envelope = np.log(amplitude / 0.02) / -pole.real
    half = np.pi / pole.imag
    assert envelope - half <= values["settling_time"][0] <= envelope
    assert not flags["settling_time"][0]


def test_double_pole_response_is_marched_to_rest():
    # K = e^(-1)/θ: a double root at -1/θ, no simple residues
    loops = closed([[np.exp(-1.0)]], [[1.0, 0.0]], 1.0)
    values, flags = stage(loops)
    t = np.linspace(0.0, 20.0, 200_001)
    y = integrating_response(np.exp(-1.0), 1.0, t)
    last = t[np.flatnonzero(np.abs(y - 1.0) > 0.02)[-1]]
    assert values["settling_time"][0] == pytest.approx(last, abs=2e-4)
    assert values["overshoot"][0] == 0.0
    assert not flags["settling_time"][0]
    # an error of one sign: IAE is IE, 1/K
    assert values["tracking_area"][0] == pytest.approx(np.e, rel=1e-7)


def test_area_of_one_sign_is_the_integral():
    # a sluggish PI loop: the load's response keeps its sign, so IAE = 1/ki
    loops = closed([[1.0]], [[5.0, 1.0]], 1.0, [[0.8 * 5.0, 0.8]], [[5.0, 0.0]])
    values, _ = stage(loops)
    assert values["disturbance_area"][0] == pytest.approx(5.0 / 0.8, rel=1e-8)


def test_late_deviation_is_the_sup_from_then_on():
    loops = closed([[0.5]], [[1.0, 0.0]], 1.0)
    t = np.linspace(0.0, 40.0, 400_001)
    y = integrating_response(0.5, 1.0, t)
    for after in (0.5, 2.5, 4.7, 9.0, 15.0):
        m = Measure("late_deviation", after=after)
        found = delayed_time_stage(loops, delayed_poles(loops, np.zeros(1)), (m,)).values[m][0]
        assert found == pytest.approx(100.0 * np.abs(y[t >= after] - 1.0).max(), abs=1e-5)


def test_other_bands_and_spans():
    loops = closed([[0.5]], [[1.0, 0.0]], 1.0)
    t = np.linspace(0.0, 16.0, 800_001)
    y = integrating_response(0.5, 1.0, t)
    band, span = Measure("settling_time", band=0.05), Measure("rise_time", span=(0.0, 1.0))
    found = delayed_time_stage(loops, delayed_poles(loops, np.zeros(1)), (band, span)).values
    exact = t[np.flatnonzero(np.abs(y - 1.0) > 0.05)[-1]]
    assert found[band][0] * loops.time_scale[0] == pytest.approx(exact, abs=2e-5)
    first = t[np.flatnonzero(y >= 1.0)[0]]
    # 0 % is where y leaves 0, at the end of the dead time
    assert found[span][0] * loops.time_scale[0] == pytest.approx(first - 1.0, abs=2e-5)


def test_a_row_alone_and_in_a_batch_are_the_same():
    loops = tuned(np.random.default_rng(11), 90, "pid")
    loops = loops.rows(np.flatnonzero(delayed_stable(loops)))
    poles = delayed_poles(loops, np.zeros(len(loops)))
    together = delayed_time_stage(loops, poles, TIME)
    for row in (0, 17, 40):
        one = np.array([row])
        alone = delayed_time_stage(loops.rows(one), poles[one], TIME)
        for m in TIME:
            np.testing.assert_allclose(alone.values[m][0], together.values[m][row], rtol=1e-7, atol=1e-7)


@settings(max_examples=15, deadline=None)
@given(st.floats(0.05, 1.4), st.integers(-30, 30))
def test_quantities_scale_with_the_unit_of_time(gain, power):
    unit = 2.0**power
    one, _ = stage(closed([[gain]], [[1.0, 0.3, 0.0]], 0.2))
    other, _ = stage(closed([[gain * unit**-2]], [[1.0, 0.3 / unit, 0.0]], 0.2 * unit))
    for m in TIME:
        expected = one[m.quantity] * unit**m.row.time_power
        if m.row.gain_power == 0:
            np.testing.assert_allclose(other[m.quantity], expected, rtol=1e-9, atol=1e-9)


def test_nothing_asked_and_no_loops():
    loops = closed([[0.5]], [[1.0, 0.0]], 1.0)
    assert delayed_time_stage(loops, delayed_poles(loops, np.zeros(1)), ()).values == {}
    none = loops.rows(np.zeros(0, dtype=int))
    assert delayed_time_stage(none, np.zeros((0, 0), dtype=complex), TIME).values[TIME[0]].shape == (0,)


# S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning", J. Process Control 13
# (2003) 291-309, case E12: IAE of a load step with the SIMC setting, printed "0.15" (recalled, not looked
# up).
E12 = ([[18.0, 9.0, 1.0]], [[80.0, 98.0, 19.0, 1.0]], 0.3)


def test_printed_area_of_a_load_response():
    gain, integral = 7.4074074074074066, 1.0
    loops = closed(*E12, [[gain * integral, gain]], [[integral, 0.0]])
    values, flags = stage(loops, (Measure("disturbance_area"),))
    assert values["disturbance_area"][0] == pytest.approx(0.15, abs=0.005)
    # an independent march to t = 36 gives 0.14817727 and leaves 5.404e-7 there, falling with 0.1652 1/s
    assert values["disturbance_area"][0] == pytest.approx(0.14817727 + 5.404e-7 / 0.1652, rel=1e-6)
    assert not flags["disturbance_area"][0]
