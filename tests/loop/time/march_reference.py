"""An independent march through a loop with dead time: an adaptive integrator with dense output, delay by delay.

One loop at a time, slow and plain; shares no code with the package. Used by the tests of the delayed responses.
"""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp
from scipy.optimize import brentq, minimize_scalar
from scipy.signal import tf2ss


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
                rtol=3e-13,
                atol=1e-14,
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
            lambda s: -factor * self.signal(which, s), bounds=(low, high), method="bounded", options={"xatol": 1e-11}
        )
        return (-float(found.fun), float(found.x)) if -found.fun > v[i] else (float(v[i]), float(t[i]))

    def _cross(self, which: int, low: float, high: float, level: float) -> float:
        if high <= low:
            return float(high)
        high = min(high, np.nextafter((int(low / self.theta + 1e-9) + 1) * self.theta, 0.0))
        a, b = self.signal(which, low) - level, self.signal(which, high) - level
        return float(high) if a * b > 0.0 else float(brentq(lambda s: self.signal(which, s) - level, low, high, xtol=1e-13))
