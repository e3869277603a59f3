"""Random loops of order 1 to 8 through other people's code: scipy.signal, scipy's ODE integrators, mpmath.

The loops go in as plant and compensator, in seconds and rad/s, through the call everything else uses.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import mpmath
import numpy as np
import pytest
from hypothesis import Phase, assume, given, settings
from hypothesis import strategies as st
from scipy import signal
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import evaluate
from synth.loop.modes_view import modes_of
from synth.loop.poles.roots import closed_roots
from synth.loop.time.curves import step_curves

ONE = np.zeros(1, dtype=np.intp)


@dataclass(frozen=True)
class Loop:
    """Plant and compensator as polynomials; strictly proper plant, proper compensator, stable together."""

    plant: tuple[np.ndarray, np.ndarray]
    compensator: tuple[np.ndarray, np.ndarray]
    dead_time: float = 0.0

    @cached_property
    def rows(self):
        return Rational.of(*self.plant, self.dead_time), Rational.of(*self.compensator)

    @cached_property
    def values(self):
        found = evaluate(*self.rows)
        assert found.stable.all()
        assert not found.approximate.any()
        return {m.quantity: float(v) for m, v in zip(found.measures, found.values[0, 0], strict=True)}

    @cached_property
    def open(self):
        (a, b), (c, d) = self.plant, self.compensator
        return np.polymul(a, c), np.polymul(b, d)

    def curves(self, t):
        """y, u and y of a disturbance step, in SI."""
        loops = close(*self.rows, ONE, ONE)
        y, u, d = step_curves(loops, np.asarray(t) / loops.time_scale[0])
        gain = loops.plant_gain[0]
        return y[0], u[0] / gain, d[0] * gain


def roots_of(factors):
    """Monic polynomial of factors (rate, damping): a pair where the damping is below 1, else a real root."""
    poly = np.ones(1)
    for rate, damping in factors:
        poly = np.polymul(poly, [1.0, rate] if damping >= 1.0 else [1.0, 2.0 * damping * rate, rate * rate])
    return poly


rates = st.floats(0.25, 4.0).map(lambda v: round(v, 3))
left = st.tuples(rates, st.sampled_from([0.15, 0.3, 0.6, 1.0, 1.0]))
flip = st.booleans()


@st.composite
def loops(draw, most=8, delayed=False):
    """Loops that a small gain leaves stable: the gain is a share of the first gain that does not."""
    order = draw(st.integers(1, most))
    poles = []
    while (size := len(roots_of(poles)) - 1) < order:
        rate, damping = draw(left)
        poles.append((rate, 1.0 if size == order - 1 else damping))
    den = roots_of(poles)
    if draw(flip):  # an integrator in place of the first factor's constant
        rate, damping = poles.pop()
        den = np.polymul(roots_of(poles), [1.0, 0.0] if damping >= 1.0 else [1.0, rate, 0.0])
    zeros = draw(st.lists(st.tuples(rates, flip), max_size=min(order - 1, 3)))
    num = np.ones(1)
    for rate, right in zeros:
        num = np.polymul(num, [-1.0 / rate if right else 1.0 / rate, 1.0])
    share = draw(st.sampled_from([0.1, 0.25, 0.5]))
    parts = np.roots(den)
    real = np.sort(parts[parts.imag == 0.0].real)
    cut = draw(st.integers(0, min(len(real), order - 1)))  # these poles go to the compensator
    below = np.atleast_1d(np.poly(real[:cut]))
    rest = np.atleast_1d(np.real(np.polydiv(den, below)[0]))
    ahead = num[-cut - 1 :] if cut and len(num) - 1 <= cut else np.ones(1)
    if len(ahead) - 1 != len(num) - 1:  # all zeros in the compensator, or all in the plant
        ahead, behind = np.ones(1), num
    else:
        behind = np.ones(1)
    assume(len(behind) < len(rest))
    gain = share * first_unstable(np.polymul(rest, below), num)
    theta = round(draw(st.floats(0.05, 0.5)), 3) if delayed else 0.0
    loop = Loop((behind, rest), (gain * ahead, below), theta)
    assume(evaluate(*loop.rows).stable.all())
    assume(1.0e-2 < loop.values["decay_rate"])
    return loop


def first_unstable(den, num):
    gain = 2.0**-8
    while gain < 2.0**4 and np.roots(np.polyadd(den, 2.0 * gain * num)).real.max() < 0.0:
        gain *= 2.0
    return gain


quick = settings(deadline=None, derandomize=True)
# a march takes too long to be shrunk
marched = settings(quick, phases=(Phase.explicit, Phase.generate))


# ---- scipy.signal: frequency response -------------------------------------------------------------------


def response(loop, w):
    return signal.freqresp(loop.open, np.atleast_1d(w))[1] * np.exp(-1j * np.atleast_1d(w) * loop.dead_time)


def supremum(curve, w):
    """Largest value on a grid, looked at again between the neighbours."""
    i = int(curve(w).argmax())
    return curve(np.linspace(w[max(i - 1, 0)], w[min(i + 1, len(w) - 1)], 1001)).max()


@settings(quick, max_examples=25)
@given(loops(delayed=True) | loops())
def test_frequency_response(loop):
    values = loop.values
    curves = {
        "sensitivity_peak": lambda w: np.abs(1.0 / (1.0 + response(loop, w))),
        "complementary_peak": lambda w: np.abs(1.0 - 1.0 / (1.0 + response(loop, w))),
        "noise_gain": lambda w: np.abs(signal.freqresp(loop.compensator, w)[1] / (1.0 + response(loop, w))),
    }
    w = np.geomspace(1e-5, 1e4, 9001)
    for key, curve in curves.items():
        assert values[key] == pytest.approx(supremum(curve, w), rel=1e-6)

    above = np.abs(response(loop, w)) > 1.0
    cells = np.flatnonzero(above[1:] != above[:-1])
    ends = [brentq(lambda x: np.log(np.abs(response(loop, x)[0])), w[i], w[i + 1], xtol=1e-13) for i in cells]
    if not ends:
        assert np.isinf(values["phase_margin"])
        return
    assert values["crossover"] == pytest.approx(max(ends), rel=1e-8)
    turned = np.angle(-response(loop, ends))  # 180° + arg L, wrapped
    assert values["phase_margin"] == pytest.approx(np.abs(np.degrees(turned)).min(), rel=1e-7, abs=1e-7)
    extra = np.mod(turned, 2.0 * np.pi) / np.array(ends)
    assert values["delay_margin"] == pytest.approx(extra.min(), rel=1e-7)


@settings(quick, max_examples=25)
@given(loops(delayed=True) | loops())
def test_gain_margin_and_bandwidth(loop):
    values = loop.values
    w = np.geomspace(1e-4, 1e2, 9001)
    loop_gain = response(loop, w)
    cells = np.flatnonzero(np.signbit(loop_gain.imag[1:]) != np.signbit(loop_gain.imag[:-1]))
    ends = [brentq(lambda x: response(loop, x)[0].imag, w[i], w[i + 1], xtol=1e-14) for i in cells]
    real = response(loop, ends).real if ends else np.zeros(0)
    real = real[real < -1e-5]
    if real.size:
        margin = np.abs(20.0 * np.log10(-real)).min()
        assert values["gain_margin"] == pytest.approx(margin, rel=1e-6, abs=1e-6)
    else:
        assert values["gain_margin"] > 99.0

    def t(x):
        return np.abs(1.0 - 1.0 / (1.0 + response(loop, x)))

    level = abs(values["final_value"]) / np.sqrt(2.0)
    w = np.geomspace(1e-4, 1e4, 18001)  # a low level is passed late
    seen = t(w)
    falls = np.flatnonzero((seen[:-1] > level) & (seen[1:] <= level))
    fall = brentq(lambda x: t(x)[0] - level, w[falls[0]], w[falls[0] + 1], xtol=1e-14)
    assert values["bandwidth"] == pytest.approx(fall, rel=1e-7)


# ---- scipy's integrators: the loop with its states --------------------------------------------------------


def states(pair):
    a, b, c, d = signal.tf2ss(*pair)
    if not len(pair[1]) - 1:  # a gain alone has no state
        return np.zeros((0, 0)), np.zeros((0, 1)), np.zeros((1, 0)), float(pair[0][-1] / pair[1][-1])
    return a, b, c, float(d[0, 0])


class Marched:
    """One step response of the loop, integrated as it stands; with dead time by the method of steps."""

    def __init__(self, loop, end, *, reference=1.0, disturbance=0.0):
        ap, self.bp, self.cp, _ = states(loop.plant)
        ac, self.bc, self.cc, self.dc = states(loop.compensator)
        self.np, self.nc, self.reference, self.disturbance = len(ap), len(ac), reference, disturbance
        self.pieces, self.theta = [], loop.dead_time

        def rate(t, x):
            y, u = self.outputs(x)
            arriving = u + disturbance if not self.theta else self._arriving(t)
            return np.concatenate(
                [
                    ap @ x[: self.np] + self.bp[:, 0] * arriving,
                    ac @ x[self.np : self.np + self.nc] + self.bc[:, 0] * (reference - y),
                    [reference - y],
                ]
            )

        x = np.zeros(self.np + self.nc + 1)
        edges = np.append(np.arange(0.0, end, self.theta), end) if self.theta else np.array([0.0, end])
        for low, high in pairwise(edges):
            run = solve_ivp(rate, (low, high), x, method="DOP853", rtol=3e-12, atol=1e-13, dense_output=True)
            assert run.success
            self.pieces.append((low, run.sol))
            x = run.y[:, -1]

    def outputs(self, x):
        y = self.cp[0] @ x[: self.np]
        u = self.cc[0] @ x[self.np : self.np + self.nc] + self.dc * (self.reference - y)
        return y, u

    def _arriving(self, t):
        """u + d as it left the compensator a dead time ago."""
        before = t - self.theta
        if before < -1e-12 or len(self.pieces) == 0:
            return 0.0
        return self.outputs(self.pieces[-1][1](max(before, 0.0)))[1] + self.disturbance

    def states(self, t):
        starts = np.array([low for low, _ in self.pieces])
        which = np.maximum(np.searchsorted(starts, t, side="right") - 1, 0)
        out = np.empty((self.np + self.nc + 1, len(t)))
        for k in np.unique(which):
            out[:, which == k] = self.pieces[k][1](t[which == k])
        return out

    def y(self, t):
        return self.outputs(self.states(np.atleast_1d(t)))[0]

    def u(self, t):
        return self.outputs(self.states(np.atleast_1d(t)))[1]

    def area(self, t):
        """∫ abs(reference - y), piece by piece between its zeros."""
        e = self.reference - self.y(t)
        cells = np.flatnonzero(np.signbit(e[1:]) != np.signbit(e[:-1]))
        zeros = [brentq(lambda x: self.reference - self.y(x)[0], t[i], t[i + 1]) for i in cells]
        run = self.states(np.array([t[0], *zeros, t[-1]]))[-1]
        return np.abs(np.diff(run)).sum()


def check_reference_step(loop, end):
    values = loop.values
    march = Marched(loop, end)
    t = np.linspace(0.0, end, 3001)[1:]
    y, u = march.y(t), march.u(t)
    curve, control, _ = loop.curves(t)
    np.testing.assert_allclose(curve, y, atol=2e-8 * max(1.0, np.abs(y).max()))
    np.testing.assert_allclose(control, u, atol=2e-8 * max(1.0, np.abs(u).max()))

    final = values["final_value"]
    z = y / final
    over, under = values["overshoot"] / 100.0, values["undershoot"] / 100.0
    low, high = supremum(lambda x: -march.y(x) / final, t), supremum(lambda x: march.y(x) / final, t)
    assert high <= 1.0 + over + 1e-7
    if over > 1e-5 and values["peak_time"] < end:
        assert high == pytest.approx(1.0 + over, abs=1e-6)
        assert march.y(values["peak_time"])[0] / final == pytest.approx(1.0 + over, abs=1e-7)
    assert max(low, 0.0) == pytest.approx(under, abs=1e-6)
    if z.max() > 0.9:

        def first(level):
            i = int(np.argmax(z >= level))
            return brentq(lambda x: march.y(x)[0] / final - level, t[i - 1] if i else 0.0, t[i])

        assert values["rise_time"] == pytest.approx(first(0.9) - first(0.1), rel=1e-6, abs=1e-8)
    settled = values["settling_time"]
    if 0.0 < settled < end:
        assert abs(march.y(settled)[0] / final - 1.0) == pytest.approx(0.02, abs=1e-7)
        assert np.abs(z[t > settled] - 1.0).max(initial=0.0) <= 0.02 + 1e-7
    peak = max(supremum(lambda x: np.abs(march.u(x)), t), abs(march.dc))
    assert peak <= values["control_peak"] * (1.0 + 1e-7)
    if np.exp(-values["decay_rate"] * end) > 1e-7:  # not seen to its end
        return
    assert peak >= values["control_peak"] * (1.0 - 1e-6)
    if np.isfinite(values["tracking_area"]):
        assert march.area(np.insert(t, 0, 0.0)) == pytest.approx(values["tracking_area"], rel=2e-5)


def check_disturbance_step(loop, end):
    values = loop.values
    march = Marched(loop, end, reference=0.0, disturbance=1.0)
    t = np.linspace(0.0, end, 3001)[1:]
    y = march.y(t)
    np.testing.assert_allclose(loop.curves(t)[2], y, atol=2e-8 * max(1.0, np.abs(y).max()))
    peak = supremum(lambda x: np.abs(march.y(x)), t)
    assert peak <= values["disturbance_peak"] * (1.0 + 1e-7)
    if np.exp(-values["decay_rate"] * end) < 1e-7:
        assert peak >= values["disturbance_peak"] * (1.0 - 1e-6)
        assert abs(y[-1]) == pytest.approx(values["disturbance_residue"], abs=1e-5)
        if np.isfinite(values["disturbance_area"]):
            assert march.area(np.insert(t, 0, 0.0)) == pytest.approx(values["disturbance_area"], rel=2e-5)
            total = abs(march.states(t[-1:])[-1, 0])
            assert total == pytest.approx(values["disturbance_integral"], rel=1e-5, abs=1e-6)


@settings(marched, max_examples=12)
@given(loops())
def test_loop_with_its_states(loop):
    end = min(18.0 / loop.values["decay_rate"], 120.0)
    check_reference_step(loop, end)
    check_disturbance_step(loop, end)


@settings(marched, max_examples=5)
@given(loops(most=4, delayed=True))
def test_dead_time_by_the_method_of_steps(loop):
    end = min(18.0 / loop.values["decay_rate"], 80.0 * loop.dead_time)
    check_reference_step(loop, end)
    check_disturbance_step(loop, end)


# ---- mpmath: poles and residues at 50 digits --------------------------------------------------------------


@settings(quick, max_examples=40)
@given(loops())
def test_poles_residues_and_shares_to_fifty_digits(loop):
    values = loop.values
    with mpmath.workdps(50):
        (a, b), (c, d) = loop.plant, loop.compensator
        num, den = product(a, c), product(b, d)
        closed = [x + y for x, y in zip([mpmath.mpf(0)] * (len(den) - len(num)) + num, den, strict=True)]
        poles = mpmath.polyroots(closed[::-1], maxsteps=500, extraprec=400, asc=True)
        gaps = [abs(p - q) / abs(p) for i, p in enumerate(poles) for q in poles[:i]]
        assume(min(gaps, default=1) > 1e-2)
        slope = [k * (len(closed) - 1 - i) for i, k in enumerate(closed[:-1])]
        residues = [horner(num, p) / (p * horner(slope, p)) for p in poles]
        both = list(zip(poles, residues, strict=True))
        final = num[-1] / closed[-1]

        ours = closed_roots(np.array([[float(k) for k in closed]]))[0]
        for p in poles:
            assert min(abs(mpmath.mpmathify(complex(q)) - p) for q in ours) <= 1e-12 * abs(p)
        assert values["decay_rate"] == pytest.approx(float(min(-p.real for p in poles)), rel=1e-11)
        assert values["final_value"] == pytest.approx(float(final), rel=1e-14)

        modes = modes_of(*loop.rows).modes
        for p, r in both:
            if p.imag < -1e-30:
                continue
            mode = min(modes, key=lambda m: abs(m.pole - complex(p)))
            twice = 2.0 if mode.pole.imag else 1.0
            assert mode.share == pytest.approx(twice * float(abs(r) / abs(final)), rel=1e-9, abs=1e-12)
            assert mode.damping == pytest.approx(float(-p.real / abs(p)), rel=1e-11)

        t = np.linspace(0.05, 4.0, 9) / values["decay_rate"]
        y = [final + mpmath.fsum(r * mpmath.exp(p * x) for p, r in both) for x in t]
        expected = np.array([float(v.real) for v in y])
    np.testing.assert_allclose(loop.curves(t)[0], expected, rtol=1e-9, atol=1e-11)


def horner(coefficients, s):
    value = mpmath.mpf(0)
    for k in coefficients:
        value = value * s + k
    return value


def product(a, b):
    out = [mpmath.mpf(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            out[i + j] += mpmath.mpf(float(x)) * mpmath.mpf(float(y))
    return out
