"""The first stage: stability, poles, and every quantity that needs no more than coefficients and poles."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from synth.loop.arrays import BoolArray, ComplexArray, FloatArray, IntArray
from synth.loop.closed_loop import Loops
from synth.loop.poles.delayed import (
    FARTHEST,
    NEAREST,
    delayed_poles,
    further_poles,
    joined,
    proven_poles,
)
from synth.loop.poles.doubt import OF_POLES
from synth.loop.poles.encirclement import chain_abscissa, delayed_stable
from synth.loop.poles.far import far_damping
from synth.loop.poles.roots import closed_roots, rightmost, routh_stable
from synth.loop.poles.share import Spacing, damping_of, share_in_step, spaced
from synth.loop.polynomials import coefficient
from synth.loop.quantities import Measure

# Poles up to this many times the highest fall of abs(T) are counted ...
REACH = 5.0
# ... and, without dead time, any pole whose share in the reference step is at least this.
LEAST_SHARE = 0.02
# With dead time a loop whose abscissa is within this of the axis, in units of 1/θ, has its roots counted
# right of the axis itself.
CLOSE = 1e-5


@dataclass(frozen=True, slots=True)
class PoleStage:
    """What the poles say of M loops, in scaled time.

    stable    (M,)
    abscissa  (M,) largest real part of a pole, NaN where it was not asked for; with dead time also of the
              chain, ln abs(L(∞)) / θ. Where 1 + L(∞) is not positive a pole has passed through infinity: a
              finite positive stand-in. -inf with no pole at all.
    poles     (M, n) without dead time, (M, q) padded with NaN with it: the rightmost true roots. By
              decreasing real part, pairs together, upper half first, exactly conjugate; reals have imaginary
              part exactly 0.
    values    scaled values of the measures that are ready; NaN where absent
    reach     (M,) all poles with abs(p) up to here are in `poles`; inf without dead time, 0 where none is
    shares    spacing of the poles and share of each (M, n) where they are known already; else None
    """

    stable: BoolArray
    abscissa: FloatArray
    poles: ComplexArray
    values: dict[Measure, FloatArray]
    reach: FloatArray
    shares: tuple[Spacing, FloatArray] | None = None

    def rows(self, index: IntArray | BoolArray) -> PoleStage:
        """The loops named by `index`."""
        values = {m: v[index] for m, v in self.values.items()}
        return PoleStage(
            self.stable[index], self.abscissa[index], self.poles[index], values, self.reach[index]
        )

    @np.errstate(over="ignore")
    def count(
        self, loops: Loops, measures: tuple[Measure, ...], highest_fall: FloatArray | None
    ) -> dict[Measure, FloatArray]:
        """Quantities over the counted poles: damping ratio by the usual rule, and natural frequency.

        highest_fall : (M,) highest ω at which abs(T) falls through abs(T(0))/√2, NaN where there is none;
        None when no measure needs it.
        """
        wanted = [m for m in measures if needs_counting(m)]
        if not wanted:
            return {}
        if highest_fall is None:
            raise ValueError("counting poles needs the highest fall of abs(T)")
        poles = _far_enough(loops, self.poles, self.reach, highest_fall)
        spacing, share = self.shares or _spacing_and_share(loops, poles)
        counted = _counted(loops, poles, share, highest_fall)
        out: dict[Measure, FloatArray] = {}
        for measure in wanted:
            if measure.quantity == "damping_ratio":
                near = least_damping(loops, poles, counted, spacing)
                reach = np.where(_all_count(loops, highest_fall), np.inf, REACH * highest_fall)
                out[measure] = with_far_poles(loops, near, reach)
            else:
                out[measure] = _natural_frequency(poles, share, counted, spacing)
        return out

    def with_shares(self, loops: Loops) -> PoleStage:
        """The same with the shares worked out; as it is with dead time, where poles are fetched as needed."""
        return self if loops.delayed else replace(self, shares=_spacing_and_share(loops, self.poles))

    def surely_counted_damping(self, loops: Loops) -> FloatArray:
        """Least damping ratio of the poles that count whatever the bandwidth, for their share alone. (M,).

        An upper bound of the damping ratio, known before any frequency; 1 with dead time, where share
        counts none.
        """
        if loops.delayed:
            return np.ones(len(loops))
        with np.errstate(invalid="ignore"):
            spacing, share = self.shares or _spacing_and_share(loops, self.poles)
            return least_damping(loops, self.poles, share >= LEAST_SHARE, spacing)


def needs_counting(measure: Measure) -> bool:
    """Whether a measure waits for the poles that count by the usual rule, and so for the fall of abs(T)."""
    usual = measure.quantity == "damping_ratio" and measure.below is None
    return usual or measure.quantity == "natural_frequency"


@np.errstate(over="ignore")
def pole_stage(loops: Loops, measures: tuple[Measure, ...]) -> PoleStage:
    """Stability, poles and the quantities of the poles' stage that need no frequency.

    With dead time a stable loop has no poles and no abscissa here where none of the measures needs a pole;
    with no measures at all poles are what is asked for.

    An unstable loop keeps its decay rate (negative) and its damping ratio, taken over all its poles;
    everything else is NaN.
    """
    names = {m.quantity for m in measures}
    if loops.delayed:
        asked = not measures or any(m.row.stage == "time" or m.quantity in OF_POLES for m in measures)
        stable, abscissa, poles, reach = _with_dead_time(loops) if asked else _stability_alone(loops)
    else:
        stable, abscissa, poles = _without_dead_time(loops)
        reach = np.full(len(loops), np.inf)
    values: dict[Measure, FloatArray] = {}
    still = statics(loops, stable, names)
    for measure in measures:
        name = measure.quantity
        if name == "decay_rate":
            values[measure] = -abscissa
        elif name in still:
            values[measure] = still[name]
        elif name == "damping_ratio":
            values[measure] = _early_damping(loops, stable, poles, reach, measure)
    return PoleStage(stable, abscissa, poles, values, reach)


@np.errstate(over="ignore")
def counted_poles(
    loops: Loops, poles: ComplexArray, highest_fall: FloatArray
) -> tuple[ComplexArray, FloatArray, BoolArray]:
    """Poles as far as counting needs them, their share in the reference step, and which are counted.

    highest_fall : (M,), NaN where abs(T) never falls: all poles count there.
    Returns poles (M, q), share (M, q) as a ratio (of abs(T(0)); where T(0) = 0 the bare residue), counted (M,
    q). With dead time further poles are fetched, as far as the rule reaches, and share alone counts none.
    """
    poles = _far_enough(loops, poles, np.zeros(len(loops)), highest_fall)
    _, share = _spacing_and_share(loops, poles)
    return poles, share, _counted(loops, poles, share, highest_fall)


def _far_enough(
    loops: Loops, poles: ComplexArray, reach: FloatArray, highest_fall: FloatArray
) -> ComplexArray:
    """With dead time the true poles as far out as the rule reaches; else the poles as they are."""
    if not loops.delayed:
        return poles
    return _reaching(loops, poles, reach, REACH * np.where(np.isfinite(highest_fall), highest_fall, 0.0))


def _spacing_and_share(loops: Loops, poles: ComplexArray) -> tuple[Spacing, FloatArray]:
    spacing = spaced(loops, poles)
    return spacing, share_in_step(loops, poles, spacing)


def _counted(loops: Loops, poles: ComplexArray, share: FloatArray, highest_fall: FloatArray) -> BoolArray:
    """Whether each pole counts, (M, q)."""
    everything = _all_count(loops, highest_fall)
    with np.errstate(invalid="ignore"):
        counted = everything[:, None] | (np.abs(poles) <= REACH * highest_fall[:, None])
        if not loops.delayed:
            counted |= share >= LEAST_SHARE
    out: BoolArray = counted & ~np.isnan(poles)
    return out


def _all_count(loops: Loops, highest_fall: FloatArray) -> BoolArray:
    """Where every pole counts: T(0) = 0, or abs(T) never falls through, or for ever again. (M,)."""
    out: BoolArray = ~np.isfinite(highest_fall) | (coefficient(loops.numerator, 0) == 0.0)
    return out


def with_far_poles(loops: Loops, near: FloatArray, reach: FloatArray) -> FloatArray:
    """Least damping ratio `near` of the listed poles taken on to all with abs(p) <= reach. (M,) each.

    With dead time there are poles beyond those that `delayed_poles` lists; with an infinite reach the ratio
    is 0, which theirs tends to.
    """
    if not loops.delayed:
        return near
    further = reach > FARTHEST / loops.dead_time
    if not further.any():
        return near
    at = np.flatnonzero(further)
    out = near.copy()
    out[at] = np.minimum(near[at], far_damping(loops.rows(at), FARTHEST / loops.dead_time[at], reach[at]))
    return out


def least_damping(
    loops: Loops, poles: ComplexArray, counted: BoolArray, spacing: Spacing | None = None
) -> FloatArray:
    """Smallest damping ratio of the counted poles; 1, the best there is, where none is counted. (M,)."""
    ratio = damping_of(loops, poles, spacing)
    out: FloatArray = np.where(counted, ratio, 1.0).min(axis=1, initial=1.0)
    return out


def _without_dead_time(loops: Loops) -> tuple[BoolArray, FloatArray, ComplexArray]:
    poles = closed_roots(loops.closed)
    with np.errstate(invalid="ignore", over="ignore"):
        passed = ~(loops.closed[:, 0] * loops.denominator[:, 0] > 0.0)  # 1 + L(∞) <= 0
    abscissa = rightmost(poles)
    if passed.any():
        with np.errstate(all="ignore"):
            depth = np.abs(loops.closed[passed, 0] / loops.denominator[passed, 0])
        stand_in = 1.0 + np.nan_to_num(np.minimum(depth, 1e30), nan=1e30)
        abscissa[passed] = np.maximum(abscissa[passed], stand_in)
    # Routh decides; where rounding has put a computed pole on or past the axis the loop is as good as on it
    stable = routh_stable(loops.closed) & ~passed & (abscissa < 0.0)
    return stable, abscissa, poles


def _with_dead_time(loops: Loops) -> tuple[BoolArray, FloatArray, ComplexArray, FloatArray]:
    reach = NEAREST / loops.dead_time  # counting asks for more where it reaches further
    poles, proven = proven_poles(loops, reach)
    abscissa = np.fmax(rightmost(poles), chain_abscissa(loops))
    # nothing lies right of the rightmost true root: its side is the verdict, but for one on the axis
    stable = abscissa < 0.0
    close = np.flatnonzero(~proven | ~(np.abs(abscissa) > CLOSE / loops.dead_time))
    if close.size:
        stable[close] &= delayed_stable(loops.rows(close))
    return _judged_without_feedback(loops, stable), abscissa, poles, reach


def _stability_alone(loops: Loops) -> tuple[BoolArray, FloatArray, ComplexArray, FloatArray]:
    """The verdict by the exact count, and poles of the loops that are not stable."""
    stable = _judged_without_feedback(loops, delayed_stable(loops))
    abscissa, reach = np.full(len(loops), np.nan), np.zeros(len(loops))
    poles = np.full((len(loops), 0), np.nan, dtype=complex)
    bad = np.flatnonzero(~stable)
    if bad.size:
        _, abscissa[bad], found, reach[bad] = _with_dead_time(loops.rows(bad))
        poles = joined(poles, bad, found)
    return stable, abscissa, poles, reach


def _judged_without_feedback(loops: Loops, stable: BoolArray) -> BoolArray:
    """The verdicts with those of loops with L = 0 by the roots of D, in which there is no dead time."""
    nothing = ~loops.numerator.any(axis=1)
    if nothing.any():
        stable[nothing] = routh_stable(loops.denominator[nothing])
    return stable


def _reaching(loops: Loops, poles: ComplexArray, reach: FloatArray, wanted: FloatArray) -> ComplexArray:
    """Poles of loops with dead time as far out as `wanted`, and never fewer than are known already.

    reach : (M,) to where all are known; 0 where none is.
    """
    short = np.flatnonzero((wanted > reach) & (reach > 0.0))
    if short.size:
        poles = joined(poles, short, further_poles(loops.rows(short), poles[short], wanted[short]))
    unknown = np.flatnonzero(reach == 0.0)
    if unknown.size:
        poles = joined(poles, unknown, delayed_poles(loops.rows(unknown), wanted[unknown]))
    return poles


def statics(loops: Loops, stable: BoolArray, names: set[str]) -> dict[str, FloatArray]:
    """Limits at s -> 0 from the last two coefficients; a dead time does not enter them.

    The characteristic function at 0 is D(0) + N(0), not 0 for a stable loop. Coefficients of 0 stay 0 through
    the products, so what should be exactly 0 (or 1) is.
    """
    numerator, denominator, load = loops.numerator, loops.denominator, loops.load
    with np.errstate(all="ignore"):
        base = np.where(stable, coefficient(loops.closed, 0), np.nan)
        out: dict[str, FloatArray] = {}
        if "final_value" in names:
            out["final_value"] = coefficient(numerator, 0) / base
        if "static_error" in names:
            out["static_error"] = 100.0 * np.abs(coefficient(denominator, 0) / base)
        if "velocity_error" in names:
            slope = np.abs(coefficient(denominator, 1) / base)
            out["velocity_error"] = _unless(coefficient(denominator, 0) != 0.0, slope, stable)
        if "disturbance_residue" in names:
            out["disturbance_residue"] = np.abs(coefficient(load, 0) / base)
        if "disturbance_integral" in names:
            area = np.abs(coefficient(load, 1) / base)
            out["disturbance_integral"] = _unless(coefficient(load, 0) != 0.0, area, stable)
    return out


def _unless(diverges: BoolArray, value: FloatArray, stable: BoolArray) -> FloatArray:
    return np.where(stable & diverges, np.inf, value)


def _early_damping(
    loops: Loops, stable: BoolArray, poles: ComplexArray, reach: FloatArray, measure: Measure
) -> FloatArray:
    """Damping ratio with `below`; by the usual rule for unstable loops alone (all poles), else NaN."""
    if measure.below is None:
        out = np.full(len(loops), np.nan)
        if not stable.all():
            bad = np.flatnonzero(~stable)
            out[bad] = least_damping(loops.rows(bad), poles[bad], ~np.isnan(poles[bad]))
        return out
    limit = measure.below * loops.time_scale
    if loops.delayed:
        poles = _reaching(loops, poles, reach, limit)
    with np.errstate(invalid="ignore"):
        near = least_damping(loops, poles, np.abs(poles) <= limit[:, None])
    return with_far_poles(loops, near, limit)


def _natural_frequency(
    poles: ComplexArray, share: FloatArray, counted: BoolArray, spacing: Spacing
) -> FloatArray:
    """abs(p) of the counted complex pair with the largest share; NaN where there is none. (M,)."""
    if poles.shape[1] == 0:
        return np.full(len(poles), np.nan)
    eligible = counted & (poles.imag > 0.0) & ~np.isnan(share)
    eligible[spacing.rows] &= ~spacing.folded
    best = np.where(eligible, share, -1.0).argmax(axis=1)[:, None]
    size = np.take_along_axis(np.abs(poles), best, axis=1)[:, 0]
    out: FloatArray = np.where(np.take_along_axis(eligible, best, axis=1)[:, 0], size, np.nan)
    return out
