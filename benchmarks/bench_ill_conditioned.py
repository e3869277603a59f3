"""How right the core is where rounding is worst, against 50-digit arithmetic from the same coefficients."""

from __future__ import annotations

import exact
import ill_conditioned
import numpy as np
from tables import Table

from synth.loop.evaluate import Evaluation, evaluate
from synth.loop.quantities import QUANTITIES, Measure

LOOPS = 4
SHARES = {"hardly any feedback": (1e-9, 1e-3), "usual gains": (0.05, 0.5), "near the limit": (0.5, 0.9)}
FAMILIES = {
    "poles": ("damping_ratio", "decay_rate"),
    "frequency": ("bandwidth", "phase_margin", "sensitivity_peak", "complementary_peak"),
    "time": ("overshoot", "rise_time", "settling_time", "control_peak", "disturbance_peak"),
}
MEASURES = tuple(Measure(name) for names in FAMILIES.values() for name in names)


def evaluated(kind: str, share: tuple[float, float], loops: int) -> tuple[Evaluation, list[dict[str, float]]]:
    """What the core finds and the reference, one dict a loop (decay_rate alone where it is not stable)."""
    population = ill_conditioned.population(kind, loops, share=share)
    found = evaluate(population.plants, population.compensators, measures=MEASURES, pairs=population.pairs)
    return found, [exact.quantities(population, i) for i in range(loops)]


def error(found: float, true: float, name: str) -> float:
    """Relative to max(abs(true), own scale); 0 where both are absent or infinite, inf where one is."""
    if found == true or (np.isnan(found) and np.isnan(true)):
        return 0.0
    if not (np.isfinite(found) and np.isfinite(true)):
        return np.inf
    return abs(found - true) / max(abs(true), QUANTITIES[name].scale or 0.0)


def right_or_said() -> Table:
    """The worst error of what is given as right, and how much is marked as approximate."""
    table = Table(
        f"Ill-conditioned loops, {LOOPS} of each: largest error, relative to max(value, own scale)",
        ["loops", "gain", *FAMILIES, "stability wrong", "marked approximate", "of them off by 1e-6"],
        note="Reference: 50 digits from the same coefficients. The first three columns leave out values "
        "that the core itself marks as approximate: those are counted in the last two.",
    )
    for kind in ill_conditioned.KINDS:
        for gain, share in SHARES.items():
            found, reference = evaluated(kind, share, LOOPS)
            worst, marked, off, wrong = dict.fromkeys(FAMILIES, 0.0), 0, 0, 0
            for i, true in enumerate(reference):
                wrong += bool(found.stable[i]) != (true["decay_rate"] > 0.0)
                for family, names in FAMILIES.items():
                    for name in set(names) & set(true):
                        q = MEASURES.index(Measure(name))
                        miss = error(float(found.values[i, q]), true[name], name)
                        if found.approximate[i, q]:
                            marked, off = marked + 1, off + (miss > 1e-6)
                        else:
                            worst[family] = max(worst[family], miss)
            table.rows.append([kind, gain, *worst.values(), wrong, marked, off])
    return table


QUESTIONS = [right_or_said]
