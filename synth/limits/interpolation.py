"""Right-half-plane poles with zeros or dead time: what S and T must be there bounds their peaks and the
margins."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from synth.limits.case import CaseView, Finding
from synth.wording.figures import pole as in_words
from synth.wording.figures import quantity

PEAK_SOURCE = (
    "S. Skogestad and I. Postlethwaite, Multivariable Feedback Control, 2nd ed. (2005), section 5.3; K. J. "
    "Åström, "
    "Limitations on control system performance, European J. Control 6 (2000) 2-20"
)
MARGIN_SOURCE = (
    "P. P. Khargonekar and A. Tannenbaum, Non-Euclidian metrics and the robust stabilization of systems with "
    "parameter uncertainty, IEEE Trans. Autom. Control 30 (1985) 1005-1013"
)
UNITY_SOURCE = "S(s) -> 1 where the loop gain vanishes: at high frequency, or at a right-half-plane zero"


# Roots are known to about this where they are double; a pole next to a zero gets the benefit of the doubt.
ROOT_ERROR = 2e-8


def least_peak(poles: Sequence[complex], zeros: Sequence[complex], dead_time: float) -> float:
    """The least sup of abs(S), and of abs(T), with these right-half-plane poles and zeros and dead time [s].

    Greatest over the poles of e^(Re p θ) Π abs(p + conj z)/abs(p - z), and over the zeros of
    Π abs(z + conj p)/abs(z - p); 1 where there are no poles, or neither zeros nor dead time.

    T has the inner factor m = e^(-sθ) Π(s - z)/(s + conj z) and is 1 at the poles, so by the maximum modulus
    sup abs(T) >= 1/abs(m(p)); S has the inner factor b of the poles and is 1 at the zeros. Both hold for S
    and T:
    S = b Q with S = 1 mod m makes Q the inverse of b compressed to the space orthogonal to m H2, whose norm
    is set by the angle between b (m H2)^⊥ and m (b H2)^⊥, in which b and m may change places.
    """
    p, z = np.array(poles, dtype=complex), np.array(zeros, dtype=complex)
    if p.size == 0 or (z.size == 0 and dead_time == 0.0):
        return 1.0
    with np.errstate(divide="ignore", over="ignore"):
        apart = np.abs(p[:, None] - z) + ROOT_ERROR * (np.abs(p[:, None]) + np.abs(z))
        ratio = np.maximum(np.abs(p[:, None] + z.conj()) / apart, 1.0)
        at_poles = np.exp(p.real * dead_time) * ratio.prod(axis=1)
        at_zeros = ratio.prod(axis=0)  # abs(z + conj p) = abs(p + conj z)
    return float(max(at_poles.max(), at_zeros.max(initial=1.0)))


def findings(view: CaseView) -> Iterator[Finding]:
    """What poles together with zeros and dead time rule out; and that Ms is no less than 1."""
    facts = view.facts
    peak = least_peak(facts.right_poles, facts.right_zeros, facts.dead_time)
    if peak > 1.0:
        yield from _peaks(view, peak)
        yield from _margins(view, peak)
    elif facts.excess > 0 or facts.dead_time > 0.0 or facts.right_zeros:
        for bound in view.asked("sensitivity_peak", "max"):
            if bound.limit < 1.0:
                yield Finding(
                    "sensitivity is 1 somewhere",
                    UNITY_SOURCE,
                    "The sensitivity peak of this plant's loops is never below 1.",
                    {"sensitivity_peak": 1.0},
                    bound,
                    1.0,
                )


def _with(view: CaseView) -> str:
    facts = view.facts
    poles = list(dict.fromkeys(in_words(p.real, p.imag) for p in facts.right_poles))
    parts = [f"the unstable {'pole' if len(poles) == 1 else 'poles'} at s = {', '.join(poles)} rad/s"]
    if facts.right_zeros:
        zeros = list(dict.fromkeys(in_words(z.real, z.imag) for z in facts.right_zeros))
        parts.append(f"the {'zero' if len(zeros) == 1 else 'zeros'} at s = {', '.join(zeros)} rad/s")
    if facts.dead_time > 0.0:
        parts.append(f"a dead time of {quantity(facts.dead_time, 's')}")
    return " and ".join((", ".join(parts[:-1]), parts[-1])) if len(parts) > 1 else parts[0]


def _peaks(view: CaseView, peak: float) -> Iterator[Finding]:
    name = "right-half-plane poles with zeros or dead time against the peaks"
    statement = (
        f"With {_with(view)} the sensitivity peak and the complementary peak are both at least {peak:.4g}."
    )
    facts: dict[str, float | str] = {"peak": peak}
    bounds = [*view.asked("sensitivity_peak", "max"), *view.asked("complementary_peak", "max")]
    for bound in bounds:
        yield Finding(name, PEAK_SOURCE, statement, facts, bound, peak)
    if not bounds:
        yield Finding(name, PEAK_SOURCE, statement, facts)


def best_gain_margin(peak: float) -> float:
    """Largest gain margin [dB], the same up and down, with a least peak: 20 log10((M + 1)/(M - 1))."""
    return float(20.0 * np.log10((peak + 1.0) / (peak - 1.0))) if np.isfinite(peak) else 0.0


def best_phase_margin(peak: float) -> float:
    """Largest phase margin [deg] with a least peak: 2 asin(1/M)."""
    return float(np.degrees(2.0 * np.arcsin(1.0 / peak)))


def _margins(view: CaseView, peak: float) -> Iterator[Finding]:
    best = {
        "gain_margin": (best_gain_margin(peak), "dB both up and down"),
        "phase_margin": (best_phase_margin(peak), "deg"),
    }
    for key, (value, unit) in best.items():
        for bound in view.asked(key, "min"):
            yield Finding(
                f"right-half-plane poles with zeros or dead time against the {key.replace('_', ' ')}",
                MARGIN_SOURCE,
                f"With {_with(view)} no loop has a {key.replace('_', ' ')} above {value:.4g} {unit}.",
                {"peak": peak, key: value},
                bound,
                value,
            )
