"""Loops with dead time against a dense look of their own, and against the limit of no dead time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from synth.loop.frequency.stage import KEYS, frequency_stage


def golden(f, a, b):
    """Maximum of f between a and b, one hump, by shrinking grids."""
    for _ in range(12):
        t = np.linspace(a, b, 41)
        k = int(np.argmax(f(t)))
        a, b = t[max(k - 1, 0)], t[min(k + 1, 40)]
    return float(f(np.array([(a + b) / 2]))[0])


def bisect(f, a, b):
    left = f(np.array([a]))[0] >= 0
    for _ in range(100):
        m = (a + b) / 2
        a, b = (m, b) if (f(np.array([m]))[0] >= 0) == left else (a, m)
    return (a + b) / 2


def dense(loops, i):
    """Every quantity from half a million nodes, refined where it matters."""
    num, den, con = loops.numerator[i], loops.denominator[i], loops.control[i]
    theta, k = loops.dead_time[i], abs(num[0] / den[0])
    roots = np.concatenate([np.roots(np.trim_zeros(p, "f")) for p in (num, den, con)])
    size = np.abs(roots[roots != 0])
    size = size if size.size else np.ones(1)
    w = [np.geomspace(min(size.min(), 1 / theta) * 1e-3, max(size.max(), 1 / theta) * 3e3, 150_000)]
    w.append(np.linspace(0, 100 / theta, 100_000)[1:])
    w.append(np.linspace(0, min(1000 / theta, size.max() * 300), 200_000)[1:])
    w += [s * (1 + np.linspace(-0.3, 0.3, 4001)) for s in np.unique(size)]
    w = np.unique(np.concatenate(w))

    def loop(x):
        return np.polyval(num, 1j * x) / np.polyval(den, 1j * x) * np.exp(-1j * x * theta)

    def closed(x):
        return np.polyval(den, 1j * x) + np.polyval(num, 1j * x) * np.exp(-1j * x * theta)

    out = {}
    for key, p, end in (
        ("sensitivity_peak", den, 1 / (1 - k)),
        ("complementary_peak", num, k / (1 - k)),
        ("noise_gain", con, abs(con[0] / den[0]) / (1 - k)),
    ):

        def f(x, p=p):
            return np.abs(np.polyval(p, 1j * x) / closed(x))

        j = int(np.argmax(f(w)))
        top = golden(f, w[max(j - 1, 0)], w[min(j + 1, len(w) - 1)])
        out[key] = max(top, end, abs(p[-1] / (num[-1] + den[-1])))

    final = abs(num[-1] / (num[-1] + den[-1]))
    if final == 0:
        out["bandwidth"] = out["highest_fall"] = np.nan
    else:

        def above(x):
            return np.abs(loop(x) / (1 + loop(x))) - final / np.sqrt(2)

        up = above(w) >= 0
        falls = (
            [bisect(above, w[j], w[j + 1]) for j in np.flatnonzero(up[:-1] & ~up[1:])[[0, -1]]]
            if (up[:-1] & ~up[1:]).any()
            else []
        )
        out["bandwidth"] = min(falls, default=np.inf)
        recurs = k > 0 and k / (1 - k) > final / np.sqrt(2) > k / (1 + k)
        out["highest_fall"] = np.inf if recurs else max(falls, default=np.nan)

    value = loop(w)
    cross = (value.imag[1:] >= 0) != (value.imag[:-1] >= 0)
    cross &= (value.real[1:] < 0) | (value.real[:-1] < 0)
    at = np.flatnonzero(cross)
    # those nearest to a gain of one on either side are enough
    order = at[np.argsort(np.abs(np.log(np.abs(value[at]))))][:12]
    points = np.array([bisect(lambda x: loop(x).imag, w[j], w[j + 1]) for j in order])
    sizes = np.abs(loop(points)) if points.size else np.empty(0)
    if k:
        sizes = np.append(sizes, k)
    if den[-1] and num[-1] / den[-1] < 0:
        sizes = np.append(sizes, abs(num[-1] / den[-1]))
    change = 20 * np.log10(sizes)
    out["gain_margin_up"] = -change[change <= 0].max() if (change <= 0).any() else np.inf
    out["gain_margin_down"] = change[change >= 0].min() if (change >= 0).any() else np.inf
    return out


@pytest.mark.parametrize("light", [False, True], ids=["usual damping", "light"])
@pytest.mark.parametrize("order", [1, 2, 3, 5, 7])
def test_random_loops_agree_with_a_dense_look(delayed_loops, poles_of, order, light):
    loops = delayed_loops(10 * order + light, order, 5, light=light)
    found = frequency_stage(loops, poles_of(loops), KEYS)
    for i in range(len(loops)):
        for key, expected in dense(loops, i).items():
            value = found[key][i]
            assert value == pytest.approx(expected, rel=2e-7, abs=1e-6, nan_ok=True), (i, key)


def test_gain_crossovers_do_not_feel_the_dead_time_but_their_margins_do(delayed_loops, poles_of):
    loops = delayed_loops(5, 4, 20)
    without = frequency_stage(replace(loops, dead_time=0 * loops.dead_time), poles_of(loops), KEYS)
    found = frequency_stage(loops, poles_of(loops), KEYS)
    np.testing.assert_array_equal(found["crossover"], without["crossover"])
    crossing = np.isfinite(without["delay_margin"])
    np.testing.assert_allclose(
        (found["delay_margin"] + loops.dead_time)[crossing], without["delay_margin"][crossing], rtol=1e-9
    )


def test_a_vanishing_dead_time_changes_nothing(random_loops, poles_of):
    loops = random_loops(3, 4, 30)
    proper = np.abs(loops.numerator[:, 0]) == 0  # with L(∞) ≠ 0 the limits differ however short it is
    loops = loops.rows(np.flatnonzero(proper))
    poles = poles_of(loops)
    without = frequency_stage(loops, poles, KEYS)
    found = frequency_stage(replace(loops, dead_time=np.full(len(loops), 1e-9)), poles, KEYS)
    for key in KEYS - {"gain_margin_up", "gain_margin"}:  # a far crossing appears, at hundreds of dB
        np.testing.assert_allclose(found[key], without[key], rtol=1e-6, atol=1e-7)


def test_rows_alone_agree_with_rows_in_company(delayed_loops, poles_of):
    loops = delayed_loops(8, 5, 30, light=True)
    poles = poles_of(loops)
    together = frequency_stage(loops, poles, KEYS)
    for i in range(0, len(loops), 5):
        alone = frequency_stage(loops.rows(np.array([i])), poles[[i]], KEYS)
        for key in KEYS:
            np.testing.assert_allclose(alone[key][0], together[key][i], rtol=1e-8)


def test_ten_turns_of_phase_lead_do_not_hide_the_crossing(measure):
    # the loop gain falls so slowly against the dead time that |L| = 0.999 ... 0.2 takes many turns
    m = measure(([[0.95]], [[1.0, 1.0]]), ([[1.0]], [[1.0]]), 40.0)
    w = np.linspace(0.001, 5.0, 3_000_001)
    loop = 0.95 / (1 + 1j * w) * np.exp(-40j * w)
    assert m["sensitivity_peak"] == pytest.approx(np.max(1 / np.abs(1 + loop)), rel=1e-6)
    above = np.abs(loop / (1 + loop)) > 0.95 / 1.95 / np.sqrt(2)
    falls = w[np.flatnonzero(above[:-1] & ~above[1:])]
    assert len(falls) > 10
    assert m["bandwidth"] == pytest.approx(falls[0], abs=2e-6)
    assert m["highest_fall"] == pytest.approx(falls[-1], abs=2e-6)


def test_the_noise_gain_of_a_lead_that_rises_beyond_the_crossover(measure):
    # C S ripples round |C| far above the crossover: the top of the envelope decides
    plant = ([[1.0]], [[1.0, 0.0]])
    m = measure(plant, ([[0.8, 0.8]], [[0.002, 1.0]]), 0.05)
    w = np.linspace(0.1, 40_000, 4_000_001)
    c = 0.8 * (1j * w + 1) / (0.002j * w + 1)
    sampled = np.max(np.abs(c / (1 + c / (1j * w) * np.exp(-0.05j * w))))
    assert m["noise_gain"] >= sampled * (1 - 1e-9)
    assert m["noise_gain"] == pytest.approx(sampled, rel=1e-4)


def test_a_peak_beside_a_near_zero_of_the_numerator_is_found(measure):
    # C S has light zeros, the plant's poles at 1.96 rad/s, and its peak at 2.1 rad/s beside them
    plant = ([[0.5986]], [[1 / 3.83735, 0.08518, 1.0]])
    compensator = ([[0.5438815, 0.3583349]], [[1.5178025, 0.0]])
    m = measure(plant, compensator, 0.2211)
    s = 1j * np.linspace(0.5, 8.0, 2_000_001)
    c = np.polyval(compensator[0][0], s) / np.polyval(compensator[1][0], s)
    loop = c * 0.5986 / np.polyval(plant[1][0], s) * np.exp(-0.2211 * s)
    assert m["noise_gain"] == pytest.approx(np.max(np.abs(c / (1 + loop))), rel=1e-8)


def test_a_resonance_hundreds_of_turns_out_is_found(measure):
    # dead time 300 s, a light mode at 5 rad/s: 240 turns away from the crossover
    den = np.polymul([1.0, 0.05], [1 / 25, 0.002, 1.0])
    m = measure(([[0.05]], [den.tolist()]), ([[0.1]], [[1.0]]), 300.0)
    s = 1j * np.linspace(4.5, 5.5, 4_000_001)
    loop = 0.005 / np.polyval(den, s) * np.exp(-300 * s)
    near = np.max(1 / np.abs(1 + loop))
    slow = 1j * np.linspace(1e-4, 1.0, 2_000_001)
    far = np.max(1 / np.abs(1 + 0.005 / np.polyval(den, slow) * np.exp(-300 * slow)))
    assert m["sensitivity_peak"] == pytest.approx(max(near, far), rel=1e-6)


COMPENSATOR = ([8.42424026598e-10, 1.54621968e-05, 0.2949], [1.3999942e-10, 4.961e-05, 0.0])


def converter(capacitor, load=2.0):
    """A step-down converter, duty ratio to voltage: (numerator, denominator)."""
    inductor, resistance = 33e-6, 25e-3
    middle = inductor / load + resistance * capacitor
    return [24.0], [inductor * capacitor, middle, 1.0 + resistance / load]


def converter_loop(plant, w):
    s = 1j * w
    ratio = np.polyval(plant[0], s) / np.polyval(plant[1], s) * np.exp(-2.5e-6 * s)
    return ratio * np.polyval(COMPENSATOR[0], s) / np.polyval(COMPENSATOR[1], s)


def test_a_close_pair_of_phase_crossings_limits_the_downward_margin(measure):
    # L crosses the negative axis at 15071 and 15438 rad/s; between them its phase is a thousandth of a degree
    # beyond it
    plant = converter(216e-6)
    found = measure(plant, COMPENSATOR, 2.5e-6)["gain_margin_down"]
    w = np.linspace(14000.0, 16500.0, 25001)
    crossed = np.flatnonzero(np.diff(np.sign(converter_loop(plant, w).imag)))
    assert len(crossed) == 2
    at = bisect(lambda x: converter_loop(plant, x).imag, w[crossed[1]], w[crossed[1] + 1])
    assert found == pytest.approx(20.0 * np.log10(abs(converter_loop(plant, at))), rel=1e-6)
    assert found == pytest.approx(20.42, abs=0.01)


def test_a_phase_that_turns_back_just_beyond_the_negative_axis_is_told_from_one_just_short_of_it(measure):
    w = np.linspace(8e3, 3e4, 400_001)
    pairs = 0
    for capacitor in np.linspace(214e-6, 222e-6, 33):
        plant = converter(capacitor)
        imaginary = converter_loop(plant, w).imag
        found = measure(plant, COMPENSATOR, 2.5e-6, ("gain_margin_down",))["gain_margin_down"]
        crossed = np.flatnonzero(np.diff(np.sign(imaginary)))
        if not len(crossed):
            assert found == np.inf
            continue
        pairs += 1
        size = np.abs(converter_loop(plant, w[crossed])).min()
        assert found == pytest.approx(20.0 * np.log10(size), abs=1e-3)
    assert 0 < pairs < 33
