"""Designed loops with dead time that a look at samples would misread: needles, ties and grazing passages.

The reference of each is its own dense evaluation, crowded where the design says that something happens.
"""

from dataclasses import replace

import mpmath
import numpy as np
import pytest
from scipy.optimize import brentq

from synth.loop.frequency.stage import frequency_stage
from synth.loop.poles.encirclement import delayed_stable

PI = ([0.1, 0.05], [1.0, 0.0])


def needle(place, damping, share, delay=1.0):
    """A first-order lag plus a light mode at ω = place: (numerator, denominator), and the loop under PI."""
    mode = np.array([1.0 / place**2, 2.0 * damping / place, 1.0])
    lag = np.array([1.0, 1.0])
    plant = np.polyadd(mode, share * lag), np.polymul(lag, mode)

    def loop(w):
        s = 1j * np.asarray(w)
        ratio = np.polyval(plant[0], s) / np.polyval(plant[1], s)
        return ratio * np.polyval(PI[0], s) / np.polyval(PI[1], s) * np.exp(-s * delay)

    return plant, loop


def crowded(place, damping):
    """Frequencies round a mode, the closer the nearer, down to a thousandth of its width."""
    off = np.geomspace(1e-3 * damping, 0.15, 100_001)
    return place * np.concatenate([1.0 - off[::-1], [1.0], 1.0 + off])


@pytest.mark.parametrize("damping", [1e-3, 1e-5])
@pytest.mark.parametrize("place", [0.0371, 0.61, 1.903, 3.377, 6.26, 8.4999, 8.5001, 47.3, 411.7])
def test_a_needle_between_any_two_looks_is_found(measure, place, damping):
    # the mode adds a circle of half the size of the distance to -1, wherever the dead time has turned it
    share = 0.5 * 2.0 * damping / 0.1
    plant, loop = needle(place, damping, share)
    found = measure(plant, PI, 1.0, ("sensitivity_peak", "complementary_peak", "noise_gain"))
    w = np.concatenate([np.geomspace(1e-7, 1e3, 400_001), crowded(place, damping)])
    value = loop(w)
    controller = np.polyval(PI[0], 1j * w) / np.polyval(PI[1], 1j * w)
    expected = {
        "sensitivity_peak": np.abs(1.0 / (1.0 + value)),
        "complementary_peak": np.abs(value / (1.0 + value)),
        "noise_gain": np.abs(controller / (1.0 + value)),
    }
    for key, curve in expected.items():
        assert found[key] == pytest.approx(curve.max(), rel=1e-6), key


@pytest.mark.parametrize("place", [2.213, 5.9, 26.31])
def test_of_two_needles_almost_alike_the_higher_counts(measure, place):
    # two modes of one shape; the share of the second is tuned until both peaks are alike to 1e-6
    damping, delay = 1e-4, 1.0
    places = (place, 1.37 * place)

    def design(second):
        modes = [np.array([1.0 / p**2, 2.0 * damping / p, 1.0]) for p in places]
        lag = np.array([1.0, 1.0])
        numerator = np.polymul(modes[0], modes[1])
        numerator = np.polyadd(numerator, 1e-3 * np.polymul(lag, modes[1]))
        numerator = np.polyadd(numerator, second * np.polymul(lag, modes[0]))
        return numerator, np.polymul(np.polymul(lag, modes[0]), modes[1])

    def peaks(second):
        plant = design(second)
        out = []
        for p in places:
            s = 1j * crowded(p, damping)
            loop = (
                np.polyval(plant[0], s)
                / np.polyval(plant[1], s)
                * np.polyval(PI[0], s)
                / np.polyval(PI[1], s)
            )
            out.append(np.abs(1.0 / (1.0 + loop * np.exp(-s * delay))).max())
        return out

    def lead(second):
        first, other = peaks(second)
        return other / first - 1.0

    low, high = 1e-5, 1e-5
    while lead(high) < 0.0:
        high *= 1.5
    tie = brentq(lead, low, high, xtol=1e-9 * high)
    for second in (tie * (1.0 - 1e-5), tie * (1.0 + 1e-5)):
        found = measure(design(second), PI, delay, ("sensitivity_peak",))["sensitivity_peak"]
        both = peaks(second)
        assert found == pytest.approx(max(both), rel=1e-7)
        assert min(both) < max(both) * (1.0 - 1e-6)


def level_ratio(loop, w):
    """|T| over the level that it falls through, |T(0)|/√2 = 1/√2."""
    value = loop(w)
    return np.abs(value / (1.0 + value)) * np.sqrt(2.0)


@pytest.mark.parametrize("place", [0.83, 2.2, 7.11, 33.3, 150.2])
@pytest.mark.parametrize("excess", [1e-6, -1e-6])
def test_a_hump_that_grazes_the_level_counts_when_it_passes(measure, place, excess):
    # |T| has fallen long before; the mode lifts it back to the level, one part in a million above or below
    damping = 2e-3

    def height(share):
        _, loop = needle(place, damping, share)
        return level_ratio(loop, crowded(place, damping)).max() - 1.0 - excess

    high = 1e-4
    while height(high) < 0.0:
        high *= 1.3
    share = brentq(height, 1e-5, high, xtol=1e-12 * high, rtol=1e-14)
    plant, loop = needle(place, damping, share)
    found = measure(plant, PI, 1.0, ("highest_fall", "bandwidth"))
    w = np.geomspace(1e-3, 0.5 * place, 200_001)
    above = level_ratio(loop, w) >= 1.0
    first = w[np.flatnonzero(above[:-1] & ~above[1:])]
    assert found["bandwidth"] == pytest.approx(first[0], rel=1e-4)
    if excess > 0.0:
        assert found["highest_fall"] == pytest.approx(place, rel=0.01)
        assert level_ratio(loop, found["highest_fall"]) == pytest.approx(1.0, abs=1e-9)
    else:
        assert found["highest_fall"] == pytest.approx(first[-1], rel=1e-4)


def test_a_phase_that_grazes_the_negative_axis_gives_its_two_crossings(measure):
    # the notch of a light zero turns the phase back by a hair; with the last digits of the dead time it does
    # or does not reach the axis
    mode = np.array([1.0, 0.002, 1.0])
    zero = np.array([1.0, 0.0021, 1.0])

    def plant(delay):
        return (0.3 * zero, np.polymul(mode, [1.0, 0.0])), delay

    w = np.linspace(0.8, 1.3, 1_000_001)
    s = 1j * w

    def turned(delay):
        loop = 0.3 * np.polyval(zero, s) / np.polyval(mode, s) / s * np.exp(-s * delay)
        return loop

    counts = set()
    for delay in np.linspace(1.54, 1.60, 31):
        found = measure(plant(delay)[0], ([1.0], [1.0]), delay, ("gain_margin_up",))["gain_margin_up"]
        loop = turned(delay)
        crossed = np.flatnonzero((np.diff(np.sign(loop.imag)) != 0) & (loop.real[1:] < 0.0))
        counts.add(len(crossed))
        expected = -20.0 * np.log10(np.abs(loop[crossed]).max())
        assert found == pytest.approx(expected, abs=1e-3)
    assert len(counts) > 1


@pytest.mark.parametrize("light", [False, True])
@pytest.mark.parametrize("order", [2, 4, 6, 9])
def test_no_value_of_a_dense_look_exceeds_a_peak(delayed_loops, poles_of, order, light):
    loops = delayed_loops(70 + order + light, order, 60, light=light)
    keys = frozenset({"sensitivity_peak", "complementary_peak", "noise_gain"})
    found = frequency_stage(loops, poles_of(loops), keys)
    for i in range(len(loops)):
        theta = loops.dead_time[i]
        parts = (loops.numerator[i], loops.denominator[i], loops.control[i])
        roots = np.concatenate([np.roots(np.trim_zeros(p, "f")) for p in parts])
        light_ones = roots[(roots.imag > 0.0) & (np.abs(roots.real) < 0.2 * np.abs(roots))]
        near = [np.abs(p.imag) + np.abs(p.real) * np.linspace(-20.0, 20.0, 801) for p in light_ones]
        wide = np.geomspace(1e-4, 1e4, 40_001) / theta
        w = np.concatenate([wide, np.linspace(0.0, 200.0, 20_001)[1:] / theta, *near])
        s = 1j * w[w > 0.0]
        n, d, c = (np.polyval(p, s) for p in parts)
        closed = np.abs(d + n * np.exp(-s * theta))
        for key, top in (("sensitivity_peak", d), ("complementary_peak", n), ("noise_gain", c)):
            assert (np.abs(top) / closed).max() <= found[key][i] * (1.0 + 2e-7), (i, key)


def test_a_needle_in_40_digits(measure):
    place, damping = 3.377, 1e-5
    plant, _ = needle(place, damping, 1e-4)
    found = measure(plant, PI, 1.0, ("sensitivity_peak",))["sensitivity_peak"]
    with mpmath.workdps(40):
        numerator, denominator = ([mpmath.mpf(float(c)) for c in p] for p in plant)

        def sensitivity(w):
            s = mpmath.mpc(0, w)
            above, below = mpmath.mpc(0), mpmath.mpc(0)
            for c in numerator:
                above = above * s + c
            for c in denominator:
                below = below * s + c
            loop = above / below * (mpmath.mpf(0.1) * s + mpmath.mpf(0.05)) / s * mpmath.exp(-s)
            return abs(1 / (1 + loop))

        width = damping * place
        start = max((place + width * mpmath.mpf(k) / 50 for k in range(-200, 201)), key=sensitivity)
        top = mpmath.findroot(lambda w: mpmath.diff(sensitivity, w, h=1e-15), (start, start + width / 100))
        assert abs(found / float(sensitivity(top)) - 1.0) < 1e-8


@pytest.mark.parametrize("delay", [1e3, 1e5, 1e7])
def test_falls_ten_thousands_of_turns_out_are_the_first_and_the_last(measure, delay):
    # |L| falls so slowly against the dead time that |T| passes its level in thousands of ripples
    def loop(w):
        return 0.5 / (1.0 + 1j * np.asarray(w)) ** 2 * np.exp(-1j * np.asarray(w) * delay)

    found = measure(([0.5], [1.0, 2.0, 1.0]), ([1.0], [1.0]), delay, ("bandwidth", "highest_fall"))
    level = 0.5 / 1.5 / np.sqrt(2.0)
    # |T| first reaches down to the level where |L|/(1 + |L|) does, and last where |L|/(1 - |L|) does
    for key, gain, turns in (
        ("bandwidth", level / (1.0 - level), (-0.5, 4.0)),
        ("highest_fall", level / (1.0 + level), (-4.0, 0.5)),
    ):
        edge = np.sqrt(0.5 / gain - 1.0)
        w = edge + np.linspace(turns[0], turns[1], 800_001) * 2.0 * np.pi / delay
        value = loop(w)
        above = np.abs(value / (1.0 + value)) > level
        falls = w[np.flatnonzero(above[:-1] & ~above[1:])]
        expected = falls[0] if key == "bandwidth" else falls[-1]
        assert found[key] == pytest.approx(expected, abs=1e-4 / delay, rel=1e-12)


def test_falls_whose_turns_are_finer_than_the_digits(measure):
    # the edges of the range of |L| tell them, to the 1e-9 by which it is taken wider
    found = measure(([0.5], [1.0, 2.0, 1.0]), ([1.0], [1.0]), 1e15, ("bandwidth", "highest_fall"))
    level = 0.5 / 1.5 / np.sqrt(2.0)
    assert found["bandwidth"] == pytest.approx(np.sqrt(0.5 * (1.0 - level) / level - 1.0), rel=1e-8)
    assert found["highest_fall"] == pytest.approx(np.sqrt(0.5 * (1.0 + level) / level - 1.0), rel=1e-8)


def test_the_noise_gain_of_loops_with_very_long_dead_times(delayed_loops, poles_of):
    # C S far out: above every value of a dense look round the top of its bound, below that bound
    rng = np.random.default_rng(5)
    loops = delayed_loops(21, 4, 60, light=True)
    factor = np.exp(rng.uniform(-4.0, -1.0, len(loops)))[:, None]
    scaled = {name: getattr(loops, name) * factor for name in ("numerator", "control")}
    loops = replace(loops, **scaled, closed=loops.denominator + scaled["numerator"],
                    dead_time=loops.dead_time * np.exp(rng.uniform(2.0, 7.0, len(loops))))  # fmt: skip
    loops = loops.rows(np.flatnonzero(delayed_stable(loops)))
    assert len(loops) > 20
    found = frequency_stage(loops, poles_of(loops), frozenset({"noise_gain"}))["noise_gain"]
    far = 0
    for i in range(len(loops)):
        theta, parts = loops.dead_time[i], (loops.numerator[i], loops.denominator[i], loops.control[i])
        roots = np.concatenate([np.roots(np.trim_zeros(p, "f")) for p in parts])
        near = [abs(p.imag) + abs(p.real) * np.linspace(-20.0, 20.0, 2001) for p in roots]
        w = np.unique(np.concatenate([np.geomspace(1e-4, 1e5, 200_001), *near]))[1:]
        n, d, c = (np.abs(np.polyval(p, 1j * w)) for p in parts)
        bound = np.where(d > n, c / np.maximum(d - n, 1e-300), 0.0)
        top = w[np.argmax(bound)]
        around = top + np.linspace(-20.0, 20.0, 200_001) / theta
        s = 1j * np.abs(around)
        n, d, c = (np.polyval(p, s) for p in parts)
        looked = np.abs(c / (d + n * np.exp(-s * theta))).max()
        assert looked <= found[i] * (1.0 + 2e-7)
        if top * theta > 20.0:
            far += 1
            assert found[i] <= bound.max() * (1.0 + 1e-3)
    assert far > 10
