"""What cannot be missed between two looks, and what is said where it could be."""

import mpmath as mp
import numpy as np
import pytest

from synth.loop.closed_loop import Rational, close
from synth.loop.poles.delayed import delayed_poles
from synth.loop.quantities import Measure
from synth.loop.time.collocation import GRID, value_matrix
from synth.loop.time.delayed import delayed_time_stage
from synth.loop.time.panels import Outline, Panels
from synth.loop.time.proof import Cells, unproven
from synth.loop.time.trace import Trace

INF = np.array([np.inf])


def cells_of(*signals):
    """The cells of one loop whose panels of length 1 hold these functions of x in [0, 1]."""
    values = np.array([f(GRID) for f in signals])
    many = len(signals)
    panels = Panels(
        np.zeros(many, dtype=int), np.arange(many) * 1.0, np.ones(many), values, np.zeros(1, dtype=int)
    )
    return Cells.of(Trace.of(panels, np.zeros(1), np.ones(1)))


def shown(*claims):
    """Whether all of them are proven of the one loop."""
    return not np.any(unproven(claims, 1))


def hidden(x):
    """Rises to 1 and falls again between two looks, rises once more and turns in the next cell, lower."""
    a, b, c = 7.2 / 16.0, 7.8 / 16.0, 8.1 / 16.0
    slope = np.polynomial.Polynomial.fromroots([a, b, c]) * -1.0
    whole = slope.integ()
    return 1.0 + 10.0 * (whole(x) - whole(a))


def test_cells_enclose_the_signal():
    rng = np.random.default_rng(3)
    fine = np.linspace(0.0, 1.0, 16 * 40 + 1)
    for _ in range(20):
        values = rng.normal(size=13) * 10 ** rng.uniform(-3.0, 0.0)
        cells = cells_of(lambda x, values=values: values)
        dense = values @ value_matrix(fine)
        for i in range(16):
            part = dense[40 * i : 40 * i + 41]
            assert cells.low[0, i] <= part.min() + 1e-12
            assert part.max() <= cells.high[0, i] + 1e-12


def test_a_peak_between_two_looks_is_not_excluded():
    cells = cells_of(hidden)
    best, _ = cells.trace.largest(1.0)
    assert best[0] < 1.0 - 1e-7  # the trace alone misses it
    assert not shown(cells.within(-INF, best + 1e-8))
    assert shown(cells.within(-INF, np.array([1.0 + 1e-8])))


def test_an_exit_or_a_passage_between_two_looks_is_not_excluded():
    cells = cells_of(hidden)
    band = 0.5 * (1.0 + cells.trace.largest(1.0)[0][0])
    later = cells_of(lambda x: 0.5 + 0.0 * x, hidden)
    for one, at in ((cells, band), (later, band)):
        assert not shown(*one.not_later(at, one.trace.last_exit(at)))
        assert not shown(*one.not_sooner(at, one.trace.first_reach(at)))


@pytest.mark.parametrize("power", [0.0, -3.0, -9.0])
def test_plain_swings_are_proven(power):
    """A quarter turn to a cell and less: every extremum is known, none is left open, whatever its size."""
    size = 10.0**power
    for turn in (0.3, 1.0, 3.0):
        cells = cells_of(
            *(lambda x, k=k, w=turn: size * np.exp(-0.2 * (k + x)) * np.sin(w * (k + x)) for k in range(4))
        )
        best, _ = cells.trace.largest(1.0)
        far = cells.trace.farthest()
        assert shown(cells.within(-INF, best + 1e-8 * size))
        assert shown(cells.within(-far - 1e-8 * size, far + 1e-8 * size))
        for part in (0.9, 0.5, 0.1):
            band = part * far[0]
            assert shown(*cells.not_later(band, cells.trace.last_exit(band)))
            assert shown(*cells.not_sooner(band, cells.trace.first_reach(band)))


def test_a_knot_too_near_the_level_is_not_trusted():
    trace, uncertain = cells_of(lambda x: np.sin(np.pi * x)).trace, np.array([1e-8])
    for level, near in ((1.0 - 1e-9, True), (1.0 + 1e-9, True), (1.0 - 1e-6, False), (1.0 + 1e-6, False)):
        assert trace.grazes(level, trace.last_exit(level), uncertain, last=True)[0] == near
        assert trace.grazes(level, trace.first_reach(level), uncertain, last=False)[0] == near


def test_bounds_of_a_panel_enclose_it():
    rng = np.random.default_rng(5)
    values = rng.normal(size=(300, 13)) * 10.0 ** -np.arange(13) @ np.linalg.inv(np.vander(GRID, 13)).T
    panels = Panels(np.zeros(300, dtype=int), np.arange(300.0), np.ones(300), values, np.zeros(1, dtype=int))
    outline = Outline.of(panels)
    dense = values @ value_matrix(np.linspace(0.0, 1.0, 401))
    assert (outline.low <= dense.min(axis=1) + 1e-9).all()
    assert (outline.high >= dense.max(axis=1) - 1e-9).all()


# Integral control of a pure dead time of 1: y is a polynomial on every delay, known to any number of digits.


def integral_response(gain, t):
    """y of K e^(-s)/s in unity feedback: Σ (-1)^m (K (t - m - 1))^(m + 1) / (m + 1)!, in mpmath."""
    whole = int(mp.floor(t))
    terms = ((-1) ** m * (gain * (t - m - 1)) ** (m + 1) / mp.factorial(m + 1) for m in range(whole))
    return mp.fsum(terms)


def extremum(gain, count):
    """Time of extremum number `count`, the first peak being 1: y' = K (1 - y(t - 1)), so y is 1 one delay
    sooner."""
    with mp.workdps(60):
        edge, found = mp.mpf("1.5"), []
        step = mp.mpf("0.05")
        while len(found) < count:
            if (integral_response(gain, edge) - 1) * (integral_response(gain, edge + step) - 1) < 0:
                root = mp.findroot(
                    lambda t: integral_response(gain, t) - 1,
                    (edge, edge + step),
                    solver="anderson",
                    tol=1e-40,
                )
                found.append(root + 1)
            edge += step
        return found[-1]


@pytest.mark.parametrize("gain", ["0.9", "1.2", "1.4"])
@pytest.mark.parametrize("count", [2, 3, 7])
@pytest.mark.parametrize("gap", [1e-3, 1e-6, 1e-8, -1e-8, -1e-6, -1e-3])
def test_grazing_extrema_with_dead_time(gain, count, gap):
    """The band is the height of an extremum times 1 + gap: left just after it, or one swing sooner."""
    with mp.workdps(60):
        k = mp.mpf(gain)
        top = extremum(k, count)
        height = abs(integral_response(k, top) - 1)
        band = float(height * (1 + mp.mpf(gap)))
        last = top if band < height else extremum(k, count - 1)
        expected = mp.findroot(
            lambda t: abs(integral_response(k, t) - 1) - band,
            (last + mp.mpf(10) ** -30, last + mp.mpf("0.9")),
            solver="anderson",
            tol=1e-40,
        )
    loops = close(
        Rational.of([[float(gain)]], [[1.0, 0.0]], 1.0),
        Rational.of([[1.0]], [[1.0]]),
        *np.zeros((2, 1), dtype=int),
    )
    measure = Measure("settling_time", band=band)
    found = delayed_time_stage(loops, delayed_poles(loops, np.zeros(1)), (measure,))
    got = found.values[measure][0] * loops.time_scale[0]
    assert got == pytest.approx(float(expected), rel=1e-6)
    assert abs(gap) * band < 1e-8 or not found.approximate[measure][0]


def test_the_time_of_an_extremum_on_the_edge_itself_is_flagged():
    with mp.workdps(60):
        band = float(abs(integral_response(mp.mpf("1.2"), extremum(mp.mpf("1.2"), 3)) - 1))
    loops = close(
        Rational.of([[1.2]], [[1.0, 0.0]], 1.0), Rational.of([[1.0]], [[1.0]]), *np.zeros((2, 1), dtype=int)
    )
    measure = Measure("settling_time", band=band)
    assert delayed_time_stage(loops, delayed_poles(loops, np.zeros(1)), (measure,)).approximate[measure][0]


def late_mode(numerator, denominator, delay, near):
    """Root of D + N e^(-sθ) near `near` and its residue in T/s, without the e^(-sθ) of y, in 40 digits."""
    with mp.workdps(40):
        num, den = ([mp.mpf(float(v)) for v in part[::-1]] for part in (numerator, denominator))

        def value(s):
            return mp.polyval(den, s, asc=True) + mp.polyval(num, s, asc=True) * mp.exp(-s * delay)

        root = mp.findroot(value, mp.mpc(near))
        return root, mp.polyval(num, root, asc=True) / (root * mp.diff(value, root))


@pytest.mark.parametrize("delay", [0.4, 2.0])
@pytest.mark.parametrize(("omega", "zeta"), [(3.0, 0.01), (9.0, 0.003), (15.0, 0.002)])
@pytest.mark.parametrize("share", [3e-3, 6e-3])
def test_a_small_ringing_tail_with_dead_time(delay, omega, zeta, share):
    """Long after the response has arrived a light mode, all but cancelled, still leaves the band of 0.1 %."""
    band, reset = 1e-3, 0.3 + 0.5 * delay
    pair = omega * complex(-zeta, np.sqrt(1.0 - zeta**2))

    def loop(off):
        """1/(reset s + 1) and the mode beside a pair of zeros, under a PI of gain 1/2."""
        zeros = np.array([1.0, 2.0 * zeta * omega, (omega + off) ** 2]) * (omega / (omega + off)) ** 2
        return zeros, np.polymul([2.0 * reset, 0.0], [1.0, 2.0 * zeta * omega, omega**2])

    # the mode's share is in proportion to the distance of the zeros while that is small; one side is stable
    probe = 1e-5
    slope = 2.0 * abs(complex(late_mode(*loop(probe), delay, pair)[1])) / probe
    stable = [
        off for off in (share / slope, -share / slope) if late_mode(*loop(off), delay, pair)[0].real < 0
    ]
    numerator, denominator = loop(stable[0])
    loops = close(
        Rational.of([numerator], [denominator], delay),
        Rational.of([[1.0]], [[1.0]]),
        *np.zeros((2, 1), dtype=int),
    )
    poles = delayed_poles(loops, np.zeros(1))
    measure = Measure("settling_time", band=band)
    found = delayed_time_stage(loops, poles, (measure,))
    got = found.values[measure][0] * loops.time_scale[0] - delay

    # the same roots, and their residues, in 40 digits
    starts = poles[0, poles[0].imag >= 0.0] / loops.time_scale[0]
    modes = [late_mode(numerator, denominator, delay, s) for s in starts]
    with mp.workdps(40):

        def error(t):
            return mp.fsum((1 + (p.imag > 0)) * mp.re(r * mp.exp(p * t)) for p, r in modes)

        before, after = (abs(error(mp.mpf(got) * (1 + side * mp.mpf("1e-6")))) for side in (-1, 1))
    assert before > band > after
    assert got > 15.0 * delay  # late enough for so few modes
    assert not found.approximate[measure][0]
    slowest = max(p.real for p, _ in modes)
    later = np.arange(got * (1.0 + 1e-6), got + 4.0 / -float(slowest), 0.02 / omega)
    weights = [(complex(p), complex(r) * (1 + (p.imag > 0))) for p, r in modes]
    assert (np.abs(sum((r * np.exp(p * later)).real for p, r in weights)) <= band).all()
