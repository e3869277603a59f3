"""Step responses again: exact exponentials of a state-space realisation, on a grid of their own.

Without dead time the closed loop is advanced by the matrix exponential, step after step, the step doubling as
fast modes die out. With dead time the method of steps is used: over one dead time after the other the delayed
output is a known input, cubic between the nodes, and the open loop is advanced exactly for such an input.
Between nodes values and slopes define a cubic; every quantity is read from these cubics. No poles' residues
are involved.

Source of the exponential with inputs: C. F. Van Loan, Computing integrals involving the matrix exponential,
IEEE Trans. Automatic Control 23 (1978) 395-404.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import expm

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.quantities import Measure
from synth.verify.subject import Subject

_PER_TURN = 64  # nodes in a period of the fastest mode that still counts
_DEAD = 1e-9  # amplitude at which a mode no longer counts
_MOST_NODES = 100_000
_MOST_STEPS = 20_000  # with dead time


class NotSimulated(Exception):
    """The response takes more nodes than a second opinion may cost."""


@dataclass(frozen=True, slots=True)
class Trace:
    """One signal as cubics: cell i runs from t[i] to t[i] + h[i], values and slopes at its two ends."""

    t: FloatArray
    h: FloatArray
    left: FloatArray
    right: FloatArray
    slope_left: FloatArray
    slope_right: FloatArray

    def at(self, cell: int, x: FloatArray) -> FloatArray:
        """Values in one cell at 0 <= x <= 1 of its width."""
        h = self.h[cell]
        a, b = self.left[cell], self.right[cell]
        p, q = self.slope_left[cell] * h, self.slope_right[cell] * h
        out: FloatArray = (
            a * (1 - x) ** 2 * (1 + 2 * x)
            + b * x**2 * (3 - 2 * x)
            + p * x * (1 - x) ** 2
            - q * x**2 * (1 - x)
        )
        return out


@dataclass(frozen=True, slots=True)
class Response:
    """y and u for a unit step of r, y for a unit step of d."""

    y: Trace
    u: Trace
    load: Trace


def respond(subject: Subject, poles: ComplexArray | None) -> Response:
    """Simulate until every mode has died out. Raises NotSimulated."""
    if subject.dead_time > 0.0:
        return _with_dead_time(subject, poles)
    assert poles is not None
    return _without_dead_time(subject, poles)


def _realised(
    numerator: tuple[float, ...], denominator: tuple[float, ...], unit: float
) -> tuple[FloatArray, ...]:
    """(A, b, c, d) in controllable form, time counted in `unit` seconds."""
    scale = unit ** -np.arange(len(denominator) - 1, -1, -1.0)
    den = np.asarray(denominator) * scale
    num = np.concatenate((np.zeros(len(denominator) - len(numerator)), numerator)) * scale
    num, den = num / den[0], den / den[0]
    n = len(den) - 1
    d = num[0]
    a = np.diag(np.ones(n - 1), 1) if n else np.zeros((0, 0))
    b = np.zeros(n)
    if n:
        a[-1] = -den[1:][::-1]
        b[-1] = 1.0
    c = (num[1:] - d * den[1:])[::-1]
    return a, b, c, np.array(d)


def _open(subject: Subject, unit: float) -> tuple[FloatArray, ...]:
    """States x = [plant, compensator], inputs (r, d, y): x' = A x + B (r, d, y); w = C x + D (r, d, y) is the
    plant's output before the dead time, u = Cu x + Du (r, d, y)."""
    ap, bp, cp, dp = _realised(subject.plant.numerator, subject.plant.denominator, unit)
    ac, bc, cc, dc = _realised(subject.numerator, subject.denominator, unit)
    n, m = len(bp), len(bc)
    a = np.block([[ap, np.outer(bp, cc)], [np.zeros((m, n)), ac]])
    e = np.array([1.0, 0.0, -1.0])  # r - y
    load = np.array([0.0, 1.0, 0.0])
    b = np.vstack((np.outer(bp, dc * e + load), np.outer(bc, e)))
    c = np.concatenate((cp, dp * cc))
    d = dp * (dc * e + load)
    cu = np.concatenate((np.zeros(n), cc))
    return a, b, c, d, cu, dc * e


def _without_dead_time(subject: Subject, poles: ComplexArray) -> Response:
    sizes = np.abs(poles)
    unit = float(1.0 / np.exp(np.log(sizes).mean())) if sizes.size else 1.0
    a, b, c, d, cu, du = _open(subject, unit)
    # y = c x + d (r, d, y): close the algebraic loop
    close = 1.0 / (1.0 - d[2])
    cy, dy = c * close, d[:2] * close
    acl, bcl = a + np.outer(b[:, 2], cy), b[:, :2] + np.outer(b[:, 2], dy)
    cul, dul = cu + du[2] * cy, du[:2] + du[2] * dy
    n = len(acl)
    p = poles * unit
    parts = []
    x = np.zeros((n, 2))
    t = 0.0
    nodes = 0
    end = float(np.max(-np.log(_DEAD) / -p.real)) if p.size else 1.0
    while t < end:
        alive = p[np.exp(p.real * t) > _DEAD]
        if not alive.size:
            break
        h = 2.0 * np.pi / (_PER_TURN * np.abs(alive).max())
        # long enough for the fastest mode to halve, so that steps grow as fast as modes die
        fastest = alive[np.abs(alive).argmax()]
        count = int(np.clip(np.ceil(np.log(2.0) / -fastest.real / h), 64, _MOST_NODES))
        count = min(count, max(2, int(np.ceil((end - t) / h)) + 1))
        nodes += count
        if nodes > _MOST_NODES:
            raise NotSimulated(f"more than {_MOST_NODES} nodes")
        block = _advance(acl, bcl, x, h, count)
        parts.append((t + h * np.arange(count), np.full(count, h), block))
        x = block[-1]
        t += h * count
    times = np.concatenate([q[0] for q in parts])
    steps = np.concatenate([q[1] for q in parts])
    left = np.concatenate([q[2][:-1] for q in parts])
    right = np.concatenate([q[2][1:] for q in parts])

    def trace(c_row: FloatArray, d_row: FloatArray, k: int) -> Trace:
        rate = c_row @ acl
        kick = float(c_row @ bcl[:, k])
        return Trace(
            times * unit,
            steps * unit,
            left[:, :, k] @ c_row + d_row[k],
            right[:, :, k] @ c_row + d_row[k],
            (left[:, :, k] @ rate + kick) / unit,
            (right[:, :, k] @ rate + kick) / unit,
        )

    return Response(trace(cy, dy, 0), trace(cul, dul, 0), trace(cy, dy, 1))


def _advance(a: FloatArray, b: FloatArray, x: FloatArray, h: float, count: int) -> FloatArray:
    """States (count + 1, n, inputs) under constant unit inputs, by doubling the number known."""
    n, inputs = b.shape
    big = np.zeros((n + inputs, n + inputs))
    big[:n, :n], big[:n, n:] = a * h, b * h
    power = expm(big)
    out = np.empty((count + 1, n + inputs, inputs))
    out[0, :n], out[0, n:] = x, np.eye(inputs)
    known = 1
    while known < count + 1:
        more = min(known, count + 1 - known)
        out[known : known + more] = power @ out[:more]
        power = power @ power
        known += more
    return out[:, :n]


def _with_dead_time(subject: Subject, poles: ComplexArray | None) -> Response:
    theta = subject.dead_time
    a, b, c, d, cu, du = _open(subject, theta)
    through = abs(d[2])
    slowest = -poles.real.max() * theta if poles is not None and poles.size else 0.3
    if through > 0.0:
        slowest = min(slowest, -np.log(through))
    every = (subject.plant.numerator, subject.plant.denominator, subject.numerator, subject.denominator)
    fast = float(max(np.abs(np.roots(q)).max(initial=1.0 / theta) * theta for q in every))
    turns = int(np.ceil(-np.log(1e-7) / max(slowest, 1e-9))) + 2
    m = int(np.clip(np.ceil(_PER_TURN * fast / (2.0 * np.pi)), 16, 400))
    if m * turns > _MOST_STEPS:
        raise NotSimulated(f"more than {_MOST_STEPS} steps")
    ramp = np.linspace(0.0, 1.0, m + 1)
    step, delayed, kick = _steps(a, b, 1.0 / m)
    n = len(a)
    past = np.zeros((4, m, 2))  # y in the cells of the last dead time: left, right, slope left, slope right
    states = np.zeros((m + 1, n, 2))
    seen, pushed = [], []
    for _ in range(turns):
        forced = np.tensordot(_powers(past), delayed, axes=(0, 1)).transpose(0, 2, 1) + kick
        x = states[-1].copy()
        states[0] = x
        for k in range(m):
            x = step @ x + forced[k]
            states[k + 1] = x
        now, push = np.empty((4, m, 2)), np.empty((4, m, 2))
        for side, rows in ((0, states[:-1]), (1, states[1:])):
            y, slope = past[side], past[2 + side]
            rate = a @ rows + b[:, 2][:, None] * y[:, None, :] + b[:, :2]
            now[side], now[2 + side] = c @ rows + d[:2] + d[2] * y, c @ rate + d[2] * slope
            push[side], push[2 + side] = cu @ rows + du[:2] + du[2] * y, cu @ rate + du[2] * slope
        seen.append(past)
        pushed.append(push)
        past = now
    t = np.concatenate([(k + ramp[:-1]) * theta for k in range(turns)])
    widths = np.full(len(t), theta / m)

    def trace(parts: list[FloatArray], k: int) -> Trace:
        left, right, slope_left, slope_right = np.concatenate(parts, axis=1)[:, :, k]
        return Trace(t, widths, left, right, slope_left / theta, slope_right / theta)

    return Response(trace(seen, 0), trace(pushed, 0), trace(seen, 1))


def _steps(a: FloatArray, b: FloatArray, h: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """exp(A h), and what inputs add over one step: a delayed y of 1, s, s², s³ with s = 0..1, (n, 4); then r
    and d of 1, (n, 2)."""
    n = len(a)
    big = np.zeros((n + 4, n + 4))
    big[:n, :n], big[:n, n] = a * h, b[:, 2] * h
    for j in range(3):
        big[n + j, n + j + 1] = 1.0
    power = expm(big)
    # a chain of integrators: started from its j-th state it yields s^j/j!
    delayed = power[:n, n:] * np.array([1.0, 1.0, 2.0, 6.0])
    big = np.zeros((n + 2, n + 2))
    big[:n, :n], big[:n, n:] = a * h, b[:, :2] * h
    return power[:n, :n], delayed, expm(big)[:n, n:]


def _powers(cells: FloatArray) -> FloatArray:
    """(4, m, k) ends and slopes of m cubics of width 1/m to their coefficients of 1, s, s², s³."""
    a, b = cells[0], cells[1]
    p, q = cells[2] / cells.shape[1], cells[3] / cells.shape[1]
    return np.array([a, p, 3.0 * (b - a) - 2.0 * p - q, 2.0 * (a - b) + p + q])


def time_values(
    subject: Subject, response: Response, measures: tuple[Measure, ...], final: float
) -> dict[Measure, float]:
    """The wanted time quantities, SI. final : T(0)."""
    out: dict[Measure, float] = {}
    y, load = response.y, response.load
    for m in measures:
        name = m.quantity
        if name in ("overshoot", "undershoot", "rise_time", "peak_time", "settling_time") and final == 0.0:
            out[m] = np.nan
        elif name == "overshoot":
            out[m] = 100.0 * max(0.0, _top(y, 1.0 / final)[0] - 1.0)
        elif name == "undershoot":
            out[m] = 100.0 * max(0.0, _top(y, -1.0 / final)[0])
        elif name == "peak_time":
            value, when = _top(y, 1.0 / final)
            out[m] = when if value > 1.0 + 1e-6 else np.nan
        elif name == "rise_time":
            out[m] = _first(y, m.span[1] * final) - _start(subject, y, m.span[0] * final)
        elif name == "settling_time":
            out[m] = _last_outside(y, final, m.band)
        elif name == "tracking_area":
            out[m] = _area(y, 1.0) if abs(final - 1.0) < 1e-12 else np.inf
        elif name == "control_peak":
            out[m] = abs(subject.reference_step) * max(_top(response.u, 1.0)[0], _top(response.u, -1.0)[0])
        elif name == "disturbance_peak":
            out[m] = max(_top(load, 1.0)[0], _top(load, -1.0)[0])
        elif name == "disturbance_area":
            # read off coefficients: where the nodes end a slow tail is still on its way
            out[m] = _area(load, 0.0) if subject.load()[-1] == 0 else np.inf
    return out


def _top(trace: Trace, factor: float) -> tuple[float, float]:
    """Largest value of factor · trace, and when."""
    y = factor * np.maximum(trace.left * np.sign(factor), trace.right * np.sign(factor)) * np.sign(factor)
    best, when = -np.inf, 0.0
    for cell in np.argsort(-y)[:3]:
        for near in range(max(int(cell) - 1, 0), min(int(cell) + 2, len(y))):
            x = np.linspace(0.0, 1.0, 201)
            z = factor * trace.at(near, x)
            j = int(np.argmax(z))
            if z[j] > best:
                fine = np.linspace(x[max(j - 1, 0)], x[min(j + 1, 200)], 201)
                top = factor * trace.at(near, fine)
                best = float(top.max())
                when = float(trace.t[near] + trace.h[near] * fine[int(np.argmax(top))])
    return best, when


def _cross(trace: Trace, cell: int, level: float, last: bool) -> float:
    """First (or last) passage of the level within a cell."""
    low, high = 0.0, 1.0
    for _ in range(4):
        x = np.linspace(low, high, 65)
        above = trace.at(cell, x) >= level
        flips = np.flatnonzero(above[1:] != above[:-1])
        if not flips.size:
            return float(trace.t[cell] + trace.h[cell] * (high if last else low))
        j = int(flips[-1] if last else flips[0])
        low, high = x[j], x[j + 1]
    return float(trace.t[cell] + trace.h[cell] * 0.5 * (low + high))


def _first(trace: Trace, level: float) -> float:
    """First time the signal reaches the level, from 0 towards it."""
    sign = np.sign(level) if level != 0.0 else 1.0
    hit_left, hit = trace.left * sign >= level * sign, trace.right * sign >= level * sign
    cell = int(np.argmax(hit | hit_left))
    return float(trace.t[cell]) if hit_left[cell] else _cross(trace, cell, level, last=False)


def _start(subject: Subject, trace: Trace, level: float) -> float:
    """First passage of the lower level; for 0 % the moment y leaves 0, which is after the dead time."""
    return subject.dead_time if level == 0.0 else _first(trace, level)


def _last_outside(trace: Trace, final: float, band: float) -> float:
    """Last time |y/y∞ - 1| > band; 0 where it never is."""
    z_left, z_right = trace.left / final - 1.0, trace.right / final - 1.0
    slope = np.maximum(np.abs(trace.slope_left), np.abs(trace.slope_right)) * trace.h / abs(final)
    suspect = np.flatnonzero(np.maximum(np.abs(z_left), np.abs(z_right)) + 0.25 * slope > band)
    for cell in suspect[::-1]:
        x = np.linspace(0.0, 1.0, 129)
        outside = np.abs(trace.at(int(cell), x) / final - 1.0) > band
        if outside.any():
            j = int(np.flatnonzero(outside)[-1])
            if j == 128:
                return float(trace.t[cell] + trace.h[cell])
            low, high = x[j], x[j + 1]
            for _ in range(30):
                middle = 0.5 * (low + high)
                z = abs(float(trace.at(int(cell), np.array([middle]))[0]) / final - 1.0)
                low, high = (middle, high) if z > band else (low, middle)
            return float(trace.t[cell] + trace.h[cell] * low)
    return 0.0


def _area(trace: Trace, level: float) -> float:
    """∫ |signal - level| dt: cubics in closed form, cells with a change of sign by fine sums."""
    a, b = trace.left - level, trace.right - level
    p, q = trace.slope_left * trace.h, trace.slope_right * trace.h
    whole = np.abs(trace.h * (0.5 * (a + b) + (p - q) / 12.0))
    mixed = np.flatnonzero(
        (a * b <= 0.0) | (np.minimum(np.abs(a), np.abs(b)) < 0.2 * np.maximum(np.abs(p), np.abs(q)))
    )
    x = ((np.arange(64) + 0.5) / 64.0).astype(float)
    for cell in mixed:
        whole[cell] = trace.h[cell] * np.abs(trace.at(int(cell), x) - level).mean()
    return float(whole.sum())
