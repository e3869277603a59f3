"""The yardstick: one loop at a time with scipy.signal as anybody would write it, values read off grids.

np.roots for the poles, three signal.step with 1000 points, one freqresp with 1000 points. A dead time enters
the responses as its third-order Padé approximation, the frequency side exactly.
"""

from __future__ import annotations

import numpy as np
from scipy import signal

from synth.loop.arrays import FloatArray


def score(
    plant_num: FloatArray,
    plant_den: FloatArray,
    comp_num: FloatArray,
    comp_den: FloatArray,
    dead_time: float = 0.0,
) -> dict[str, float]:
    """Quantities of the table, SI units, from grids of 1000 points."""
    delay_num, delay_den = _pade(dead_time)
    num = np.polymul(np.polymul(plant_num, comp_num), delay_num)
    den = np.polymul(np.polymul(plant_den, comp_den), delay_den)
    closed = np.polyadd(num, den)
    poles = np.roots(closed)
    out = {
        "decay_rate": float(-poles.real.max()),
        "damping_ratio": float((-poles.real / np.abs(poles)).min()),
    }
    if out["decay_rate"] <= 0.0:
        return out
    t = np.linspace(0.0, 8.0 / out["decay_rate"], 1000)
    _, y = signal.step((num, closed), T=t)
    _, u = signal.step((np.polymul(np.polymul(comp_num, plant_den), delay_den), closed), T=t)
    _, d = signal.step((np.polymul(np.polymul(plant_num, comp_den), delay_num), closed), T=t)
    final = num[-1] / closed[-1]
    z = y / final
    out["final_value"] = float(final)
    out["static_error"] = 100.0 * abs(1.0 - float(final))
    out["overshoot"] = 100.0 * max(0.0, float(z.max()) - 1.0)
    out["undershoot"] = 100.0 * max(0.0, -float(z.min()))
    out["rise_time"] = float(t[np.argmax(z >= 0.9)] - t[np.argmax(z >= 0.1)])
    out["peak_time"] = float(t[np.argmax(z)])
    outside = np.flatnonzero(np.abs(z - 1.0) > 0.02)
    out["settling_time"] = float(t[outside[-1]]) if outside.size else 0.0
    step = t[1] - t[0]
    out["tracking_area"] = float(np.abs(1.0 - y).sum() * step)
    out["control_peak"] = float(np.abs(u).max())
    out["disturbance_peak"] = float(np.abs(d).max())
    out["disturbance_area"] = float(np.abs(d).sum() * step)
    out["disturbance_integral"] = float(abs(d.sum() * step))
    out["disturbance_residue"] = float(abs(d[-1]))

    middle = float(np.exp(np.log(np.abs(poles)).mean()))
    w = np.geomspace(1e-3 * middle, 1e3 * middle, 1000)
    _, loop = signal.freqresp((np.polymul(plant_num, comp_num), np.polymul(plant_den, comp_den)), w=w)
    if dead_time > 0.0:
        loop = loop * np.exp(-1j * w * dead_time)
    size, phase = np.abs(loop), np.unwrap(np.angle(loop))
    sensitivity = 1.0 / np.abs(1.0 + loop)
    tracking = size * sensitivity
    out["sensitivity_peak"] = float(sensitivity.max())
    out["complementary_peak"] = float(tracking.max())
    below = np.flatnonzero(tracking < abs(final) / np.sqrt(2.0))
    out["bandwidth"] = float(w[below[0]]) if below.size else np.inf
    crossing = np.flatnonzero(np.diff(size > 1.0))
    if crossing.size:
        margins = np.rad2deg(np.angle(-loop[crossing]))
        out["crossover"] = float(w[crossing[-1]])
        out["phase_margin"] = float(np.abs(margins).min())
        out["delay_margin"] = float((np.mod(np.angle(-loop[crossing]), 2 * np.pi) / w[crossing]).min())
    turns = np.flatnonzero(np.diff(np.floor((phase + np.pi) / (2 * np.pi))))
    out["gain_margin"] = float(np.abs(20 * np.log10(size[turns])).min()) if turns.size else np.inf
    with np.errstate(divide="ignore", invalid="ignore"):
        control = np.polyval(comp_num, 1j * w) / np.polyval(comp_den, 1j * w)
    out["noise_gain"] = float((np.abs(control) * sensitivity).max())
    return out


def _pade(dead_time: float) -> tuple[FloatArray, FloatArray]:
    if dead_time == 0.0:
        return np.ones(1), np.ones(1)
    h = dead_time
    return np.array([-(h**3), 12 * h**2, -60 * h, 120.0]), np.array([h**3, 12 * h**2, 60 * h, 120.0])
