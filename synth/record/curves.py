"""The curves a report draws, of the nominal loop: step, loop gain, locus."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, cast

import numpy as np

from synth.loop.arrays import FloatArray, IntArray
from synth.loop.closed_loop import Loops, Rational, close
from synth.loop.poles.delayed import delayed_poles
from synth.loop.poles.locus import root_locus
from synth.loop.time.curves import step_curves
from synth.record.format import Branch, LocusCurve, LoopCurve, Pole, StepCurve
from synth.record.numbers import plain

STEP_POINTS = 240
LOOP_POINTS = 200
LOCUS_POINTS = 260  # of one branch
DELAY_GAINS = 110  # gains at which the locus of a loop with dead time is looked at
DIGITS = 6  # a picture needs no more, and a record stays small


def one_loop(plants: Rational, compensators: Rational) -> Loops:
    """The loop of the first compensator on the nominal case."""
    return close(plants, compensators, np.array([0]), np.array([0]))


def short(values: Sequence[float] | FloatArray) -> list[Any]:
    """Values as a record holds them in a curve."""
    return [plain(float(f"{v:.{DIGITS - 1}e}")) if math.isfinite(v) else plain(v) for v in map(float, values)]


def step(loop: Loops, settling: float, slowest: float) -> StepCurve:
    """y and u of a unit reference step of one stable loop, until a while after it has settled.

    settling : settling time [s]; where it is NaN or 0 the slowest pole, decaying with `slowest` [1/s],
    decides.
    """
    scale, gain = float(loop.time_scale[0]), float(loop.plant_gain[0])
    end = 1.4 * settling / scale if math.isfinite(settling) and settling > 0.0 else 6.0 / (slowest * scale)
    end += float(loop.dead_time[0])
    early = np.geomspace(1e-3 * end, end, STEP_POINTS // 3)
    t = np.unique(np.concatenate([np.linspace(0.0, end, STEP_POINTS - len(early)), early]))
    y, u, _ = step_curves(loop, t)
    return {"case": "nominal", "t": short(t * scale), "y": short(y[0]), "u": short(u[0] / gain)}


def loop_gain(loop: Loops, crossover: float) -> LoopCurve:
    """abs(L) in dB and its phase in degrees, unwrapped, over the decades round the crossover."""
    scale = float(loop.time_scale[0])
    centre = crossover * scale if math.isfinite(crossover) and crossover > 0.0 else 1.0
    w = np.geomspace(1e-2 * centre, 30.0 * centre, LOOP_POINTS)
    s = 1j * w
    with np.errstate(all="ignore"):
        value = np.polyval(loop.numerator[0], s) / np.polyval(loop.denominator[0], s)
        gain = 20.0 * np.log10(np.abs(value))
    phase = np.unwrap(np.angle(value)) - w * float(loop.dead_time[0])
    phase -= 2.0 * np.pi * np.round((phase[0] + 0.25 * np.pi) / (2.0 * np.pi))
    return {"w": short(w / scale), "gain_db": short(gain), "phase_deg": short(np.degrees(phase))}


def locus(loop: Loops, closed: list[Pole]) -> LocusCurve:
    """Closed-loop poles as the gain of C goes from 0 up; with dead time as points, without as branches."""
    scale = float(loop.time_scale[0])
    out: LocusCurve = {"parameter": "gain", "closed": [[*map(float, p)] for p in closed]}
    numerator = np.trim_zeros(loop.numerator[0], "f")
    denominator = np.trim_zeros(loop.denominator[0], "f")
    if len(numerator) == 0 or len(numerator) > len(denominator):
        return {}
    out["zeros"] = _roots(numerator, scale)
    out["poles"] = _roots(denominator, scale)
    if loop.dead_time[0] > 0.0:
        out["points"] = _delayed_points(loop, closed, scale)
        out["branches"] = []
        return out
    found = root_locus(numerator, denominator)
    keep = _spread(found.branches.shape[1], LOCUS_POINTS)
    branches: list[Branch] = []
    for row in found.branches[:, keep]:
        if (row.imag < 0.0).sum() > (row.imag > 0.0).sum():
            continue  # the mirror image of another branch
        branches.append({"re": short(row.real / scale), "im": short(row.imag / scale)})
    out["branches"] = branches
    out["gain"] = short(found.gains[keep])
    return out


def _spread(count: int, most: int) -> IntArray:
    """At most so many of `count` indices, the ends among them."""
    index: IntArray = np.unique(np.linspace(0, count - 1, min(count, most)).round().astype(np.intp))
    return index


def _roots(polynomial: FloatArray, scale: float) -> list[Pole]:
    return [[float(r.real) / scale, float(r.imag) / scale] for r in np.roots(polynomial).astype(complex)]


def _delayed_points(loop: Loops, closed: list[Pole], scale: float) -> list[Pole]:
    """Poles with dead time at many gains, upper half, as far out as the closed loop's own near ones."""
    gains = np.geomspace(1e-2, 6.0, DELAY_GAINS)
    many = loop.rows(np.zeros(DELAY_GAINS, dtype=np.intp))
    scaled = Loops(
        numerator=many.numerator * gains[:, None],
        denominator=many.denominator,
        control=many.control * gains[:, None],
        load=many.load,
        closed=many.denominator + many.numerator * gains[:, None],
        dead_time=many.dead_time,
        time_scale=many.time_scale,
        plant_gain=many.plant_gain,
    )
    sizes = sorted(math.hypot(*p) * scale for p in closed)
    reach = 2.0 * sizes[min(2, len(sizes) - 1)] if sizes else 3.0 / float(loop.dead_time[0])
    poles = delayed_poles(scaled, np.full(DELAY_GAINS, reach))
    flat = poles[~np.isnan(poles.real) & (poles.imag >= 0.0)]
    return cast("list[Pole]", [short([p.real / scale, p.imag / scale]) for p in flat])
