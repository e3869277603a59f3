"""Right-half-plane zeros: early settling is paid for with undershoot, and the tracking area has a floor."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.limits.case import CaseView, Finding
from synth.wording.figures import figure, quantity

SOURCE = (
    "R. H. Middleton, Trade-offs in linear control system design, Automatica 27 (1991) 281-292: "
    "the transform of the step response vanishes at a zero of the plant"
)
SLIGHT = 0.01  # % of undershoot that is not worth a number
CONDITIONS = "Holds for a real zero z > 0 and every stable loop."


def least_undershoot(zero: float, settling: float, band: float, dead_time: float = 0.0) -> float:
    """Undershoot, relative to y∞, that settling to ±band by a time costs: (1 - band)/(e^(z (t - θ)) - 1).

    From 0 = ∫ y e^(-zt) dt with y = 0 before θ, y >= -undershoot until the settling time, y >= 1 - band
    after it.
    inf where the time is not beyond the dead time; 0 for a band of 100 % or more.
    """
    if band >= 1.0:
        return 0.0
    if settling <= dead_time:
        return np.inf
    return float((1.0 - band) / np.expm1(np.minimum(zero * (settling - dead_time), 700.0)))


def least_settling(zero: float, undershoot: float, band: float, dead_time: float = 0.0) -> float:
    """The same solved for the settling time; inf for an undershoot of 0."""
    if band >= 1.0:
        return dead_time
    return dead_time + float(np.log1p((1.0 - band) / undershoot) / zero) if undershoot > 0.0 else np.inf


def findings(view: CaseView) -> Iterator[Finding]:
    """What the real right-half-plane zeros of a case rule out."""
    zeros, delay = view.real_zeros, view.facts.dead_time
    if not zeros:
        return
    zero = min(zeros)  # the slowest one costs most, in both bounds
    yield from _undershoot(view, zero, delay)
    area = delay + 1.0 / zero
    name = "right-half-plane zero against the tracking area"
    statement = (
        f"With the zero at s = {zero:.4g} rad/s the area between reference and response is at least "
        f"{quantity(area, 's')}, the dead time and 1/z. {CONDITIONS}"
    )
    facts: dict[str, float | str] = {"zero": zero, "dead_time": delay, "tracking_area": area}
    for bound in view.asked("tracking_area", "max"):
        yield Finding(name, SOURCE, statement, facts, bound, area)


def _undershoot(view: CaseView, zero: float, delay: float) -> Iterator[Finding]:
    name = "right-half-plane zero against settling and undershoot"
    settled = list(view.asked("settling_time", "max"))
    dips = list(view.asked("undershoot", "max"))
    if not settled:
        time = delay + 1.0 / zero
        least = 100.0 * least_undershoot(zero, time, 0.02, delay)
        yield Finding(
            name,
            SOURCE,
            f"The zero at s = {zero:.4g} rad/s makes the response start the wrong way: settling to 2 % "
            f"within {quantity(time, 's', 3)} costs an undershoot of at least {figure(least, 3)} %, "
            f"earlier costs more. {CONDITIONS}",
            {"zero": zero, "settling_time": time, "undershoot": least},
        )
    for bound in settled:
        band = bound.measure.band
        least = 100.0 * least_undershoot(zero, bound.limit, band, delay)
        says = (
            f"With the zero at s = {zero:.4g} rad/s, settling to {100 * band:g} % within "
            f"{quantity(bound.limit, 's')} costs "
            + (
                f"an undershoot of at least {figure(least, 3)} %"
                if least >= SLIGHT
                else "next to no undershoot"
            )
        )
        facts: dict[str, float | str] = {
            "zero": zero,
            "dead_time": delay,
            "band": band,
            "settling_time": bound.limit,
            "undershoot": least,
        }
        if not dips:
            yield Finding(name, SOURCE, f"{says}. {CONDITIONS}", facts)
        for dip in dips:
            time = least_settling(zero, dip.limit / 100.0, band, delay)
            facts = {**facts, "undershoot_limit": dip.limit}
            if np.isinf(time):
                yield Finding(name, SOURCE, f"{says}; none is allowed. {CONDITIONS}", facts, dip, least)
                continue
            facts["settling_time_at_that_undershoot"] = time
            says_more = f"; an undershoot of {dip.limit:g} % allows no settling before {quantity(time, 's')}"
            yield Finding(name, SOURCE, f"{says}{says_more}. {CONDITIONS}", facts, bound, time)
