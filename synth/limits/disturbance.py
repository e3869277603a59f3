"""Dead time against disturbances: the answer to a step of d reaches the output two dead times later."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from synth.limits.case import CaseView, Finding
from synth.loop.arrays import FloatArray
from synth.model import Plant

SOURCE = (
    "causality: a disturbance at the plant's input shows after θ, the compensator's answer after 2 θ; "
    "the best possible load response of F. G. Shinskey, Process Control Systems, 4th ed. (1996)"
)
NAME = "dead time against disturbances"
STEPS = 256  # samples of the open response; a peak between two of them is missed, which errs to the safe side


def open_response(plant: Plant, until: float) -> tuple[float, float]:
    """Largest abs(h) and area of abs(h) on 0 .. until [s], h the plant's step response without dead time.

    Both from below: the peak over samples, the area as the sum of abs(integral of h) between them. The
    samples are exact but for rounding, from the exponential of the plant's companion matrix.
    """
    den = np.array(plant.denominator)
    n = len(den) - 1
    num = np.concatenate([np.zeros(n + 1 - len(plant.numerator)), plant.numerator]) / den[0]
    through = float(num[0])
    if n == 0:
        return abs(through), abs(through) * until
    # time in units of `until`: s = v/until, so a coefficient of s^k is divided by until^k
    a = den / den[0] * until ** np.arange(0, n + 1)
    c = (num - through * den / den[0])[1:] * until ** np.arange(1, n + 1)
    system = np.zeros((n + 2, n + 2))  # states of the companion form, the unit step, the integral of h
    system[0, :n] = -a[1:]
    system[np.arange(1, n), np.arange(n - 1)] = 1.0
    system[0, n] = 1.0
    system[n + 1, :n], system[n + 1, n] = c, through
    step = _exponential(system / STEPS)
    state = np.zeros(n + 2)
    state[n] = 1.0
    peak, area = abs(through), 0.0
    for _ in range(STEPS):
        after = step @ state
        peak = max(peak, float(abs(c @ after[:n] + through)))
        area += float(abs(after[n + 1] - state[n + 1]))
        state = after
    return peak, area * until


def _exponential(matrix: FloatArray) -> FloatArray:
    """exp(matrix): Taylor's series of the matrix halved until it is small, then squared back."""
    halvings = max(int(np.ceil(np.log2(max(float(np.abs(matrix).sum(axis=0).max()), 1e-300)))) + 3, 0)
    small = matrix * 0.5**halvings
    out, term = np.eye(len(matrix)), np.eye(len(matrix))
    for k in range(1, 14):
        term = term @ small / k
        out = out + term
    for _ in range(halvings):
        out = out @ out
    return out


def findings(view: CaseView) -> Iterator[Finding]:
    """What the dead time of a case leaves of a disturbance, whatever the compensator."""
    delay = view.facts.dead_time
    peaks, areas = list(view.asked("disturbance_peak", "max")), list(view.asked("disturbance_area", "max"))
    if delay <= 0.0 or not (peaks or areas):
        return
    with np.errstate(all="ignore"):
        peak, area = open_response(view.plant, delay)
    if not (np.isfinite(peak) and np.isfinite(area)):
        return
    statement = (
        f"A unit step of the disturbance is not answered before 2 dead times of {delay:.4g} s: by then it "
        f"has "
        f"moved the output by {peak:.4g} and left an area of {area:.4g}."
    )
    facts: dict[str, float | str] = {
        "dead_time": delay,
        "disturbance_peak": peak,
        "disturbance_area": area,
    }
    for bound in peaks:
        yield Finding(NAME, SOURCE, statement, facts, bound, peak)
    for bound in areas:
        yield Finding(NAME, SOURCE, statement, facts, bound, area)
