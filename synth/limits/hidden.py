"""A hidden unstable mode: numerator and denominator of the plant share a root that no compensator moves."""

from __future__ import annotations

from collections.abc import Iterator

from synth.limits.case import CaseView, Finding

SOURCE = (
    "internal stability: D_P D_C + N_P N_C has every common root of N_P and D_P; T. Kailath, Linear Systems "
    "(1980), "
    "section 2.4"
)


def findings(view: CaseView) -> Iterator[Finding]:
    """A plant with such a mode cannot be stabilised at all."""
    hidden = view.facts.hidden_unstable
    if not hidden:
        return
    name = "hidden unstable mode"
    roots = ", ".join(f"{r.real:.4g}" if r.imag == 0.0 else f"{r:.4g}" for r in hidden)
    statement = (
        f"Numerator and denominator of the plant share a root at s = {roots} rad/s: the mode stays in every "
        f"closed "
        "loop, and nothing stabilises it."
    )
    facts: dict[str, float | str] = {"root_real": hidden[0].real, "root_imaginary": hidden[0].imag}
    for bound in view.bounds:  # an unstable loop meets nothing
        yield Finding(name, SOURCE, statement, facts, bound, hopeless=True)
    if not view.bounds:
        yield Finding(name, SOURCE, statement, facts)
