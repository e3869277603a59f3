"""A second opinion on a candidate: its claimed values recomputed by other algorithms than the core's."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from synth.loop.arrays import ComplexArray, FloatArray
from synth.loop.quantities import QUANTITIES, Measure
from synth.model.forms import PlantForm
from synth.model.plant import Plant
from synth.verify.frequency import frequency_values
from synth.verify.panels import Trace
from synth.verify.roots import chain, right_of
from synth.verify.roots import poles as exact_poles
from synth.verify.subject import Subject
from synth.verify.time import NotSimulated, respond, time_values

TOLERANCE = 1e-4
_REACH = 5.0
_LEAST_SHARE = 0.02
_NEARLY = 1e-9
_UNSURE = "the poles found do not pass the check of their number"


@dataclass(frozen=True, slots=True)
class Verified:
    """What the second opinion says.

    agrees       no claimed value is further than 1e-4 from its second value, relative to max(abs(value), own
        scale)
    largest_relative_difference  of all that could be compared; inf where one side has no value or an infinite
        one
    details      a sentence for each value that differs, and for what could not be compared
    differences  by quantity
    """

    agrees: bool
    largest_relative_difference: float
    details: tuple[str, ...]
    differences: Mapping[str, float]


def second_opinion(
    form: PlantForm,
    parameters: Mapping[str, float],
    plant: Plant,
    compensator: tuple[Sequence[float], Sequence[float]],
    measures: Sequence[Measure],
    claimed: Sequence[float] | FloatArray,
    *,
    reference_step: float = 1.0,
    case: str = "",
) -> Verified:
    """Recompute `claimed` values (SI, one a measure) of a stable loop on one plant case.

    form, parameters : the plant as the sheet states it, with the values of this case; plant : its
    coefficients.
    compensator : numerator and denominator, descending powers of s. case : named in the details.
    """
    num, den = (tuple(np.trim_zeros(np.asarray(p, dtype=float), "f")) for p in compensator)
    subject = Subject(form, parameters, plant, num or (0.0,), den, reference_step)
    try:
        with np.errstate(all="ignore"):
            values, missing, step = _values(subject, tuple(measures))
    except (OverflowError, ZeroDivisionError, np.linalg.LinAlgError):
        step = None
        values, missing = {}, dict.fromkeys(measures, "its numbers leave the range of double precision")
    where = f" on {case}" if case else ""
    details = [f"{m.quantity}{where} was not recomputed: {why}" for m, why in missing.items()]
    differences: dict[str, float] = {}
    for measure, claim in zip(measures, claimed, strict=True):
        if measure not in values:
            continue
        difference = _difference(measure, float(claim), values[measure])
        if (
            measure.quantity == "peak_time"
            and difference > TOLERANCE
            and _as_high(step, claim, values[measure])
        ):
            difference = 0.0
        name = measure.quantity
        differences[name] = max(difference, differences.get(name, 0.0))
        if not difference <= TOLERANCE:
            details.append(f"{name}{where}: claimed {claim:.6g}, second value {values[measure]:.6g}")
    largest = max(differences.values(), default=0.0)
    return Verified(bool(largest <= TOLERANCE), largest, tuple(details), differences)


def together(opinions: Iterable[Verified]) -> Verified:
    """One opinion over several plant cases: the worst of each."""
    every = list(opinions)
    differences: dict[str, float] = {}
    for one in every:
        for name, value in one.differences.items():
            differences[name] = max(value, differences.get(name, 0.0))
    return Verified(
        all(one.agrees for one in every),
        max((one.largest_relative_difference for one in every), default=0.0),
        tuple(dict.fromkeys(d for one in every for d in one.details)),
        differences,
    )


def _difference(measure: Measure, claim: float, value: float) -> float:
    if claim == value or (np.isnan(claim) and np.isnan(value)):
        return 0.0
    if not (np.isfinite(claim) and np.isfinite(value)):
        return np.inf
    return abs(claim - value) / max(abs(value), QUANTITIES[measure.quantity].scale or 0.0, 1e-300)


def _as_high(step: Trace | None, claim: float, when: float) -> bool:
    """Whether the response stands as high at the claimed time as at its top: on a plateau, or at one of two
    tops alike, no one time is the peak."""
    if step is None or not np.isfinite(claim) or not np.isfinite(when):
        return False
    top, near = (
        max((step.at(t * (1.0 + e)) for e in (-_NEARLY, 0.0, _NEARLY)), key=abs) for t in (when, float(claim))
    )
    return abs(near - top) <= _NEARLY * abs(top)


def _values(
    subject: Subject, measures: tuple[Measure, ...]
) -> tuple[dict[Measure, float], dict[Measure, str], Trace | None]:
    """Second values, why some have none, and the step response where there is one."""
    step = None
    out: dict[Measure, float] = {}
    missing: dict[Measure, str] = {}
    names = {m.quantity for m in measures}
    roots = exact_poles(subject)
    statics = _statics(subject)
    wanted = frozenset(n for n in names if QUANTITIES[n].stage == "frequency")
    counting = names & {"damping_ratio", "natural_frequency"}
    if counting and any(m.quantity != "damping_ratio" or m.below is None for m in measures):
        wanted |= {"highest_fall"}
    looked = frequency_values(subject, roots, wanted) if wanted else {}
    for m in measures:
        if m.quantity in looked:
            out[m] = looked[m.quantity]
        elif m.quantity in statics:
            out[m] = statics[m.quantity]
        elif m.quantity in ("damping_ratio", "decay_rate", "natural_frequency"):
            value = _of_poles(subject, m, roots, looked.get("highest_fall", np.nan))
            if isinstance(value, str):
                missing[m] = value
            else:
                out[m] = value
    timed = tuple(
        m for m in measures if m.quantity != "late_deviation" and QUANTITIES[m.quantity].stage == "time"
    )
    if timed:
        try:
            response = respond(subject, roots)
            step = response.y
            out |= time_values(subject, response, timed, statics["final_value"])
        except NotSimulated as reason:
            missing |= dict.fromkeys(timed, str(reason))
    if max((v for m, v in out.items() if m.quantity == "overshoot"), default=np.inf) < 1e-2:
        # where hardly anything overshoots, the time of the top says nothing
        out = {m: v for m, v in out.items() if m.quantity != "peak_time"}
    return out, missing, step


def _statics(subject: Subject) -> dict[str, float]:
    """Limits at s -> 0, in exact arithmetic."""
    above, below = subject.exact
    load = subject.load
    closed = above[-1] + below[-1]
    out: dict[str, float] = {}
    if closed == 0:
        return {"final_value": np.nan}
    final = above[-1] / closed
    out["final_value"] = float(final)
    out["static_error"] = float(100 * abs(1 - final))
    out["velocity_error"] = (
        np.inf if below[-1] else float(abs(below[-2] / closed)) if len(below) > 1 else np.inf
    )
    residue = load[-1] / closed
    out["disturbance_residue"] = float(abs(residue))
    out["disturbance_integral"] = (
        np.inf if residue else float(abs(load[-2] / closed)) if len(load) > 1 else 0.0
    )
    return out


def _of_poles(
    subject: Subject, measure: Measure, roots: ComplexArray | None, highest_fall: float
) -> float | str:
    """A quantity of the poles' stage, or why there is none."""
    if roots is None:
        return _UNSURE
    if measure.quantity == "decay_rate":
        decay = min(float(-roots.real.max()) if roots.size else np.inf, chain(subject))
        if subject.dead_time > 0.0 and np.isfinite(decay):
            # with a direct path infinitely many come close to the chain's line: the count stays clear of it
            line = min(decay * (1.0 - 1e-4), chain(subject) - 0.05 / subject.dead_time)
            if right_of(subject, line) != int((-roots.real < line).sum()):
                return _UNSURE
        return decay
    above, _ = subject.exact
    delayed = subject.dead_time > 0.0
    everything = not np.isfinite(highest_fall) or above[-1] == 0
    if measure.below is not None and measure.quantity == "damping_ratio":
        reach, everything = measure.below, False
    elif everything:
        if delayed and measure.quantity == "damping_ratio":
            # the chain goes on for ever while Re p grows like a logarithm at most: no ratio is the least
            return 0.0
        reach = np.inf
    else:
        reach = _REACH * highest_fall
    if delayed and not everything:
        further = exact_poles(subject, reach)
        if further is None:
            return _UNSURE
        roots = further
    size = np.abs(roots)
    share = _shares(subject, roots)
    counted = size <= reach
    if not delayed and measure.below is None:
        counted |= share >= _LEAST_SHARE
    if measure.quantity == "damping_ratio":
        ratio = -roots.real[counted] / size[counted]
        return float(ratio.min(initial=1.0))
    pairs = counted & (roots.imag > 0.0)
    if not pairs.any():
        return np.nan
    return float(size[pairs][share[pairs].argmax()])


def _shares(subject: Subject, roots: ComplexArray) -> FloatArray:
    """|residue of T/s| / |T(0)| of each pole, pairs doubled."""
    above, below = (np.array([float(c) for c in p]) for p in subject.exact)
    theta = subject.dead_time
    with np.errstate(all="ignore"):
        e = np.exp(-roots * theta)
        n = np.polyval(above, roots)
        slope = np.polyval(np.polyder(below), roots) + (np.polyval(np.polyder(above), roots) - theta * n) * e
        final = above[-1] / (above[-1] + below[-1])
        share: FloatArray = np.abs(n * e / (slope * roots)) / (abs(final) if final else 1.0)
    return np.where(roots.imag != 0.0, 2.0, 1.0) * np.nan_to_num(share)
