"""Margins and peaks again: the plant as stated, on a dense grid, features closed in by shrinking grids."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray
from synth.verify.subject import Subject

_PER_DECADE = 50
_MOST = 6000
_TURNED = 400  # ωθ up to which every turn of the phase is looked at
_ZOOM = 33
_PEAK_ROUNDS, _CROSSING_ROUNDS = 5, 7  # to (1/16)^5 and (1/32)^7 of a cell

Curve = Callable[[FloatArray], FloatArray]


def frequency_values(
    subject: Subject, poles: ComplexArray | None, wanted: frozenset[str]
) -> dict[str, float]:
    """The wanted frequency quantities, SI; "highest_fall" too. Names of other kinds are passed over."""
    with np.errstate(all="ignore"):
        return _Look(subject, poles).values(wanted)


class _Look:
    def __init__(self, subject: Subject, poles: ComplexArray | None) -> None:
        self.subject = subject
        self.w = _grid(subject, poles)
        self.l = self.loop(self.w)
        above, below = subject.exact
        total = above[-1] + below[-1]
        self.k = abs(float(above[0] / below[0]))
        self.sign_end = float(above[0] / below[0])
        self.final = float(above[-1] / total) if total else np.nan
        self.start = float(above[-1] / below[-1]) if below[-1] else np.inf
        self.delayed = subject.dead_time > 0.0
        self.s_start = float(below[-1] / total) if total else np.nan
        if self.delayed:
            self._look_far(float(subject.dead_time))

    def _look_far(self, theta: float) -> None:
        """Add the turns of e^(-jωθ) where a peak beyond the dense part of the grid would be: with the phase
        free, |C S| is at most |C|/(1 - |L|), and each turn comes close to it."""
        far = (self.w > _TURNED / theta) & (np.abs(self.l) < 1.0)
        size = np.abs(self.l[far])
        if not far.any():
            return
        w, turn = self.w[far], 2.0 * np.pi / theta

        def tops(w: FloatArray, size: FloatArray) -> list[int]:
            c = np.abs(self.subject.compensator(w))
            return [int((top / (1.0 - size)).argmax()) for top in (np.ones_like(size), size, c)]

        middles = list(self._turns_of_falls(w, size))
        for kind, i in enumerate(tops(w, size)):
            fine = np.geomspace(w[max(i - 1, 0)], w[min(i + 1, len(w) - 1)], 400)
            middles.append(fine[tops(fine, np.abs(self.loop(fine)))[kind]])
        more = (np.array(middles)[:, None] + turn * np.linspace(-8.0, 8.0, 401)).ravel()
        self.w = np.unique(np.concatenate((self.w, more[more > 0.0])))
        self.l = self.loop(self.w)

    def _turns_of_falls(self, w: FloatArray, size: FloatArray) -> FloatArray:
        """Where the turns of the phase begin and cease to carry |T| through |T(0)|/√2, from |L| at far w."""
        level = abs(self.final) / np.sqrt(2.0)

        def swept(size: FloatArray) -> BoolArray:
            out: BoolArray = (size / (1.0 + size) < level) & (size < 1.0) & (size / (1.0 - size) > level)
            return out

        inside = swept(size)
        found = []
        for i in (
            np.flatnonzero(inside[1:] != inside[:-1])[[0, -1]] if inside.any() and not inside.all() else []
        ):
            fine = np.geomspace(w[i], w[i + 1], 800)
            found.append(fine[np.argmax(swept(np.abs(self.loop(fine))) != inside[i])])
        return np.array(found)

    def loop(self, w: FloatArray) -> ComplexArray:
        return self.subject.stated(w) * self.subject.compensator(w)

    def values(self, wanted: frozenset[str]) -> dict[str, float]:
        out: dict[str, float] = {}
        if wanted & {"bandwidth", "highest_fall"}:
            out |= self._falls()
        if wanted & {"crossover", "phase_margin", "delay_margin"}:
            out |= self._gains()
        if wanted & {"gain_margin", "gain_margin_up", "gain_margin_down"}:
            out |= self._phases()
        end = 1.0 / (1.0 - self.k) if self.delayed else 1.0 / abs(1.0 + self.sign_end)
        c = self.subject
        c_end = abs(c.numerator[0] / c.denominator[0]) if len(c.numerator) == len(c.denominator) else 0.0
        if "sensitivity_peak" in wanted:
            limits = [abs(self.s_start), end]
            out["sensitivity_peak"] = self._peak(lambda w: 1.0 / np.abs(1.0 + self.loop(w)), limits)
        if "complementary_peak" in wanted:
            limits = [abs(self.final), self.k * end]

            def t(w: FloatArray) -> FloatArray:
                x = self.loop(w)
                out: FloatArray = np.abs(x / (1.0 + x))
                return out

            out["complementary_peak"] = self._peak(t, limits)
        if "noise_gain" in wanted:

            def cs(w: FloatArray) -> FloatArray:
                x = c.compensator(w)
                out: FloatArray = np.abs(x / (1.0 + x * c.stated(w)))
                return out

            out["noise_gain"] = self._peak(cs, [c_end * end])
        return {key: value for key, value in out.items() if key in wanted}

    def _peak(self, curve: Curve, limits: list[float]) -> float:
        y = curve(self.w)
        y[~np.isfinite(y)] = 0.0
        inner = (y[1:-1] >= y[:-2]) & (y[1:-1] >= y[2:])
        top = np.flatnonzero(inner) + 1
        # with dead time neighbouring turns are nearly as high, and the grid does not tell which is highest
        top = top[np.argsort(-y[top])][: 16 if self.delayed else 4]
        best = float(np.max(y))
        if top.size:
            best = max(best, float(self._tops(curve, self.w[top - 1], self.w[top + 1])[1].max()))
        return max([best, *(x for x in limits if np.isfinite(x))])

    @staticmethod
    def _tops(curve: Curve, low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
        """ω and height of a curve's maximum in each interval, closed in on by shrinking grids."""
        every = np.arange(len(low))
        for _ in range(_PEAK_ROUNDS):
            t = np.linspace(low, high, _ZOOM)
            z = np.nan_to_num(curve(t.ravel()).reshape(t.shape))
            j = z.argmax(axis=0)
            low, high = t[np.maximum(j - 1, 0), every], t[np.minimum(j + 1, _ZOOM - 1), every]
        return t[j, every], z[j, every]

    @staticmethod
    def _crossings(curve: Curve, low: FloatArray, high: FloatArray, positive: BoolArray) -> FloatArray:
        """ω of the sign change of a curve in each interval; `positive` where it is not below 0 at `low`."""
        every = np.arange(len(low))
        for _ in range(_CROSSING_ROUNDS if low.size else 0):
            t = np.linspace(low, high, _ZOOM)
            same = (curve(t.ravel()).reshape(t.shape) >= 0.0) == positive
            same[0], same[-1] = True, False
            j = same.argmin(axis=0)
            low, high = t[j - 1, every], t[j, every]
        out: FloatArray = 0.5 * (low + high)
        return out

    def _falls(self) -> dict[str, float]:
        if not np.isfinite(self.final) or self.final == 0.0:
            return {"bandwidth": np.nan, "highest_fall": np.nan}
        level = abs(self.final) / np.sqrt(2.0)

        def excess(w: FloatArray) -> FloatArray:
            x = self.loop(w)
            out: FloatArray = np.abs(x / (1.0 + x)) - level
            return out

        w, y = self._with_near_misses(excess)
        at = np.flatnonzero((y[:-1] >= 0.0) & (y[1:] < 0.0))
        ends = at[[0, -1]] if at.size else at
        found = self._crossings(excess, w[ends], w[ends + 1], y[ends] >= 0.0).tolist()
        k = self.k
        recurs = self.delayed and k > 0.0 and k / (1.0 - k) > level > k / (1.0 + k)
        highest = np.inf if recurs else max(found, default=np.nan)
        return {"bandwidth": min(found, default=np.inf), "highest_fall": highest}

    def _with_near_misses(self, curve: Curve) -> tuple[FloatArray, FloatArray]:
        """The grid and a curve on it, with the tops and bottoms that pass 0 between two nodes: those before
        the first fall that the grid shows and after the last, where they make another one."""
        y = curve(self.w)
        falls = np.flatnonzero((y[:-1] >= 0.0) & (y[1:] < 0.0))
        gap = np.diff(self.w)
        slope, inner = np.diff(y) / gap, y[1:-1]
        before, after = slope[:-1], slope[1:]
        # a top that bends one way lies under the secants on either side, run on across the gap between
        room = np.maximum(np.abs(before) * gap[1:], np.abs(after) * gap[:-1])
        turns = (before * after <= 0.0) & (inner * (before - after) < 0.0)
        at = np.flatnonzero(turns & (np.abs(inner) < room)) + 1
        if falls.size:
            at = at[(at <= falls[0]) | (at > falls[-1])]
        if not at.size:
            return self.w, y
        side = -np.sign(y[at])
        every_side = np.tile(side, _ZOOM)
        w, height = self._tops(lambda t: every_side * curve(t), self.w[at - 1], self.w[at + 1])
        passes = height > 0.0
        every = np.concatenate((self.w, w[passes]))
        order = np.argsort(every)
        return every[order], np.concatenate((y, (side * height)[passes]))[order]

    def _gains(self) -> dict[str, float]:
        def excess(w: FloatArray) -> FloatArray:
            out: FloatArray = np.log(np.abs(self.loop(w)))
            return out

        y = np.log(np.abs(self.l))
        at = np.flatnonzero((y[:-1] >= 0.0) != (y[1:] >= 0.0))
        at = at[-12:]
        w = self._crossings(excess, self.w[at], self.w[at + 1], y[at] >= 0.0)
        if abs(self.start) == 1.0:
            w = np.append(w, 0.0) if not w.size else w
        if not w.size:
            return {
                "crossover": np.nan,
                "phase_margin": np.inf,
                "delay_margin": 0.0 if self.k >= 1.0 else np.inf,
            }
        angle = np.angle(-self.loop(np.maximum(w, 1e-300)))
        delays = np.mod(angle, 2.0 * np.pi) / w
        return {
            "crossover": float(w.max()),
            "phase_margin": float(np.degrees(np.abs(angle).min())),
            "delay_margin": 0.0 if self.k >= 1.0 else float(delays.min()),
        }

    def _phases(self) -> dict[str, float]:
        def excess(w: FloatArray) -> FloatArray:
            out: FloatArray = self.loop(w).imag
            return out

        y = self.l.imag
        at = np.flatnonzero((y[:-1] >= 0.0) != (y[1:] >= 0.0))
        at = at[(self.l.real[at] < 0.0) | (self.l.real[at + 1] < 0.0)]
        at = at[np.argsort(np.abs(np.log(np.abs(self.l[at]))))][:8]
        found = self._crossings(excess, self.w[at], self.w[at + 1], y[at] >= 0.0)
        sizes = np.abs(self.loop(found)).tolist() if found.size else []
        if np.isfinite(self.start) and self.start < 0.0:
            sizes.append(-self.start)
        if self.delayed and self.k > 0.0:
            sizes.append(self.k)
        elif self.sign_end < 0.0:
            sizes.append(self.k)
        change = [20.0 * np.log10(s) for s in sizes if s > 0.0]
        up = min((-c for c in change if c <= 0.0), default=np.inf)
        down = min((c for c in change if c >= 0.0), default=np.inf)
        return {"gain_margin_up": up, "gain_margin_down": down, "gain_margin": min(up, down)}


def _grid(subject: Subject, poles: ComplexArray | None) -> FloatArray:
    """Frequencies dense enough for the roots at hand: a decade in fifty, closer round light damping, and with
    dead time a fifth of a radian of ωθ as far as |L| counts."""
    roots = [np.roots(p) for p in (subject.plant.numerator, subject.plant.denominator)]
    roots += [np.roots(p) for p in (subject.numerator, subject.denominator)]
    if poles is not None:
        roots.append(poles)
    every = np.concatenate([np.asarray(r, dtype=complex) for r in roots])
    every = every[np.abs(every) > 0.0]
    theta = subject.dead_time
    sizes = np.append(np.abs(every), 1.0 / theta) if theta > 0.0 else np.abs(every)
    if not sizes.size:
        sizes = np.ones(1)
    low, high = np.log10(sizes.min()) - 3.0, np.log10(sizes.max()) + 3.0
    parts = [np.logspace(low, high, int(min((high - low) * _PER_DECADE, _MOST)))]
    light = every[(every.imag > 0.0) & (np.abs(every.real) < 0.2 * np.abs(every))]
    steps = np.concatenate(
        (np.linspace(-3.0, 3.0, 25), np.geomspace(3.5, 60.0, 8), -np.geomspace(3.5, 60.0, 8))
    )
    for root in light[:8]:
        width = max(abs(root.real), 1e-7 * abs(root))
        parts.append(abs(root.imag) + width * steps)
    if theta > 0.0:
        parts.append(np.arange(1, 5 * _TURNED) * (0.2 / theta))
    w = np.unique(np.concatenate(parts))
    return w[w > 0.0]
