"""Step responses again: exact exponentials of a state-space realisation, on panels of their own.

One realisation in controllable form drives all three responses. Without dead time the closed loop is advanced
by exp(A h). With dead time the method of steps is used: over one dead time after the other the delayed output
is a known polynomial on each panel and the open loop is advanced exactly under it; once only a few true poles
are alive their modes take over, provided that they reproduce the last dead time simulated.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.quantities import Measure
from synth.verify.exponential import ladder
from synth.verify.panels import NODES, PER_PANEL, POINTS, Trace, edges, plan
from synth.verify.subject import Subject, scaled

_DEAD = 25.0  # a mode counts until it has shrunk by e^-25
_DEAD_IN_A_TURN = 45.0  # layers carry powers of t as well
_MOST_PANELS = 100_000
_MOST_IN_A_TURN = 60
_TURNS = (24, 64, 160, 400, 1000, 2500, 6000)
_SETTLED = 1e-11
_MATCH = 1e-9
_LEFT = 1e-6
_RESOLVED = 1e-8


class NotSimulated(Exception):
    """The response takes more panels than a second opinion may cost."""


@dataclass(frozen=True, slots=True)
class Response:
    """y and u for a unit step of r, y for a unit step of d."""

    y: Trace
    u: Trace
    load: Trace


def respond(subject: Subject, poles: ComplexArray | None) -> Response:
    """Simulate until every mode has died out. Raises NotSimulated."""
    with np.errstate(all="ignore"):
        if subject.dead_time > 0.0:
            response = _Delayed(subject, poles).response()
        elif poles is not None:
            response = _without_dead_time(subject, poles)
        else:
            raise NotSimulated("its poles are not known")
    if not all(np.isfinite(t.values).all() for t in (response.y, response.u, response.load)):
        raise NotSimulated("its numbers leave the range of double precision")
    return response


@dataclass(frozen=True, slots=True)
class _Realised:
    """z of D(d/dt) z = v in a state x of n derivatives: x' = a x + b v, and the signals rows x + direct v.

    The states are scaled by the sizes of D's roots, slowest first, so each row of `a` has the size of its
    root and slow modes keep their digits.
    """

    a: FloatArray
    b: FloatArray
    rows: FloatArray
    direct: FloatArray


def _realised(polynomials: list[FloatArray], below: FloatArray, sizes: FloatArray) -> _Realised:
    """polynomials : numerators over `below`, all (n + 1,) descending; sizes (n,) of its roots."""
    n = len(below) - 1
    top = np.array(polynomials) / below[0]
    monic = below / below[0]
    some = sizes[sizes > 0.0]
    floor = float(some.min()) if some.size else 1.0
    scale = np.concatenate(([1.0], np.cumprod(np.sort(np.maximum(sizes, floor)))))
    direct = top[:, 0]
    rows = (top[:, 1:] - direct[:, None] * monic[1:])[:, ::-1] * scale[:n]
    a = np.diag(scale[1:n] / scale[: n - 1], 1) if n else np.zeros((0, 0))
    b = np.zeros(n)
    if n:
        a[-1] = -monic[1:][::-1] * scale[:n] / scale[n - 1]
        b[-1] = 1.0 / scale[n - 1]
    return _Realised(a, b, rows, direct)


def _without_dead_time(subject: Subject, poles: ComplexArray) -> Response:
    sizes = np.abs(poles)
    power = round(float(np.log2(sizes).mean())) if sizes.size else 0
    unit = 2.0**-power
    closed = np.trim_zeros(scaled(subject.closed, power), "f")
    parts = [scaled(p, power) for p in (subject.exact[0], subject.control, subject.load)]
    parts = [p[len(p) - len(closed) :] for p in parts]
    final = np.array([p[-1] / closed[-1] for p in parts])
    p = poles * unit
    sizes = np.abs(p)
    loop = _realised(parts, closed, sizes)
    n = len(loop.a)
    base = PER_PANEL / sizes.max() if n else 1.0
    stages = _until_dead(p, base, 0.0) if n else [(0, 1)]
    rungs = ladder(loop.a, None, base, max(level for level, _ in stages) + 1)
    x = np.zeros(n)
    if n:
        x[0] = -1.0 / closed[-1] * closed[0]
    found = []
    for level, count in stages:
        growth = rungs[level].growth
        starts = _advance(growth[-1], x, count)
        x = starts[-1] + growth[-1] @ starts[-1]
        # (3, 16, n) rows of the signals at the nodes
        reading = loop.rows[:, None, :] + np.einsum("sn,jnm->sjm", loop.rows, growth)
        found.append(np.einsum("pm,sjm->spj", starts, reading))
    levels, begins = edges(stages)
    errors = np.concatenate(found, axis=1)
    signals = errors + final[:, None, None]
    # every mode has died by now: what is left is the rounding of ill-conditioned coefficients
    left = np.abs(errors[:, -1]).max(axis=1) / np.maximum(np.abs(signals).max(axis=(1, 2)), 1e-300)
    if left.max() > _LEFT:
        raise NotSimulated("rounding swamps it")
    start = begins * (base * unit)
    length = (1 << levels) * (base * unit)
    return Response(*(Trace(start, length, s) for s in signals))


def _until_dead(poles: ComplexArray, base: float, start: float) -> list[tuple[int, int]]:
    """The panels from `start` until every mode has died out. Raises NotSimulated."""
    stages = plan(np.abs(poles), -poles.real, base=base, start=start, whole=None, dead=_DEAD)
    if sum(count for _, count in stages) > _MOST_PANELS:
        raise NotSimulated(f"more than {_MOST_PANELS} panels")
    return stages


def _advance(growth: FloatArray, x: FloatArray, count: int) -> FloatArray:
    """(count, n): x and what x + growth x makes of it again and again, by doubling the number known."""
    out = np.empty((count, len(x)))
    out[0] = x
    known = 1
    while known < count:
        more = min(known, count - known)
        out[known : known + more] = out[:more] + out[:more] @ growth.T
        growth = 2.0 * growth + growth @ growth
        known += more
    return out


class _Delayed:
    """A loop with dead time, time counted in dead times ("turns"). Signals: y, u, and y under load."""

    def __init__(self, subject: Subject, poles: ComplexArray | None) -> None:
        theta = subject.dead_time
        self.unit = theta
        above, below = subject.exact
        ratio = theta ** np.arange(len(below) - 1, -1, -1.0)
        parts = (above, subject.control, subject.load)
        powers = [np.array([float(c) for c in p]) / ratio for p in parts]
        self.below = np.array([float(c) for c in below]) / ratio
        lead = self.below[0]
        self.below /= lead
        self.parts = [p / lead for p in powers]
        rest = self.below[-1] + self.parts[0][-1]
        self.final = np.array([p[-1] / rest for p in self.parts])
        self.rest = rest
        self.open: ComplexArray = np.roots(self.below).astype(complex)
        self.poles = np.empty(0, dtype=complex) if poles is None else poles * theta
        self.poles = self.poles[self.poles.imag >= 0.0]

    def response(self) -> Response:
        # where a layer outlives its turn, for many turns, the whole turn is finer than its begin
        for dead, finer in ((_DEAD_IN_A_TURN, 1.0), (np.inf, 2.0)):
            traces = self._traces(dead, finer)
            unresolved = max(t.unresolved() for t in traces)
            if unresolved < _RESOLVED:
                break
        if unresolved > 100.0 * _RESOLVED:
            raise NotSimulated("its panels are too wide")
        return Response(*(Trace(t.start * self.unit, t.length * self.unit, t.values) for t in traces))

    def _turn(self, dead: float, finer: float) -> None:
        """What one dead time makes of (x at its begin, y - y∞ on its panels): `self.step`, and u and the load
        response on the way."""
        sizes: FloatArray = np.abs(self.open)
        fastest = max(float(sizes.max(initial=0.0)), 1.0) * finer
        depth = max(0, int(np.ceil(np.log2(fastest / PER_PANEL))))
        whole = 1 << depth
        base = 1.0 / whole
        stages = plan(finer * sizes, -self.open.real, base=base, start=0.0, whole=whole, dead=dead)
        levels, begins = edges(stages)
        if len(levels) > _MOST_IN_A_TURN:
            raise NotSimulated(f"more than {_MOST_IN_A_TURN} panels in a dead time")
        self.begins, self.lengths = begins * base, (1 << levels) * base
        loop = _realised(self.parts, self.below, sizes)
        rungs = ladder(loop.a, loop.b, base, int(levels.max()) + 1)
        self.n = n = len(loop.a)
        wide = n + NODES * len(levels)
        x = np.eye(n, wide)
        out = np.zeros((3, len(levels), NODES, wide))
        for i, level in enumerate(levels):
            rung = rungs[level]
            assert rung.driven is not None
            own = slice(n + NODES * i, n + NODES * (i + 1))
            states = x + rung.growth @ x
            states[:, :, own] -= rung.driven
            out[:, i] = np.einsum("sn,jnw->sjw", loop.rows, states)
            out[:, i, :, own] -= loop.direct[:, None, None] * np.eye(NODES)
            x = states[-1]
        signals = out.reshape(3, -1, wide)
        self.step = np.vstack((x, signals[0]))
        self.reading = signals[1:]
        self.begin = np.full(wide, -self.final[0])
        self.begin[:n] = 0.0
        if n:
            self.begin[0] = -1.0 / self.rest

    def _traces(self, dead: float, finer: float) -> tuple[Trace, ...]:
        self._turn(dead, finer)
        known = [self.begin]
        for turns in _TURNS:
            if turns * len(self.begins) > _MOST_PANELS:
                break
            while len(known) < turns:
                known.append(self.step @ known[-1])
            states = np.array(known)
            y = states[:, self.n :]
            u = states @ self.reading[0].T
            after = states @ self.reading[1].T
            load = np.vstack((np.full((1, y.shape[1]), -self.final[2]), after[:-1]))
            errors = np.array([y, u, load])
            most = np.abs(errors + self.final[:, None, None]).max(axis=(1, 2))
            most[most == 0.0] = 1.0
            left = (np.abs(errors[:, -1]).max(axis=1) / most).max()
            if not np.isfinite(left):
                break
            if left < _SETTLED:
                return self._joined(errors, turns, None)
            modes = self._modes(turns)
            now = self._of_modes(modes, (turns - 1 + self.begins)[:, None] + self.lengths[:, None] * POINTS)
            gap = np.abs(now.reshape(3, -1) - errors[:, -1]).max(axis=1)
            # a signal may still be on its way to its peak
            if (gap / np.maximum(most, 1e-3 * np.abs(modes[1]).sum(axis=1))).max() < _MATCH:
                return self._joined(errors, turns, modes)
        raise NotSimulated("it has not died out after many dead times")

    def _modes(self, turns: int) -> tuple[ComplexArray, ComplexArray]:
        """Poles (m,) still alive then, and their weights (3, m) in the three signals."""
        p = self.poles
        p = p[-p.real * (turns - 1) < _DEAD + 10.0]
        top = self.parts[0]
        e = np.exp(-p)
        n = np.polyval(top, p)
        slope = np.polyval(np.polyder(self.below), p) + (np.polyval(np.polyder(top), p) - n) * e
        share = np.where(p.imag > 0.0, 2.0, 1.0) / (slope * p)
        return p, np.array(
            [n * e * share, np.polyval(self.parts[1], p) * share, np.polyval(self.parts[2], p) * e * share]
        )

    @staticmethod
    def _of_modes(modes: tuple[ComplexArray, ComplexArray], t: FloatArray) -> FloatArray:
        p, weights = modes
        grown = np.exp(t[..., None] * p)
        out: FloatArray = np.einsum("sm,...m->s...", weights, grown).real
        return out

    def _joined(
        self, errors: FloatArray, turns: int, modes: tuple[ComplexArray, ComplexArray] | None
    ) -> tuple[Trace, ...]:
        start = (np.arange(turns)[:, None] + self.begins).ravel()
        length = np.tile(self.lengths, turns)
        values = errors.reshape(3, len(start), NODES)
        if modes is not None and len(modes[0]):
            p, weights = modes
            base = PER_PANEL / float(np.abs(p).max())
            stages = _until_dead(p, base, float(turns))
            if stages:
                levels, begins = edges(stages)
                later = turns + begins * base
                long = (1 << levels) * base
                grown = np.exp(later[:, None] * p)
                late = np.empty((3, len(later), NODES))
                for level in np.unique(levels):
                    own = levels == level
                    within = np.exp(p[:, None] * (base * 2.0 ** float(level)) * POINTS)
                    late[:, own] = ((grown[own] * weights[:, None, :]) @ within).real
                start, length = np.concatenate((start, later)), np.concatenate((length, long))
                values = np.concatenate((values, late), axis=1)
        values = values + self.final[:, None, None]
        return tuple(Trace(start, length, v) for v in values)


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
            out[m] = 100.0 * max(0.0, y.top(np.sign(final))[0] / abs(final) - 1.0)
        elif name == "undershoot":
            out[m] = 100.0 * max(0.0, y.top(-np.sign(final))[0] / abs(final))
        elif name == "peak_time":
            value, when = y.top(np.sign(final))
            out[m] = when if value / abs(final) > 1.0 + 1e-6 else np.nan
        elif name == "rise_time":
            out[m] = y.first(m.span[1] * final) - _start(subject, y, m.span[0] * final)
        elif name == "settling_time":
            out[m] = y.last_outside(final, m.band)
        elif name == "tracking_area":
            out[m] = y.area(1.0) if abs(final - 1.0) < 1e-12 else np.inf
        elif name == "control_peak":
            out[m] = abs(subject.reference_step) * max(response.u.top(1.0)[0], response.u.top(-1.0)[0])
        elif name == "disturbance_peak":
            out[m] = max(load.top(1.0)[0], load.top(-1.0)[0])
        elif name == "disturbance_area":
            # read off coefficients: where the panels end a slow tail is still on its way
            out[m] = load.area(0.0) if subject.load[-1] == 0 else np.inf
    return out


def _start(subject: Subject, trace: Trace, level: float) -> float:
    """First passage of the lower level; for 0 % the moment y leaves 0, which is after the dead time."""
    return subject.dead_time if level == 0.0 else trace.first(level)
