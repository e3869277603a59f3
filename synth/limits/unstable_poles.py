"""Right-half-plane poles: a loop that is slow must overshoot; and what they cost in gain and in delay
margin."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.limits.case import CaseView, Finding
from synth.wording.figures import pole as in_words

OVERSHOOT_SOURCE = (
    "R. H. Middleton, Trade-offs in linear control system design, Automatica 27 (1991) 281-292: "
    "the transform of the error vanishes at an unstable pole of the plant"
)
NOISE_SOURCE = (
    "K. Havre and S. Skogestad, Achievable performance of multivariable systems with unstable zeros and "
    "poles, "
    "Int. J. Control 74 (2001) 1131-1139: abs(C S) >= 1/abs(P b) at an unstable pole, b the all-pass of the "
    "poles"
)
DELAY_SOURCE = (
    "R. H. Middleton and D. E. Miller, On the achievable delay margin using LTI control for unstable plants, "
    "IEEE Trans. Autom. Control 52 (2007) 1194-1207"
)


def least_overshoot(
    pole: float, dead_time: float, final: float, rise: float = 0.0, level: float = 0.9
) -> float:
    """Overshoot over y∞ = final > 0 that a real unstable pole forces: E_r (E_θ/y∞ - level) + level - 1.

    From 0 = ∫ (1 - y) e^(-pt) dt with y = 0 before θ, y <= level · y∞ for a time `rise` more, y <= its
    largest after that; E_θ = e^(pθ), E_r = e^(p rise). Falls as `final` rises. May be below 0: then nothing
    is forced.
    """
    growth_delay, growth_rise = np.exp(min(pole * dead_time, 300.0)), np.exp(min(pole * rise, 300.0))
    return float(growth_rise * (growth_delay / final - level) + level - 1.0)


def longest_rise(pole: float, dead_time: float, final: float, overshoot: float, level: float = 0.9) -> float:
    """The same solved for the rise time: inf where no overshoot is forced, 0 where no rise is fast enough."""
    excess = float(np.exp(min(pole * dead_time, 300.0))) / final - level
    if excess <= 0.0:
        return np.inf
    return max(float(np.log((overshoot + 1.0 - level) / excess) / pole), 0.0)


def findings(view: CaseView) -> Iterator[Finding]:
    """What the right-half-plane poles of a case rule out."""
    if not view.facts.right_poles:
        return
    if view.real_poles:
        pole = max(view.real_poles)  # the fastest one asks for most
        yield from _overshoot(view, pole)
        yield from _delay_margin(view, pole)
    yield from _noise_gain(view)


def _overshoot(view: CaseView, pole: float) -> Iterator[Finding]:
    name = "right-half-plane pole against overshoot and rise"
    delay, final = view.facts.dead_time, view.final_value
    says = f"With the unstable pole at s = {pole:.4g} rad/s the response must pass the reference"
    if final.low <= 0.0 or not np.isfinite(final.high):
        yield Finding(
            name,
            OVERSHOOT_SOURCE,
            f"{says}, by at least {100 * np.expm1(min(pole * delay, 700.0)):.3g} %; since the sheet does "
            f"not force "
            "the final value near the reference, that need not be an overshoot.",
            {"pole": pole, "dead_time": delay, "passes_by": 100.0 * np.expm1(min(pole * delay, 700.0))},
        )
        return
    facts: dict[str, float | str] = {
        "pole": pole,
        "dead_time": delay,
        "final_value_low": final.low,
        "final_value_high": final.high,
        "final_value_because": final.because,
    }
    forced = f"T(0) is at most {final.high:.4g} ({final.because})"
    overshoots, slow = list(view.asked("overshoot", "max")), list(view.asked("rise_time", "min"))
    alone = max(100.0 * least_overshoot(pole, delay, final.high), 0.0)
    if not slow or not overshoots:
        statement = f"{says}: overshoot of at least {alone:.3g} %, more when it rises slowly; {forced}."
        facts["overshoot"] = alone
        for bound in overshoots:
            yield Finding(name, OVERSHOOT_SOURCE, statement, facts, bound, alone)
        if not overshoots:
            yield Finding(name, OVERSHOOT_SOURCE, statement, facts)
        return
    for rise in slow:
        level = rise.measure.span[1]
        least = 100.0 * least_overshoot(pole, delay, final.high, max(rise.limit, 0.0), level)
        for bound in overshoots:
            longest = longest_rise(pole, delay, final.high, bound.limit / 100.0, level)
            yield Finding(
                name,
                OVERSHOOT_SOURCE,
                f"{says}: a rise of {rise.limit:.4g} s costs an overshoot of at least {max(least, 0.0):.3g} "
                f"%; "
                f"{forced}. At {bound.limit:g} % the rise can take {longest:.4g} s at most.",
                {**facts, "rise_time": rise.limit, "overshoot": max(least, 0.0), "longest_rise": longest},
                bound,
                max(least, 0.0),
            )


def _delay_margin(view: CaseView, pole: float) -> Iterator[Finding]:
    best = 2.0 / pole
    for bound in view.asked("delay_margin", "min"):
        yield Finding(
            "right-half-plane pole against the delay margin",
            DELAY_SOURCE,
            f"With the unstable pole at s = {pole:.4g} rad/s no loop stands more than {best:.4g} s of extra "
            f"dead "
            "time, twice the pole's time constant.",
            {"pole": pole, "delay_margin": best},
            bound,
            best,
        )


def least_noise_gain(view: CaseView) -> float:
    """max over unstable poles of 1/abs(P(s) b(s)), b = Π(s - p)/(s + conj p): the least sup of abs(C S)."""
    poles = np.array(view.facts.right_poles)
    all_poles = list(view.plant.poles())
    for p in poles:  # P b has no unstable pole: take each out of the denominator
        all_poles.pop(int(np.argmin(np.abs(np.array(all_poles) - p))))
    others, lead = np.array(all_poles, dtype=complex), view.plant.denominator[0]
    worst = 0.0
    for p in poles:
        below = lead * np.prod(p - others) * np.prod(p + poles.conj())
        above = np.polyval(view.plant.numerator, p) * np.exp(-p * view.facts.dead_time)
        with np.errstate(divide="ignore", over="ignore"):
            worst = max(worst, float(np.abs(below) / np.abs(above)))
    return worst


def _noise_gain(view: CaseView) -> Iterator[Finding]:
    least = least_noise_gain(view)
    fastest = max(view.facts.right_poles, key=lambda p: p.real)
    statement = (
        f"To hold the unstable pole at s = {in_words(fastest.real, fastest.imag)} rad/s the compensator "
        f"passes noise of y to the actuator with a gain of at least {least:.4g} at some frequency."
    )
    facts: dict[str, float | str] = {"pole": float(fastest.real), "noise_gain": least}
    bounds = list(view.asked("noise_gain", "max"))
    for bound in bounds:
        yield Finding(
            "right-half-plane pole against noise gain", NOISE_SOURCE, statement, facts, bound, least
        )
    if not bounds:
        yield Finding("right-half-plane pole against noise gain", NOISE_SOURCE, statement, facts)
