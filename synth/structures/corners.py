"""Leads and lags by the angles their corners make at one frequency; for every structure that has corners."""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.structures.factors import Factors


def corner_angles(
    phase: FloatArray, share: FloatArray, least: float, most: float
) -> tuple[FloatArray, FloatArray]:
    """Angles (larger, smaller): larger - smaller = phase, tan(larger)/tan(smaller) within least .. most.

    phase (B,) [rad] in (0, pi/2); share (B,) in (0, 1) picks among what is left: 0 puts both corners as far
    above the frequency as `most` lets them (a fast filter), 0.5 next to the middle, 1 as far below. NaN where
    none exists.

    With a middle angle m = (pi/2 - phase)/2 and smaller = m + d, tan(phase + smaller)/tan(smaller)
    = (cos 2d + sin phase)/(cos 2d - sin phase): even in d, rising with abs(d), so each ratio is one abs(d).
    """
    sine = np.sin(phase)
    with np.errstate(invalid="ignore"):
        nearest = _half_angle(sine, least)
        farthest = _half_angle(sine, most)
        nearest = np.where(np.isnan(nearest), 0.0, nearest)
        side = 2.0 * share - 1.0
        d = np.where(side < 0.0, -1.0, 1.0) * (nearest + np.abs(side) * (farthest - nearest))
        smaller = 0.5 * (0.5 * np.pi - phase) + d
        good = (phase > 0.0) & (phase < 0.5 * np.pi) & np.isfinite(farthest) & (smaller > 0.0)
    smaller = np.where(good, smaller, np.nan)
    return smaller + phase, smaller


def _half_angle(sine: FloatArray, ratio: float) -> FloatArray:
    """abs(d) at which the ratio of tangents is `ratio`; NaN where even d = 0 gives more."""
    with np.errstate(divide="ignore", invalid="ignore"):
        cosine = sine * (ratio + 1.0) / (ratio - 1.0) if ratio > 1.0 else np.full_like(sine, np.inf)
        half: FloatArray = 0.5 * np.arccos(np.where(np.abs(cosine) <= 1.0, cosine, np.nan))
    return half


def between(low: float | FloatArray, high: float | FloatArray, share: FloatArray) -> FloatArray:
    """low · (high/low)^share, an even draw on a logarithmic scale."""
    out: FloatArray = low * (high / low) ** share
    return out


def bump(zero: float, pole: float) -> dict[str, float]:
    """One line on a lead or a lag: largest phase [deg], where [rad/s], corner ratio, corners [rad/s]."""
    ratio = max(zero, pole) / min(zero, pole)
    phase = np.degrees(np.arcsin((ratio - 1.0) / (ratio + 1.0))) * (1.0 if zero < pole else -1.0)
    return {
        "max phase": float(phase),
        "at": float(np.sqrt(zero * pole)),
        "corner ratio": float(ratio),
        "zero corner": float(zero),
        "pole corner": float(pole),
    }


def corners_to_polynomials(
    gain: FloatArray, zero: FloatArray, pole: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """gain (s/zero + 1)/(s/pole + 1), times zero·pole above and below: no corner is divided by. (B,) each"""
    return np.column_stack([gain * pole, gain * zero * pole]), np.column_stack([zero, zero * pole])


def realise_pair(theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Polynomials of (gain, zero, pole) rows: one pair of corners, be it a lead or a lag. (B, 3)"""
    gain, zero, pole = theta.T
    return corners_to_polynomials(gain, zero, pole)


def recognise_pair(factors: Factors) -> FloatArray | None:
    """(gain, zero, pole) of a function with one pair of real corners and no integrator; None for others."""
    corners = factors.real_corners()
    if factors.integrators or corners is None or (len(corners[0]), len(corners[1])) != (1, 1):
        return None
    return np.array([factors.gain, corners[0][0], corners[1][0]])
