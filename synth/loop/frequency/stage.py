"""Frequency quantities of a stack of closed loops, one by one, from exact polynomials and dense grids."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.closed_loop import Loops

KEYS = (
    "bandwidth",
    "highest_fall",
    "crossover",
    "phase_margin",
    "gain_margin",
    "gain_margin_up",
    "gain_margin_down",
    "delay_margin",
    "sensitivity_peak",
    "complementary_peak",
    "noise_gain",
)


def frequency_stage(loops: Loops, poles: ComplexArray, wanted: frozenset[str]) -> dict[str, FloatArray]:
    """(M,) scaled values of the wanted frequency quantities of stable loops; other names are passed over."""
    keys = [k for k in KEYS if k in wanted]
    out = {k: np.full(len(loops), np.nan) for k in keys}
    if not keys:
        return out
    with np.errstate(all="ignore"):
        for i in range(len(loops)):
            found = _one(loops, i)
            for k in keys:
                out[k][i] = found[k]
    return out


def _square(p: FloatArray) -> FloatArray:
    """|p(jw)|^2 as a polynomial in w."""
    q = np.convolve(p, p * (-1.0) ** np.arange(len(p) - 1, -1, -1))
    return np.real(q * 1j ** np.arange(len(q) - 1, -1, -1))


def _positive(p: FloatArray) -> FloatArray:
    """Positive real roots w of a polynomial in w, sorted; ones off the axis by rounding are kept."""
    p = np.trim_zeros(p, "f")
    if len(p) < 2:
        return np.empty(0)
    r = np.roots(p)
    return np.sort(r.real[(r.real > 0) & (abs(r.imag) < 1e-7 * abs(r))])


def _changes(f: Callable[[FloatArray], FloatArray], w: FloatArray) -> FloatArray:
    """Zeros of f by bisection between the nodes w where the sign changes."""
    s = f(w) >= 0
    i = np.flatnonzero(s[:-1] != s[1:])
    a, b, left = w[i], w[i + 1], s[i]
    for _ in range(80):
        mid = np.where((a > 0) & (b > 4 * a), np.sqrt(a * b), (a + b) / 2)
        same = (f(mid) >= 0) == left
        a, b = np.where(same, mid, a), np.where(same, b, mid)
    return (a + b) / 2


def _sup(f: Callable[[FloatArray], FloatArray], w: FloatArray) -> float:
    """Largest f, by golden sections round the best nodes."""
    y = f(w)
    best = float(np.nanmax(y))
    for i in np.argsort(y)[-3:]:
        a, b = w[max(i - 1, 0)], w[min(i + 1, len(w) - 1)]
        for _ in range(6):
            t = np.linspace(a, b, 41)
            k = int(np.argmax(f(t)))
            best = max(best, float(f(t)[k]))
            a, b = t[max(k - 1, 0)], t[min(k + 1, 40)]
    return best


def _one(loops: Loops, i: int) -> dict[str, float]:
    num, den, con = loops.numerator[i], loops.denominator[i], loops.control[i]
    theta = float(loops.dead_time[i])
    closed = num + den
    k = num[0] / den[0]

    def loop(w: FloatArray) -> ComplexArray:
        out: ComplexArray = np.polyval(num, 1j * w) / np.polyval(den, 1j * w) * np.exp(-1j * w * theta)
        return out

    def delta(w: FloatArray) -> ComplexArray:
        out: ComplexArray = np.polyval(den, 1j * w) + np.polyval(num, 1j * w) * np.exp(-1j * w * theta)
        return out

    n2, d2 = _square(num), _square(den)
    gains = _positive(n2 - d2)
    if abs(num[-1]) == abs(den[-1]):
        gains = np.concatenate([[0.0], gains])
    roots = np.concatenate([np.roots(np.trim_zeros(p, "f")) for p in (num, den, con, closed) if p.any()])
    scales = abs(roots[roots != 0])
    low, high = (scales.min(), scales.max()) if scales.size else (1.0, 1.0)
    w = np.geomspace(low * 1e-4, high * 1e4, 4000)
    if scales.size:
        w = np.concatenate([w, *(np.outer(scales, 1 + np.linspace(-1, 1, 81) * 0.03))])
    if theta > 0:
        falls = _positive(n2 - max(0.05, abs(k) * 1.001) ** 2 * d2)
        w_end = max(60 / theta, falls.max() * 3 if falls.size else 0.0)
        turns = int(min(w_end * theta * 30, 60000))
        w = np.concatenate([w[w < w_end], np.linspace(0, w_end, turns)[1:]])
    w = np.unique(np.concatenate([w, gains[gains > 0]]))

    t0 = num[-1] / closed[-1]
    level = abs(t0) / np.sqrt(2)

    def t_excess(x: FloatArray) -> FloatArray:
        out: FloatArray = np.abs(np.polyval(num, 1j * x)) - level * np.abs(delta(x))
        return out

    crossings = _changes(t_excess, w)
    step = 1e-6
    falls = crossings[t_excess(crossings * (1 - step)) > 0]
    out: dict[str, float] = {}
    at_end = abs(k) / (1 + k) if theta == 0 else np.nan
    recurring = theta > 0 and k != 0 and abs(k) / (1 - abs(k)) > level > abs(k) / (1 + abs(k))
    if t0 == 0:
        out["bandwidth"] = out["highest_fall"] = np.nan
    else:
        out["bandwidth"] = falls.min() if falls.size else np.inf
        out["highest_fall"] = np.inf if recurring else falls.max() if falls.size else np.nan
    out["crossover"] = gains.max() if gains.size else np.nan

    values = loop(gains)
    values[gains == 0] = num[-1] / den[-1] if den[-1] != 0 else np.inf
    margin = np.angle(-values)
    out["phase_margin"] = np.degrees(np.abs(margin).min()) if gains.size else np.inf
    delays = np.mod(margin, 2 * np.pi) / gains
    out["delay_margin"] = 0.0 if abs(k) >= 1 else delays.min() if gains.size else np.inf

    phase = _changes(lambda x: np.imag(loop(x)), w)
    at = loop(phase)
    sizes = list(-at.real[at.real < 0])
    if den[-1] != 0 and num[-1] / den[-1] < 0:
        sizes.append(abs(num[-1] / den[-1]))
    if theta > 0 and k != 0:
        sizes.append(abs(k))
    elif k < 0:
        sizes.append(abs(k))
    db = 20 * np.log10(np.array(sizes)) if sizes else np.empty(0)
    up, down = -db[db < 0], db[db > 0]
    out["gain_margin_up"] = up.min() if up.size else np.inf
    out["gain_margin_down"] = down.min() if down.size else np.inf
    out["gain_margin"] = min(out["gain_margin_up"], out["gain_margin_down"])

    largest_s = 1 / (1 - abs(k)) if theta > 0 else 1 / (1 + k)
    ends = {
        "sensitivity_peak": (den, largest_s),
        "complementary_peak": (num, abs(k) * largest_s if theta > 0 else at_end),
        "noise_gain": (con, abs(con[0] / den[0]) * largest_s),
    }
    for key, (p, end) in ends.items():
        out[key] = max(
            _sup(lambda x, p=p: np.abs(np.polyval(p, 1j * x)) / np.abs(delta(x)), w),  # type: ignore[misc]
            abs(p[-1] / closed[-1]),
            end,
        )
    return out
