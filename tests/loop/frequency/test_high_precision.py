"""Random loops against exact polynomials: integer-free, 60-digit roots of the same coefficients (mpmath)."""

from __future__ import annotations

import warnings

import mpmath as mp
import numpy as np
import pytest

from synth.loop.frequency.stage import KEYS, frequency_stage

SCALE = {"phase_margin": 1.0, "gain_margin": 1.0, "gain_margin_up": 1.0, "gain_margin_down": 1.0}
SCALE |= {"sensitivity_peak": 0.01, "complementary_peak": 0.01}


def halves(p):
    """Even and odd half in x = w² of descending coefficients: p(jw) = e + jw o."""
    up = [mp.mpf(float(c)) for c in p[::-1]]
    e = [c * (-1) ** i for i, c in enumerate(up[0::2])]
    o = [c * (-1) ** i for i, c in enumerate(up[1::2])]
    return e, o or [mp.mpf(0)]


def mul(a, b):
    out = [mp.mpf(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            out[i + j] += x * y
    return out


def add(a, b, factor=1):
    n = max(len(a), len(b))
    a, b = a + [mp.mpf(0)] * (n - len(a)), b + [mp.mpf(0)] * (n - len(b))
    return [x + factor * y for x, y in zip(a, b, strict=True)]


def square(p):
    e, o = halves(p)
    return add(mul(e, e), [mp.mpf(0), *mul(o, o)])


def horner(p, x):
    out = mp.mpf(0)
    for c in p:
        out = out * x + c
    return out


def slope(p):
    return [k * c for k, c in enumerate(p)][1:] or [mp.mpf(0)]


def positive_roots(p):
    while p and p[-1] == 0:
        p = p[:-1]
    while p and p[0] == 0:
        p = p[1:]
    if len(p) < 2:
        return []
    # the variable is stretched so that the roots lie round 1, which the iteration needs
    stretch = mp.power(abs(p[0] / p[-1]), mp.mpf(1) / (len(p) - 1))
    scaled = [c * stretch**k for k, c in enumerate(p)]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)  # newer versions want ascending order
        roots = mp.polyroots(scaled[::-1], maxsteps=2000, extraprec=600)
    return [mp.re(r) * stretch for r in roots if mp.re(r) > 0 and abs(mp.im(r)) < mp.mpf(10) ** -25 * abs(r)]


def reference(num, den, control):
    closed = [a + b for a, b in zip(num, den, strict=True)]
    n2, d2, c2, k2 = square(num), square(den), square(closed), square(control)

    def at(p, x):
        return horner([mp.mpf(float(c)) for c in p], mp.mpc(0, mp.sqrt(x)))

    out = {}
    gains = positive_roots(add(n2, d2, -1))
    values = [(mp.sqrt(x), at(num, x) / at(den, x)) for x in gains]
    out["crossover"] = max((w for w, _ in values), default=mp.nan)
    angles = [(w, mp.arg(-v)) for w, v in values]
    out["phase_margin"] = min((abs(mp.degrees(a)) for _, a in angles), default=mp.inf)
    out["delay_margin"] = min(((a if a > 0 else a + 2 * mp.pi) / w for w, a in angles), default=mp.inf)
    if abs(num[0]) >= abs(den[0]):
        out["delay_margin"] = mp.mpf(0)

    level = (mp.mpf(float(num[-1])) / mp.mpf(float(closed[-1]))) ** 2 / 2
    falling = add(n2, c2, -level)
    falls = []
    for x in positive_roots(falling) if num[-1] else []:
        if horner(slope(falling)[::-1], x) < 0:
            falls.append(mp.sqrt(x))
    out["bandwidth"] = min(falls, default=mp.inf) if num[-1] else mp.nan
    out["highest_fall"] = max(falls, default=mp.nan) if num[-1] else mp.nan

    (en, on), (ed, od) = halves(num), halves(den)
    sizes = []
    for x in positive_roots(add(mul(on, ed), mul(en, od), -1)):
        v = at(num, x) / at(den, x)
        if mp.re(v) < 0:
            sizes.append(abs(v))
    for a, b in ((num[-1], den[-1]), (num[0], den[0])):
        if b and a / b < 0:
            sizes.append(abs(mp.mpf(float(a)) / mp.mpf(float(b))))
    changes = [20 * mp.log10(s) for s in sizes]
    out["gain_margin_up"] = min((-c for c in changes if c <= 0), default=mp.inf)
    out["gain_margin_down"] = min((c for c in changes if c >= 0), default=mp.inf)
    out["gain_margin"] = min(out["gain_margin_up"], out["gain_margin_down"])

    for key, p, p2 in (
        ("sensitivity_peak", den, d2),
        ("complementary_peak", num, n2),
        ("noise_gain", control, k2),
    ):
        points = positive_roots(add(mul(slope(p2), c2), mul(p2, slope(c2)), -1))
        values = [abs(at(p, x) / at(closed, x)) for x in points]
        ends = [abs(mp.mpf(float(p[i])) / mp.mpf(float(closed[i]))) for i in (0, -1)]
        out[key] = max(values + ends)
    return out


def worst(loops, found, index):
    with mp.workdps(60):
        expected = reference(loops.numerator[index], loops.denominator[index], loops.control[index])
    errors = {}
    for key in KEYS:
        value, true = float(found[key][index]), float(expected[key])
        if value == true or (np.isnan(value) and np.isnan(true)):
            errors[key] = 0.0
        else:
            errors[key] = abs(value - true) / max(abs(true), SCALE.get(key, 0.0))
    return errors


@pytest.mark.parametrize("light", [False, True], ids=["usual damping", "damping down to 1e-4"])
@pytest.mark.parametrize("order", [1, 2, 3, 4, 6, 8, 10, 12])
def test_random_loops_agree_with_60_digits(random_loops, poles_of, order, light):
    count = 6 if order <= 4 else 3 if order <= 6 else 1
    loops = random_loops(100 * order + light, order, count, light=light)
    found = frequency_stage(loops, poles_of(loops), KEYS)
    for i in range(count):
        errors = worst(loops, found, i)
        assert max(errors.values()) < 1e-8, (i, errors)


def test_loops_of_every_kind(special):
    """Integrators, unstable plants, both gain margins, negative gains, direct paths, hidden modes ..."""
    found = frequency_stage(*special, KEYS)
    errors = worst(special[0], found, 0)
    assert max(errors.values()) < 1e-8, errors


@pytest.mark.parametrize("order", [3, 5])
def test_time_constants_fifteen_decades_apart(random_loops, poles_of, order):
    loops = random_loops(order, order, 4, spread=9.0)
    found = frequency_stage(loops, poles_of(loops), KEYS)
    for i in range(4):
        errors = worst(loops, found, i)
        assert max(errors.values()) < 1e-8, (i, errors)


def test_a_dipole_and_a_resonance_between_any_two_nodes(poles_of):
    from synth.loop.closed_loop import Rational, close

    # damping 1e-4, zeros a hundred-thousandth beside the poles: no grid sees them, |L| jumps by 10 % and back
    for shift in (1e-3, 1e-5):
        w = 3.37
        pole, zero = [1.0, 2e-4 * w, w**2], [1.0, 2e-4 * w * (1 + shift), (w * (1 + shift)) ** 2]
        plant = Rational.of([np.multiply(4.0, zero)], [np.polymul(np.polymul([1.0, 0.0], [0.25, 1.0]), pole)])
        loops = close(plant, Rational.of([[1.0]], [[1.0]]), np.zeros(1, dtype=int), np.zeros(1, dtype=int))
        found = frequency_stage(loops, poles_of(loops), KEYS)
        errors = worst(loops, found, 0)
        assert max(errors.values()) < 1e-7, errors


def test_rows_alone_agree_with_rows_in_company(random_loops, poles_of):
    loops = random_loops(9, 6, 40, light=True)
    poles = poles_of(loops)
    together = frequency_stage(loops, poles, KEYS)
    for i in range(0, 40, 7):
        alone = frequency_stage(loops.rows(np.array([i])), poles[[i]], KEYS)
        for key in KEYS:
            np.testing.assert_allclose(alone[key][0], together[key][i], rtol=1e-9)
