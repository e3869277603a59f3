"""A structure contains the simpler ones: their best points, written in the parameters of the larger one.

Where the larger structure has more to give, a polish from there finds it; where it has not, it at least comes
out no worse. Parameters that both have are copied; what the simpler one lacks is made neutral: an integral so
slow that nothing sees it, a pair of corners so near to each other (or so far out) that it does nothing.
"""

from __future__ import annotations

import numpy as np

from synth.loop.arrays import FloatArray
from synth.search.archive import Rows, joined
from synth.search.objective import Objective
from synth.structures import Structure, same_function

# How keys of one structure read in another that has two pairs of corners.
RENAMED = {
    ("lead", "lead-lag"): {"zero": "lead_zero", "pole": "lead_pole"},
    ("lag", "lead-lag"): {"zero": "lag_zero", "pole": "lag_pole"},
}
EXACT = 1e-9


def embedded(objective: Objective, rows: Rows, larger: int, of: Objective | None = None) -> Rows | None:
    """The rows of one structure as rows of structure `larger`, which may be several each; None where it
    cannot. `of` is the objective that the rows belong to, where it is another one.

    The same function is carried over where both can be it; else the larger one has to contain the other
    (`Structure.simpler`).
    """
    structure, of = objective.structures[larger], of or objective
    parts = []
    for theta, number, origin in zip(of.theta(rows), rows.structure, rows.origin, strict=True):
        small = of.structures[int(number)]
        made = _same(small, structure, theta)
        if made is not None:
            parts.append(objective.rows_of(larger, made[None, :], int(origin)))
        elif small.name in structure.simpler:
            parts.append(_with_neutral(objective, small, structure, larger, theta, int(origin)))
    return joined(parts) if parts else None


def _same(small: Structure, large: Structure, theta: FloatArray) -> FloatArray | None:
    """The very same function in the parameters of the other structure, None where it cannot be."""
    made = small.realise(theta[None, :])
    for structure, values in same_function(made.numerator[0], made.denominator[0], EXACT):
        if structure.name == large.name:
            return values
    return None


def _with_neutral(
    objective: Objective, small: Structure, large: Structure, number: int, theta: FloatArray, origin: int
) -> Rows:
    """What the smaller one has, and the rest neutral: once as far out as the search goes, once round the
    corners that are there, where a pair of corners has an effect as soon as it opens."""
    names = RENAMED.get((small.name, large.name), {})
    known = {names.get(p.key, p.key): float(v) for p, v in zip(small.parameters, theta, strict=True)}
    scales = objective.scales
    values = np.array([known.get(p.key, 1.0) for p in large.parameters])
    x, sign = large.to_search(values[None, :], scales.time, scales.gain)
    low, high = objective.boxes[number]
    free = [j for j, p in enumerate(large.parameters) if p.key not in known]
    middle = _middle(objective, small, theta)
    ratios = {rule.at for rule in large.ratios}
    out = []
    for far in (True, False):
        one = x[0].copy()
        for j in free:
            parameter = large.parameters[j]
            if j in ratios:
                one[j] = low[j]  # closed
                continue
            upward = parameter.role == "time"  # a slow time is a large one, a slow corner a small one
            slow = _neutral_when_slow(large, parameter.key)
            one[j] = (high[j] if slow == upward else low[j]) if far else (-middle if upward else middle)
            if not far and parameter.key == "integral_time":
                one[j] += 2.0 * float(np.log(10.0))
        out.append(one)
    return objective.rows_at(number, np.array(out), np.repeat(sign, len(out)), origin)


def _neutral_when_slow(structure: Structure, key: str) -> bool:
    """An integral and the corners of a lag do nothing far below everything, a lead and a derivative far
    above."""
    return key in ("integral_time", "lag_zero") or (structure.name == "lag" and key == "zero")


def _middle(objective: Objective, small: Structure, theta: FloatArray) -> float:
    """Mean logarithm of the corners of a compensator, in units of the time scale; 0 where it has none."""
    corners = [
        np.log(v * objective.scales.time) if p.role == "frequency" else -np.log(v / objective.scales.time)
        for p, v in zip(small.parameters, theta, strict=True)
        if p.role != "gain"
    ]
    return float(np.mean(corners)) if corners else 0.0
