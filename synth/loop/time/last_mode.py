"""What is left when one mode alone remains: sup, last exit and area of Re(a e^(pt)), t >= 0, in closed form.

M loops. p real or in the upper half plane, Re p < 0.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray


def extremes(amplitude: ComplexArray, pole: ComplexArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Largest value and its time, least value; 0 at time inf counts as the limit. (M,) each."""
    at = _first_extremum(amplitude, pole)
    half = _half_period(pole)
    times = np.stack([np.zeros_like(at), at, at + half])
    values = np.stack([_value(amplitude, pole, t) for t in times] + [np.zeros_like(at)])
    times = np.concatenate([times, np.full((1, len(at)), np.inf)])
    top, column = values.argmax(axis=0), np.arange(len(at))
    return values[top, column], times[top, column], values.min(axis=0)


def last_exit(amplitude: ComplexArray, pole: ComplexArray, band: FloatArray) -> FloatArray:
    """Last time at which abs(Re a e^(pt)) > band; NaN where it never is. (M,)."""
    with np.errstate(all="ignore"):
        real = pole.imag == 0.0
        fall = np.log(np.abs(amplitude.real) / band) / -pole.real
        smooth = np.where(np.abs(amplitude.real) > band, fall, np.nan)
        at, half = _first_extremum(amplitude, pole), _half_period(pole)
        peak = np.abs(_value(amplitude, pole, at))
        # later extrema shrink by e^(Re p · half period) each
        further = np.floor(np.log(peak / band) / (-pole.real * half))
        exact = np.log(peak / band) / (-pole.real * half) == further
        further = np.where(exact, further - 1.0, further)
        low = np.where(peak > band, at + np.maximum(further, 0.0) * half, 0.0)
        started = np.abs(amplitude.real) > band
        high = np.where(peak > band, low + half, at)
        some = np.flatnonzero(~real & ((peak > band) | started))
        # before the next extremum the size falls to 0 and rises to less than the band: one passage
        outside = np.sign(_value(amplitude[some], pole[some], low[some]))
        high[some] = _passing(amplitude[some] * outside, pole[some], band[some], low[some], high[some])
        swinging = np.where((peak > band) | started, high, np.nan)
    out_time: FloatArray = np.where(real, smooth, swinging)
    return out_time


def area(amplitude: ComplexArray, pole: ComplexArray) -> FloatArray:
    """Integral of abs(Re a e^(pt)) from 0 to infinity. (M,).

    With f = a e^(pt) / p, the primitive of a pair's mode, and abs f falling by e^(-pi sigma/omega) from zero
    to zero, the sum after the first zero is abs(f(zero)) coth(pi sigma / (2 omega)).
    """
    with np.errstate(all="ignore"):
        real = pole.imag == 0.0
        zero = np.mod(np.pi / 2.0 - np.angle(amplitude), np.pi) / pole.imag
        whole = (amplitude / pole).real
        at_zero = (amplitude / pole * np.exp(pole * zero)).real
        waves = np.abs(at_zero) / np.tanh(-0.5 * np.pi * pole.real / pole.imag)
        swinging = np.abs(at_zero - whole) + waves
    out: FloatArray = np.where(real, np.abs(amplitude.real / pole.real), swinging)
    return out


def _passing(
    amplitude: ComplexArray, pole: ComplexArray, level: FloatArray, low: FloatArray, high: FloatArray
) -> FloatArray:
    """Where Re(a e^(pt)), monotone from low to high, passes the level: Newton, halving where it leaves the
    bracket. (E,)."""
    time = 0.5 * (low + high)
    starts_above = _value(amplitude, pole, low) > level
    for _ in range(60):
        wave = amplitude * np.exp(pole * time)
        off = wave.real - level
        before = (off > 0.0) == starts_above
        low, high = np.where(before, time, low), np.where(before, high, time)
        newton = time - off / (pole * wave).real
        better = np.where((newton >= low) & (newton <= high), newton, 0.5 * (low + high))
        done = np.abs(better - time) <= 1e-15 * high
        time = better
        if done.all():
            break
    return time


def _value(amplitude: ComplexArray, pole: ComplexArray, time: FloatArray) -> FloatArray:
    """Re(a e^(pt)); 0 at infinity."""
    there = np.isfinite(time)
    out: FloatArray = (amplitude * np.exp(pole * np.where(there, time, 0.0))).real
    return np.where(there, out, 0.0)


def _half_period(pole: ComplexArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        out: FloatArray = np.where(pole.imag > 0.0, np.pi / np.maximum(pole.imag, 0.0), np.inf)
    return out


def _first_extremum(amplitude: ComplexArray, pole: ComplexArray) -> FloatArray:
    """First t >= 0 at which the slope Re(a p e^(pt)) is 0; inf for a real pole."""
    with np.errstate(all="ignore"):
        at = np.mod(np.pi / 2.0 - np.angle(amplitude * pole), np.pi) / pole.imag
    out: FloatArray = np.where(pole.imag > 0.0, at, np.inf)
    return out


def first_reach(amplitude: ComplexArray, pole: ComplexArray, level: FloatArray) -> FloatArray:
    """First time at which Re a e^(pt) >= level, from below; inf where it never is. (M,)."""
    at, half = _first_extremum(amplitude, pole), _half_period(pole)
    with np.errstate(all="ignore"):
        smooth = np.log(amplitude.real / level) / -pole.real
        smooth = np.where((amplitude.real < level) & (level < 0.0), smooth, np.inf)
        early = _value(amplitude, pole, at) >= level
        late = _value(amplitude, pole, at + half) >= level
        low, high = np.where(early, 0.0, at), np.where(early, at, at + half)
        some = np.flatnonzero((early | late) & (pole.imag != 0.0) & (amplitude.real < level))
        high[some] = _passing(amplitude[some], pole[some], level[some], low[some], high[some])
        found = np.where(pole.imag == 0.0, smooth, np.where(early | late, high, np.inf))
    out: FloatArray = np.where(amplitude.real >= level, 0.0, found)
    return out
