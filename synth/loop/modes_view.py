"""The closed-loop poles of one compensator on one plant, as a report lists them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from synth.loop.closed_loop import Rational, close
from synth.loop.evaluate import stacks
from synth.loop.frequency.stage import frequency_stage
from synth.loop.poles.share import damping_of
from synth.loop.poles.stage import counted_poles, pole_stage


@dataclass(frozen=True, slots=True)
class Mode:
    """One closed-loop pole, or a complex pair named by its upper half.

    pole     [rad/s]
    share    what it carries of the reference step, relative to T(0) (of 1 where T(0) = 0); 1.0 is 100 %
    damping  -Re p / abs(p)
    counted  whether the damping ratio of the loop takes it in
    """

    pole: complex
    share: float
    damping: float
    counted: bool

    @property
    def period(self) -> float:
        """Time of one oscillation [s]; inf for a real pole."""
        return float(2.0 * np.pi / self.pole.imag) if self.pole.imag else float("inf")

    @property
    def decay_time(self) -> float:
        """Time in which it falls to 1/e [s]; negative where it grows, inf on the axis."""
        return -1.0 / self.pole.real if self.pole.real else float("inf")


@dataclass(frozen=True, slots=True)
class Modes:
    """All modes listed, largest share first, and whether the loop is stable.

    With dead time there are infinitely many: those within reach of the rule that counts, and never fewer
    than the rightmost.
    """

    stable: bool
    modes: tuple[Mode, ...]

    def uncounted_below(self, ratio: float) -> tuple[Mode, ...]:
        """Modes left out of the damping ratio though their own is below `ratio`: to be listed with a
        caution."""
        return tuple(m for m in self.modes if not m.counted and m.damping < ratio)


def modes_of(plant: Rational, compensator: Rational, *, below: float | None = None) -> Modes:
    """Modes of the loop of the first row of each.

    below : count exactly the poles with abs(p) <= below [rad/s] instead of the usual rule.
    In an unstable loop every pole counts. Raises ValueError where the coefficients are not finite.
    """
    first = np.zeros(1, dtype=np.intp)
    if not list(stacks(plant, compensator, first, first)):
        raise ValueError("plant and compensator need finite coefficients and a denominator that is not zero")
    loops = close(plant, compensator, first, first)
    scale = float(loops.time_scale[0])
    stage = pole_stage(loops, ())
    stable = bool(stage.stable[0])
    fall = np.full(1, np.nan)
    if stable and below is None:
        fall = frequency_stage(loops, stage.poles, frozenset({"highest_fall"}))["highest_fall"]
    if below is not None:
        fall = np.array([below * scale / 5.0])
    poles, share, counted = counted_poles(loops, stage.poles, fall)
    if below is not None:
        counted = np.abs(poles) <= below * scale
    damping = damping_of(loops, poles)
    listed = [
        Mode(complex(p) / scale, float(s), float(z), bool(c))
        for p, s, z, c in zip(poles[0], share[0], damping[0], counted[0], strict=True)
        if not np.isnan(p) and p.imag >= 0.0
    ]
    return Modes(stable, tuple(sorted(listed, key=lambda m: (-m.share, abs(m.pole)))))
