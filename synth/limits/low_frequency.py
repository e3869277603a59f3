"""What s = 0 decides: zeros of the plant there, and the steady input that the reference needs."""

from __future__ import annotations

from collections.abc import Iterator

from synth.limits.case import CaseView, Finding

ZERO_SOURCE = (
    "internal stability: a compensator pole at s = 0 against the plant's zero there would be a mode that "
    "nothing "
    "moves, so T(0) = 0; see K. J. Åström and R. M. Murray, Feedback Systems, 2nd ed. (2021), section 12.2"
)
INPUT_SOURCE = (
    "S. Skogestad and I. Postlethwaite, Multivariable Feedback Control, 2nd ed. (2005), section 5.10: "
    "in the steady state y = P(0) u"
)

# Absent where the final value is 0: these divide by it.
RELATIVE = ("overshoot", "undershoot", "rise_time", "peak_time", "settling_time", "bandwidth")


def findings(view: CaseView) -> Iterator[Finding]:
    """What the plant's gain at s = 0 rules out."""
    if view.facts.differentiators:
        yield from _zero_at_origin(view)
    elif view.facts.integrators:
        yield from _integrator(view)
    else:
        yield from _steady_input(view)


def _zero_at_origin(view: CaseView) -> Iterator[Finding]:
    name = "plant zero at s = 0"
    count = view.facts.differentiators
    statement = (
        f"The plant has {'a zero' if count == 1 else f'{count} zeros'} at s = 0: the output of every stable "
        f"loop "
        "returns to 0, the static error is 100 % and the velocity error infinite."
    )
    facts: dict[str, float | str] = {"zeros_at_0": float(count), "final_value": 0.0, "static_error": 100.0}
    best = {"static_error": 100.0, "final_value": 0.0}
    found = False
    for bound in view.bounds:
        quantity = bound.measure.quantity
        if quantity in best:
            found = True
            yield Finding(name, ZERO_SOURCE, statement, facts, bound, best[quantity])
        elif quantity in RELATIVE or (
            quantity in ("velocity_error", "tracking_area") and bound.side == "max"
        ):
            found = True
            says = f"{statement} There is no {bound.measure.row.name} to speak of."
            yield Finding(name, ZERO_SOURCE, says, facts, bound, hopeless=True)
    if not found:
        yield Finding(name, ZERO_SOURCE, statement, facts)


def _integrator(view: CaseView) -> Iterator[Finding]:
    says = "The plant integrates: T(0) = 1 in every stable loop."
    for bound in view.bounds:
        if bound.measure.quantity in ("final_value", "complementary_peak"):
            if bound.side == "min" and bound.measure.quantity == "complementary_peak":
                continue  # 1 is the least peak, not the most
            yield Finding("integrator of the plant", ZERO_SOURCE, says, {"final_value": 1.0}, bound, 1.0)


def _steady_input(view: CaseView) -> Iterator[Finding]:
    final, gain = view.final_value, abs(view.facts.dc_gain)
    if final.low <= 0.0 or gain == 0.0:
        return
    per_unit = final.low / gain
    least = per_unit * abs(view.reference_step)
    facts: dict[str, float | str] = {
        "dc_gain": view.facts.dc_gain,
        "reference_step": view.reference_step,
        "final_value_low": final.low,
        "final_value_because": final.because,
        "control_peak": least,
    }
    statement = (
        f"To hold {final.low:.4g} of a reference step of {view.reference_step:.4g} the input must stay at "
        f"{least:.4g}: the plant's static gain is {view.facts.dc_gain:.4g}, and T(0) is at least "
        f"{final.low:.4g} "
        f"({final.because})."
    )
    name = "steady input for the reference"
    bounds = list(view.asked("control_peak", "max"))
    for bound in bounds:
        yield Finding(name, INPUT_SOURCE, statement, facts, bound, least)
    if not bounds:
        yield Finding(name, INPUT_SOURCE, statement, facts)
    for bound in view.asked("noise_gain", "max"):  # abs(C S) at s = 0 is T(0)/P(0)
        yield Finding(name, INPUT_SOURCE, statement, {**facts, "noise_gain": per_unit}, bound, per_unit)
    for bound in view.asked("complementary_peak", "max"):
        says = f"T(0) is at least {final.low:.4g} ({final.because}), so the complementary peak is no less."
        yield Finding("complementary peak at s = 0", INPUT_SOURCE, says, facts, bound, final.low)
