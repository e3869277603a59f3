"""Every published setting that fits a plant and a structure."""

from __future__ import annotations

import numpy as np

from synth.loop.closed_loop import Rational
from synth.model import Plant
from synth.rules import bode, internal_model, optimum, reaction_curve, sensitivity, ultimate
from synth.rules.start import Start
from synth.structures import by_name

SCHOOLS = (internal_model, sensitivity, optimum, ultimate, reaction_curve, bode)


def starts(plant: Plant | Rational, structure: str) -> list[Start]:
    """Starting settings for one structure, SI, all legal; empty where no rule applies.

    plant : one plant, or a stack whose first row is meant. Raises KeyError for an unknown structure.
    """
    one = plant if isinstance(plant, Plant) else Plant.from_row(plant, 0)
    family = by_name(structure)
    out: list[Start] = []
    for school in SCHOOLS:
        with np.errstate(all="ignore"):  # a rule out of its range gives inf or NaN, dropped below
            found = school.starts(one, family.name)
        out += [s for s in found if bool(family.legal(s.theta[None, :])[0])]
    return out
