"""Candidates that nobody would build: what the sheet lets pass and an engineer would not."""

from __future__ import annotations

import math

import numpy as np

from synth.rationale.scene import Scene
from synth.structures import REGISTRY
from synth.wording.figures import figure
from synth.wording.names import parameter_name

APART = 1e3  # a corner this many times slower or faster than the loop does nothing for it
BEYOND = 100.0  # crossover above the plant's fastest pole or zero
POOR = 10.0  # static error in %, where the sheet bounds none
EFFORT = ("control_peak", "noise_gain")


def remarks(scene: Scene) -> list[str]:
    """One short line each, empty for a candidate that can be built as it stands."""
    return [*_final_value(scene), *idle(scene), *far_beyond(scene)]


def backwards(scene: Scene) -> str:
    """ "drives backwards: y ends at −0.4 of the reference", on the worst case; nothing for a usual loop."""
    final = scene.column("final_value")
    if not (final < 0.0).any():
        return ""
    return f"drives backwards: y ends at {figure(float(np.nanmin(final)), 3)} of the reference"


def reach_words(final: float) -> str:
    """ "reaches only 38 % of the reference", or "settles at 208 % of the reference" where it goes past it."""
    verb = "settles at" if final > 1.0 else "reaches only"
    return f"{verb} {figure(100.0 * final, 3)} % of the reference"


def poor_reach(scene: Scene) -> int | None:
    """The case on which the static error is worst, where it exceeds 10 % and the sheet bounds none."""
    if any(b.measure.quantity == "static_error" for b in scene.spec.bounds):
        return None
    error, case = scene.worst("static_error")
    return case if error > POOR else None


def _final_value(scene: Scene) -> list[str]:
    if words := backwards(scene):
        return [words]
    case = poor_reach(scene)
    return [] if case is None else [reach_words(float(scene.column("final_value")[case]))]


def _pace(scene: Scene) -> float:
    """How fast the loop is on the nominal plant [rad/s]: its crossover, else its bandwidth; NaN without."""
    for key in ("crossover", "bandwidth"):
        w = scene.nominal(key)
        if math.isfinite(w) and w > 0.0:
            return w
    return math.nan


def idle(scene: Scene) -> list[str]:
    """Corners so far from the loop's own frequencies that they do nothing, such as an integral time of 1e9 s.

    The one that is farthest speaks for all.
    """
    structure, pace = REGISTRY.get(scene.candidate.structure), _pace(scene)
    if structure is None or math.isnan(pace):
        return []
    worst, text = APART, ""
    for p in structure.parameters:
        value = abs(scene.candidate.parameters.get(p.key, math.nan))
        if p.role not in ("time", "frequency") or not value > 0.0:
            continue
        ratio = pace * value if p.role == "time" else pace / value
        apart = max(ratio, 1.0 / ratio)
        if apart > worst:
            worst, side = apart, "slower" if ratio > 1.0 else "faster"
            name = f"{parameter_name(p.key)} {figure(value)} {p.unit}"  # as the tuned values are printed
            text = f"{name} is {figure(apart, 2)} times {side} than the loop: it does nothing worth building"
    return [text] if text else []


def far_beyond(scene: Scene) -> list[str]:
    """A crossover far above all that the model knows of the plant, because no effort is bounded."""
    if scene.spec.valid_to is not None or any(b.measure.quantity in EFFORT for b in scene.spec.bounds):
        return []
    w, plant = scene.nominal("crossover"), scene.spec.cases.cases[0].plant
    sizes = [abs(r) for r in (*plant.poles(), *plant.zeros()) if abs(r) > 0.0]
    if not sizes or not w > BEYOND * max(sizes):
        return []
    return [
        f"the crossover, {figure(w, 3)} rad/s, is {figure(w / max(sizes), 2)} times the plant's fastest "
        "root, because no effort is bounded"
    ]
